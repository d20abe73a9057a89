"""Rows to records: the traces of a run."""

from __future__ import annotations

from collections import defaultdict
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Row, select

from store.records import Trace, TracePoint
from store.tables import trace, trace_vector


def traces_of_run(c: Connection, run_id: UUID) -> tuple[Trace, ...]:
    """In the order in which they were traced; empty for a run without any."""
    heads = c.execute(select(trace).where(trace.c.run_id == run_id).order_by(trace.c.number)).all()
    rows: dict[int, list[Row[Any]]] = defaultdict(list)
    for row in c.execute(
        select(trace_vector)
        .where(trace_vector.c.trace_seq.in_([h.seq for h in heads]))
        .order_by(trace_vector.c.trace_seq, trace_vector.c.step, trace_vector.c.place)
    ):
        rows[row.trace_seq].append(row)
    return tuple(_trace(h, rows[h.seq]) for h in heads)


def _trace(head: Row[Any], rows: list[Row[Any]]) -> Trace:
    steps: dict[int, list[Row[Any]]] = defaultdict(list)
    for row in rows:
        steps[row.step].append(row)
    first = next(iter(steps.values()), [])
    return Trace(
        direction=head.direction,
        channels=tuple(r.channel for r in first),
        units=tuple(r.unit for r in first),
        started_us=head.started_us,
        duration_s=head.duration_s,
        points=tuple(_point(step) for step in steps.values()),
        number=head.number,
    )


def _point(step: list[Row[Any]]) -> TracePoint:
    return TracePoint(
        t_s=step[0].t_s,
        speed_hz=step[0].speed_hz,
        revolutions=step[0].revolutions,
        vectors=tuple(complex(r.re, r.im) for r in step),
        se=tuple(r.se for r in step),
        gap_v=tuple(r.gap_v for r in step),
    )
