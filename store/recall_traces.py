"""Rows to records: the traces of a run."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Row, select

from store import recall
from store.again import scale_factors
from store.records import Trace, TracePoint
from store.tables import run, trace, trace_vector
from store.views import run_now


def traces_of_run(c: Connection, run_id: UUID, set_up_id: UUID | None = None) -> tuple[Trace, ...]:
    """In the order in which they were traced; empty for a run without any.

    As the run's set-up has them that stands, or the one named: a trace has no counts, so where a sensitivity
    was corrected later its vectors are scaled, exactly."""
    heads = c.execute(select(trace).where(trace.c.run_id == run_id).order_by(trace.c.number)).all()
    rows: dict[int, list[Row[Any]]] = defaultdict(list)
    for row in c.execute(
        select(trace_vector)
        .where(trace_vector.c.trace_seq.in_([h.seq for h in heads]))
        .order_by(trace_vector.c.trace_seq, trace_vector.c.step, trace_vector.c.place)
    ):
        rows[row.trace_seq].append(row)
    by = _scales(c, run_id, set_up_id) if heads else {}
    return tuple(_trace(h, rows[h.seq], by) for h in heads)


def _scales(c: Connection, run_id: UUID, set_up_id: UUID | None) -> dict[str, float]:
    first, now = (
        c.execute(select(t.c.set_up_id).where(t.c.id == run_id)).scalar_one() for t in (run, run_now)
    )
    wanted = set_up_id or now
    if first == wanted:
        return {}
    return scale_factors(recall.set_up_by_id(c, first), recall.set_up_by_id(c, wanted))


def _trace(head: Row[Any], rows: list[Row[Any]], by: Mapping[str, float]) -> Trace:
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
        points=tuple(_point(step, by) for step in steps.values()),
        number=head.number,
    )


def _point(step: list[Row[Any]], by: Mapping[str, float]) -> TracePoint:
    return TracePoint(
        t_s=step[0].t_s,
        speed_hz=step[0].speed_hz,
        revolutions=step[0].revolutions,
        vectors=tuple(complex(r.re, r.im) * by.get(r.channel, 1.0) for r in step),
        se=tuple(r.se * abs(by.get(r.channel, 1.0)) for r in step),
        gap_v=tuple(r.gap_v for r in step),
    )
