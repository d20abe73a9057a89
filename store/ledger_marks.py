"""Marks: the act of labelling a reading, from the question to its end."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal
from uuid import UUID

from sqlalchemy import Row, func, select

from config.errors import NeedsAnswer, Refusal
from store import ledger_coefficients, recall, recall_runs
from store.balance.weights import pieces_at, pieces_listed, pieces_now
from store.ledger_weights import same_weights
from store.names import check_name
from store.records import Job, JobStory, Label, Mark, MarkState, Mount, Reading, Run, WeightEvent
from store.tables import label as label_table
from store.tables import mark, mark_end
from store.tables import run as run_table
from store.views import mark_now
from store.writer import Writer

SPEED_BAND = 0.005
"""O, O+T, check and trim take a plateau within this fraction of a balancing speed of the job (REUSE (a))."""
CRITICAL_SHARE, CRITICAL_BAND = 0.1, 0.002
"""Within the first share of the model's first critical speed they take one within the second only: 1 % of
speed turns the response there by up to 11 deg (REUSE sec. 3)."""

Choice = Literal["last", "next"]


@dataclass(frozen=True, slots=True)
class Question:
    """A mark as it is asked."""

    key: str
    label: Label
    who: str
    from_sample: int | None = None
    from_session: UUID | None = None
    choose: Choice | None = None
    confirmed: bool = False
    slow_roll_limit_hz: float | None = None


# --- asking ------------------------------------------------------------------------------------------


def ask(w: Writer, q: Question) -> Mark:
    """Leave the mark pending, or (``--last``) label a reading there is already.

    Raises Refusal: nothing mounted, another mark pending, a question that only a person can answer, no
    reading that fits ``--last``, or the key used for another label.
    """
    known = _known(w, q)
    if known is not None:
        return known
    current = recall.current_mount(w.c)
    if current is None:
        raise Refusal("Nothing is mounted, so no reading can be marked.", "Mount the machine first.")
    of = recall.job_by_id(w.c, current.job_id)
    if q.choose == "last":
        return _label_last(w, q, of, current)
    _ask_person(q, [_odd_weights(w, q, of, current, None)])
    if q.choose is None and q.from_sample is None:
        _refuse_to_choose(w, q, of, current)
    _add_mark(w, q, current)
    return _mark(w, q.key)


def label_one(w: Writer, q: Question, reading_id: UUID) -> Mark:
    """Label a stored reading at once.

    Raises Refusal: no such reading, one of no job, a speed that does not fit, or a question unanswered.
    """
    known = _known(w, q)
    if known is not None:
        return known
    found = recall_runs.reading_by_id(w.c, reading_id)
    run = recall_runs.run_head(w.c, found.run_id)
    if run.job_number is None or run.mount_id is None:
        raise Refusal(f"Run {run.name} belongs to no job.", "Assign it first: `revmark run assign`.")
    if run.void is not None:
        raise Refusal(f"Run {run.name} is void ({run.void}).", "Mark a reading of another run.")
    of = recall.job_named(w.c, run.job_number)
    at = recall.mount_by_id(w.c, run.mount_id)
    why_not = unfit(q.label, found.speed_hz, of, q.slow_roll_limit_hz, _critical_hz(at))
    if why_not:
        raise Refusal(f"Reading {found.number} of run {run.name} {why_not}.", "Mark one at that speed.")
    _ask_person(q, [_relabels(q, run, found), _odd_weights(w, q, of, at, run)])
    _add_mark(w, q, at)
    _put_label(w, q.key, run, found)
    return _mark(w, q.key)


def label_named(w: Writer, q: Question, name: str, number: int | None) -> Mark:
    """Label a reading of the run of that name; ``number`` None = its newest that can take the label."""
    known = _known(w, q)
    if known is not None:
        return known
    run = recall_runs.run_named(w.c, name)
    if run.job_number is None or not run.readings:
        lacks = "no readings" if run.job_number is not None else "no job"
        raise Refusal(
            f"Run {run.name} has {lacks}, so nothing of it can be marked.", "See `revmark run show`."
        )
    if number is None:
        at = None if run.mount_id is None else recall.mount_by_id(w.c, run.mount_id)
        of = recall.job_named(w.c, run.job_number)
        return label_one(w, q, _newest_fitting(q, run, of, _critical_hz(at)).id)
    found = next((r for r in run.readings if r.number == number), None)
    if found is None:
        there = ", ".join(str(r.number) for r in run.readings)
        raise Refusal(f"Run {run.name} has no reading {number}.", f"Its readings: {there}.")
    return label_one(w, q, found.id)


def _known(w: Writer, q: Question) -> Mark | None:
    """A retry gets the mark there is; while another one is pending nothing new is asked."""
    known = recall_runs.find_mark(w.c, check_name("The mark's key", q.key))
    if known is not None and known.label is not q.label:
        raise Refusal(
            f"This mark was asked before as {known.label}, now as {q.label}.", "Ask again with a new key."
        )
    pending = None if known is not None else recall_runs.pending_mark(w.c)
    if pending is not None:
        raise Refusal(
            f"The mark {pending.label} of job {pending.job_number} is pending; one waits at a time.",
            "Wait for it, or cancel it with `revmark mark --cancel`.",
        )
    return known


def _add_mark(w: Writer, q: Question, at: Mount) -> None:
    running = recall_runs.open_run(w.c)
    w.add(
        mark,
        key=q.key,
        label=q.label.value,
        job_id=at.job_id,
        mount_id=at.id,
        session_id=q.from_session or w.session,
        asked_run_id=None if running is None else running.id,
        from_sample=q.from_sample,
        asked_us=w.now_us(),
        who=q.who,
    )


# --- what only a person can answer -------------------------------------------------------------------


Doubt = tuple[str, str] | None
"""Cause and remedy of a question that --yes answers."""


def _ask_person(q: Question, doubts: Sequence[Doubt]) -> None:
    """All doubts in one question, so that one --yes is said with every one of them seen."""
    open_ = [d for d in doubts if d is not None]
    if open_ and not q.confirmed:
        causes, remedies = zip(*open_, strict=True)
        raise NeedsAnswer(" ".join(causes), " ".join(remedies), options=("--yes",))


def _relabels(q: Question, run: Run, found: Reading) -> Doubt:
    """A reading that has another label; the old one stays in the store behind the new."""
    if found.label is None or found.label is q.label:
        return None
    return (
        f"Reading {found.number} of run {run.name} is labelled {found.label}; it would become {q.label}.",
        "If that is meant, say --yes.",
    )


def _odd_weights(w: Writer, q: Question, of: Job, at: Mount, run: Run | None) -> Doubt:
    """O with other weights than listed at the mount, O+T with the same as at O.

    ``run``: the run that is to be labelled; None = the next one, with the weights of now.
    """
    if q.confirmed or q.label not in (Label.O, Label.O_T):
        return None
    story = recall_runs.story(w.c, of.number, labelled_only=True)
    here = pieces_now(story, at) if run is None else pieces_at(story, run)
    if q.label is Label.O and not same_weights(here, pieces_listed(story, at)):
        changed = "The weights on the rotor differ from those listed when it was mounted"
        return f"{changed}, so this would be no O run.", "If it is to be O all the same, say --yes."
    if q.label is Label.O_T and _same_as_at_o(story, here):
        return (
            "The weights on the rotor are those of the O run, so there is no trial weight.",
            "Enter it with `revmark weight fit`, or say --yes.",
        )
    return None


def _same_as_at_o(story: JobStory, here: Sequence[WeightEvent]) -> bool:
    """Whether the newest O run had just these weights; without an O run there is nothing to compare."""
    marked = [r for r in story.runs if any(d.label is Label.O for d in r.readings)]
    return bool(marked) and same_weights(here, pieces_at(story, marked[-1]))


def _refuse_to_choose(w: Writer, q: Question, of: Job, at: Mount) -> None:
    """With no pulses, a newest run that nobody marked and nothing was changed after could be meant, when one
    of its readings can take the label."""
    run = recall_runs.newest_run_of_job(w.c, of.id)
    if run is None or run.state == "open" or run.mount_id != at.id or not run.readings:
        return
    if any(r.label is not None for r in run.readings) or _weight_later(w, at, run):
        return
    critical_hz = _critical_hz(at)
    if all(unfit(q.label, r.speed_hz, of, q.slow_roll_limit_hz, critical_hz) for r in run.readings):
        return
    raise NeedsAnswer(
        f"Run {run.name} has readings and none is marked: {q.label} may mean that run or the next.",
        f"Say --last for run {run.name}, or --next to wait for the next run.",
        options=("--last", "--next"),
    )


def _weight_later(w: Writer, at: Mount, run: Run) -> bool:
    order = select(run_table.c.seq).where(run_table.c.id == run.id)
    place = w.c.execute(order).scalar_one()
    return any(anchor >= place for _, anchor in recall.anchored_events(w.c, [at.id]))


def _label_last(w: Writer, q: Question, of: Job, at: Mount) -> Mark:
    run = recall_runs.newest_run_of_job(w.c, of.id)
    if run is None or run.mount_id != at.id or not run.readings:
        raise Refusal(f"Job {of.number} has no run with readings in this mount.", "Mark the next: --next.")
    return label_one(w, q, _newest_fitting(q, run, of, _critical_hz(at)).id)


def _newest_fitting(q: Question, run: Run, of: Job, critical_hz: float | None) -> Reading:
    why_not = [unfit(q.label, r.speed_hz, of, q.slow_roll_limit_hz, critical_hz) for r in run.readings]
    fitting = [r for r, why in zip(run.readings, why_not, strict=True) if why is None]
    if not fitting:
        raise Refusal(
            f"No reading of run {run.name} fits {q.label}: the newest {why_not[-1]}.", "Run it again."
        )
    return fitting[-1]


# --- ending ------------------------------------------------------------------------------------------


def _critical_hz(at: Mount | None) -> float | None:
    """First critical speed of the machine's model, where it is known."""
    return None if at is None else at.machine.model.first_critical_hz


