"""What a polar plot of a job shows: its 1X vectors in one frame, effects, predictions, tolerance, weights.

Pure: records in, frozen answers out. Every vector is turned into the frame of the newest balancing run, as
the correction and the verdict turn them.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any, Literal

from config.errors import Refusal
from store.balance.angles import same_sense
from store.balance.fit import BALANCING, Observation, near, standing_of
from store.balance.reuse import Candidate
from store.balance.slowroll import less
from store.balance.standing import Standing
from store.balance.tolerance import tolerance_of
from store.balance.weights import mount_of, pieces_at, pieces_now
from store.casework_answers import FittedPiece, Verdict, foreseen_has_lag, unbalance_dict, vector_dict
from store.casework_scene import (
    Scene,
    build,
    default_speed_hz,
    fitted_piece,
    history,
    judged_machine,
    slow_rolls,
    sources,
    weight_change,
)
from store.casework_slow_roll import no_slow_roll, why_left
from store.records import JobStory, Label, Reading, Run, Sense, Turn, flags_of
from store.standing_flags import all_flags

Role = Literal["O", "O+T", "check", "trim", "slow-roll", "predicted"]


@dataclass(frozen=True, slots=True)
class PolarVector:
    """One arrow from the centre."""

    role: Role
    run: str
    reading: int
    """Within its run; 0 = the run gives this plot one reading only."""
    value: complex
    """0-peak in the channel's base unit, as measured (runout included) unless slow roll is taken off."""
    lag_known: bool = True
    """False where the amplitude is below the noise floor."""
    flags: tuple[str, ...] = ()
    """Health flags of the reading that concern this channel."""

    noise_floor: float = 0.0

    @property
    def flagged(self) -> bool:
        return bool(self.flags)


@dataclass(frozen=True, slots=True)
class PolarEffect:
    """What a change of weights did: from the tip of one vector to the tip of another."""

    run: str
    since_run: str
    start: complex
    end: complex
    weights: Mapping[int, complex]
    """Weights added in between, g.mm by plane, against rotation from the rotor mark."""

    @property
    def value(self) -> complex:
        return self.end - self.start


@dataclass(frozen=True, slots=True)
class ToleranceCircle:
    """Where a vector lies whose residual unbalance is just permissible; of a single-plane job only."""

    centre: complex
    """The slow-roll vector where the verdict takes it off, else 0."""
    radius: float
    """|alpha| times the permissible residual unbalance."""
    permissible_gmm: float


@dataclass(frozen=True, slots=True)
class PolarChannel:
    channel: str
    unit: str
    probe_deg: float
    """Stand angle, as ``PolarPicture.seen_from`` sees it."""
    vectors: tuple[PolarVector, ...]
    effects: tuple[PolarEffect, ...]
    circle: ToleranceCircle | None


@dataclass(frozen=True, slots=True)
class FittedAt:
    """What was on the rotor at a run; ``run`` None = what is there now."""

    role: Role | None
    run: str | None
    pieces: tuple[FittedPiece, ...]


@dataclass(frozen=True, slots=True)
class PolarPicture:
    job_number: str
    machine_serial: str
    model_code: str
    speed_hz: float
    rotation: Sense
    seen_from: str
    """The end that stand angles are seen from, and the plot with them."""
    turns: Turn
    """The rotor's rotation as seen from that end."""
    edge: str
    sensor_deg: float
    zero: str
    runs: tuple[str, ...]
    """Those whose vectors are drawn, by start."""
    origins: tuple[str, ...]
    first_us: int
    last_us: int
    planes: int
    channels: tuple[PolarChannel, ...]
    weights: tuple[FittedAt, ...]
    verdict: Verdict | None
    """Of the newest check or trim that could be judged."""
    left: tuple[tuple[str, str], ...]
    """(run, why) of labelled runs that could not be drawn with the others."""
    slow_roll: tuple[str, int, float] | None = None
    """(run, reading, Hz) of the slow roll that is taken off; None = vectors as measured."""
    left_raw: tuple[str, ...] = ()
    """Why channels are drawn as measured all the same, a sentence each."""

    @property
    def angles_grow(self) -> Turn:
        """The sense in which lag and weight angles grow on the plot: against rotation."""
        return "counterclockwise" if self.turns == "clockwise" else "clockwise"

    def to_dict(self) -> dict[str, Any]:
        return {
            "job": self.job_number,
            "machine": self.machine_serial,
            "model": self.model_code,
            "speed_hz": self.speed_hz,
            "rotation": str(self.rotation),
            "seen_from": self.seen_from,
            "angles_grow": self.angles_grow,
            "runs": list(self.runs),
            "channels": [_channel_dict(c) for c in self.channels],
            "left": [{"run": run, "why": why} for run, why in self.left],
            "slow_roll_subtracted": None if self.slow_roll is None else self.slow_roll[0],
            "left_raw": list(self.left_raw),
        }


