"""Rows to records: how a reading was measured, version by version."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import replace
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Row, Table, select

from store.recall_runs import reading_by_id, to_level, to_vector
from store.records import Level, Measured, Reading, Vector
from store.tables import level, measured, measured_vector, reading, run, vector


def versions(c: Connection, reading_id: UUID) -> tuple[Measured, ...]:
    """Every time a reading's arithmetic was done, oldest first; one made before that was recorded has no
    version 1 here (see ``first``)."""
    rows = c.execute(
        select(measured).where(measured.c.reading_id == reading_id).order_by(measured.c.version)
    ).all()
    later: dict[int, list[Vector]] = defaultdict(list)
    for v in _placed(c, measured_vector, reading_id):
        later[v.version].append(to_vector(v))
    levels: dict[int, list[Level]] = defaultdict(list)
    for v in _placed(c, level, reading_id):
        levels[v.version].append(to_level(v))
    live = [to_vector(v) for v in _placed(c, vector, reading_id)]
    return tuple(_measured(r, live if r.version == 1 else later[r.version], levels[r.version]) for r in rows)


def heads(c: Connection, run_id: UUID) -> dict[UUID, tuple[Measured, ...]]:
    """By reading of a run, how each version came about, without vectors and levels."""
    rows = c.execute(
        select(measured)
        .join(reading, reading.c.id == measured.c.reading_id)
        .where(reading.c.run_id == run_id)
        .order_by(measured.c.version)
    )
    found: dict[UUID, list[Measured]] = defaultdict(list)
    for row in rows:
        found[row.reading_id].append(_measured(row, (), ()))
    return {i: tuple(m) for i, m in found.items()}


def set_up_then(c: Connection, run_id: UUID, version: int) -> UUID | None:
    """The set-up that a version of a run's readings was measured with; None when it has no such version."""
    row = c.execute(
        select(measured.c.set_up_id)
        .join(reading, reading.c.id == measured.c.reading_id)
        .where(reading.c.run_id == run_id, measured.c.version == version)
        .order_by(measured.c.seq)
    ).first()
    if row is None and version == 1:
        row = c.execute(select(run.c.set_up_id).where(run.c.id == run_id)).first()
    return None if row is None else row.set_up_id


def _placed(c: Connection, table: Table, reading_id: UUID) -> Sequence[Row[Any]]:
    return c.execute(select(table).where(table.c.reading_id == reading_id).order_by(table.c.place)).all()


def _measured(row: Row[Any], vectors: Sequence[Vector], levels: Sequence[Level]) -> Measured:
    return Measured(
        why=row.why,
        set_up_id=row.set_up_id,
        speed_hz=row.speed_hz,
        revolutions=row.revolutions,
        duration_s=row.duration_s,
        flags=tuple(row.flags),
        figures=row.figures,
        setting=row.setting,
        software=row.software,
        numpy=row.numpy,
        processor=row.processor,
        vectors=tuple(vectors),
        levels=tuple(levels),
        version=row.version,
        at_us=row.at_us,
        who=row.who,
    )


def reading_as(c: Connection, reading_id: UUID, version: int) -> Reading | None:
    """A reading as a version has it; None when there is no such version of it."""
    now = reading_by_id(c, reading_id)
    if version == now.version:
        return now
    found = next((m for m in versions(c, reading_id) if m.version == version), None)
    if found is None:
        return _first(c, now) if version == 1 else None
    return replace(
        now,
        version=version,
        duration_s=found.duration_s,
        speed_hz=found.speed_hz,
        revolutions=found.revolutions,
        flags=found.flags,
        figures=found.figures,
        vectors=found.vectors,
        levels=found.levels,
    )


def _first(c: Connection, now: Reading) -> Reading:
    """Version 1 of a reading that is older than the record of how it was measured."""
    row = c.execute(select(reading).where(reading.c.id == now.id)).one()
    return replace(
        now,
        version=1,
        duration_s=row.duration_s,
        speed_hz=row.speed_hz,
        revolutions=row.revolutions,
        flags=tuple(row.flags),
        figures={},
        vectors=tuple(to_vector(v) for v in _placed(c, vector, now.id)),
        levels=(),
    )
