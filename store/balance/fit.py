"""From a job's story to what its runs say: labelled readings in one frame, and their least-squares fit."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from uuid import UUID

import numpy as np

from config.errors import Refusal
from store.balance.angles import frame_turn_deg, turn
from store.balance.influence import ComplexArray, FloatArray, plane_effects
from store.balance.scatter import Scatter, scatter_from_repeats
from store.balance.standing import Standing, differences, sensor_turn_deg
from store.balance.weights import Unbalances, mount_of, pieces_at, same_weights, unbalances
from store.records import JobStory, Label, Origin, Reading, Run, Vector

SPEED_SHARE = 0.005
"""Readings within 0.5 % of a speed belong to it."""
BALANCING = frozenset({Label.O, Label.O_T, Label.CHECK, Label.TRIM})
"""Labels whose readings hold the response to unbalance at a balancing speed."""

Chooses = Callable[[Run, Reading], bool]


@dataclass(frozen=True, slots=True)
class Observation:
    """One labelled reading of one channel, turned into the frame of the standing asked for."""

    reading_id: UUID
    run_name: str
    run_index: int
    reading_number: int
    run_started_us: int
    label: Label
    speed_hz: float
    value: complex
    """0-peak in the channel's base unit."""
    own_sd: float
    """The vector's own standard error per component."""
    unit: str
    weights: Mapping[int, complex]
    """By plane, g.mm against rotation from the rotor mark of the standing asked for."""

    @property
    def order(self) -> tuple[int, int]:
        return (self.run_index, self.reading_number)


@dataclass(frozen=True, slots=True)
class Gathered:
    """Observations of a channel, and the runs that could not be taken with them."""

    taken: tuple[Observation, ...]
    left: tuple[tuple[str, str], ...]
    """(run name, why) of runs whose reading would fit but may not be taken."""


def near(speed_hz: float, target_hz: float, share: float = SPEED_SHARE) -> bool:
    """Whether two speeds are one (within ``share`` of the target)."""
    return abs(speed_hz - target_hz) <= share * target_hz * (1.0 + 1e-9)


def standing_of(story: JobStory, run: Run) -> Standing | None:
    """Mount and set-up of a run; None when the story lacks one of them."""
    mount, set_up = mount_of(story, run), story.set_ups.get(run.set_up_id)
    return Standing(mount, set_up) if mount is not None and set_up is not None else None


def frame_turns_deg(channel: str, then: Standing, now: Standing) -> tuple[float, float] | str:
    """(turn of weights, turn of vectors) from one standing's frame to another's, or why there is none."""
    if then.mount.id == now.mount.id and then.set_up.id == now.set_up.id:
        return 0.0, 0.0
    why = differences(channel, then, now)
    if why:
        return "; ".join(why)
    weights = frame_turn_deg(then.mount, now.mount, now.ends)
    if weights is None:
        return "how the rotor mark stands to that mount's was not measured"
    return weights, weights + sensor_turn_deg(then, now)


def gather(story: JobStory, channel: str, now: Standing, wanted: Chooses) -> Gathered:
    """The readings of a channel that ``wanted`` picks, in ``now``'s frame, in the order of the runs."""
    taken: list[Observation] = []
    left: list[tuple[str, str]] = []
    for index, run, readings in _picked(story, channel, wanted):
        then = standing_of(story, run)
        turns = "its mount or set-up is not in the store" if then is None else _turns(channel, then, now)
        if then is None or isinstance(turns, str):
            left.append((run.name, str(turns)))
            continue
        try:
            weights = unbalances(pieces_at(story, run), then.mount, then.ends)
        except Refusal as refusal:
            left.append((run.name, refusal.cause))
            continue
        turned = {p: turn(w, turns[0]) for p, w in weights.items()}
        taken += [_observation(index, run, r, v, turned, turns[1]) for r, v in readings]
    return Gathered(tuple(taken), tuple(left))


def _turns(channel: str, then: Standing, now: Standing) -> tuple[float, float] | str:
    try:
        return frame_turns_deg(channel, then, now)
    except Refusal as refusal:
        return refusal.cause


def _picked(
    story: JobStory, channel: str, wanted: Chooses
) -> Iterator[tuple[int, Run, list[tuple[Reading, Vector]]]]:
    for index, run in enumerate(story.runs):
        readings = [(r, v) for r in run.readings if wanted(run, r) and (v := r.vector(channel)) is not None]
        if readings and run.void is None:
            yield index, run, readings


