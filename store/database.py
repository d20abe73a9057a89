"""The one place that opens a store. One writer connection, which alone checkpoints; readers are mode=ro.

Why so (measured, see the decision records): WAL with synchronous FULL loses no acknowledged commit in a
power cut; one writer that is the only checkpointer keeps clear of SQLite's WAL-reset bug and makes the
acknowledgement faster, because the checkpoint follows it.
"""

from __future__ import annotations

import os
import sqlite3
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

from sqlalchemy import Connection, Engine, create_engine, event
from sqlalchemy.pool import QueuePool, StaticPool

from config.errors import StoreError
from config.places import is_network_folder
from store import schema, tables
from store.identity import Identities
from store.lock import StoreLock
from store.migrations import HEAD, KNOWN
from store.trouble import file_error, in_our_words, missing

APPLICATION_ID = int.from_bytes(b"RVMK")
BUSY_TIMEOUT_MS = 5000
CHECKPOINT_WAIT_MS = 100
"""A checkpoint waits this long for readers; the next one takes up what is left."""
JOURNAL_LIMIT_BYTES = 64 * 2**20
_HEADER_BYTES = 100


class StoreClock(Protocol):
    """What the store needs of a clock (``daq.clock.Clock`` has it)."""

    def monotonic(self) -> float: ...

    def now_us(self) -> int: ...


# --- engines -----------------------------------------------------------------------------------------


def writer_engine(path: Path) -> Engine:
    """The only connection that writes; the caller holds the store's lock. BEGIN is always IMMEDIATE."""
    engine = create_engine("sqlite://", creator=lambda: _connect(path, "rw"), poolclass=StaticPool)

    @event.listens_for(engine, "connect")
    def _pragmas(connection: sqlite3.Connection, _: Any) -> None:
        (mode,) = connection.execute("PRAGMA journal_mode=WAL").fetchone()
        if mode != "wal":
            raise StoreError(
                f"The store {path} cannot keep a write-ahead log (mode {mode}).",
                "Put it on a local disk that this user may write to.",
                kind="io",
            )
        for pragma in (
            "synchronous=FULL",
            "foreign_keys=ON",
            "recursive_triggers=ON",
            "wal_autocheckpoint=0",
            f"journal_size_limit={JOURNAL_LIMIT_BYTES}",
        ):
            connection.execute(f"PRAGMA {pragma}").close()

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        connection.exec_driver_sql("BEGIN IMMEDIATE")

    return engine


def reader_engine(path: Path) -> Engine:
    """Read-only connections with snapshots; they neither write nor checkpoint."""
    engine = create_engine(
        "sqlite://", creator=lambda: _connect(path, "ro"), poolclass=QueuePool, pool_size=4, max_overflow=12
    )

    @event.listens_for(engine, "begin")
    def _begin(connection: Connection) -> None:
        connection.exec_driver_sql("BEGIN")

    return engine


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    return sqlite3.connect(
        f"{path.absolute().as_uri()}?mode={mode}",
        uri=True,
        isolation_level=None,
        check_same_thread=False,
        timeout=BUSY_TIMEOUT_MS / 1000,
    )


def checkpoint(connection: sqlite3.Connection) -> bool:
    """Fold the write-ahead log into the store and cut it to nothing; False when a reader was in the way."""
    connection.execute(f"PRAGMA busy_timeout={CHECKPOINT_WAIT_MS}").close()
    try:
        busy, _, _ = connection.execute("PRAGMA wal_checkpoint(TRUNCATE)").fetchone()
    finally:
        connection.execute(f"PRAGMA busy_timeout={BUSY_TIMEOUT_MS}").close()
    return not busy


# --- what a file is, without touching it -------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Header:
    """The two numbers in an SQLite file's first 100 bytes that say whose it is (SQLite file format, 1.3)."""

    application_id: int
    user_version: int


