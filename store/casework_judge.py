"""The verdict on a reading: measured beside predicted, residual unbalance against the tolerance."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from uuid import UUID

import numpy as np

from config.errors import Refusal
from store.balance.fit import Observation, gather, standing_of
from store.balance.orbit import orbits
from store.balance.reuse import Candidate, ReusePool
from store.balance.scatter import Scatter
from store.balance.tolerance import Tolerance, tolerance_of
from store.balance.uncertainty import CHANGED_ABOVE, innovation
from store.casework_answers import (
    ChannelVerdict,
    PlaneVerdict,
    UsedCoefficient,
    Verdict,
    VibrationVerdict,
)
from store.casework_correction import System, system
from store.casework_flags import flagged, lag_is_known_of
from store.casework_scene import (
    Scene,
    Sources,
    base_or_none,
    history,
    judged_machine,
    left_notes,
    predict,
    ratio_warnings,
    scene_before,
    slow_rolls,
    sources,
    unknown_effects,
    weight_change,
)
from store.records import JobStory, Label, Reading, Run


@dataclass(frozen=True, slots=True)
class _Case:
    """A reading, and what was known before it."""

    run: Run
    reading: Reading
    scene: Scene
    found: Sources
    reused: ReusePool | None
    measured: Mapping[str, Observation]
    slow: Mapping[str, Observation]
    solved: System | None
    why_not: str
    """Why there is no system to solve."""


def judge(
    story: JobStory,
    reading_id: UUID,
    *,
    reuse: Iterable[Candidate] | None = None,
    any_origin: bool = False,
) -> Verdict:
    """Judge a labelled balancing reading (check or trim; O shows the initial unbalance).

    Prediction and residual use only the job's labelled runs before the reading, and of ``reuse`` only
    coefficients whose newest run is older. Raises Refusal when the reading is not there or has no such label.
    """
    case = _case(story, reading_id, reuse, any_origin=any_origin)
    machine = judged_machine(case.scene)
    tolerance = tolerance_of(machine)
    channels = _channels(case)
    return Verdict(
        job_number=story.job.number,
        machine_serial=machine.serial,
        run_name=case.run.name,
        reading_number=case.reading.number,
        label=str(case.reading.label),
        speed_hz=case.reading.speed_hz,
        channels=channels,
        planes=_planes(case, tolerance),
        permissible_gmm=tolerance.permissible_gmm if tolerance else None,
        tolerance_how=tolerance.how if tolerance else "",
        slow_roll_run=next((o.run_name for o in case.slow.values()), None),
        vibration=_vibration(case, machine.vibration_limit_um_pk),
        coefficients=_used(case),
        not_reused=case.reused.refused if case.reused else (),
        warnings=_warnings(case, channels),
        notes=_notes(case, tolerance),
        flags=flagged(story, _behind(case)),
    )


def _behind(case: _Case) -> dict[str, list[Observation]]:
    """By channel, the readings before it that prediction and residual rest on."""
    fits = case.scene.fits
    return {
        c: [*(fits[c].observations if c in fits else ()), *([case.slow[c]] if c in case.slow else [])]
        for c in case.measured
    }


def _find(story: JobStory, reading_id: UUID) -> tuple[Run, Reading]:
    for run in story.runs:
        for reading in run.readings:
            if reading.id == reading_id:
                return run, reading
    raise Refusal(f"The reading is not in job {story.job.number}.", "Name a run of this job.")


def _case(story: JobStory, reading_id: UUID, reuse: Iterable[Candidate] | None, *, any_origin: bool) -> _Case:
    run, reading = _find(story, reading_id)
    if reading.label is None or reading.label is Label.SLOW_ROLL:
        raise Refusal(
            f"Reading {reading.number} of run {run.name} is no balancing reading.",
            "Mark it check or trim first.",
        )
    scene = scene_before(story, run, reading, any_origin=any_origin)
    older = None if reuse is None else [c for c in reuse if c[0].at_us < run.started_us]
    reused = history(scene, older)
    found = sources(scene, reused)
    measured = _measured(story, scene, reading_id)
    slow = slow_rolls(scene)
    solved, why_not = _solve(scene, found, measured, slow)
    return _Case(run, reading, scene, found, reused, measured, slow, solved, why_not)


def _measured(story: JobStory, scene: Scene, reading_id: UUID) -> dict[str, Observation]:
    """The reading itself, by channel. Raises Refusal when its weights cannot be placed."""
    found: dict[str, Observation] = {}
    for channel in scene.standing.set_up.channels:
        gathered = gather(story, channel.name, scene.standing, lambda _, r: r.id == reading_id)
        for run, why in gathered.left:
            raise Refusal(
                f"Run {run} cannot be judged: {why.rstrip('.')}.", "Correct the weights of its mount."
            )
        if gathered.taken:
            found[channel.name] = gathered.taken[-1]
    return found


def _solve(
    scene: Scene, found: Sources, measured: Mapping[str, Observation], slow: Mapping[str, Observation]
) -> tuple[System | None, str]:
    """The system of all planes that are known well enough, or why there is none."""
    planes = tuple(p for p in scene.planes if found.knows(p.number) and p.number not in found.weak)
    if not planes:
        return None, "no run before it tells the effect of any weight apart"
    try:
        return system(scene, found, measured, slow, planes), ""
    except Refusal as refusal:
        return None, refusal.cause.rstrip(".")


# --- by channel ----------------------------------------------------------------------------------------


def _scatter(case: _Case, channel: str) -> Scatter:
    return case.scene.scatter(channel, case.measured[channel])


def _channels(case: _Case) -> tuple[ChannelVerdict, ...]:
    base = base_or_none(case.scene)
    return tuple(_channel(case, channel, base.get(channel)) for channel in case.measured)


def _channel(case: _Case, channel: str, base: Observation | None) -> ChannelVerdict:
    reading = case.measured[channel]
    predicted: complex | None = None
    sd: float | None = None
    if base is not None:
        change = weight_change(dict(reading.weights), base.weights)
        if not unknown_effects(case.found, change, [channel]):
            predicted, sd = predict(case.scene, base, case.found, channel, change)
            sd = math.hypot(sd, _scatter(case, channel).sd(reading.value, reading.own_sd))
    far = None if predicted is None or sd is None else innovation(reading.value, predicted, sd)
    slow = case.slow[channel].value if channel in case.slow else None
    known = lag_is_known_of(case.scene.story, reading, channel)
    return ChannelVerdict(channel, reading.unit, reading.value, predicted, sd, far, slow, known)


# --- by plane ------------------------------------------------------------------------------------------


def _planes(case: _Case, tolerance: Tolerance | None) -> tuple[PlaneVerdict, ...]:
    shares = tolerance.shares_gmm if tolerance else {}
    judged = _residuals(case) if case.solved else {}
    return tuple(
        _plane(case, p.number, judged.get(p.number), shares.get(p.number)) for p in case.scene.planes
    )


@dataclass(frozen=True, slots=True)
class _Residual:
    value: complex
    sd: float
    bound: float | None


def _plane(case: _Case, number: int, residual: _Residual | None, share: float | None) -> PlaneVerdict:
    if residual is None:
        return PlaneVerdict(number, None, None, None, share, None, _why_not(case, number))
    missing = [p.number for p in case.scene.planes if not _is_solved(case, p.number)]
    verdict = None if share is None or missing else abs(residual.value) <= share
    why = "no tolerance is on record" if share is None else ""
    if missing:
        why = f"the effect of plane {missing[0]} is not known, so its unbalance is counted here"
    return PlaneVerdict(number, residual.value, residual.sd, residual.bound, share, verdict, why)


def _is_solved(case: _Case, number: int) -> bool:
    return case.solved is not None and any(p.number == number for p in case.solved.planes)


def _why_not(case: _Case, number: int) -> str:
    if number in case.found.weak:
        ratio = case.found.weak[number]
        return f"the effect of its weights was only {ratio:.1f} times the scatter (5 needed)"
    if not case.found.knows(number):
        return "no run before it tells the effect of its weights apart"
    return case.why_not


def _residuals(case: _Case) -> dict[int, _Residual]:
    """|A^-1 (V - V_slow)| by plane, its sd, and the slow-roll bound (HOUSE, verdict)."""
    made = case.solved
    assert made is not None
    values = made.unbalance(case.measured[c].value for c in made.channels)
    sds = made.spread(_variance(case, made, c, values) for c in made.channels)
    bounds = _bounds(case, made)
    return {
        p.number: _Residual(values[i], sds[i], bounds[i] if bounds else None)
        for i, p in enumerate(made.planes)
    }


def _variance(case: _Case, made: System, channel: str, residual: list[complex]) -> float:
    """Of a channel's vector and of what the coefficients' errors make of the residual, per component."""
    reading = case.measured[channel]
    own = _scatter(case, channel).sd(reading.value, reading.own_sd)
    entries = [case.found.entries[(p.number, channel)].sd for p in made.planes]
    return own**2 + sum((abs(u) * sd) ** 2 for u, sd in zip(residual, entries, strict=True))


def _bounds(case: _Case, made: System) -> list[float] | None:
    """2 (n_slow/n)^2 |V_O| of each channel through |A^-1|; None when nothing is subtracted."""
    if not case.slow:
        return None
    by_channel = [_slow_share(case, c) for c in made.channels]
    return [float(b) for b in np.abs(made.inverse) @ np.array(by_channel)]


def _slow_share(case: _Case, channel: str) -> float:
    slow, reading = case.slow.get(channel), case.measured[channel]
    if slow is None:
        return 0.0
    fit = case.scene.fits.get(channel)
    first = next((o for o in fit.observations if o.label is Label.O), reading) if fit else reading
    return 2.0 * (slow.speed_hz / reading.speed_hz) ** 2 * abs(first.value)


# --- the rest ------------------------------------------------------------------------------------------


def _vibration(case: _Case, limit: float | None) -> VibrationVerdict | None:
    """By the largest vibration there is: of an XY pair the major axis, not the larger probe (METHODS 6.3)."""
    sizes = [(abs(o.value), c) for c, o in case.measured.items() if o.unit == "um"]
    standing = standing_of(case.scene.story, case.run)
    if standing is not None:
        rotation = standing.mount.rotation
        sizes += [
            (o.major_pk, f"{o.pair} (major axis)")
            for o in orbits(case.reading.vectors, standing.set_up, rotation)
            if o.order == 1 and o.unit == "um"
        ]
    if limit is None or not sizes:
        return None
    largest, channel = max(sizes)
    return VibrationVerdict(limit, largest, channel)


def _used(case: _Case) -> tuple[UsedCoefficient, ...]:
    if case.solved is None:
        return ()
    return tuple(case.found.entries[(p.number, c)] for p in case.solved.planes for c in case.solved.channels)


def _warnings(case: _Case, channels: tuple[ChannelVerdict, ...]) -> tuple[str, ...]:
    found = ratio_warnings(case.found, case.found.ratios)
    changed = [c.channel for c in channels if c.innovation is not None and c.innovation > CHANGED_ABOVE]
    if changed:
        found.append(
            f"{' and '.join(changed)}: measured and predicted differ by more than 99 in 100 honest runs do; "
            "check the weights entered, the rotor mark and whether the machine changed."
        )
    return tuple(found)


def _notes(case: _Case, tolerance: Tolerance | None) -> tuple[str, ...]:
    notes: list[str] = []
    if not case.slow:
        notes.append("Runout included: the job has no slow-roll reading.")
    else:
        notes.append(
            "The slow-roll vector holds some unbalance response itself: (n_slow/n)^2 of the O vector, "
            "doubled, is stated as its bound."
        )
    if tolerance is None:
        notes.append("No tolerance is on record for this machine; give a grade or a figure (machine add).")
    if any(c.source == "history" for c in _used(case)):
        notes.append("Predicted from history; the odds of such a prediction are not calibrated yet.")
    if any(_scatter(case, c).is_prior for c in case.measured):
        notes.append("Run-to-run scatter is a prior (3 % and a floor), not yet measured by repeated runs.")
    return tuple(notes + left_notes(case.scene))
