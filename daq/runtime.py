"""Where the daemon tells who may talk to it how: the runtime file and the Unix socket, with their modes.

Alone: folder 0700, file and socket 0600. With a group of operators: folder 2750, file 0640, socket
0660, all of that group, so that its members may mark and read and nobody else may.
"""

from __future__ import annotations

import hashlib
import json
import os
import secrets
import socket
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from config.errors import DaemonError, StandFileError

LONGEST_SOCKET_PATH = 100
"""Bytes; the system allows 107."""


@dataclass(frozen=True, slots=True)
class Access:
    """Who besides the service's user may talk to the daemon."""

    gid: int | None

    @property
    def folder_mode(self) -> int:
        return 0o700 if self.gid is None else 0o2750

    @property
    def file_mode(self) -> int:
        return 0o600 if self.gid is None else 0o640

    @property
    def socket_mode(self) -> int:
        return 0o600 if self.gid is None else 0o660

    @property
    def store_mode(self) -> int:
        return 0o600 if self.gid is None else 0o660


def access_of(group: str | None) -> Access:
    """The access a stand file asks for. Raises StandFileError when the group does not exist."""
    if not group:
        return Access(None)
    try:
        import grp

        return Access(grp.getgrnam(group).gr_gid)
    except (ImportError, KeyError) as error:
        raise StandFileError(
            f"The group {group!r} of access.group does not exist on this PC.",
            f"Make it (groupadd {group}) or leave access.group empty.",
        ) from error


def give(path: Path, mode: int, gid: int | None) -> None:
    """Set the group first, then the mode (a change of group clears the set-group bit).

    Raises StandFileError when the daemon's user may not give files to the group.
    """
    try:
        if gid is not None:
            os.chown(path, -1, gid)
        if os.name == "posix":
            path.chmod(mode)
    except PermissionError as error:
        if gid is None:
            raise
        group, user = _group_name(gid), _user_name()
        raise StandFileError(
            f"The daemon's user {user!r} may not give {path} to the group {group!r} of access.group.",
            f"Make it a member (usermod -aG {group} {user}), or leave access.group empty.",
        ) from error


def closed_to_group(folder: Path, access: Access) -> str | None:
    """A sentence when the store's folder keeps the group of operators out; None when it lets them in.

    Readers of a store share its -shm file, which whoever comes first makes: so they must write there.
    """
    if access.gid is None:
        return None
    found = folder.stat()
    if found.st_gid == access.gid and found.st_mode & 0o2070 == 0o2070:
        return None
    group = _group_name(access.gid)
    return (
        f"The store's folder {folder} keeps the group {group!r} of access.group out: its members can mark, "
        f"but not read runs. Open it: chgrp {group} {folder} && chmod 2770 {folder}"
    )


def _group_name(gid: int) -> str:
    import grp

    return grp.getgrgid(gid).gr_name


def _user_name() -> str:
    import pwd

    try:
        return pwd.getpwuid(os.getuid()).pw_name
    except KeyError:
        return f"uid {os.getuid()}"


@contextmanager
def _in_words(what: str, path: Path) -> Iterator[None]:
    """Border to the system: what goes wrong with a runtime file or folder is said in words."""
    try:
        yield
    except OSError as error:
        raise DaemonError(
            f"The runtime {what} {path} cannot be made: {error.strerror}.",
            "Check its folder's owner and space, or name a folder of your own in REVMARK_RUNTIME.",
        ) from error


class Runtime:
    """The runtime file and socket of one daemon. The store's lock must be held: stale ones are replaced."""

    def __init__(self, folder: Path, store: Path, access: Access) -> None:
        self._access = access
        self._folder = folder
        stem = hashlib.sha256(os.fsencode(store)).hexdigest()[:12]
        self.file = folder / f"{stem}.json"
        self.socket_path = folder / f"{stem}.sock"
        self.token = secrets.token_urlsafe(32)
        self.instance = secrets.token_hex(8)

    def make_folder(self) -> None:
        """Make the folder, or take the one that is there. Raises DaemonError when it is somebody else's."""
        with _in_words("folder", self._folder):
            self._folder.mkdir(parents=True, exist_ok=True)
            owner = self._folder.stat().st_uid
        if owner != _uid():
            raise DaemonError(
                f"The runtime folder {self._folder} belongs to another user.",
                "Run the daemon as that user, or name a folder of your own in REVMARK_RUNTIME.",
            )
        give(self._folder, self._access.folder_mode, self._access.gid)

    def unix_socket(self) -> socket.socket | None:
        """A listening Unix socket; None where the system has none or the path is too long for one."""
        if not hasattr(socket, "AF_UNIX") or len(os.fsencode(self.socket_path)) > LONGEST_SOCKET_PATH:
            return None
        link = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
        before = os.umask(0o177)
        try:
            with _in_words("socket", self.socket_path):
                self.socket_path.unlink(missing_ok=True)
                link.bind(os.fspath(self.socket_path))
        finally:
            os.umask(before)
        give(self.socket_path, self._access.socket_mode, self._access.gid)
        link.listen(64)
        return link

    def publish(self, content: dict[str, Any], *, has_socket: bool) -> None:
        """Write the runtime file under another name, with its mode from the first byte, then rename it."""
        told = {**content, "token": self.token, "instance": self.instance, "pid": os.getpid()}
        told["socket"] = os.fspath(self.socket_path) if has_socket else None
        draft = self.file.with_suffix(f".{secrets.token_hex(4)}.new")
        with _in_words("file", self.file):
            handle = os.open(draft, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
            with os.fdopen(handle, "w") as out:
                json.dump(told, out)
            give(draft, self._access.file_mode, self._access.gid)
            draft.replace(self.file)

    def withdraw(self) -> None:
        for path in (self.file, self.socket_path):
            with suppress(OSError):
                path.unlink()


def _uid() -> int:
    """This user's number; 0 where the system has none, as ``stat`` says there."""
    return os.getuid() if hasattr(os, "getuid") else 0
