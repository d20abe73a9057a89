"""Rows to records: runs, readings, marks, and a job's whole story."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Row, Select, Table, func, select, union

from config.errors import Refusal
from store import recall
from store.rawcodec import Packed, decode
from store.records import (
    JobStory,
    Label,
    Level,
    Mark,
    MarkState,
    Origin,
    RawSamples,
    Reading,
    Run,
    RunState,
    Vector,
    WeightEvent,
)
from store.tables import job, level, measured_vector, mount, raw, raw_aged, run_assign, vector
from store.tables import run as run_table
from store.views import mark_now, reading_now, run_now

# --- runs --------------------------------------------------------------------------------------------


def runs_of_job_ids(job_id: UUID) -> Select[Any]:
    """Ids of runs that began in a job or were assigned to it (some may have moved on): quick to find."""
    return select(
        union(
            select(run_table.c.id).where(run_table.c.job_id == job_id),
            select(run_assign.c.run_id).where(run_assign.c.job_id == job_id),
        ).subquery()
    )


def _select_runs() -> Select[Any]:
    return select(run_now, job.c.number.label("job_number")).join(
        job, job.c.id == run_now.c.job_id, isouter=True
    )


def run_by_id(c: Connection, run_id: UUID) -> Run:
    """The run with its readings. Raises Refusal when there is none."""
    return replace(run_head(c, run_id), readings=tuple(_readings_by_run(c, [run_id])[run_id]))


def run_head(c: Connection, run_id: UUID) -> Run:
    """The run without its readings, which may be many. Raises Refusal when there is none."""
    row = c.execute(_select_runs().where(run_now.c.id == run_id)).first()
    if row is None:
        raise _no_run(str(run_id))
    return _run(row, ())


def run_named(c: Connection, name: str) -> Run:
    """The run that answers to ``0142/3`` or ``U/1``, also by a name it had before. Raises Refusal."""
    return run_by_id(c, run_id_of(c, name))


def run_id_of(c: Connection, name: str) -> UUID:
    """Raises Refusal when no run answers to the name."""
    job_number, _, number = name.rpartition("/")
    if not job_number or not number.isdecimal() or len(number) > 9:
        raise Refusal(f"{name!r} is no run's name.", "Write it as 0142/3, or U/1 for an unassigned run.")
    found = _unassigned(int(number)) if job_number == "U" else _in_job(job_number, int(number))
    run_id = c.execute(found).scalar()
    if run_id is None:
        raise _no_run(name)
    return UUID(bytes=run_id) if isinstance(run_id, bytes) else run_id


def _unassigned(number: int) -> Select[Any]:
    return select(run_table.c.id).where(run_table.c.unassigned_number == number)


def _in_job(job_number: str, number: int) -> Any:
    job_id = select(job.c.id).where(job.c.number == job_number).scalar_subquery()
    return union(
        select(run_table.c.id).where(run_table.c.job_id == job_id, run_table.c.number == number),
        select(run_assign.c.run_id).where(run_assign.c.job_id == job_id, run_assign.c.number == number),
    )


def _no_run(name: str) -> Refusal:
    return Refusal(f"There is no run {name} in the store.", "`revmark run list` shows those there are.")


def open_run(c: Connection) -> Run | None:
    """The run (without readings) still open. Only the newest can be: the others had to end first."""
    newest = select(func.max(run_table.c.seq)).scalar_subquery()
    run_id = c.execute(
        select(run_now.c.id).where(run_now.c.seq == newest, run_now.c.state == "open")
    ).scalar()
    return None if run_id is None else run_head(c, run_id)


def newest_run_of_job(c: Connection, job_id: UUID) -> Run | None:
    """The run with the job's highest number that counts (not void), with readings.

    By number and not by time: a run given to the job later is its newest, whenever it was recorded.
    """
    row = c.execute(
        _select_runs()
        .where(
            run_now.c.id.in_(runs_of_job_ids(job_id)), run_now.c.job_id == job_id, run_now.c.void.is_(None)
        )
        .order_by(run_now.c.number.desc())
        .limit(1)
    ).first()
    return None if row is None else _run(row, _readings_by_run(c, [row.id])[row.id])


def newest_run_of_mount(c: Connection, mount_id: UUID) -> UUID | None:
    """Id of the newest run of a mount, void or not: what a weight fitted now comes after."""
    began = select(run_table.c.id, run_table.c.seq).where(run_table.c.mount_id == mount_id)
    moved = (
        select(run_table.c.id, run_table.c.seq)
        .join(run_assign, run_assign.c.run_id == run_table.c.id)
        .where(run_assign.c.mount_id == mount_id)
    )
    both = union(began, moved).subquery()
    found: UUID | None = c.execute(select(both.c.id).order_by(both.c.seq.desc()).limit(1)).scalar()
    return found


def _run(row: Row[Any], readings: Sequence[Reading]) -> Run:
    return Run(
        id=row.id,
        job_number=row.job_number,
        number=row.number,
        unassigned_number=row.unassigned_number,
        mount_id=row.mount_id,
        set_up_id=row.set_up_id,
        origin=Origin(row.origin),
        operator=row.operator,
        condition=row.condition,
        software=row.software,
        started_us=row.started_us,
        ended_us=row.ended_us,
        state=RunState(row.state),
        reason=row.reason,
        void=row.void,
        readings=tuple(readings),
    )


# --- readings ----------------------------------------------------------------------------------------


def _readings_by_run(c: Connection, run_ids: Sequence[UUID]) -> dict[UUID, list[Reading]]:
    return _readings(c, reading_now.c.run_id.in_(list(run_ids)))


def reading_by_id(c: Connection, reading_id: UUID) -> Reading:
    """Raises Refusal when there is no such reading."""
    found = _readings(c, reading_now.c.id == reading_id)
    if not found:
        raise Refusal(f"There is no reading {reading_id}.", "`revmark run show` lists a run's readings.")
    return next(iter(found.values()))[0]


def _readings(c: Connection, condition: Any) -> dict[UUID, list[Reading]]:
    rows = c.execute(select(reading_now).where(condition).order_by(reading_now.c.seq)).all()
    newest = {row.id: row.version for row in rows}
    ids = select(reading_now.c.id).where(condition)
    first = [i for i, version in newest.items() if version == 1]
    vectors = _parts(c, vector, ids, dict.fromkeys(first)) if first else {}
    if len(first) < len(rows):
        vectors |= _parts(c, measured_vector, ids, newest)
    levels = _parts(c, level, ids, newest)
    found: dict[UUID, list[Reading]] = defaultdict(list)
    for row in rows:
        told = [to_vector(v) for v in vectors.get(row.id, ())]
        found[row.run_id].append(_reading(row, told, [to_level(v) for v in levels.get(row.id, ())]))
    return found


def _parts(
    c: Connection, table: Table, ids: Select[Any], newest: Mapping[UUID, int | None]
) -> dict[UUID, list[Row[Any]]]:
    """By reading, the rows of its ``newest`` version (None = the table knows none), in their places.

    From the tables and not from ``vector_now``: SQLite looks through all of a view of two tables.
    """
    found: dict[UUID, list[Row[Any]]] = defaultdict(list)
    for row in c.execute(select(table).where(table.c.reading_id.in_(ids)).order_by(table.c.place)):
        version = newest.get(row.reading_id, 0)
        if version is None or version == getattr(row, "version", None):
            found[row.reading_id].append(row)
    return found


def _reading(row: Row[Any], vectors: Sequence[Vector], levels: Sequence[Level]) -> Reading:
    return Reading(
        id=row.id,
        run_id=row.run_id,
        number=row.number,
        at_us=row.at_us,
        duration_s=row.duration_s,
        speed_hz=row.speed_hz,
        revolutions=row.revolutions,
        steadiness=row.steadiness,
        flags=tuple(row.flags),
        vectors=tuple(vectors),
        label=None if row.label is None else Label(row.label),
        labelled_by=row.labelled_by,
        levels=tuple(levels),
        figures=row.figures,
        version=row.version,
    )


def to_level(row: Row[Any]) -> Level:
    """A row of ``level``."""
    return Level(row.channel, row.gap_v, row.residual_sd, row.peak_to_peak, row.ac_rms, row.unit)


def to_vector(row: Row[Any]) -> Vector:
    """A row of ``vector`` or ``measured_vector``."""
    return Vector(
        channel=row.channel,
        order=row.harmonic,
        value=complex(row.re, row.im),
        var_re=row.var_re,
        var_im=row.var_im,
        cov=row.cov,
        noise_floor=row.noise_floor,
        unit=row.unit,
    )


def reading_raw(c: Connection, reading_id: UUID) -> RawSamples:
    """The samples, proven by their checksum. Raises Refusal when none are stored, StoreError when damaged."""
    row = c.execute(select(raw).where(raw.c.reading_id == reading_id)).first()
    if row is None:
        reading_by_id(c, reading_id)
        aged = c.execute(select(raw_aged.c.rule).where(raw_aged.c.reading_id == reading_id)).scalar()
        why = f"were let go ({aged})" if aged else "were not stored"
        raise Refusal(f"The raw samples of this reading {why}.", "Its vectors are there: `revmark run show`.")
    return RawSamples(decode(packed(row)), tuple(row.volts_per_count), row.rate_hz, row.first_sample)


def packed(row: Row[Any]) -> Packed:
    """The codec's part of a row of ``raw``."""
    return Packed(row.codec, row.version, row.frames, row.channels, row.dtype, row.crc32, row.samples)


