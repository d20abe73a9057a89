"""The scene of a piece of arithmetic: its standing, speed and runs, and the coefficients it rests on."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from config.errors import Refusal
from store.balance.angles import frame_turn_deg, piece_angle_deg, plane_of
from store.balance.coefficients import planes_of, present_standing
from store.balance.fit import (
    ChannelFit,
    Observation,
    balancing_at,
    fit_channel,
    gather,
    near,
    standing_of,
)
from store.balance.reuse import Candidate, ReusePool, pool
from store.balance.scatter import Scatter
from store.balance.standing import Standing
from store.balance.uncertainty import REFUSE_BELOW_RATIO, WARN_BELOW_RATIO
from store.balance.weights import Unbalances, pieces_now, same_weights, unbalances
from store.casework_answers import FittedPiece, UsedCoefficient
from store.casework_slow_roll import slow_rolls_in
from store.records import JobStory, Label, Machine, Mount, Origin, Reading, Run, WeightEvent, WeightPlane

BASES = frozenset({Label.O, Label.CHECK, Label.TRIM})
"""Readings a correction may start from; the newest is taken."""
Order = tuple[int, int]


@dataclass(frozen=True, slots=True)
class Scene:
    """A standing, a speed, and what the job's runs say in that standing's frame."""

    story: JobStory
    standing: Standing
    speed_hz: float
    origins: frozenset[Origin]
    fits: Mapping[str, ChannelFit]
    """By channel, of the present set-up, that has at least one reading."""
    left: tuple[tuple[str, str], ...]
    """(run, why) of labelled runs that may not be taken with the rest."""

    @property
    def planes(self) -> tuple[WeightPlane, ...]:
        return tuple(plane_of(self.standing.mount, n) for n in planes_of(self.standing))

    @property
    def job(self) -> str:
        return self.story.job.number

    @property
    def rpm(self) -> str:
        return f"{self.speed_hz * 60:.0f} r/min"

    def scatter(self, channel: str, observation: Observation) -> Scatter:
        """Run-to-run scatter of a channel; the plain prior where it has no reading yet."""
        fit = self.fits.get(channel)
        return fit.scatter if fit else Scatter(observation.unit, observation.speed_hz)

    def weights_now(self) -> Unbalances:
        """What is fitted at the end of the story, g.mm by plane."""
        mount = self.standing.mount
        return unbalances(pieces_now(self.story, mount), mount, self.standing.ends)


def origins_of(run: Run | None, *, any_origin: bool) -> frozenset[Origin]:
    """Live jobs take live runs only, others their own kind; all of them when asked for."""
    return frozenset(Origin) if any_origin or run is None else frozenset({run.origin})


def build(
    story: JobStory,
    standing: Standing,
    speed_hz: float,
    origins: frozenset[Origin],
    before: Order | None = None,
) -> Scene:
    """Fit every channel of the standing's set-up, from readings before ``before`` (None = all)."""
    fits: dict[str, ChannelFit] = {}
    left: dict[str, str] = {}
    for channel in standing.set_up.channels:
        found = gather(story, channel.name, standing, balancing_at(speed_hz, origins))
        taken = tuple(o for o in found.taken if before is None or o.order < before)
        left.update(found.left)
        if taken:
            fits[channel.name] = fit_channel(channel.name, planes_of(standing), taken)
    return Scene(story, standing, speed_hz, origins, fits, tuple(left.items()))


def scene_now(story: JobStory, *, speed_hz: float | None = None, any_origin: bool = False) -> Scene:
    """The scene at the end of the story: newest mount, newest set-up, all labelled runs.

    Raises Refusal when nothing is mounted or nothing was run.
    """
    standing = present_standing(story)
    if standing is None:
        raise Refusal(
            f"Job {story.job.number} has no O run.", "Run the rotor at its balancing speed and mark it O."
        )
    newest = next((r for r in reversed(story.runs) if r.void is None), None)
    origins = origins_of(newest, any_origin=any_origin)
    return build(story, standing, speed_hz or default_speed_hz(story), origins)


def default_speed_hz(story: JobStory) -> float:
    """The job's first balancing speed, or the machine's service speed."""
    speeds = story.job.speeds_hz or tuple(m.machine.service_hz for m in story.mounts[-1:])
    return speeds[0]