def _vector_dict(vector: PolarVector, unit: str) -> dict[str, Any]:
    told = vector_dict(vector.value, unit)
    lag = told["lag_deg"] if vector.lag_known else None
    return {
        "role": vector.role,
        "run": vector.run,
        "reading": vector.reading,
        **told,
        "lag_deg": lag,
        "flags": list(vector.flags),
    }


def _channel_dict(channel: PolarChannel) -> dict[str, Any]:
    circle = channel.circle
    return {
        "channel": channel.channel,
        "vectors": [_vector_dict(v, channel.unit) for v in channel.vectors],
        "effects": [
            {
                "run": e.run,
                "since_run": e.since_run,
                **vector_dict(e.value, channel.unit),
                "weights": [{"plane": p, **unbalance_dict(w)} for p, w in e.weights.items()],
            }
            for e in channel.effects
        ],
        "tolerance_circle": None
        if circle is None
        else {
            "centre": vector_dict(circle.centre, channel.unit),
            "radius_pk": circle.radius,
            "permissible_gmm": circle.permissible_gmm,
        },
    }


# --- making one ----------------------------------------------------------------------------------------


def polar_picture(
    story: JobStory,
    verdicts: Iterable[Verdict] = (),
    *,
    reuse: Iterable[Candidate] | None = None,
    channels: tuple[str, ...] = (),
    speed_hz: float | None = None,
    minus_slow_roll: bool = False,
) -> PolarPicture:
    """The picture of a job at a speed (None = the job's first balancing speed).

    ``verdicts`` are those of its check and trim readings; ``reuse`` serves the circle of a single-plane job
    that no verdict covers yet. ``channels`` empty = all. ``minus_slow_roll`` draws shaft vectors less the
    slow roll. Raises Refusal: no O run at the speed, no such channel, or no slow roll to take off.
    """
    speed = speed_hz or default_speed_hz(story)
    scene = _scene(story, speed)
    told = [v for v in verdicts if near(v.speed_hz, speed)]
    names = _chosen(scene, channels)
    slow = slow_rolls(scene)
    circles = _circles(scene, told[-1] if told else None, slow, reuse)
    shown = tuple(_channel(scene, name, told, slow.get(name), circles.get(name)) for name in names)
    whole = _picture(scene, shown, told[-1] if told else None)
    return _without(scene, whole, slow) if minus_slow_roll else whole


def _scene(story: JobStory, speed_hz: float) -> Scene:
    """In the standing of the newest run that holds a balancing reading at the speed."""
    for run in reversed(story.runs):
        standing = standing_of(story, run)
        wanted = any(r.label in BALANCING and near(r.speed_hz, speed_hz) for r in run.readings)
        if wanted and run.void is None and standing is not None:
            scene = build(story, standing, speed_hz, frozenset({run.origin}))
            if any(o.label is Label.O for f in scene.fits.values() for o in f.observations):
                return scene
            raise _no_o(story, speed_hz, scene.left)
    raise _no_o(story, speed_hz, ())


def _no_o(story: JobStory, speed_hz: float, left: tuple[tuple[str, str], ...]) -> Refusal:
    rpm = f"{speed_hz * 60:.0f} r/min"
    why = f" (run {left[-1][0]} cannot be taken with the rest: {left[-1][1].rstrip('.')})" if left else ""
    return Refusal(
        f"Job {story.job.number} has no O run at {rpm} to draw{why}.",
        "Run the rotor at its balancing speed and mark it O, or name another speed (--rpm).",
    )


