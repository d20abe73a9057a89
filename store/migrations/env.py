"""Alembic's entry: one transaction for schema and version stamp together, all or nothing.

The connection comes from ``store.schema``; it emits BEGIN IMMEDIATE itself, because the driver's own
transactions would commit before each DDL statement and leave half a migration behind after a crash.
"""

from __future__ import annotations

from alembic import context

context.configure(
    connection=context.config.attributes["connection"],
    transactional_ddl=True,
    transaction_per_migration=False,
)
with context.begin_transaction():
    context.run_migrations()