def scene_before(story: JobStory, run: Run, reading: Reading, *, any_origin: bool = False) -> Scene:
    """The scene as it was before a reading, in that reading's own standing and at its speed."""
    standing = standing_of(story, run)
    if standing is None:
        raise Refusal(f"The mount or the set-up of run {run.name} is not in the store.", "Check the store.")
    index = next(i for i, r in enumerate(story.runs) if r.id == run.id)
    speed = next((s for s in story.job.speeds_hz if near(reading.speed_hz, s)), reading.speed_hz)
    return build(
        story, standing, speed, origins_of(run, any_origin=any_origin), before=(index, reading.number)
    )


def history(scene: Scene, candidates: Iterable[Candidate] | None) -> ReusePool | None:
    """What may be reused in the scene; None when reuse was not asked for."""
    if candidates is None:
        return None
    return pool(candidates, scene.standing, speed_hz=scene.speed_hz, origins=scene.origins, not_job=scene.job)


def judged_machine(scene: Scene) -> Machine:
    """The mounted machine with its newest revision's tolerance; the geometry stays the mount's."""
    mounted, now = scene.standing.mount.machine, scene.story.machine_now
    if now is None or now.serial != mounted.serial:
        return mounted
    return replace(now, model=mounted.model)


def turn_notes(scene: Scene, base: Mapping[str, Observation]) -> list[str]:
    """A sentence when the base reading is of an earlier mount and was turned for a moved rotor mark."""
    name = next((o.run_name for o in base.values()), "")
    run = next((r for r in scene.story.runs if r.name == name), None)
    then = None if run is None else standing_of(scene.story, run)
    if then is None or then.mount.id == scene.standing.mount.id:
        return []
    turned = frame_turn_deg(then.mount, scene.standing.mount, scene.standing.ends)
    if not turned:
        return []
    what = f"its vectors and weights were turned by {turned:+.4g} deg in the sense of lag"
    return [f"Run {name} is of an earlier mount: {what}, because the rotor mark was moved since."]


def fitted_piece(event: WeightEvent, mount: Mount, ends: tuple[str, str]) -> FittedPiece:
    """What a weight event put on the rotor, and where."""
    plane = mount.machine.model.plane(event.plane)
    try:
        angle: float | None = piece_angle_deg(event, mount, ends)
    except Refusal:
        angle = None
    return FittedPiece(
        plane=event.plane,
        mass_g=event.mass_g,
        radius_mm=event.radius_mm,
        own_radius=plane is None or plane.radius_mm != event.radius_mm,
        hole=event.hole,
        angle_deg=angle,
        drilled=event.act == "drilled",
    )


# --- base and slow roll --------------------------------------------------------------------------------


def base_of(scene: Scene) -> dict[str, Observation]:
    """The newest O, check or trim reading, by channel. Raises Refusal when there is none."""
    found = base_or_none(scene)
    if found:
        return found
    if scene.left:
        run, why = scene.left[-1]
        raise Refusal(
            f"Run {run} of job {scene.job} cannot be used for the present mount: {why}.",
            "Run the rotor as it stands now and mark it O.",
        )
    raise Refusal(
        f"Job {scene.job} has no O run at {scene.rpm}.",
        f"Run the rotor at {scene.rpm} (within 0.5 %) and mark it O.",
    )


def base_or_none(scene: Scene) -> dict[str, Observation]:
    """The same, empty when there is none."""
    bases = [(c, o) for c, fit in scene.fits.items() for o in fit.observations if o.label in BASES]
    newest = max((o.order for _, o in bases), default=None)
    return {c: o for c, o in bases if o.order == newest}


def slow_rolls(scene: Scene) -> dict[str, Observation]:
    """The newest slow-roll reading by channel, of displacement channels only (METHODS section 9)."""
    return slow_rolls_in(scene.story, scene.standing, scene.origins)


# --- coefficients --------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Sources:
    """Which coefficients are there, from the job's own runs first, else from history."""

    entries: Mapping[tuple[int, str], UsedCoefficient]
    """By (plane, channel)."""
    weak: Mapping[int, float]
    """Planes whose effect was too small to be trusted, with their ratio; their entries are there too."""
    ratios: Mapping[int, float]
    """Largest effect ratio over the channels, of planes told apart by own runs that are used."""

    def get(self, plane: int, channel: str) -> UsedCoefficient | None:
        return self.entries.get((plane, channel))

    def knows(self, plane: int) -> bool:
        return any(p == plane for p, _ in self.entries)

    def channels_for(self, planes: Iterable[int], channels: Iterable[str]) -> tuple[str, ...]:
        """Of these channels, those that know every one of these planes."""
        wanted = tuple(planes)
        return tuple(c for c in channels if all((p, c) in self.entries for p in wanted))


