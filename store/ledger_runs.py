"""Runs and readings: what the daemon finds by itself, and the later records that correct it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any
from uuid import UUID

from sqlalchemy import Row, func, select

from config.errors import Refusal
from store import ledger_coefficients, ledger_marks, recall, recall_runs
from store.names import check_name, check_text
from store.rawcodec import encode
from store.records import (
    Mark,
    Measured,
    RawSamples,
    Reading,
    ReadingDraft,
    Run,
    RunDraft,
    RunState,
    Vector,
)
from store.tables import (
    label,
    level,
    measured,
    measured_vector,
    mount,
    raw,
    raw_aged,
    reading,
    run,
    run_assign,
    run_end,
    run_revise,
    run_void,
    vector,
)
from store.views import run_now
from store.writer import Writer

LOST_DAEMON = "the daemon ended without closing it"
AGE_RULE = "raw budget: oldest unlabelled first"
MIB = 2**20


# --- as it happens -----------------------------------------------------------------------------------


def begin(w: Writer, draft: RunDraft) -> Run:
    """A new run, of the job that is mounted; unassigned when nothing is. Raises Refusal while one is open."""
    running = recall_runs.open_run(w.c)
    if running is not None:
        raise Refusal(f"Run {running.name} is still open.", "Close it before another begins.")
    current = recall.current_mount(w.c)
    numbers: dict[str, Any] = {"job_id": None, "number": None, "unassigned_number": _next_unassigned(w)}
    if current is not None:
        number = recall_runs.newest_run_number(w.c, current.job_id) + 1
        numbers = {"job_id": current.job_id, "number": number, "unassigned_number": None}
    run_id = w.ids.new()
    w.add(
        run,
        id=run_id,
        **numbers,
        mount_id=None if current is None else current.id,
        mount_seq=w.c.execute(select(func.max(mount.c.seq))).scalar() or 0,
        set_up_id=draft.set_up_id,
        origin=draft.origin.value,
        operator=check_text("The operator", draft.operator or (current.who if current else "")),
        condition=dict(draft.condition),
        software=w.software,
        session_id=w.session,
        segment=draft.segment,
        first_sample=draft.first_sample,
        mono_s=draft.mono_s,
        started_us=draft.started_us,
    )
    return recall_runs.run_head(w.c, run_id)


def _next_unassigned(w: Writer) -> int:
    return int(w.c.execute(select(func.max(run.c.unassigned_number))).scalar() or 0) + 1


def add_reading(
    w: Writer, run_id: UUID, draft: ReadingDraft, slow_roll_limit_hz: float | None
) -> tuple[Reading, Mark | None]:
    """A reading, its vectors and samples, and the label when the pending mark fits: all or nothing."""
    of = recall_runs.run_head(w.c, run_id)
    if of.state is not RunState.OPEN:
        raise Refusal(f"Run {of.name} has ended and takes no more readings.", "Open another run.")
    reading_id = w.ids.new()
    newest = select(func.max(reading.c.number)).where(reading.c.run_id == run_id)
    w.add(
        reading,
        id=reading_id,
        run_id=run_id,
        number=(w.c.execute(newest).scalar() or 0) + 1,
        at_us=draft.at_us,
        duration_s=draft.duration_s,
        speed_hz=draft.speed_hz,
        revolutions=draft.revolutions,
        segment=draft.segment,
        first_sample=draft.first_sample,
        mono_s=draft.mono_s,
        steadiness=dict(draft.steadiness),
        flags=list(draft.flags),
    )
    w.add_all(vector, [{"reading_id": reading_id, **v} for v in vector_rows(draft.vectors)])
    if draft.measured is not None:
        add_measured(w, reading_id, 1, draft.measured, of.set_up_id)
    if draft.raw is not None:
        _add_raw(w, reading_id, draft.raw)
    found = recall_runs.reading_by_id(w.c, reading_id)
    ended = ledger_marks.take_reading(w, of, found, draft.first_sample, slow_roll_limit_hz)
    return (found if ended is None else recall_runs.reading_by_id(w.c, reading_id)), ended


def vector_rows(vectors: Sequence[Vector]) -> list[dict[str, Any]]:
    """Vectors as columns, without the reading they belong to."""
    return [
        {
            "place": place,
            "channel": v.channel,
            "harmonic": v.order,
            "re": v.value.real,
            "im": v.value.imag,
            "var_re": v.var_re,
            "var_im": v.var_im,
            "cov": v.cov,
            "noise_floor": v.noise_floor,
            "unit": v.unit,
        }
        for place, v in enumerate(vectors)
    ]


def add_measured(w: Writer, reading_id: UUID, version: int, draft: Measured, set_up_id: UUID) -> None:
    """How a reading was measured, with its levels; vectors of version 2 and later beside them."""
    w.add(
        measured,
        reading_id=reading_id,
        version=version,
        set_up_id=draft.set_up_id or set_up_id,
        why=draft.why,
        speed_hz=draft.speed_hz,
        revolutions=draft.revolutions,
        duration_s=draft.duration_s,
        flags=list(draft.flags),
        figures=dict(draft.figures),
        setting=dict(draft.setting),
        software=draft.software,
        numpy=draft.numpy,
        processor=draft.processor,
        at_us=w.now_us(),
        who=draft.who,
    )
    own = {"reading_id": reading_id, "version": version}
    w.add_all(level, [{**own, "place": i, **asdict(v)} for i, v in enumerate(draft.levels)])
    if version > 1:
        w.add_all(measured_vector, [{**own, **v} for v in vector_rows(draft.vectors)])


def _add_raw(w: Writer, reading_id: UUID, samples: RawSamples) -> None:
    packed = encode(samples.counts)
    w.add(
        raw,
        reading_id=reading_id,
        codec=packed.codec,
        version=packed.version,
        frames=packed.frames,
        channels=packed.channels,
        dtype=packed.dtype,
        volts_per_count=list(samples.volts_per_count),
        rate_hz=samples.rate_hz,
        first_sample=samples.first_sample,
        crc32=packed.crc32,
        stored_bytes=len(packed.samples),
        samples=packed.samples,
    )


def end(
    w: Writer, run_id: UUID, state: RunState, reason: str, ended_us: int, detail: str, *, fast_enough: bool
) -> tuple[Run, Mark | None]:
    """Close a run; a mark that found no reading in it is missed when it was fast enough to count.

    Closing again changes nothing (a retry). Raises Refusal for a state that ends nothing.
    """
    of = recall_runs.run_by_id(w.c, run_id)
    if state is RunState.OPEN:
        raise Refusal("A run cannot be closed as open.", "Close it as complete or interrupted.")
    if of.state is not RunState.OPEN:
        return of, None
    _add_end(w, run_id, state, reason, ended_us, detail)
    missed = ledger_marks.miss(w, of, detail or reason) if fast_enough else None
    return recall_runs.run_by_id(w.c, run_id), missed


def _add_end(w: Writer, run_id: UUID, state: RunState, reason: str, ended_us: int, detail: str) -> None:
    w.add(
        run_end,
        run_id=run_id,
        state=state.value,
        reason=reason,
        detail=detail,
        ended_us=ended_us,
        at_us=w.now_us(),
    )


def recover(w: Writer) -> tuple[Run, ...]:
    """Close what a daemon left open; a pending mark stays pending. Ended = end of the last reading."""
    left = select(run_now.c.id).where(run_now.c.state == RunState.OPEN.value).order_by(run_now.c.seq)
    ids = w.c.execute(left).scalars().all()
    for run_id in ids:
        of = recall_runs.run_by_id(w.c, run_id)
        ends = [r.at_us + round(r.duration_s * 1e6) for r in of.readings]
        _add_end(w, run_id, RunState.INTERRUPTED, LOST_DAEMON, max([of.started_us, *ends]), "")
        w.event("run recovered", f"Run {of.name} was left open: {LOST_DAEMON}.")
    return tuple(recall_runs.run_by_id(w.c, i) for i in ids)


# --- later records -----------------------------------------------------------------------------------


def void(w: Writer, name: str, why: str, who: str) -> Run:
    """Take a run out of the arithmetic; it stays in the store. Raises Refusal: open, or void already."""
    of = _closed(w, name)
    if of.void is not None:
        raise Refusal(f"Run {of.name} is void already ({of.void}).", "Nothing to do.")
    why = check_text("The reason", why)
    if not why:
        raise Refusal("A void needs a reason.", "Say why the run does not count.")
    w.add(run_void, run_id=of.id, why=why, at_us=w.now_us(), who=who)
    _rebuild(w, of)
    return recall_runs.run_by_id(w.c, of.id)


def assign(w: Writer, name: str, number: str, who: str) -> Run:
    """Move a run to a job; it takes the job's next number and goes on answering to its old name.

    Its mount becomes the job's next after it began (the mount somebody forgot), else the last before.
    """
    of = _closed(w, name)
    into = recall.job_named(w.c, check_name("The job's number", number))
    if of.job_number == into.number:
        raise Refusal(f"Run {of.name} is of job {into.number} already.", "Nothing to do.")
    w.add(
        run_assign,
        run_id=of.id,
        job_id=into.id,
        number=recall_runs.newest_run_number(w.c, into.id) + 1,
        mount_id=_mount_for(w, of.id, into.id),
        at_us=w.now_us(),
        who=who,
    )
    _rebuild(w, of)
    moved = recall_runs.run_by_id(w.c, of.id)
    _rebuild(w, moved)
    return moved


def _mount_for(w: Writer, run_id: UUID, job_id: UUID) -> UUID | None:
    began = w.c.execute(select(run.c.mount_seq).where(run.c.id == run_id)).scalar_one()
    mounts = w.c.execute(
        select(mount.c.id, mount.c.seq).where(mount.c.job_id == job_id).order_by(mount.c.seq)
    ).all()
    later = [m.id for m in mounts if m.seq > began]
    earlier = [m.id for m in mounts if m.seq <= began]
    return later[0] if later else earlier[-1] if earlier else None


def revise(w: Writer, name: str, set_up_id: UUID, why: str, who: str) -> Run:
    """Say that a run was measured with another revision of the set-up than was thought."""
    of = _closed(w, name)
    recall.set_up_by_id(w.c, set_up_id)
    add_revision(w, of.id, set_up_id, check_text("The reason", why), who)
    _rebuild(w, of)
    return recall_runs.run_by_id(w.c, of.id)


def add_revision(w: Writer, run_id: UUID, set_up_id: UUID, why: str, who: str) -> None:
    """The row that gives a run another set-up."""
    w.add(run_revise, run_id=run_id, set_up_id=set_up_id, why=why, at_us=w.now_us(), who=who)


def _closed(w: Writer, name: str) -> Run:
    of = recall_runs.run_named(w.c, name)
    if of.state is RunState.OPEN:
        raise Refusal(f"Run {of.name} is still open.", "Wait until it has ended.")
    return of


def _rebuild(w: Writer, of: Run) -> None:
    if of.job_number is not None:
        ledger_coefficients.rebuild(w, recall.job_named(w.c, of.job_number).id)


# --- raw samples age ---------------------------------------------------------------------------------


def age_raw(w: Writer, total_mib: float, at_most: int) -> int:
    """Let raw samples go until they fit: unlabelled readings first, oldest first; each leaves a record."""
    total = w.c.execute(select(func.sum(raw.c.stored_bytes))).scalar() or 0
    gone = 0
    for row in _oldest(w, at_most) if total > total_mib * MIB else ():
        if total <= total_mib * MIB:
            break
        w.add(
            raw_aged,
            reading_id=row.reading_id,
            freed_bytes=row.stored_bytes,
            crc32=row.crc32,
            rule=f"{AGE_RULE}, {total_mib:g} MiB",
            at_us=w.now_us(),
        )
        w.c.execute(raw.delete().where(raw.c.reading_id == row.reading_id))
        total -= row.stored_bytes
        gone += 1
    return gone


def _oldest(w: Writer, at_most: int) -> list[Row[Any]]:
    labelled = select(label.c.seq).where(label.c.reading_id == raw.c.reading_id).exists()
    return list(
        w.c.execute(
            select(raw.c.reading_id, raw.c.stored_bytes, raw.c.crc32)
            .join(reading, reading.c.id == raw.c.reading_id)
            .order_by(labelled, reading.c.seq)
            .limit(at_most)
        )
    )
