"""Readings measured again: another version beside those that are there, perhaps with a corrected set-up.

The arithmetic was done before and elsewhere; here it is only found to fit what the store holds now, and kept.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from uuid import UUID

from sqlalchemy import func, select

from config.errors import Refusal
from store import ledger_coefficients, ledger_rotor, ledger_runs, recall, recall_runs
from store.again import RunAgain
from store.names import check_text
from store.records import Run, RunState
from store.tables import measured
from store.writer import Writer


def keep(w: Writer, again: Sequence[RunAgain], why: str, who: str) -> tuple[Run, ...]:
    """Store every run's new versions (and set-up), or none of them, and rebuild the jobs' coefficients.

    Raises Refusal: a run is open, named twice, or was changed since the arithmetic was done.
    """
    why = check_text("The reason", why.strip())
    if not why:
        raise Refusal("Nothing says why the runs are measured again.", "Say why: --why TEXT.")
    if len({one.run_id for one in again}) < len(again):
        raise Refusal("A run is named twice.", "Name each run once.")
    runs = [_keep_one(w, one, why, who) for one in again]
    for number in dict.fromkeys(r.job_number for r in runs if r.job_number is not None):
        ledger_coefficients.rebuild(w, recall.job_named(w.c, number).id)
    return tuple(recall_runs.run_by_id(w.c, r.id) for r in runs)


def _keep_one(w: Writer, again: RunAgain, why: str, who: str) -> Run:
    of = recall_runs.run_head(w.c, again.run_id)
    if of.state is RunState.OPEN:
        raise Refusal(f"Run {of.name} is still open.", "Wait until it has ended.")
    if of.set_up_id != again.set_up_id:
        raise _meanwhile(of)
    set_up_id = of.set_up_id
    if again.set_up is not None:
        set_up_id = ledger_rotor.keep_set_up(w, again.set_up).id
        ledger_runs.add_revision(w, of.id, set_up_id, why, who)
    for one in again.readings:
        if _newest(w, one.reading_id) != one.beside:
            raise _meanwhile(of)
        made = replace(one.measured, who=who, set_up_id=set_up_id)
        ledger_runs.add_measured(w, one.reading_id, max(one.beside, 1) + 1, made, set_up_id)
    return of


def _newest(w: Writer, reading_id: UUID) -> int:
    """The newest version of a reading; 0 = how it was measured is not in the store."""
    newest = select(func.max(measured.c.version)).where(measured.c.reading_id == reading_id)
    return w.c.execute(newest).scalar() or 0


def _meanwhile(of: Run) -> Refusal:
    return Refusal(f"Run {of.name} was measured again meanwhile by somebody else.", "Look, then ask again.")
