"""The correction of a job: exact weights, pieces in real holes, and what should be read with them."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np

from config.errors import Refusal
from store.balance.fit import Observation
from store.balance.holes import DEFAULT_STEP_G, Piece, place
from store.balance.influence import ComplexArray, FloatArray, condition_number, inverse
from store.balance.reuse import Candidate, ReusePool
from store.balance.slowroll import less
from store.balance.tolerance import Tolerance, tolerance_of
from store.balance.trial import force_n
from store.balance.uncertainty import REFUSE_BELOW_RATIO, WARN_BELOW_RATIO, amplitude_quantile
from store.balance.weights import Unbalances, pieces_now
from store.casework_answers import (
    ChannelOutlook,
    CorrectionAdvice,
    FittedPiece,
    LeftOut,
    PlaneAdvice,
    UsedCoefficient,
)
from store.casework_flags import flagged, lag_is_known_of
from store.casework_scene import (
    Scene,
    Sources,
    base_of,
    fitted_piece,
    history,
    judged_machine,
    left_notes,
    predict,
    ratio_warnings,
    scene_now,
    slow_rolls,
    sources,
    turn_notes,
    unknown_effects,
    weight_change,
)
from store.records import JobStory, Origin, WeightPlane

WARN_CONDITION = 20.0
REFUSE_CONDITION = 1e3
"""Ratio of singular values above which planes can hardly be told apart by the probes (judgement)."""
WARN_P90_SHARE = 0.6
"""Predicted p90 residual over what is there now (REUSE (d) 12)."""
NEAR_SD = 3.0
"""An unbalance within so many of its standard deviations is near what the coefficients tell (judgement)."""


@dataclass(frozen=True, slots=True)
class System:
    """A w + V = 0 for the planes to be solved and the channels that know them."""

    scene: Scene
    found: Sources
    base: Mapping[str, Observation]
    slow: Mapping[str, Observation]
    """By channel, what is subtracted; empty = nothing."""
    planes: tuple[WeightPlane, ...]
    channels: tuple[str, ...]
    A: ComplexArray
    """Shape (channels, planes)."""
    inverse: ComplexArray
    """Least-squares inverse, shape (planes, channels)."""

    def slow_roll(self, channel: str) -> complex | None:
        return self.slow[channel].value if channel in self.slow else None

    def unbalance(self, vectors: Iterable[complex]) -> list[complex]:
        """The unbalance in each plane that explains vectors (slow roll taken off), g.mm at its heavy spot."""
        v = np.array([less(x, self.slow_roll(c)) for c, x in zip(self.channels, vectors, strict=True)])
        return [complex(u) for u in self.inverse @ v]

    def spread(self, variances: Iterable[float]) -> list[float]:
        """sd per component in each plane from the channels' variances per component."""
        squares = np.abs(self.inverse) ** 2 @ np.array(list(variances))
        return [float(s) for s in np.sqrt(squares)]


def system(
    scene: Scene,
    found: Sources,
    base: Mapping[str, Observation],
    slow: Mapping[str, Observation],
    planes: tuple[WeightPlane, ...],
) -> System:
    """Raises Refusal when fewer channels than planes know them, or when the planes look alike."""
    channels = found.channels_for([p.number for p in planes], base)
    if len(channels) < len(planes):
        raise Refusal(
            f"{len(planes)} planes cannot be solved from {len(channels)} channel(s) of job {scene.job}.",
            "Correct in one plane at a time (--plane), or measure with one more probe.",
        )
    A = np.array([[found.entries[(p.number, c)].value for p in planes] for c in channels])
    inv = inverse(A, _row_weights(scene, base, channels))
    made = System(scene, found, base, slow, planes, channels, A, inv)
    if not condition(made) < REFUSE_CONDITION:
        raise Refusal(
            f"The planes of {scene.standing.mount.machine.serial} look alike to its probes "
            f"(condition number above {REFUSE_CONDITION:.0f}).",
            "Correct in one plane only (--plane).",
        )
    return made


def condition(made: System) -> float:
    """Condition number of A with each row in units of its channel's scatter where units differ."""
    rows = _row_weights(made.scene, made.base, made.channels)
    return condition_number(made.A if rows is None else np.sqrt(rows)[:, None] * made.A)