def sources(scene: Scene, reused: ReusePool | None) -> Sources:
    """Own coefficients whose effect is at least 5 times the scatter, else history's, else own weak ones."""
    entries: dict[tuple[int, str], UsedCoefficient] = {}
    weak: dict[int, float] = {}
    ratios: dict[int, float] = {}
    for plane in planes_of(scene.standing):
        own = {c: _own(scene, fit, plane) for c, fit in scene.fits.items() if plane in fit.effects}
        ratio = max((e.effect_ratio or 0.0 for e in own.values()), default=0.0)
        old = _reused(scene, reused, plane)
        chosen = own if ratio >= REFUSE_BELOW_RATIO or not old else old
        entries.update({(plane, c): e for c, e in chosen.items()})
        if chosen is own and own:
            (ratios if ratio >= REFUSE_BELOW_RATIO else weak)[plane] = ratio
    return Sources(entries, weak, ratios)


def _own(scene: Scene, fit: ChannelFit, plane: int) -> UsedCoefficient:
    runs = tuple(dict.fromkeys(o.run_name for o in fit.observations))
    return UsedCoefficient(
        plane=plane,
        channel=fit.channel,
        unit=fit.unit,
        value=fit.effects[plane],
        sd=fit.se(plane),
        source="own",
        behind=runs,
        machines=(scene.standing.mount.machine.serial,),
        effect_ratio=fit.effect_ratio(plane),
        basis=f"runs {', '.join(runs)}",
    )


def _reused(scene: Scene, reused: ReusePool | None, plane: int) -> dict[str, UsedCoefficient]:
    found = [p for p in reused.pooled if p.plane == plane] if reused else []
    return {
        p.channel: UsedCoefficient(
            plane=plane,
            channel=p.channel,
            unit=channel.unit,
            value=p.value,
            sd=p.sd,
            source="history",
            behind=p.jobs,
            machines=p.machines,
            effect_ratio=None,
            basis=p.basis,
        )
        for p in found
        if (channel := scene.standing.set_up.channel(p.channel)) is not None
    }


def ratio_warnings(found: Sources, planes: Iterable[int]) -> list[str]:
    """A sentence for each plane whose effect is between 5 and 10 times its scatter."""
    return [
        f"Plane {p}: the largest effect of its weights is only {found.ratios[p]:.1f} times the scatter "
        f"(10 wanted); the figures for it are rough."
        for p in planes
        if found.ratios.get(p, WARN_BELOW_RATIO) < WARN_BELOW_RATIO
    ]


# --- prediction ----------------------------------------------------------------------------------------


def weight_change(to: Unbalances, since: Mapping[int, complex]) -> Unbalances:
    """Weights added in between, by plane, those that are only rounding taken as none."""
    planes = sorted(to.keys() | since.keys())
    scale = max([1.0, *(abs(v) for v in (*to.values(), *since.values()))])
    return {
        p: to.get(p, 0j) - since.get(p, 0j)
        for p in planes
        if not same_weights({p: to.get(p, 0j)}, {p: since.get(p, 0j)}, scale_gmm=scale)
    }


def unknown_effects(found: Sources, change: Unbalances, channels: Iterable[str]) -> tuple[int, ...]:
    """Planes whose weights changed and whose effect on some of the channels is not known."""
    names = tuple(channels)
    return tuple(p for p in change if any((p, c) not in found.entries for c in names))


def predict(
    scene: Scene, base: Observation, found: Sources, channel: str, change: Unbalances
) -> tuple[complex, float]:
    """(vector, sd per component) once the weights have changed so since the base reading.

    The sd holds what the readings behind it leave (their shared part counted once) and what a reused
    coefficient may be off; not the scatter of the next reading. Raises KeyError for an unknown effect.
    """
    fit = scene.fits[channel]
    share = np.array([1.0 + 0j if o.order == base.order else 0j for o in fit.observations])
    value, variance = base.value, 0.0
    for plane, weight in change.items():
        entry = found.entries[(plane, channel)]
        value += entry.value * weight
        if entry.source == "own":
            share = share + weight * fit.maps[plane]
        else:
            variance += (abs(weight) * entry.sd) ** 2
    variance += float((np.abs(share) ** 2 * fit.sd**2).sum())
    return value, variance**0.5


def left_notes(scene: Scene) -> list[str]:
    """A sentence for each labelled run that was not taken."""
    return [f"Run {run} was not taken: {why}." for run, why in scene.left]
