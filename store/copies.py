"""Copies of a store that can be trusted: made in one step, checked, then given their name."""

from __future__ import annotations

import os
import sqlite3
from pathlib import Path

from config.errors import StoreError
from store.database import check_ours, sync_folder
from store.trouble import in_our_words


def copy_store(store: Path, target: Path) -> Path:
    """A whole, checked copy of ``store`` at ``target``; never overwrites. The store may be in use.

    The copy is made by VACUUM INTO from a read-only connection: one step, so a busy writer cannot make it
    start over, and what is still in the log is in it. Raises StoreError (refused: the file is there
    already; missing, full, corrupt, ...).
    """
    check_ours(store)
    if target.exists():
        raise StoreError(f"{target} is there already.", "Give the copy another name.", kind="refused")
    if not target.parent.is_dir():
        raise StoreError(f"There is no folder {target.parent}.", "Make the folder first.", kind="missing")
    part = target.with_name(target.name + ".part")
    with in_our_words(target):
        part.unlink(missing_ok=True)
        try:
            _vacuum_into(store, part)
            check_whole(part)
            _sync(part)
            _name(part, target)
        finally:
            part.unlink(missing_ok=True)
        sync_folder(target.parent)
    return target


def check_whole(path: Path) -> None:
    """Raises StoreError (corrupt) unless SQLite finds the file sound and its rows joined."""
    found = problems_of(path)
    if found:
        raise StoreError(
            f"{path} is damaged: {found[0]}.", "Do not use it; make or take another copy.", kind="corrupt"
        )


def problems_of(path: Path) -> tuple[str, ...]:
    """What SQLite's integrity check and foreign key check find; reads only."""
    connection = sqlite3.connect(f"{path.absolute().as_uri()}?mode=ro", uri=True)
    try:
        rows = [str(r[0]) for r in connection.execute("PRAGMA integrity_check(20)")]
        found = [text for text in rows if text != "ok"]
        for table, rowid, parent, _ in connection.execute("PRAGMA foreign_key_check").fetchmany(20):
            found.append(f"row {rowid} of {table} belongs to no row of {parent}")
        return tuple(found)
    except sqlite3.DatabaseError as e:
        return (str(e),)
    finally:
        connection.close()


def _vacuum_into(store: Path, part: Path) -> None:
    """SQLite fills an empty file and keeps its mode (0660 as far as the umask lets it)."""
    os.close(os.open(part, os.O_CREAT | os.O_EXCL | os.O_WRONLY, 0o660))
    connection = sqlite3.connect(f"{store.absolute().as_uri()}?mode=ro", uri=True, isolation_level=None)
    try:
        connection.execute("VACUUM INTO ?", (str(part),))
    finally:
        connection.close()


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDWR)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)


def _name(part: Path, target: Path) -> None:
    """Give the copy its name; a hard link fails when somebody made the file meanwhile, a rename would not."""
    try:
        os.link(part, target)
    except FileExistsError:
        raise
    except OSError:
        part.rename(target)