def _row_weights(scene: Scene, base: Mapping[str, Observation], channels: Iterable[str]) -> FloatArray | None:
    """1/s^2 per channel where their units differ (um beside mm/s); None = plain least squares."""
    rows = [(scene.scatter(c, base[c]), base[c]) for c in channels]
    if len({o.unit for _, o in rows}) < 2:
        return None
    return np.array([scatter.sd(o.value, o.own_sd) ** -2 for scatter, o in rows])


# --- the answer ----------------------------------------------------------------------------------------


def correction_for(
    story: JobStory,
    *,
    planes: tuple[int, ...] | None = None,
    reuse: Iterable[Candidate] | None = None,
    subtract_slow_roll: bool = False,
    speed_hz: float | None = None,
    any_origin: bool = False,
    step_g: float = DEFAULT_STEP_G,
) -> CorrectionAdvice:
    """What to add to what is fitted at the end of the story, plane by plane.

    ``planes`` None = all of the model. ``reuse`` None = own runs only; else coefficients of history with
    their mount and set-up. ``speed_hz`` None = the job's first balancing speed. Raises Refusal: no O run,
    no plane told apart, an effect below 5 times its scatter, an effect needed but not known.
    """
    scene = scene_now(story, speed_hz=speed_hz, any_origin=any_origin)
    base = base_of(scene)
    reused = history(scene, reuse)
    found = sources(scene, reused)
    wanted = _wanted(scene, planes)
    _refuse_weak(scene, found, wanted)
    solved = tuple(p for p in wanted if found.knows(p.number))
    if not solved:
        raise _nothing_known(scene, wanted, reused)
    made = system(scene, found, base, _slow(scene, asked=subtract_slow_roll), solved)
    asked = {p.number for p in wanted}
    left_out = tuple(p for p in scene.planes if p not in solved)
    return _advice(made, _left_out(made, left_out, asked, reused), reused, step_g)


def _wanted(scene: Scene, planes: tuple[int, ...] | None) -> tuple[WeightPlane, ...]:
    known = {p.number: p for p in scene.planes}
    for number in planes or ():
        if number not in known:
            machine = scene.standing.mount.machine
            raise Refusal(
                f"Model {machine.model.code} of {machine.serial} has no plane {number}.",
                f"Its planes: {', '.join(map(str, known))}.",
            )
    return scene.planes if planes is None else tuple(known[n] for n in sorted(set(planes)))


def _slow(scene: Scene, *, asked: bool) -> dict[str, Observation]:
    found = slow_rolls(scene) if asked else {}
    if asked and not found:
        raise Refusal(
            f"Job {scene.job} has no slow-roll reading of a displacement probe.",
            "Mark one (revmark mark slow-roll), or correct without subtracting it.",
        )
    return found


def _refuse_weak(scene: Scene, found: Sources, wanted: tuple[WeightPlane, ...]) -> None:
    for plane in wanted:
        ratio = found.weak.get(plane.number)
        if ratio is None:
            continue
        tried = max(_tried(scene, plane.number), default=0.0)
        offer = tried * WARN_BELOW_RATIO / ratio if ratio > 0 else 0.0
        size = f" of about {offer / plane.radius_mm:.2g} g ({offer:.3g} g.mm)" if offer else ""
        raise Refusal(
            f"The weights tried in plane {plane.number} changed the vibration by only {ratio:.1f} times its "
            f"scatter; below {REFUSE_BELOW_RATIO:.0f} no correction is worth fitting.",
            f"Try a larger trial weight{size}, if its force allows (revmark weight advise), and mark O+T; "
            "or use history (--reuse).",
        )


def _tried(scene: Scene, plane: int) -> list[float]:
    """Weight differences of a plane between the readings, g.mm."""
    observations = [o for fit in scene.fits.values() for o in fit.observations]
    weights = [o.weights.get(plane, 0j) for o in observations]
    return [abs(w - weights[0]) for w in weights]