def _observation(
    index: int, run: Run, reading: Reading, vector: Vector, weights: Unbalances, turn_deg: float
) -> Observation:
    own = math.sqrt(max(vector.var_re, vector.var_im, 0.0))
    assert reading.label is not None
    return Observation(
        reading_id=reading.id,
        run_name=run.name,
        run_index=index,
        reading_number=reading.number,
        run_started_us=run.started_us,
        label=reading.label,
        speed_hz=reading.speed_hz,
        value=turn(vector.value, turn_deg),
        own_sd=own,
        unit=vector.unit,
        weights=weights,
    )


def balancing_at(speed_hz: float, origins: frozenset[Origin]) -> Chooses:
    """Picks O, O+T, check and trim readings at a speed, from runs of these origins."""

    def wanted(run: Run, reading: Reading) -> bool:
        return run.origin in origins and reading.label in BALANCING and near(reading.speed_hz, speed_hz)

    return wanted


@dataclass(frozen=True, slots=True)
class ChannelFit:
    """What the runs say about one channel: each plane's effect, and how sure it is."""

    channel: str
    unit: str
    planes: tuple[int, ...]
    observations: tuple[Observation, ...]
    scatter: Scatter
    sd: FloatArray
    """s per component of each observation, shape (n,)."""
    effects: Mapping[int, complex]
    """alpha per plane told apart, base unit 0-peak per g.mm."""
    maps: Mapping[int, ComplexArray]
    """alpha = maps[plane] @ values."""

    def se(self, plane: int) -> float:
        """Standard error of a plane's alpha, per component."""
        return float(np.sqrt((np.abs(self.maps[plane]) ** 2 * self.sd**2).sum()))

    def effect_ratio(self, plane: int) -> float:
        """Largest |V1 - V0| / (sqrt2 s) over pairs of readings that differ in this plane alone.

        Where no pair does, |alpha| / se, which is the same thing for one pair.
        """
        ratios = [
            abs(b.value - a.value) / math.hypot(self.sd[i], self.sd[j])
            for i, a in enumerate(self.observations)
            for j, b in enumerate(self.observations[:i])
            if _differs_only_in(plane, a.weights, b.weights)
        ]
        return float(max(ratios, default=abs(self.effects[plane]) / self.se(plane)))


def _differs_only_in(plane: int, a: Mapping[int, complex], b: Mapping[int, complex]) -> bool:
    here = same_weights({plane: a.get(plane, 0j)}, {plane: b.get(plane, 0j)})
    rest = [{p: w for p, w in side.items() if p != plane} for side in (a, b)]
    return not here and same_weights(*rest)


def fit_channel(channel: str, planes: tuple[int, ...], taken: tuple[Observation, ...]) -> ChannelFit:
    """Least squares over the observations (at least one) of a channel at one speed."""
    unit, speed_hz = taken[-1].unit, taken[-1].speed_hz
    scatter = scatter_from_repeats(_repeats(taken), unit, speed_hz)
    sd = np.array([scatter.sd(o.value, o.own_sd) for o in taken])
    weights = np.array([[o.weights.get(p, 0j) for p in planes] for o in taken], dtype=np.complex128)
    values = np.array([o.value for o in taken], dtype=np.complex128)
    found = plane_effects(weights.reshape(len(taken), len(planes)), values, sd)
    known = [(p, i) for i, p in enumerate(planes) if found.known[i]]
    return ChannelFit(
        channel=channel,
        unit=unit,
        planes=planes,
        observations=taken,
        scatter=scatter,
        sd=sd,
        effects={p: complex(found.values[i]) for p, i in known},
        maps={p: found.maps[i] for p, i in known},
    )


def _repeats(taken: tuple[Observation, ...]) -> list[list[complex]]:
    """Sets of vectors with the same weights, one per run (its last)."""
    sets: list[tuple[Unbalances, dict[int, complex]]] = []
    for o in taken:
        weights = dict(o.weights)
        runs = next((r for w, r in sets if same_weights(w, weights)), None)
        if runs is None:
            sets.append((weights, runs := {}))
        runs[o.run_index] = o.value
    return [list(runs.values()) for _, runs in sets]