# --- marks -------------------------------------------------------------------------------------------


def _select_marks() -> Select[Any]:
    return (
        select(
            mark_now,
            job.c.number.label("job_number"),
            reading_now.c.number.label("reading_number"),
        )
        .join(job, job.c.id == mark_now.c.job_id)
        .join(reading_now, reading_now.c.id == mark_now.c.reading_id, isouter=True)
    )


def find_mark(c: Connection, key: str) -> Mark | None:
    return _first_mark(c, _select_marks().where(mark_now.c.key == key))


def pending_mark(c: Connection) -> Mark | None:
    """The mark that waits; only the newest can, as a new one is refused until the last has ended."""
    newest = last_mark(c)
    return newest if newest is not None and newest.state is MarkState.PENDING else None


def last_mark(c: Connection) -> Mark | None:
    """The mark asked last, whatever became of it."""
    return _first_mark(c, _select_marks().order_by(mark_now.c.seq.desc()).limit(1))


def _first_mark(c: Connection, wanted: Select[Any]) -> Mark | None:
    row = c.execute(wanted).first()
    return None if row is None else _mark(c, row)


def _mark(c: Connection, row: Row[Any]) -> Mark:
    return Mark(
        key=row.key,
        label=Label(row.label),
        job_number=row.job_number,
        asked_us=row.asked_us,
        who=row.who,
        state=MarkState(row.state),
        run_name=None if row.run_id is None else run_head(c, row.run_id).name,
        reading_id=row.reading_id,
        reading_number=row.reading_number,
        detail=row.detail,
    )