def _nothing_known(scene: Scene, wanted: tuple[WeightPlane, ...], reused: ReusePool | None) -> Refusal:
    which = " or ".join(str(p.number) for p in wanted)
    cause = f"No run of job {scene.job} at {scene.rpm} tells the effect of a weight in plane {which}"
    if reused is None:
        return Refusal(
            f"{cause}.",
            "Fit a trial weight (revmark weight advise), run and mark it O+T, or use history (--reuse).",
        )
    newest = reused.refused[-1] if reused.refused else None
    none = "and history has none for this model" if newest is None else "and none of history may be used"
    first = f" (job {newest.job_number}: {newest.why.rstrip('.')})" if newest else ""
    return Refusal(f"{cause}, {none}{first}.", "Fit a trial weight, run and mark it O+T.")


def _advice(
    made: System, left_out: tuple[LeftOut, ...], reused: ReusePool | None, step_g: float
) -> CorrectionAdvice:
    scene = made.scene
    weights_now = scene.weights_now()
    first = next(iter(made.base.values()))
    since = weight_change(weights_now, first.weights)
    _refuse_unknown(made, since, first.run_name)
    now = [predict(scene, made.base[c], made.found, c, since)[0] for c in made.channels]
    add = {p.number: -u for p, u in zip(made.planes, made.unbalance(now), strict=True)}
    tolerance = tolerance_of(judged_machine(scene))
    planes = _planes(made, add, weights_now, since, now, tolerance, step_g)
    within = () if left_out else _already_within(planes, since)
    channels = _outlooks(made, now, _with_pieces(since, planes))
    machine = scene.standing.mount.machine
    return CorrectionAdvice(
        job_number=scene.job,
        machine_serial=machine.serial,
        model_code=machine.model.code,
        speed_hz=scene.speed_hz,
        origins=tuple(sorted(o.value for o in _origins_used(scene))),
        base_run=first.run_name,
        base_reading=first.reading_number,
        base_label=first.label.value,
        fitted=_fitted(scene),
        slow_roll_run=next((o.run_name for o in made.slow.values()), None),
        planes=planes,
        left_out=left_out,
        channels=channels,
        condition_number=condition(made),
        coefficients=_used(made),
        not_reused=reused.refused if reused else (),
        scatter_is_prior=_is_prior(made),
        permissible_gmm=tolerance.permissible_gmm if tolerance else None,
        tolerance_how=tolerance.how if tolerance else "",
        warnings=_warnings(made, channels, within=bool(within)),
        notes=(*within, *_notes(made, reused)),
        flags=flagged(scene.story, _behind(made)),
    )


def _behind(made: System) -> dict[str, list[Observation]]:
    """By channel used, the readings that the answer rests on."""
    return {
        c: [*made.scene.fits[c].observations, *([made.slow[c]] if c in made.slow else [])]
        for c in made.channels
    }


def _refuse_unknown(made: System, since: Unbalances, base_run: str) -> None:
    unknown = unknown_effects(made.found, since, made.channels)
    if unknown:
        raise Refusal(
            f"Plane {unknown[0]} holds other weights now than at run {base_run}; no run tells their effect.",
            "Put them back as they were, or run the rotor as it is and mark it check.",
        )


def _left_out(
    made: System, planes: tuple[WeightPlane, ...], asked: set[int], reused: ReusePool | None
) -> tuple[LeftOut, ...]:
    """Planes that are not corrected, with the unbalance that stays there where it can be told."""
    stays = _unbalance_now(made) if planes else {}
    return tuple(
        LeftOut(
            p.number,
            _why_left(reused) if p.number in asked else "not asked for (--plane)",
            stays.get(p.number),
        )
        for p in planes
    )


def _why_left(reused: ReusePool | None) -> str:
    asked = "history has none that may be used" if reused else "--reuse may know it"
    return f"no run tells the effect of its weights apart; {asked}"


