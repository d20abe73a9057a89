"""${message}"""

from __future__ import annotations

from pathlib import Path

from alembic import op

from store.migrations import statements

revision = ${repr(up_revision)}
down_revision = ${repr(down_revision)}


def upgrade() -> None:
    """Additive only: a column or table more, never one less. Ends with PRAGMA user_version."""
    for statement in statements(Path(__file__).with_suffix(".sql")):
        op.get_bind().exec_driver_sql(statement)
