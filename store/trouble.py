"""What SQLite says, in our words: by error name, never by its text."""

from __future__ import annotations

import errno
import os
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from sqlalchemy.exc import StatementError

from config.errors import RevmarkError, StoreError, StoreTrouble

_KINDS: dict[str, tuple[StoreTrouble, str, str]] = {
    # first part of SQLite's name -> kind, cause, remedy
    "FULL": (
        "full",
        "has no room left: nothing more can be written, what was stored is intact.",
        "Free space on its disk, then try again.",
    ),
    "READONLY": (
        "read_only",
        "can only be read.",
        "Check who owns the store, its -wal file and its folder, and that the disk is mounted for writing.",
    ),
    "CANTOPEN": (
        "io",
        "cannot be opened.",
        "Check that its folder exists, that you may write there and that the disk is mounted for writing.",
    ),
    "BUSY": ("locked", "is being written by another process.", "End that process, or try again."),
    "LOCKED": ("locked", "is being written by another process.", "End that process, or try again."),
    "IOERR": (
        "io",
        "cannot be read or written: the disk reports an error.",
        "Check the disk and its cable, then run `revmark store check`.",
    ),
    "CORRUPT": (
        "corrupt",
        "is damaged.",
        "Run `revmark store check`, and `revmark store restore` with a backup; the damaged file is kept.",
    ),
    "NOTADB": ("corrupt", "is no SQLite database.", "Check the path, or restore a backup."),
    "CONSTRAINT": (
        "refused",
        "refuses the row, which contradicts what is stored.",
        "Nothing was changed; please report this.",
    ),
}

_ALSO_FULL = {"IOERR_SHMSIZE"}
"""No room for the -shm file. SQLite's "Result and Error Codes": "may indicate that the underlying filesystem
volume is out of space"."""


def store_error(error: sqlite3.Error, path: Path) -> StoreError:
    """SQLite's error as one of ours; kind ``io`` for what is not in the table above."""
    name = (getattr(error, "sqlite_errorname", None) or "").removeprefix("SQLITE_")
    kind, cause, remedy = _KINDS.get(
        "FULL" if name in _ALSO_FULL else name.split("_")[0],
        ("io", f"cannot be used ({error}).", "Run `revmark store check`."),
    )
    detail = f" ({error})" if kind == "refused" else ""
    return StoreError(f"The store {path} {cause}{detail}", remedy, kind=kind)


@contextmanager
def in_our_words(path: Path) -> Iterator[None]:
    """Border to SQLite, SQLAlchemy and the file system: only RevmarkError and programming errors come out."""
    try:
        yield
    except StatementError as e:
        if isinstance(e.orig, RevmarkError):
            raise e.orig from e
        if isinstance(e.orig, sqlite3.Error):
            raise store_error(e.orig, path) from e.orig
        raise
    except sqlite3.Error as e:
        raise store_error(e, path) from e
    except OSError as e:
        raise file_error(e, path) from e


def file_error(error: OSError, path: Path) -> StoreError:
    """An operating system error about the store's file or folder."""
    what = error.strerror or type(error).__name__
    kind: StoreTrouble = "full" if error.errno in _NO_ROOM else "io"
    return StoreError(
        f"The file {error.filename or path} cannot be used: {what}.",
        "Check its folder, its owner and the space on its disk.",
        kind=kind,
    )


_NO_ROOM = {errno.ENOSPC, errno.EDQUOT}


def missing(path: Path) -> StoreError:
    """The store is not there; an absent folder is named, because that is what a typo looks like."""
    if not path.parent.is_dir():
        return StoreError(
            f"There is no folder {path.parent}{os.sep} for the store {path.name}.",
            "Make the folder, or correct store.path in the stand file.",
            kind="missing",
        )
    return StoreError(
        f"There is no store {path}.",
        "`revmark serve` makes a new one; check the path otherwise.",
        kind="missing",
    )
