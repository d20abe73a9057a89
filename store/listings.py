"""What lists and ``status`` show: frozen, made by a single query each."""

from __future__ import annotations

from dataclasses import dataclass
from uuid import UUID

from store.records import Label, Origin, RunState


@dataclass(frozen=True, slots=True)
class RunLine:
    """One line of a list of runs: made by a single query, without the readings themselves."""

    name: str
    other_name: str | None
    """``U/1`` of a run that was assigned later."""
    job_number: str | None
    machine_serial: str | None
    origin: Origin
    state: RunState
    reason: str
    void: str | None
    operator: str
    started_us: int
    ended_us: int | None
    readings: int
    labels: tuple[Label, ...]
    speed_hz: float | None
    """Of the newest labelled reading, else of the newest; None = no reading."""


@dataclass(frozen=True, slots=True)
class StoreEvent:
    """Something worth keeping that is no measurement (a clock step, a drop-out, a recovery)."""

    at_us: int
    kind: str
    text: str


@dataclass(frozen=True, slots=True)
class StoreInfo:
    store_id: UUID
    made_us: int
    made_by: str
    schema: str
    """Revision of the schema (0001, ...)."""
    sqlite: str
    """Version of the SQLite library in use."""
    sqlite_wal_reset_safe: bool
    """False: this SQLite has the WAL-reset bug; harmless as only one connection writes and checkpoints."""
    file_bytes: int
    wal_bytes: int
    raw_bytes: int