def _unbalance_now(made: System) -> dict[int, complex]:
    """The unbalance of every plane with what is fitted now; empty where the planes cannot be told apart."""
    scene, found = made.scene, made.found
    numbers = [p.number for p in scene.planes]
    if any(n in found.weak or not found.knows(n) for n in numbers):
        return {}
    try:
        whole = system(scene, found, made.base, made.slow, scene.planes)
    except Refusal:
        return {}
    since = weight_change(scene.weights_now(), next(iter(made.base.values())).weights)
    now = [predict(scene, made.base[c], found, c, since)[0] for c in whole.channels]
    return dict(zip(numbers, whole.unbalance(now), strict=True))


def _fitted(scene: Scene) -> tuple[FittedPiece, ...]:
    """All that is on the rotor now, plane by plane."""
    mount, ends = scene.standing.mount, scene.standing.ends
    held = [fitted_piece(e, mount, ends) for e in pieces_now(scene.story, mount)]
    return tuple(sorted(held, key=lambda p: p.plane))


def _already_within(planes: tuple[PlaneAdvice, ...], since: Unbalances) -> tuple[str, ...]:
    """The first note, where what is there is within the tolerance of every plane; else nothing."""
    shares = [p.share_gmm for p in planes]
    if any(s is None or abs(p.add) > s for p, s in zip(planes, shares, strict=True)):
        return ()
    told = ", ".join(
        f"{abs(p.add):.1f} of {s:.1f} g.mm in plane {p.plane}" for p, s in zip(planes, shares, strict=True)
    )
    sure = "" if not since else " by prediction, for the weights changed since"
    worst = max((abs(p.add) / p.sd_gmm if p.sd_gmm > 0 else math.inf for p in planes), default=math.inf)
    tell = "below" if worst <= 1.0 else "near" if worst <= NEAR_SD else ""
    rest = f"; what is left is {tell} what these coefficients can tell" if tell else ""
    return (f"Already in tolerance{sure} (residual {told}){rest}.",)


def _with_pieces(since: Unbalances, planes: tuple[PlaneAdvice, ...]) -> Unbalances:
    total = dict(since)
    for p in planes:
        total[p.plane] = total.get(p.plane, 0j) + p.chosen
    return total


def _planes(
    made: System,
    add: Mapping[int, complex],
    weights_now: Unbalances,
    since: Unbalances,
    now: list[complex],
    tolerance: Tolerance | None,
    step_g: float,
) -> tuple[PlaneAdvice, ...]:
    mount, ends = made.scene.standing.mount, made.scene.standing.ends
    pieces = {p.number: place(add[p.number], p, mount, ends, step_g) for p in made.planes}
    chosen = np.array([_sum(pieces[p.number]) for p in made.planes])
    left = made.unbalance(v + complex(dv) for v, dv in zip(now, made.A @ chosen, strict=True))
    sds, fitted = _sd_of_add(made, add, since), _fitted(made.scene)
    total = {p.number: weights_now.get(p.number, 0j) + add[p.number] for p in made.planes}
    instead = {p.number: _instead(made.scene, p, total[p.number], step_g) for p in made.planes}
    return tuple(
        PlaneAdvice(
            plane=p.number,
            radius_mm=p.radius_mm,
            fitted_now=weights_now.get(p.number, 0j),
            add=add[p.number],
            sd_gmm=sds[i],
            pieces=pieces[p.number],
            instead=instead[p.number],
            there=tuple(f for f in fitted if any(f.in_place_of(x) for x in pieces[p.number])),
            left=left[i],
            left_instead=_sum(instead[p.number]) - total[p.number] if instead[p.number] else None,
            share_gmm=tolerance.shares_gmm.get(p.number) if tolerance else None,
            force_n=force_n(abs(chosen[i]), top_speed_hz(made.scene)),
        )
        for i, p in enumerate(made.planes)
    )


def top_speed_hz(scene: Scene) -> float:
    """The highest of the job's balancing speeds, this one and the service speed."""
    return max(scene.speed_hz, scene.standing.mount.machine.service_hz, *scene.story.job.speeds_hz)


def _sd_of_add(made: System, add: Mapping[int, complex], since: Unbalances) -> list[float]:
    """METHODS 10.2 in general form: errors of the readings and of reused coefficients through A^-1."""
    total = dict(since)
    for plane, weight in add.items():
        total[plane] = total.get(plane, 0j) + weight
    sds = [predict(made.scene, made.base[c], made.found, c, total)[1] for c in made.channels]
    return made.spread(s**2 for s in sds)


