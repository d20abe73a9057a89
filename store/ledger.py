"""The only writer of a store. Every method is one transaction; acknowledged means committed."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Literal, Protocol
from uuid import UUID

from store.records import (
    Label,
    Machine,
    MachineDraft,
    Mark,
    Mount,
    MountDraft,
    PieceDraft,
    Reading,
    ReadingDraft,
    Run,
    RunDraft,
    RunState,
    SetUp,
    SetUpDraft,
    WeightEvent,
)


class LedgerClock(Protocol):
    """What the ledger needs of a clock (``daq.clock.Clock`` has it)."""

    def monotonic(self) -> float: ...

    def now_us(self) -> int: ...


class Ledger:
    """SKELETON: signatures stand, bodies follow within the hour. Safe to call from several threads."""

    session: UUID
    """Identity of this opening; stored with every run and mark."""

    @classmethod
    def open(cls, path: Path, *, clock: LedgerClock, software: str) -> Ledger:
        """Take the store's lock and open it for writing. Raises StoreError (missing, locked, newer, older, ...)."""
        raise NotImplementedError

    def close(self) -> None:
        raise NotImplementedError

    # --- the stand and the rotor
    def set_up(self, draft: SetUpDraft) -> SetUp:
        raise NotImplementedError

    def add_machine(self, draft: MachineDraft, who: str) -> Machine:
        raise NotImplementedError

    def mount(self, draft: MountDraft, who: str) -> Mount:
        raise NotImplementedError

    def unmount(self, who: str) -> Mount | None:
        """End the current mount; returns it as ended, None when nothing was mounted."""
        raise NotImplementedError

    # --- weights (``after_run``: name of a run of the job, "mount" = before the mount's first run)
    def fit(self, piece: PieceDraft, who: str, after_run: str | None = None) -> tuple[WeightEvent, ...]:
        raise NotImplementedError

    def drill(self, piece: PieceDraft, who: str, after_run: str | None = None) -> tuple[WeightEvent, ...]:
        raise NotImplementedError

    def remove(
        self,
        plane: int,
        who: str,
        *,
        hole: int | None = None,
        angle_deg: float | None = None,
        every: bool = False,
        after_run: str | None = None,
    ) -> tuple[WeightEvent, ...]:
        raise NotImplementedError

    # --- marks
    def ask_mark(
        self,
        key: str,
        label: Label,
        who: str,
        *,
        from_sample: int | None = None,
        from_session: UUID | None = None,
        choose: Literal["last", "next"] | None = None,
        confirmed: bool = False,
        slow_roll_limit_hz: float | None = None,
    ) -> Mark:
        """``from_sample`` given = asked while turning; None = no pulses. Same key again: the same mark."""
        raise NotImplementedError

    def cancel_mark(self, key: str) -> Mark:
        """Cancel a pending mark; one already ended is returned as it ended."""
        raise NotImplementedError

    def label_reading(
        self,
        key: str,
        reading_id: UUID,
        label: Label,
        who: str,
        *,
        confirmed: bool = False,
        slow_roll_limit_hz: float | None = None,
    ) -> Mark:
        raise NotImplementedError

    # --- runs and readings
    def open_run(self, draft: RunDraft) -> Run:
        raise NotImplementedError

    def add_reading(
        self, run_id: UUID, draft: ReadingDraft, *, slow_roll_limit_hz: float | None = None
    ) -> tuple[Reading, Mark | None]:
        """The mark is the one this reading ended, None when it ended none."""
        raise NotImplementedError

    def close_run(
        self,
        run_id: UUID,
        state: RunState,
        reason: str,
        ended_us: int,
        detail: str = "",
        *,
        fast_enough: bool,
    ) -> tuple[Run, Mark | None]:
        """``fast_enough``: the run exceeded the minimum speed, so a mark still pending is ``missed``."""
        raise NotImplementedError

    def void_run(self, name: str, why: str, who: str) -> Run:
        raise NotImplementedError

    def assign_run(self, name: str, job: str, who: str) -> Run:
        raise NotImplementedError

    def revise_run(self, name: str, set_up_id: UUID, why: str, who: str) -> Run:
        raise NotImplementedError

    def recover(self) -> tuple[Run, ...]:
        raise NotImplementedError

    # --- the store itself
    def once(
        self, key: str, verb: str, body: Mapping[str, Any], fn: Callable[[], Mapping[str, Any]]
    ) -> dict[str, Any]:
        """Do ``fn`` (ledger calls inside join the same transaction) and keep its JSON answer under ``key``."""
        raise NotImplementedError

    def rebuild_coefficients(self, job: str | None = None) -> int:
        raise NotImplementedError

    def age_raw(self, total_mib: float, *, at_most: int = 50) -> int:
        """Let raw samples go, oldest unlabelled first, until they fit ``total_mib``; returns how many went."""
        raise NotImplementedError

    def checkpoint(self) -> bool:
        """Fold the write-ahead log into the store; False = a reader was in the way, try later."""
        raise NotImplementedError

    def backup(self, path: Path) -> Path:
        raise NotImplementedError

    def note_event(self, kind: str, text: str) -> None:
        raise NotImplementedError
