"""Asks the history what a piece of arithmetic needs, and the arithmetic what the operator wants to know.

The daemon (verdict of a mark) and the command line (correction, advice, job) both come here.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from contextlib import suppress
from dataclasses import replace
from typing import Any
from uuid import UUID

from config.errors import Refusal
from store import asjson, casework, standing_flags
from store.balance.reuse import Candidate
from store.casework_answers import CorrectionAdvice, ForceAdvice, TrialAdvice, Verdict
from store.casework_bode import BodePicture, bode_picture, trace_json
from store.casework_flags import FlaggedReading, flagged_in_job
from store.casework_slow_roll import Runout, runout_of
from store.history import History
from store.ledger_marks import off_speed
from store.records import (
    JobStory,
    Label,
    Machine,
    Mark,
    Mount,
    PieceDraft,
    Reading,
    Run,
    SetUp,
    Trace,
    Vector,
)

Json = dict[str, Any]
JUDGED = (Label.CHECK, Label.TRIM)


def candidates(history: History, story: JobStory, before_us: int | None = None) -> tuple[Candidate, ...]:
    """Coefficients of the same model from other jobs, each with its mount and set-up."""
    model = story.mounts[-1].machine.model.code if story.mounts else None
    return tuple(
        (c, history.mount(c.mount_id), history.set_up(c.set_up_id))
        for c in history.coefficients(model=model, before_us=before_us)
        if c.job_number != story.job.number
    )


def correction(history: History, job: str, *, reuse: bool, **how: Any) -> CorrectionAdvice:
    """See ``casework.correction_for``; ``reuse`` takes coefficients of the model's other jobs."""
    story = history.job_story(job)
    pool = candidates(history, story) if reuse else None
    advice = casework.correction_for(story, reuse=pool, **how)
    return replace(advice, flags=(*advice.flags, *_flags_behind(history, advice)))


def _flags_behind(history: History, advice: CorrectionAdvice) -> Iterator[FlaggedReading]:
    """Flags of the readings of other jobs that reused coefficients came from."""
    channels: dict[str, set[str]] = {}
    for used in advice.coefficients:
        for job in used.behind if used.source == "history" else ():
            channels.setdefault(job, set()).add(used.channel)
    for job, names in sorted(channels.items()):
        yield from flagged_in_job(history.job_story(job), sorted(names), advice.speed_hz)


def trial(history: History, job: str, plane: int, **how: Any) -> TrialAdvice:
    story = history.job_story(job)
    return casework.trial_advice(story, plane, reuse=candidates(history, story), **how)


def force(history: History, piece: PieceDraft) -> ForceAdvice | None:
    """How hard a piece pulls on the mounted rotor at the highest speed of its job; None = nothing mounted."""
    mount = history.current_mount()
    if mount is None:
        return None
    job = next(j for j in history.jobs() if j.id == mount.job_id)
    return casework.fit_force(mount, piece, (*job.speeds_hz, mount.machine.service_hz))


def mounted_otherwise(history: History, machine: Machine) -> list[str]:
    """A sentence when the machine just entered stands mounted as an earlier revision; else nothing."""
    mount = history.current_mount()
    if mount is None or mount.machine.serial != machine.serial:
        return []
    then, model = mount.machine, mount.machine.model
    if then.revision != machine.revision:
        what = f"its revision {then.revision}"
    elif model.id != machine.model.id:
        what = f"revision {model.revision} of model {model.code}"
    else:
        return []
    at_once = "its tolerance and vibration limit count at once"
    return [f"{machine.serial} is mounted as {what}; mount it again for the new one ({at_once})."]


def verdict(history: History, job: str, reading_id: UUID) -> Verdict:
    """How a check or trim reading stands, by what was known before its run."""
    story = history.job_story(job)
    run = next((r for r in story.runs if any(x.id == reading_id for x in r.readings)), None)
    if run is None:
        raise Refusal(f"That reading is not of job {job}, or its run is void.", "See revmark run list.")
    pool = candidates(history, story, before_us=run.started_us)
    return casework.judge(story, reading_id, reuse=pool)


def newest_verdict(history: History, story: JobStory) -> Verdict | None:
    """The verdict of the job's newest check or trim reading; None when there is none to be had."""
    for run, reading_id in _judged(story):
        with suppress(Refusal):
            return casework.judge(story, reading_id, reuse=candidates(history, story, run.started_us))
    return None


def _judged(story: JobStory) -> Iterator[tuple[Run, UUID]]:
    for run in reversed(story.runs):
        for reading in reversed(run.readings):
            if reading.label in JUDGED:
                yield run, reading.id


def why_passed_by(
    history: History, mark: Mark, speed_hz: float, slow_roll_limit_hz: float | None
) -> str | None:
    """Why a pending mark takes no reading at the speed that turns now; None = it takes one."""
    mount = history.current_mount()
    critical_hz = None if mount is None else mount.machine.model.first_critical_hz
    of = history.job(mark.job_number)
    return off_speed(mark.label, speed_hz, of, slow_roll_limit_hz, critical_hz)


def weight_entries(history: History, mounts: Iterable[Mount]) -> list[Json]:
    """Every weight entry of some mounts, void ones too, each with the run after which it was done."""
    found: list[Json] = []
    for mount in mounts:
        story = history.job_story(history.job_of(mount.id).number, with_void=True)
        names = {run.id: run.name for run in story.runs}
        for event in history.weight_events(mount.id, with_void=True):
            after = None if event.after_run_id is None else names.get(event.after_run_id, "a run moved away")
            found.append({**asjson.weight_json(event), "after_run": after})
    return found