def unfit(
    label: Label,
    speed_hz: float,
    of: Job,
    slow_roll_limit_hz: float | None,
    critical_hz: float | None = None,
) -> str | None:
    """Why a reading at this speed cannot take the label; None = it can."""
    why = off_speed(label, speed_hz, of, slow_roll_limit_hz, critical_hz)
    return None if why is None else f"was taken at {speed_hz * 60:.1f} r/min, {why}"


def off_speed(
    label: Label, speed_hz: float, of: Job, slow_roll_limit_hz: float | None, critical_hz: float | None
) -> str | None:
    """What keeps the label from this speed, without naming it; None = nothing does."""
    if label is Label.SLOW_ROLL:
        if slow_roll_limit_hz is None:
            return "and no slow-roll limit is known"
        above = speed_hz > slow_roll_limit_hz
        return f"above the slow-roll limit of {slow_roll_limit_hz * 60:.1f} r/min" if above else None
    bands = [_band(s, critical_hz) for s in of.speeds_hz]
    if any(abs(speed_hz - s) <= band * s for s, band in zip(of.speeds_hz, bands, strict=True)):
        return None
    speeds = ", ".join(f"{s * 60:.1f}" for s in of.speeds_hz)
    near = " (0.2 % within 10 % of the first critical speed)" if CRITICAL_BAND in bands else ""
    return f"not within 0.5 %{near} of the balancing speed ({speeds} r/min)"


