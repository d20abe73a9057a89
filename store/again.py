"""What is handed to the ledger of readings that were measured again."""

from __future__ import annotations

from dataclasses import dataclass
from uuid import UUID

from store.records import Measured, SetUp, SetUpDraft


@dataclass(frozen=True, slots=True)
class Remeasured:
    """A reading measured again, to be kept beside what is there."""

    reading_id: UUID
    beside: int
    """The newest version when it was made: the ledger refuses it where that has changed since. 0 = how the
    reading was measured is not in the store."""
    measured: Measured


@dataclass(frozen=True, slots=True)
class RunAgain:
    """A run whose readings were measured again, all that could be."""

    run_id: UUID
    set_up_id: UUID
    """The run's set-up when it was done."""
    set_up: SetUpDraft | None
    """The corrected one; None = as it was."""
    readings: tuple[Remeasured, ...]


def scale_factors(then: SetUp | SetUpDraft, now: SetUp | SetUpDraft) -> dict[str, float]:
    """By channel whose scale differs, what a length measured ``then`` is multiplied with to be as ``now``
    would have it: old sensitivity over new, times the senses of positive."""
    new = {c.name: c for c in now.channels}
    both = [(c, new[c.name]) for c in then.channels if c.name in new]
    return {
        a.name: a.volts_per_unit / b.volts_per_unit * (a.positive * b.positive)
        for a, b in both
        if (a.volts_per_unit, a.positive) != (b.volts_per_unit, b.positive)
    }
