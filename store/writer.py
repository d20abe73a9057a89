"""What the ledger's parts share while a transaction is open."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Table

from store.database import StoreClock
from store.identity import Identities


@dataclass(frozen=True, slots=True)
class Writer:
    """The writer's connection inside its transaction, with the clock and the maker of ids."""

    c: Connection
    clock: StoreClock
    ids: Identities
    software: str
    session: UUID
    path: Path

    def now_us(self) -> int:
        return self.clock.now_us()

    def add(self, table: Table, **values: Any) -> None:
        """Insert one row."""
        self.c.execute(table.insert(), values)

    def add_all(self, table: Table, rows: Sequence[Mapping[str, Any]]) -> None:
        """Insert rows of one shape; none is fine."""
        if rows:
            self.c.execute(table.insert(), list(rows))

    def event(self, kind: str, text: str) -> None:
        """Note what is no measurement."""
        from store.tables import event

        self.add(event, session_id=self.session, kind=kind, text=text, at_us=self.now_us())