def run_json(
    history: History, name: str, *, minus_slow_roll: bool = False, version: int | None = None
) -> Json:
    """A run with all that its probes told, as ``revmark run show --json`` prints it; of the arithmetic that
    stands, or of an earlier version."""
    run = history.run(name) if version is None else history.run_as(name, version)
    return run_told(history, run, minus_slow_roll=minus_slow_roll)


def run_told(history: History, run: Run, *, minus_slow_roll: bool = False) -> Json:
    """The same of a run at hand, in whichever version its readings are.

    Raises Refusal when a slow roll is to be taken off and there is none."""
    set_up, traces = history.set_up(run.set_up_id), history.traces(run.id, run.set_up_id)
    story = _told_as(_story_of(history, run), run, set_up)
    flags = {r.id: reading_flags(story, run, r) for r in run.readings}
    seen = {r.id: standing_flags.orbits_of(story, run, r, set_up) for r in run.readings}
    runout = runout_of(story, run) if minus_slow_roll else None
    told = {**asjson.run_json(run, flags, seen), "zero": set_up.zero, "set_up_revision": set_up.revision}
    versions = history.versions(run.id)
    for reading, one in zip(run.readings, told["readings"], strict=True):
        one["versions"] = [asjson.version_json(m) for m in versions.get(reading.id, ())]
    if runout is not None:
        told["slow_roll"] = _runout_json(run, runout, traces)
        for reading, one in zip(run.readings, told["readings"], strict=True):
            less = [runout.without(run, reading, v) for v in reading.vectors]
            one["less_slow_roll"] = [
                asjson.vector_json(v, (*reading.flags, *flags[reading.id])) for v in less if v is not None
            ]
    return {**told, "traces": [trace_json(t, runout) for t in traces]}


def _story_of(history: History, run: Run) -> JobStory | None:
    return None if run.job_number is None else history.job_story(run.job_number, with_void=True)


def _told_as(story: JobStory | None, run: Run, set_up: SetUp) -> JobStory | None:
    """The job's story with the run in the version at hand, so that its own slow roll is of that version."""
    if story is None:
        return None
    runs = tuple(run if r.id == run.id else r for r in story.runs)
    return replace(story, runs=runs, set_ups={**story.set_ups, run.set_up_id: set_up})


def _runout_json(run: Run, runout: Runout, traces: Iterable[Trace]) -> Json:
    """The slow roll's own unbalance counts most at the lowest speed it is taken off at: of the readings that
    are no slow roll, else at the top of the traces."""
    least_hz = 1.5 * runout.reading.speed_hz
    read = [r.speed_hz for r in run.readings if r.speed_hz >= least_hz]
    traced = [p.speed_hz for t in traces for p in t.points]
    return runout.to_dict(min(read) if read else max(traced, default=None))


def bode(history: History, name: str, *, minus_slow_roll: bool = False, **how: Any) -> BodePicture:
    """A run's traces as they are drawn; ``how`` as ``casework_bode.bode_picture`` has it."""
    run = history.run(name)
    mount = None if run.mount_id is None else history.mount(run.mount_id)
    runout = runout_of(_story_of(history, run), run) if minus_slow_roll else None
    return bode_picture(
        run,
        history.traces(run.id),
        history.set_up(run.set_up_id),
        mount.machine if mount else None,
        runout=runout,
        **how,
    )


def reading_flags(story: JobStory | None, run: Run, reading: Reading) -> tuple[str, ...]:
    """The flags that the records add to a reading's own; of a run of no job only what needs none."""
    if story is not None:
        return standing_flags.derived_flags(story, run, reading)
    return tuple(standing_flags.floor_flags(reading))


def open_run_told(history: History) -> tuple[JobStory, Run] | None:
    """The run that is open, with its job's story; None when there is none or it belongs to no job."""
    run = history.open_run()
    if run is None or run.job_number is None:
        return None
    return history.job_story(run.job_number), run


def reading_now(run: Run, vectors: Sequence[Vector], flags: Sequence[str], speed_hz: float) -> Reading:
    """Vectors as they stand now, as a reading of the open run that nobody stored."""
    return Reading(run.id, run.id, 0, 0, 0.0, speed_hz, 0, {}, tuple(flags), tuple(vectors))


def reading_json(history: History, reading: Reading, job: str) -> Json:
    """One reading of a job as the answer of a mark tells it."""
    story = history.job_story(job, with_void=True)
    run = next((r for r in story.runs if r.id == reading.run_id), None)
    if run is None:
        return asjson.reading_json(reading)
    seen = standing_flags.orbits_of(story, run, reading, history.set_up(run.set_up_id))
    return asjson.reading_json(reading, standing_flags.derived_flags(story, run, reading), seen)


def job_json(history: History, number: str) -> Json:
    """A whole job, as ``revmark job show --json`` prints it."""
    story = history.job_story(number, with_void=True)
    names = {run.id: run.name for run in story.runs}
    found = newest_verdict(history, history.job_story(number))
    flags = standing_flags.flags_by_reading(story)
    weights = [
        {**asjson.weight_json(w), "after_run": names.get(w.after_run_id) if w.after_run_id else None}
        for w in story.weights
    ]
    return {
        **asjson.job_json(story.job),
        "mounts": [asjson.mount_json(m, number) for m in story.mounts],
        "runs": [asjson.run_json(r, flags) for r in story.runs],
        "weights": weights,
        "verdict": found.to_dict() if found else None,
    }
