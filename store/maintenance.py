"""Looking after a store: check, restore, migrate (a backup is ``store.copies.copy_store``).

Restore and migrate are the only writers beside the ledger; both hold the store's lock, so neither runs
beside a daemon. Nothing is ever deleted or overwritten.
"""

from __future__ import annotations

import shutil
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from sqlalchemy import Connection, Engine, Table, func, select

from config.errors import StoreError
from store import database, recall_runs, schema
from store.copies import check_whole, copy_store, problems_of
from store.lock import StoreLock
from store.migrations import KNOWN, SCRIPTS
from store.rawcodec import decode
from store.schema import Migration
from store.tables import metadata, raw
from store.trouble import in_our_words

ROOM_FOR_MIGRATION = 2.2
"""Free space wanted, in sizes of the store: the backup, and the log of the change."""


@dataclass(frozen=True, slots=True)
class CheckReport:
    """What a check found. ``problems`` empty = sound."""

    path: Path
    schema: str
    problems: tuple[str, ...]
    rows: int
    raw_checked: int


@dataclass(frozen=True, slots=True)
class MigrationReport:
    """``done``: steps taken now; ``backup``: the copy made before, None when there was nothing to do."""

    done: tuple[Migration, ...]
    backup: Path | None


# --- check -------------------------------------------------------------------------------------------


def check(path: Path, *, with_raw: bool = True) -> CheckReport:
    """SQLite's own checks, foreign keys and (``with_raw``) the checksum of all raw samples.

    The store may be in use: reading takes no lock. Raises StoreError when it cannot be opened at all.
    """
    database.check_openable(path)
    found = problems_of(path)
    if found:
        return CheckReport(path, KNOWN[-1], found, 0, 0)
    engine = database.reader_engine(path)
    try:
        with in_our_words(path), engine.begin() as c:
            revision = schema.stamp(c) or ""
            rows = sum(_count(c, t) for t in metadata.sorted_tables)
        checked, damaged = _check_raw(engine, path) if with_raw else (0, ())
    finally:
        engine.dispose()
    return CheckReport(path, revision, damaged, rows, checked)


def _count(c: Connection, table: Table) -> int:
    return int(c.execute(select(func.count()).select_from(table)).scalar_one())


def _check_raw(engine: Engine, path: Path) -> tuple[int, tuple[str, ...]]:
    """How many were checked, and what is damaged. A short transaction each: the writer's log stays small."""
    checked, damaged = 0, []
    with in_our_words(path), engine.begin() as c:
        ids = c.execute(select(raw.c.reading_id)).scalars().all()
    for reading_id in ids:
        with in_our_words(path), engine.begin() as c:
            row = c.execute(select(raw).where(raw.c.reading_id == reading_id)).first()
        if row is None:
            continue  # let go meanwhile
        checked += 1
        try:
            decode(recall_runs.packed(row))
        except StoreError as e:
            damaged.append(f"reading {reading_id}: {e.cause}")
    return checked, tuple(damaged)


# --- restore -----------------------------------------------------------------------------------------


def restore(path: Path, backup: Path, *, clock: database.StoreClock) -> Path | None:
    """Put a backup in the store's place; returns where the old store went, None when there was none.

    The backup is checked first and copied; the old store is renamed together with its -wal and -shm,
    never deleted. Raises StoreError: backup missing, corrupt or newer; store locked; network folder.
    """
    _check_backup(path, backup)
    with StoreLock.take(path):
        ready = path.with_name(path.name + ".restored")
        with in_our_words(ready):
            ready.unlink(missing_ok=True)
        copy_store(backup, ready)
        with in_our_words(path):
            aside = _set_aside(path, _stamp(clock))
            ready.rename(path)
            database.sync_folder(path.parent)
    return aside


def _check_backup(path: Path, backup: Path) -> None:
    if not path.parent.is_dir():
        raise StoreError(f"There is no folder {path.parent}.", "Make the folder first.", kind="missing")
    database.refuse_network(path)
    if not backup.is_file():
        raise StoreError(f"There is no backup {backup}.", "Check the path.", kind="missing")
    if path.exists() and path.samefile(backup):
        raise StoreError(f"{backup} is the store itself.", "Name a backup.", kind="refused")
    version = database.check_ours(backup)
    if version > len(KNOWN):
        raise StoreError(
            f"The backup {backup} was written by a newer version (schema {version:04}).",
            "Install that version first; nothing was changed.",
            kind="newer",
        )
    check_whole(backup)


def _set_aside(path: Path, stamp: str) -> Path | None:
    """The store first: a log without its store is harmless, a new store beside an old log is not."""
    aside = path.with_name(f"{path.name}.replaced-{stamp}")
    had_store = path.exists()
    for old, new in zip((path, *database.beside(path)), (aside, *database.beside(aside)), strict=True):
        if new.exists():
            raise StoreError(f"{new} is there already.", "Try again in a second.", kind="refused")
        if old.exists():
            old.rename(new)
    return aside if had_store else None


# --- migrate -----------------------------------------------------------------------------------------


def list_migrations(path: Path, *, scripts: Path = SCRIPTS) -> tuple[Migration, ...]:
    """All steps of the schema and which of them the store has; changes nothing."""
    database.check_ours(path)
    return schema.migrations(_stamp_of(path), scripts)


def migrate(path: Path, *, clock: database.StoreClock, scripts: Path = SCRIPTS) -> MigrationReport:
    """Bring a store to this version's schema: a backup beside it first, then all steps in one transaction.

    A crash leaves the store as it was; run it again. Raises StoreError: locked, newer, full, network, ...
    """
    database.refuse_network(path)
    database.check_ours(path)
    with StoreLock.take(path):
        steps = schema.migrations(_stamp_of(path), scripts)
        wanted = tuple(s for s in steps if not s.done)
        backup = None
        if wanted:
            _check_room(path)
            backup = copy_store(
                path, path.with_name(f"{path.name}.before-{steps[-1].revision}-{_stamp(clock)}")
            )
        _upgrade(path, scripts)
    return MigrationReport(wanted, backup)


def _upgrade(path: Path, scripts: Path) -> None:
    """Also when there is nothing to do: a kill after the commit may have left the header in the log."""
    engine = database.writer_engine(path)
    try:
        with in_our_words(path):
            schema.upgrade(engine, scripts)
            with engine.connect() as connection:
                database.checkpoint(connection.connection.driver_connection)  # type: ignore[arg-type]
    finally:
        engine.dispose()


def _stamp_of(path: Path) -> str | None:
    engine = database.reader_engine(path)
    try:
        with in_our_words(path), engine.begin() as connection:
            return schema.stamp(connection)
    finally:
        engine.dispose()


def _check_room(path: Path) -> None:
    need = round(path.stat().st_size * ROOM_FOR_MIGRATION)
    free = shutil.disk_usage(path.parent).free
    if free < need:
        raise StoreError(
            f"{path.parent} has {free // 2**20} MiB free; migrating the store needs {need // 2**20 + 1} MiB.",
            "Free space on its disk; nothing was changed.",
            kind="full",
        )


def _stamp(clock: database.StoreClock) -> str:
    return datetime.fromtimestamp(clock.now_us() / 1e6, UTC).strftime("%Y%m%dT%H%M%SZ")