def _band(balancing_hz: float, critical_hz: float | None) -> float:
    """How far from a balancing speed a reading may be, as a fraction of it."""
    if critical_hz is not None and abs(balancing_hz - critical_hz) <= CRITICAL_SHARE * critical_hz:
        return CRITICAL_BAND
    return SPEED_BAND


def take_reading(
    w: Writer, run: Run, found: Reading, first_sample: int, slow_roll_limit_hz: float | None
) -> Mark | None:
    """Give a new reading the pending label when it fits; the mark as it ended, else None."""
    row = _waiting(w, run)
    if row is None or not _is_from_now(w, row, run, first_sample):
        return None
    of = recall.job_by_id(w.c, row.job_id)
    at = None if run.mount_id is None else recall.mount_by_id(w.c, run.mount_id)
    if unfit(Label(row.label), found.speed_hz, of, slow_roll_limit_hz, _critical_hz(at)):
        return None
    _put_label(w, row.key, run, found)
    return _mark(w, row.key)


def miss(w: Writer, run: Run, detail: str) -> Mark | None:
    """A run ended without a fitting reading: the mark that waited for it is used up."""
    row = _waiting(w, run)
    if row is None:
        return None
    _end(w, row.seq, MarkState.MISSED, detail, run_id=run.id)
    return _mark(w, row.key)


