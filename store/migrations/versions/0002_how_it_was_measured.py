"""How each reading was measured, levels beside its vectors, and traces of run-ups and coast-downs."""

from __future__ import annotations

from pathlib import Path

from alembic import op

from store.migrations import statements

revision = "0002"
down_revision = "0001"


def upgrade() -> None:
    """Make everything in 0002_how_it_was_measured.sql."""
    for statement in statements(Path(__file__).with_suffix(".sql")):
        op.get_bind().exec_driver_sql(statement)
