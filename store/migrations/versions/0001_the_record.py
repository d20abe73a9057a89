"""The record: all source tables, their guards, the derived coefficients and the views."""

from __future__ import annotations

from pathlib import Path

from alembic import op

from store.migrations import statements

revision = "0001"
down_revision = None


def upgrade() -> None:
    """Make everything in 0001_the_record.sql."""
    for statement in statements(Path(__file__).with_suffix(".sql")):
        op.get_bind().exec_driver_sql(statement)