def cancel(w: Writer, key: str) -> Mark:
    """Raises Refusal when no mark has that key; one that ended before is returned as it ended."""
    known = recall_runs.find_mark(w.c, key)
    if known is None:
        raise Refusal("There is no such mark.", "`revmark status` shows the pending one.")
    if known.state is MarkState.PENDING:
        _end(w, _seq(w, key), MarkState.CANCELLED, "cancelled")
    return _mark(w, key)


def _waiting(w: Writer, run: Run) -> Row[Any] | None:
    """The pending mark, when it is of the run's job."""
    newest = select(func.max(mark.c.seq)).scalar_subquery()
    row = w.c.execute(
        select(mark_now).where(mark_now.c.seq == newest, mark_now.c.state == MarkState.PENDING.value)
    ).first()
    if row is None or run.job_number is None or run.void is not None:
        return None
    return row if recall.job_by_id(w.c, row.job_id).number == run.job_number else None


def _is_from_now(w: Writer, row: Row[Any], run: Run, first_sample: int) -> bool:
    """A mark asked while turning takes no reading that began before; in a later run any reading is later."""
    session = w.c.execute(select(run_table.c.session_id).where(run_table.c.id == run.id)).scalar_one()
    later = row.asked_run_id != run.id or row.session_id != session
    return row.from_sample is None or later or first_sample >= row.from_sample


def _put_label(w: Writer, key: str, run: Run, found: Reading) -> None:
    asked = w.c.execute(select(mark).where(mark.c.key == key)).one()
    w.add(
        label_table,
        reading_id=found.id,
        label=asked.label,
        mark_key=key,
        at_us=w.now_us(),
        who=asked.who,
    )
    detail = f"run {run.name}, reading {found.number}"
    _end(w, asked.seq, MarkState.LABELLED, detail, run_id=run.id, reading_id=found.id)
    ledger_coefficients.rebuild(w, asked.job_id)


def _end(
    w: Writer,
    seq: int,
    state: MarkState,
    detail: str,
    *,
    run_id: UUID | None = None,
    reading_id: UUID | None = None,
) -> None:
    w.add(
        mark_end,
        mark_seq=seq,
        state=state.value,
        detail=detail,
        run_id=run_id,
        reading_id=reading_id,
        at_us=w.now_us(),
    )


def _seq(w: Writer, key: str) -> int:
    return int(w.c.execute(select(mark.c.seq).where(mark.c.key == key)).scalar_one())


def _mark(w: Writer, key: str) -> Mark:
    found = recall_runs.find_mark(w.c, key)
    assert found is not None  # it was written in this transaction
    return found