def read_header(path: Path) -> Header:
    """Reads 100 bytes and nothing else. Raises StoreError (missing, corrupt, io)."""
    try:
        with path.open("rb") as file:
            head = file.read(_HEADER_BYTES)
    except FileNotFoundError as e:
        raise missing(path) from e
    except OSError as e:
        raise file_error(e, path) from e
    if len(head) < _HEADER_BYTES or not head.startswith(b"SQLite format 3\0"):
        raise StoreError(f"{path} is no store.", "Check the path, or restore a backup.", kind="corrupt")
    return Header(int.from_bytes(head[68:72]), int.from_bytes(head[60:64]))


def check_openable(path: Path) -> None:
    """Raises StoreError unless ``path`` is a local store of exactly this version; changes nothing."""
    refuse_network(path)
    version = check_ours(path)
    if version > len(KNOWN):
        raise _newer(path, f"{version:04}")
    if version < len(KNOWN):
        raise StoreError(
            f"The store {path} is of an older version ({version:04}, now {HEAD}).",
            f"Stop the daemon and run `revmark store migrate --store {path}`.",
            kind="older",
        )


def check_ours(path: Path) -> int:
    """The number of the store's schema by its header; raises StoreError when it is another program's."""
    header = read_header(path)
    if header.application_id != APPLICATION_ID:
        raise StoreError(
            f"{path} is a database of another program.",
            "Check the path; nothing was changed.",
            kind="refused",
        )
    return header.user_version


def check_stamp(connection: Connection, path: Path) -> None:
    """The schema's own stamp, which a newer version may have moved since the header was written."""
    found = schema.stamp(connection)
    if found != HEAD:
        raise _newer(path, str(found))


def refuse_network(path: Path) -> None:
    """SQLite's shared memory and locks do not work on other machines' disks."""
    kind = is_network_folder(path.parent)
    if kind is not None:
        raise StoreError(
            f"The folder {path.parent} lies on another machine ({kind}): a store there would be damaged.",
            "Set store.path in the stand file to a folder on a local disk.",
            kind="network",
        )


def _newer(path: Path, found: str) -> StoreError:
    return StoreError(
        f"The store {path} was written by a newer version (schema {found}, this one knows {HEAD}).",
        "Install that version again; the store was not touched.",
        kind="newer",
    )


# --- a new store -------------------------------------------------------------------------------------


def create_store(path: Path, *, clock: StoreClock, software: str) -> None:
    """Make a new, empty store in an existing folder. Never replaces a file.

    It is built beside its place and renamed, so a crash leaves no half store. Files are for owner and
    group (0660) as far as the umask lets them. Raises StoreError (missing folder, refused, network, ...).
    """
    if not path.parent.is_dir():
        raise missing(path)
    refuse_network(path)
    with StoreLock.take(path), in_our_words(path):
        _refuse_occupied(path)
        new = path.with_name(path.name + ".new")
        _fill(new, clock, software)
        new.rename(path)
        sync_folder(path.parent)


def _refuse_occupied(path: Path) -> None:
    """A write-ahead log left behind would be replayed into the new store: that is refused too."""
    log, shared = beside(path)
    for occupied in (path, log):
        if occupied.exists() and (occupied is path or occupied.stat().st_size):
            raise StoreError(
                f"{occupied} is there already.", "Use that store, or move the file away.", kind="refused"
            )
    for leftover in (log, shared):
        leftover.unlink(missing_ok=True)


def _fill(new: Path, clock: StoreClock, software: str) -> None:
    for leftover in (new, *beside(new)):
        leftover.unlink(missing_ok=True)
    os.close(os.open(new, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o660))
    engine = writer_engine(new)
    try:
        schema.upgrade(engine)
        with engine.begin() as connection:
            now = clock.now_us()
            connection.execute(
                tables.store_info.insert().values(
                    id=Identities(lambda: now).new(), made_us=now, made_by=software
                )
            )
        with engine.connect() as connection:
            checkpoint(connection.connection.driver_connection)  # type: ignore[arg-type]
    finally:
        engine.dispose()


def beside(path: Path) -> tuple[Path, Path]:
    """The two files SQLite keeps beside a store; they belong to it and move with it."""
    return path.with_name(path.name + "-wal"), path.with_name(path.name + "-shm")


def sync_folder(folder: Path) -> None:
    """Make renames durable; Windows has no such call and needs none."""
    if os.name == "nt":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