# --- a job's story -----------------------------------------------------------------------------------


def story(
    c: Connection,
    number: str,
    before_run: str | None = None,
    *,
    with_void: bool = False,
    labelled_only: bool = False,
) -> JobStory:
    """All of a job that arithmetic needs. ``before_run``: as it stood when that run began.

    ``labelled_only`` leaves out readings that nobody marked (long runs have hundreds).

    A weight event after a run that is left out (void, moved away) is placed after the nearest earlier run
    of its mount that is in the story, so that the order needs no run outside it.
    Raises Refusal for an unknown job or run, or a run of another job.
    """
    of = recall.job_named(c, number)
    cut = None if before_run is None else _cut_at(c, before_run, number)
    rows = _story_rows(c, of.id, cut, with_void=with_void)
    taken = reading_now.c.run_id.in_([r.id for r in rows])
    readings = _readings(c, taken & reading_now.c.label.is_not(None) if labelled_only else taken)
    runs = tuple(_run(r, readings[r.id]) for r in rows)
    mounts = tuple(m for m in recall.mounts_of_job(c, of.id) if cut is None or _stood(c, m.id, cut))
    events = recall.anchored_events(c, [m.id for m in mounts])
    return JobStory(
        job=of,
        mounts=mounts,
        runs=runs,
        weights=_placed([e for e in events if cut is None or e[1] < cut.seq], rows),
        set_ups={i: recall.set_up_by_id(c, i) for i in dict.fromkeys(r.set_up_id for r in rows)},
        machine_now=recall.newest_machine(c, of.machine_serial),
    )


def _cut_at(c: Connection, name: str, number: str) -> Row[Any]:
    row = c.execute(_select_runs().where(run_now.c.id == run_id_of(c, name))).one()
    if row.job_number != number:
        raise Refusal(f"Run {name} is not of job {number}.", f"`revmark job show {number}` lists its runs.")
    return row


def _story_rows(c: Connection, job_id: UUID, cut: Row[Any] | None, *, with_void: bool) -> Sequence[Row[Any]]:
    wanted = _select_runs().where(run_now.c.id.in_(runs_of_job_ids(job_id)), run_now.c.job_id == job_id)
    if not with_void:
        wanted = wanted.where(run_now.c.void.is_(None))
    if cut is not None:
        wanted = wanted.where(run_now.c.seq < cut.seq)
    return c.execute(wanted.order_by(run_now.c.seq)).all()


def _stood(c: Connection, mount_id: UUID, cut: Row[Any]) -> bool:
    """Whether a mount had begun when the run of ``cut`` did (or is the run's own, given to it later)."""
    began = c.execute(select(mount.c.seq).where(mount.c.id == mount_id)).scalar_one()
    return bool(began <= cut.mount_seq or mount_id == cut.mount_id)


def _placed(events: Sequence[tuple[WeightEvent, int]], rows: Sequence[Row[Any]]) -> tuple[WeightEvent, ...]:
    there = {r.id for r in rows}

    def place(event: WeightEvent, anchor: int) -> WeightEvent:
        if event.after_run_id is None or event.after_run_id in there:
            return event
        earlier = [r.id for r in rows if r.mount_id == event.mount_id and r.seq < anchor]
        return replace(event, after_run_id=earlier[-1] if earlier else None)

    return tuple(place(event, anchor) for event, anchor in events)


def newest_run_number(c: Connection, job_id: UUID) -> int:
    """The highest number given in a job, also to runs that moved away; 0 before the first."""
    began = select(func.max(run_table.c.number)).where(run_table.c.job_id == job_id)
    moved = select(func.max(run_assign.c.number)).where(run_assign.c.job_id == job_id)
    return max(c.execute(began).scalar() or 0, c.execute(moved).scalar() or 0)