def _chosen(scene: Scene, channels: tuple[str, ...]) -> tuple[str, ...]:
    for name in channels:
        if name not in scene.fits:
            raise Refusal(
                f"Job {scene.job} has no balancing reading of a channel {name!r} at {scene.rpm}.",
                f"Its channels: {', '.join(scene.fits)}.",
            )
    return tuple(n for n in scene.fits if not channels or n in channels)


def _reading_of(story: JobStory, observation: Observation) -> Reading:
    run = story.runs[observation.run_index]
    return next(r for r in run.readings if r.id == observation.reading_id)


def _channel(
    scene: Scene,
    name: str,
    verdicts: list[Verdict],
    slow: Observation | None,
    circle: ToleranceCircle | None,
) -> PolarChannel:
    fit = scene.fits[name]
    taken = [*fit.observations, *([slow] if slow else [])]
    runs = [o.run_name for o in taken]
    vectors: list[PolarVector] = []
    for o in taken:
        number = o.reading_number if runs.count(o.run_name) > 1 else 0
        foreseen = _predicted(verdicts, o, name)
        if foreseen is not None:
            vectors.append(PolarVector("predicted", o.run_name, number, *foreseen))
        vectors.append(_measured(scene, o, name, number))
    effects = tuple(e for o in fit.observations if (e := _effect(fit.observations, o)) is not None)
    probe = scene.standing.set_up.channel(name)
    return PolarChannel(name, fit.unit, probe.angle_deg if probe else 0.0, tuple(vectors), effects, circle)


def _measured(scene: Scene, o: Observation, channel: str, number: int) -> PolarVector:
    reading = _reading_of(scene.story, o)
    vector = reading.vector(channel)
    known = vector is not None and abs(vector.value) > vector.noise_floor
    run = scene.story.runs[o.run_index]
    flags = flags_of(all_flags(scene.story, run, reading), channel)
    floor = vector.noise_floor if vector is not None else 0.0
    return PolarVector(o.label.value, o.run_name, number, o.value, known, flags, floor)


def _predicted(verdicts: list[Verdict], o: Observation, channel: str) -> tuple[complex, bool] | None:
    """What the verdict on this reading foresaw, turned from the reading's own frame as the reading was, and
    whether its lag means anything."""
    for verdict in verdicts:
        if (verdict.run_name, verdict.reading_number) == (o.run_name, o.reading_number):
            found = next((c for c in verdict.channels if c.channel == channel), None)
            if found is not None and found.predicted is not None:
                turned = o.value / found.measured if found.measured else 1.0 + 0j
                return found.predicted * turned, foreseen_has_lag(found.predicted, found.sd)
    return None


def _effect(all_of: tuple[Observation, ...], tried: Observation) -> PolarEffect | None:
    """Of an O+T reading: since the O or O+T before it that differs in fewest planes (O before O+T)."""
    if tried.label is not Label.O_T:
        return None
    before = [o for o in all_of if o.order < tried.order and o.label in (Label.O, Label.O_T)]
    changes = [(weight_change(dict(tried.weights), o.weights), o) for o in before]
    useful = [(c, o) for c, o in changes if c]
    if not useful:
        return None
    change, since = min(useful, key=lambda x: (len(x[0]), x[1].label is not Label.O, -x[1].run_index))
    return PolarEffect(tried.run_name, since.run_name, since.value, tried.value, change)


def _circles(
    scene: Scene,
    verdict: Verdict | None,
    slow: Mapping[str, Observation],
    reuse: Iterable[Candidate] | None,
) -> dict[str, ToleranceCircle]:
    """One circle a channel for a single-plane machine with a tolerance and a known effect; else none."""
    tolerance = tolerance_of(judged_machine(scene))
    if tolerance is None or len(scene.planes) != 1:
        return {}
    plane = scene.planes[0].number
    used = [c for c in verdict.coefficients if c.plane == plane] if verdict else []
    if not used:
        found = sources(scene, history(scene, reuse))
        used = [c for c in found.entries.values() if c.plane == plane and plane not in found.weak]
    share = tolerance.shares_gmm[plane]
    return {
        c.channel: ToleranceCircle(
            slow[c.channel].value if c.channel in slow else 0j, abs(c.value) * share, share
        )
        for c in used
    }


