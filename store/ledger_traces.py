"""Traces: 1X of all channels against speed over one run-up or coast-down."""

from __future__ import annotations

import math
from collections.abc import Iterable
from uuid import UUID

from sqlalchemy import func, select

from config.errors import Refusal
from store import recall_runs
from store.records import RunState, Trace, TracePoint
from store.tables import trace, trace_vector
from store.writer import Writer


def add(w: Writer, run_id: UUID, draft: Trace) -> int:
    """Keep a trace with all its steps; returns its number within the run.

    Raises Refusal when the run has ended, the trace is empty, or a step does not fit its channels."""
    of = recall_runs.run_head(w.c, run_id)
    if of.state is not RunState.OPEN:
        raise Refusal(f"Run {of.name} has ended and takes no more traces.", "Open another run.")
    _check(draft)
    newest = select(func.max(trace.c.number)).where(trace.c.run_id == run_id)
    number = int(w.c.execute(newest).scalar() or 0) + 1
    w.add(
        trace,
        run_id=run_id,
        number=number,
        direction=draft.direction,
        started_us=draft.started_us,
        duration_s=draft.duration_s,
    )
    seq = w.c.execute(
        select(trace.c.seq).where(trace.c.run_id == run_id, trace.c.number == number)
    ).scalar_one()
    w.add_all(
        trace_vector, [row for step, p in enumerate(draft.points) for row in _rows(seq, step, p, draft)]
    )
    return number


def _rows(seq: int, step: int, p: TracePoint, of: Trace) -> Iterable[dict[str, object]]:
    for place, (channel, unit) in enumerate(zip(of.channels, of.units, strict=True)):
        yield {
            "trace_seq": seq,
            "step": step,
            "place": place,
            "channel": channel,
            "t_s": p.t_s,
            "speed_hz": p.speed_hz,
            "revolutions": p.revolutions,
            "re": p.vectors[place].real,
            "im": p.vectors[place].imag,
            "se": p.se[place],
            "gap_v": p.gap_v[place],
            "unit": unit,
        }


def _check(draft: Trace) -> None:
    wide = len(draft.channels)
    whole = draft.points and wide and len(draft.units) == wide
    whole = whole and all(len(p.vectors) == len(p.se) == len(p.gap_v) == wide for p in draft.points)
    if not whole or not all(map(math.isfinite, _figures(draft))):
        raise Refusal(
            "A trace without steps, or one whose steps do not fit its channels, is not kept.",
            "Report this: the analysis should not have made it.",
        )


def _figures(draft: Trace) -> Iterable[float]:
    for p in draft.points:
        yield from (p.t_s, p.speed_hz, *p.se, *p.gap_v)
        for v in p.vectors:
            yield from (v.real, v.imag)
