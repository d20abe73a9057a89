"""Lists by one query each: runs, coefficients; and the store's own figures."""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Row, Select, case, func, select

from store import recall, schema
from store.database import beside
from store.listings import RunLine, StoreInfo
from store.recall_runs import runs_of_job_ids
from store.records import Coefficient, Label, Origin, RunState
from store.tables import coefficient, job, label, raw, reading, store_info
from store.views import run_now

# --- runs --------------------------------------------------------------------------------------------


def run_lines(
    c: Connection, number: str | None, serial: str | None, limit: int | None
) -> tuple[RunLine, ...]:
    """Newest first. Raises Refusal for a job or machine that is not there."""
    wanted = _select_runs()
    if number is not None:
        of = recall.job_named(c, number)
        wanted = wanted.where(run_now.c.id.in_(runs_of_job_ids(of.id)), run_now.c.job_id == of.id)
    if serial is not None:
        recall.newest_machine(c, serial)
        wanted = wanted.where(job.c.machine_serial == serial)
    listed = _with_readings(wanted.order_by(run_now.c.seq.desc()).limit(limit))
    return tuple(map(_line, c.execute(listed).all()))


def _select_runs() -> Select[Any]:
    first_job = job.alias("first_job")
    return (
        select(
            *run_now.c["seq", "id", "number", "unassigned_number", "first_number", "origin", "state"],
            *run_now.c["reason", "void", "operator", "started_us", "ended_us"],
            job.c.number.label("job_number"),
            job.c.machine_serial,
            first_job.c.number.label("first_job_number"),
        )
        .join(job, job.c.id == run_now.c.job_id, isouter=True)
        .join(first_job, first_job.c.id == run_now.c.first_job_id, isouter=True)
    )


def _with_readings(runs: Select[Any]) -> Select[Any]:
    """Number of readings, labels and a speed beside each run.

    ``speed_hz`` comes from the row of the maximum: SQLite takes bare columns of a query with one max()
    from there (sqlite.org/lang_select.html, "Bare columns in an aggregate query").
    """
    chosen = runs.subquery("chosen")
    later = label.alias("later")
    newest = select(func.max(later.c.seq)).where(later.c.reading_id == reading.c.id).scalar_subquery()
    labelled_first = case((label.c.seq.is_(None), 0), else_=2**48) + reading.c.seq
    return (
        select(
            *[column for column in chosen.c if column.name not in ("seq", "id")],
            func.count(reading.c.seq).label("readings"),
            func.group_concat(label.c.label, " ").label("labels"),
            reading.c.speed_hz,
            func.max(labelled_first),
        )
        .select_from(chosen)
        .join(reading, reading.c.run_id == chosen.c.id, isouter=True)
        .join(label, label.c.seq == newest, isouter=True)
        .group_by(chosen.c.seq)
        .order_by(chosen.c.seq.desc())
    )


_ORIGINS = {o.value: o for o in Origin}
_STATES = {s.value: s for s in RunState}
_LABELS = {text.value: text for text in Label}


def _line(row: Row[Any]) -> RunLine:
    values: tuple[Any, ...] = tuple(row)
    number, unassigned, first_number, origin, state, reason, void, operator, started_us, ended_us = values[
        :10
    ]
    job_number, machine_serial, first_job_number, readings, labels, speed_hz, _ = values[10:]
    name = _name(job_number, number, unassigned)
    first = _name(first_job_number, first_number, unassigned)
    return RunLine(
        name=name,
        other_name=None if first == name else first,
        job_number=job_number,
        machine_serial=machine_serial,
        origin=_ORIGINS[origin],
        state=_STATES[state],
        reason=reason,
        void=void,
        operator=operator,
        started_us=started_us,
        ended_us=ended_us,
        readings=readings,
        labels=tuple(_LABELS[text] for text in labels.split()) if labels else (),
        speed_hz=speed_hz,
    )


def _name(job_number: str | None, number: int | None, unassigned: int | None) -> str:
    return f"U/{unassigned}" if job_number is None else f"{job_number}/{number}"


# --- coefficients ------------------------------------------------------------------------------------

_COEFFICIENT = coefficient.c[
    "job_number",
    "machine_serial",
    "model_code",
    "plane",
    "channel",
    "speed_hz",
    "re",
    "im",
    "se",
    "run_names",
    "origin",
    "mount_id",
    "set_up_id",
    "at_us",
    "largest_effect_ratio",
]
"""Just what the covering index holds."""


def coefficients_like(
    model: str | None,
    plane: int | None,
    channel: str | None,
    speed_hz: float | None,
    within: float,
    before_us: int | None,
) -> Select[Any]:
    """The query: equality on model, plane and channel, a range of speeds, in order of time."""
    wanted: Select[Any] = select(*_COEFFICIENT)
    for column, value in (
        (coefficient.c.model_code, model),
        (coefficient.c.plane, plane),
        (coefficient.c.channel, channel),
    ):
        if value is not None:
            wanted = wanted.where(column == value)
    if speed_hz is not None:
        wanted = wanted.where(
            coefficient.c.speed_hz.between((1 - within) * speed_hz, (1 + within) * speed_hz)
        )
    if before_us is not None:
        wanted = wanted.where(coefficient.c.at_us < before_us)
    return wanted.order_by(coefficient.c.at_us, coefficient.c.job_number, coefficient.c.speed_hz)


def coefficient_records(c: Connection, wanted: Select[Any]) -> tuple[Coefficient, ...]:
    return tuple(_coefficient(r) for r in c.execute(wanted))


def _coefficient(row: Row[Any]) -> Coefficient:
    return Coefficient(
        job_number=row.job_number,
        machine_serial=row.machine_serial,
        model_code=row.model_code,
        plane=row.plane,
        channel=row.channel,
        speed_hz=row.speed_hz,
        value=complex(row.re, row.im),
        se=row.se,
        run_names=tuple(row.run_names),
        origin=Origin(row.origin),
        mount_id=row.mount_id,
        set_up_id=row.set_up_id,
        at_us=row.at_us,
        largest_effect_ratio=row.largest_effect_ratio,
    )


# --- the store itself --------------------------------------------------------------------------------


def info(c: Connection, path: Path) -> StoreInfo:
    """Identity, versions and sizes."""
    row = c.execute(select(store_info).order_by(store_info.c.seq).limit(1)).one()
    return StoreInfo(
        store_id=row.id,
        made_us=row.made_us,
        made_by=row.made_by,
        schema=schema.stamp(c) or "",
        sqlite=sqlite3.sqlite_version,
        sqlite_wal_reset_safe=_reset_safe(sqlite3.sqlite_version_info),
        file_bytes=_size(path),
        wal_bytes=_size(beside(path)[0]),
        raw_bytes=c.execute(select(func.sum(raw.c.stored_bytes))).scalar() or 0,
    )


def _reset_safe(version: tuple[int, ...]) -> bool:
    """The WAL-reset bug is fixed in 3.51.3, 3.50.7 and 3.44.6 (sqlite.org/wal.html)."""
    return version >= (3, 51, 3) or (3, 50, 7) <= version < (3, 51) or (3, 44, 6) <= version < (3, 45)


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except OSError:
        return 0