def _without(scene: Scene, whole: PolarPicture, slow: Mapping[str, Observation]) -> PolarPicture:
    """The picture less slow roll: shaft vectors and circles moved by it, the slow roll itself left out."""
    drawn = {c.channel for c in whole.channels}
    channels = [c for c in scene.standing.set_up.channels if c.name in drawn]
    if not drawn & slow.keys():
        raise no_slow_roll(scene.story, channels)
    of = next(iter(slow.values()))
    return replace(
        whole,
        channels=tuple(_less(scene, c, slow.get(c.channel)) for c in whole.channels),
        slow_roll=(of.run_name, of.reading_number, of.speed_hz),
        left_raw=tuple(why_left(c) for c in channels if c.name not in slow),
    )


def _less(scene: Scene, channel: PolarChannel, slow: Observation | None) -> PolarChannel:
    if slow is None:
        return channel
    own = _reading_of(scene.story, slow).vector(channel.channel)
    floor = own.noise_floor if own is not None else 0.0

    def moved(v: PolarVector) -> PolarVector:
        value = less(v.value, slow.value)
        return replace(v, value=value, lag_known=abs(value) > math.hypot(v.noise_floor, floor))

    circle = channel.circle
    return replace(
        channel,
        vectors=tuple(moved(v) for v in channel.vectors if v.role != "slow-roll"),
        effects=tuple(
            replace(e, start=less(e.start, slow.value), end=less(e.end, slow.value)) for e in channel.effects
        ),
        circle=None if circle is None else replace(circle, centre=less(circle.centre, slow.value)),
    )


# --- the rest ------------------------------------------------------------------------------------------


def _picture(scene: Scene, channels: tuple[PolarChannel, ...], verdict: Verdict | None) -> PolarPicture:
    standing, story = scene.standing, scene.story
    set_up, machine = standing.set_up, standing.mount.machine
    names = {v.run for c in channels for v in c.vectors}
    runs = [r for r in story.runs if r.name in names]
    return PolarPicture(
        job_number=story.job.number,
        machine_serial=machine.serial,
        model_code=machine.model.code,
        speed_hz=scene.speed_hz,
        rotation=standing.mount.rotation,
        seen_from=set_up.angles_seen_from,
        turns=turns_seen(standing),
        edge=set_up.pulse.edge,
        sensor_deg=set_up.pulse.angle_deg,
        zero=set_up.zero,
        runs=tuple(r.name for r in runs),
        origins=tuple(dict.fromkeys(r.origin.value for r in runs)),
        first_us=runs[0].started_us,
        last_us=runs[-1].started_us,
        planes=len(scene.planes),
        channels=channels,
        weights=_weights(scene, runs),
        verdict=verdict,
        left=scene.left,
    )


def turns_seen(standing: Standing) -> Turn:
    """The rotor's sense of turning as seen from the end that stand angles are seen from."""
    as_seen = Sense("clockwise", standing.set_up.angles_seen_from)
    return "clockwise" if same_sense(as_seen, standing.mount.rotation, standing.ends) else "counterclockwise"


def _weights(scene: Scene, runs: list[Run]) -> tuple[FittedAt, ...]:
    """What was on the rotor at each balancing run drawn, and now where that differs from the newest."""
    story, ends = scene.story, scene.standing.ends
    found: list[FittedAt] = []
    for run in runs:
        mount = mount_of(story, run)
        label = next((r.label for r in run.readings if r.label in BALANCING), None)
        if label is not None and mount is not None:
            pieces = tuple(fitted_piece(e, mount, ends) for e in pieces_at(story, run))
            found.append(FittedAt(label.value, run.name, pieces))
    mount = scene.standing.mount
    now = tuple(fitted_piece(e, mount, ends) for e in pieces_now(story, mount))
    if mount.ended_us is None and found and now != found[-1].pieces:
        found.append(FittedAt(None, None, now))
    return tuple(found)
