"""Lists by one query each: runs, coefficients; and the store's own figures."""

from __future__ import annotations

import sqlite3
from pathlib import Path
from typing import Any

from sqlalchemy import Connection, Row, Select, func, select

from store import recall, schema
from store.database import beside
from store.recall_runs import runs_of_job_ids
from store.records import Coefficient, Label, Origin, RunLine, RunState, StoreInfo
from store.tables import coefficient, job, raw, reading, reading_now, run_now, store_info

# --- runs --------------------------------------------------------------------------------------------


def run_lines(
    c: Connection, number: str | None, serial: str | None, limit: int | None
) -> tuple[RunLine, ...]:
    """Newest first. Raises Refusal for a job or machine that is not there."""
    wanted = _select_lines()
    if number is not None:
        of = recall.job_named(c, number)
        wanted = wanted.where(run_now.c.id.in_(runs_of_job_ids(of.id)), run_now.c.job_id == of.id)
    if serial is not None:
        recall.newest_machine(c, serial)
        wanted = wanted.where(job.c.machine_serial == serial)
    rows = c.execute(wanted.order_by(run_now.c.seq.desc()).limit(limit))
    return tuple(_line(r) for r in rows)


def _select_lines() -> Select[Any]:
    first_job = job.alias("first_job")
    mine = reading_now.c.run_id == run_now.c.id
    speed = (
        select(reading_now.c.speed_hz)
        .where(mine)
        .order_by(reading_now.c.label.is_(None), reading_now.c.seq.desc())
        .limit(1)
    )
    return (
        select(
            *run_now.c["number", "unassigned_number", "first_number", "origin", "state", "reason", "void"],
            *run_now.c["operator", "started_us", "ended_us"],
            job.c.number.label("job_number"),
            job.c.machine_serial,
            first_job.c.number.label("first_job_number"),
            select(func.count()).where(reading.c.run_id == run_now.c.id).scalar_subquery().label("readings"),
            select(func.group_concat(reading_now.c.label, " ")).where(mine).scalar_subquery().label("labels"),
            speed.scalar_subquery().label("speed_hz"),
        )
        .join(job, job.c.id == run_now.c.job_id, isouter=True)
        .join(first_job, first_job.c.id == run_now.c.first_job_id, isouter=True)
    )


def _line(row: Row[Any]) -> RunLine:
    first = _name(row.first_job_number, row.first_number, row.unassigned_number)
    name = _name(row.job_number, row.number, row.unassigned_number)
    return RunLine(
        name=name,
        other_name=None if first == name else first,
        job_number=row.job_number,
        machine_serial=row.machine_serial,
        origin=Origin(row.origin),
        state=RunState(row.state),
        reason=row.reason,
        void=row.void,
        operator=row.operator,
        started_us=row.started_us,
        ended_us=row.ended_us,
        readings=row.readings,
        labels=tuple(Label(text) for text in (row.labels or "").split()),
        speed_hz=row.speed_hz,
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
