"""Coefficients are derived: rebuilt, per job, in the transaction that changes what they come from."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from typing import Any
from uuid import UUID

from sqlalchemy import select

from store import recall_runs
from store.balance import coefficients
from store.records import Coefficient
from store.tables import coefficient, job
from store.writer import Writer

log = logging.getLogger(__name__)


def rebuild(w: Writer, job_id: UUID) -> int:
    """Replace the job's coefficients by what its story gives now; returns how many.

    What is derived must not cost what is measured: when the arithmetic fails the job is left without
    coefficients, and an event says so.
    """
    number = w.c.execute(select(job.c.number).where(job.c.id == job_id)).scalar_one()
    story = recall_runs.story(w.c, number, labelled_only=True)
    try:
        rows = [_row(job_id, c) for c in coefficients.from_story(story)]
    except Exception as e:
        log.exception("coefficients of job %s", number)
        w.event("coefficients failed", f"Job {number}: {type(e).__name__}: {e}"[:500])
        rows = []
    w.c.execute(coefficient.delete().where(coefficient.c.job_id == job_id))
    w.add_all(coefficient, rows)
    return len(rows)


def rebuild_all(w: Writer, number: str | None = None) -> int:
    """Those of one job, or of all."""
    wanted = select(job.c.id).order_by(job.c.seq)
    ids: Sequence[Any] = (
        w.c.execute(wanted if number is None else wanted.where(job.c.number == number)).scalars().all()
    )
    return sum(rebuild(w, job_id) for job_id in ids)


def _row(job_id: UUID, c: Coefficient) -> dict[str, Any]:
    return {
        "job_id": job_id,
        "job_number": c.job_number,
        "machine_serial": c.machine_serial,
        "model_code": c.model_code,
        "plane": c.plane,
        "channel": c.channel,
        "speed_hz": c.speed_hz,
        "re": c.value.real,
        "im": c.value.imag,
        "se": c.se,
        "run_names": list(c.run_names),
        "origin": c.origin.value,
        "mount_id": c.mount_id,
        "set_up_id": c.set_up_id,
        "at_us": c.at_us,
        "largest_effect_ratio": c.largest_effect_ratio,
    }