def _instead(scene: Scene, plane: WeightPlane, total: complex, step_g: float) -> tuple[Piece, ...]:
    mount = scene.standing.mount
    here = [e for e in pieces_now(scene.story, mount) if e.plane == plane.number]
    if not here or any(e.act == "drilled" for e in here):
        return ()
    return place(total, plane, mount, scene.standing.ends, step_g)


def _sum(pieces: Iterable[Piece]) -> complex:
    """g.mm against rotation from the rotor mark."""
    return sum((p.unbalance for p in pieces), start=0j)


def _outlooks(made: System, now: list[complex], total: Unbalances) -> tuple[ChannelOutlook, ...]:
    made_up: list[ChannelOutlook] = []
    for channel, value_now in zip(made.channels, now, strict=True):
        fit, base = made.scene.fits[channel], made.base[channel]
        predicted, sd = predict(made.scene, base, made.found, channel, total)
        sd = math.hypot(sd, fit.scatter.run_to_run(abs(predicted)))
        made_up.append(
            ChannelOutlook(
                channel=channel,
                unit=fit.unit,
                base=base.value,
                now=value_now,
                slow_roll=made.slow[channel].value if channel in made.slow else None,
                predicted=predicted,
                sd=sd,
                median_pk=amplitude_quantile(0.5, abs(predicted), sd),
                p90_pk=amplitude_quantile(0.9, abs(predicted), sd),
                lag_known=lag_is_known_of(made.scene.story, base, channel),
            )
        )
    return tuple(made_up)


def _used(made: System) -> tuple[UsedCoefficient, ...]:
    return tuple(made.found.entries[(p.number, c)] for p in made.planes for c in made.channels)


def _reuses(made: System) -> bool:
    return any(c.source == "history" for c in _used(made))


def _is_prior(made: System) -> bool:
    return any(made.scene.fits[c].scatter.is_prior for c in made.channels)


def _origins_used(scene: Scene) -> set[Origin]:
    names = {o.run_name for fit in scene.fits.values() for o in fit.observations}
    return {r.origin for r in scene.story.runs if r.name in names}


def _warnings(made: System, channels: tuple[ChannelOutlook, ...], *, within: bool) -> tuple[str, ...]:
    """``within``: what is there now is within the tolerance already, so a share of it says nothing."""
    found = ratio_warnings(made.found, [p.number for p in made.planes])
    number = condition(made)
    if number > WARN_CONDITION:
        found.append(
            f"The planes look much alike to these probes (condition number {number:.0f}): a small error "
            "makes large weights that oppose each other."
        )
    before = math.sqrt(sum(abs(c.now) ** 2 for c in channels))
    share = math.sqrt(sum(c.p90_pk**2 for c in channels)) / before if before > 0 else 0.0
    if _reuses(made) and not within and share > WARN_P90_SHARE:
        found.append(
            f"One machine in ten may keep {100 * min(share, 9.99):.0f} % of its vibration or more with these "
            "pieces; a trial weight is the safer way."
        )
    return tuple(found)


def _notes(made: System, reused: ReusePool | None) -> tuple[str, ...]:
    notes: list[str] = []
    if _is_prior(made):
        notes.append("Run-to-run scatter is a prior (3 % and a floor), not yet measured by repeated runs.")
    if _reuses(made):
        notes.append("History is reused; the odds given with it are not calibrated yet.")
        notes += reused.notes if reused else ()
    if not made.slow:
        notes.append("Runout included: no slow-roll vector was subtracted.")
    elif any(c not in made.slow for c in made.channels):
        notes.append("Slow roll was subtracted from displacement channels only.")
    if len(made.channels) > len(made.planes):
        notes.append(f"Least squares over {len(made.channels)} channels for {len(made.planes)} plane(s).")
    origins = sorted(o.value for o in _origins_used(made.scene))
    if origins != ["live"]:
        notes.append(f"From {' and '.join(origins)} runs.")
    return tuple(notes + turn_notes(made.scene, made.base) + left_notes(made.scene))
