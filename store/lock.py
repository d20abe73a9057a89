"""One writer per store: an operating system lock on ``<store>.lock``, kept open while it is held.

The lock ends with the process, also after kill -9. The pid inside is information, never the lock itself.
"""

from __future__ import annotations

import os
import sys
from contextlib import suppress
from pathlib import Path

from config.errors import StoreError
from store.trouble import file_error

_LOCKED_BYTE = 1 << 30
"""Windows locks a byte far behind the pid, so that the pid can be read meanwhile."""


class StoreLock:
    """Held from ``take`` to ``release``; usable as a context manager."""

    def __init__(self, descriptor: int, path: Path) -> None:
        self._descriptor: int | None = descriptor
        self.path = path

    @classmethod
    def take(cls, store: Path) -> StoreLock:
        """Raises StoreError (locked: by whom; io: the lock file cannot be made)."""
        path = lock_path(store)
        try:
            descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o660)
        except OSError as e:
            raise file_error(e, path) from e
        if not _lock(descriptor):
            holder = _pid_in(descriptor)
            os.close(descriptor)
            raise StoreError(
                f"The store {store} is in use by another process{holder}.",
                "Stop that process first; one store has one writer.",
                kind="locked",
            )
        with suppress(OSError):  # a full disk has no room for the pid, and needs none
            os.ftruncate(descriptor, 0)
            os.write(descriptor, f"{os.getpid()}\n".encode())
        return cls(descriptor, path)

    def release(self) -> None:
        """Let the lock go; the file stays, because removing it would let two processes hold one lock."""
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None

    def __enter__(self) -> StoreLock:
        return self

    def __exit__(self, *_: object) -> None:
        self.release()


def lock_path(store: Path) -> Path:
    return store.with_name(store.name + ".lock")


def _pid_in(descriptor: int) -> str:
    text = os.pread(descriptor, 32, 0) if hasattr(os, "pread") else os.read(descriptor, 32)
    pid = text.decode(errors="replace").strip()
    return f" (pid {pid})" if pid.isdigit() else ""


def _lock(descriptor: int) -> bool:
    if sys.platform == "win32":
        import msvcrt

        os.lseek(descriptor, _LOCKED_BYTE, os.SEEK_SET)
        try:
            msvcrt.locking(descriptor, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        finally:
            os.lseek(descriptor, 0, os.SEEK_SET)
        return True
    import fcntl

    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True
