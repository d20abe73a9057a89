"""Making and changing the schema through Alembic: all or nothing, and only when asked."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from sqlalchemy import Connection, Engine
from sqlalchemy.exc import OperationalError

from config.errors import StoreError
from store.migrations import SCRIPTS, configuration


@dataclass(frozen=True, slots=True)
class Migration:
    """One step of the schema, as ``store migrate --list`` shows it."""

    revision: str
    text: str
    done: bool


def stamp(connection: Connection) -> str | None:
    """The revision in the store; None when it has none."""
    try:
        return connection.exec_driver_sql("SELECT version_num FROM alembic_version").scalar()
    except OperationalError as e:
        if "no such table" in str(e.orig):
            return None
        raise


def upgrade(engine: Engine, scripts: Path = SCRIPTS) -> None:
    """Bring the schema to the newest revision in ``scripts``, in one transaction (BEGIN IMMEDIATE).

    An exception or a kill leaves the store as it was. The caller holds the store's lock.
    """
    from alembic import command

    with engine.connect() as connection:
        command.upgrade(configuration(scripts, connection=connection), "head")
        connection.commit()


def migrations(current: str | None, scripts: Path = SCRIPTS) -> tuple[Migration, ...]:
    """All steps in order; raises StoreError (newer) when ``current`` is none of them."""
    from alembic.script import ScriptDirectory

    steps = list(ScriptDirectory.from_config(configuration(scripts)).walk_revisions())[::-1]
    names = [s.revision for s in steps]
    if current is not None and current not in names:
        raise StoreError(
            f"The store's schema {current} is not known to this version.",
            "Install the newer revmark that made it; nothing was changed.",
            kind="newer",
        )
    upto = names.index(current) if current is not None else -1
    return tuple(Migration(s.revision, (s.doc or "").splitlines()[0], i <= upto) for i, s in enumerate(steps))
