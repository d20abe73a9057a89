"""The operator's end of the control channel: find the daemon, ask it, read its answer.

Standard library only: a mark must not wait for a dozen imports. HTTP/1.1 over the daemon's Unix socket
where there is one, else over loopback, one connection per question.
"""

from __future__ import annotations

import json
import os
import socket
from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from config.errors import DaemonError, NeedsAnswer, Refusal, RevmarkError
from config.places import runtime_folders

PROTOCOL = 1
CONNECT_S = 2.0
ANSWER_S = 40.0
STRANGER = (401, 421)
"""What a daemon answers to the token and the port of the one before it."""


@dataclass(frozen=True, slots=True)
class Address:
    """A running daemon, as its runtime file tells."""

    stand: str
    stand_file: str
    store: str
    port: int
    token: str
    unix: str | None
    show: Mapping[str, str] = field(default_factory=dict)
    """By channel, how the stand file has its amplitudes shown; empty from an older daemon."""
    time_zone: str | None = None

    def connect(self) -> socket.socket:
        """A connected socket. Raises OSError when nobody answers."""
        if self.unix and hasattr(socket, "AF_UNIX"):
            link = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
            try:
                link.settimeout(CONNECT_S)
                link.connect(self.unix)
            except OSError:
                link.close()
            else:
                return link
        return socket.create_connection(("127.0.0.1", self.port), CONNECT_S)


def _read_runtime(path: Path) -> Address | None:
    try:
        told = json.loads(path.read_text())
        return Address(
            told["stand"],
            told["stand_file"],
            told["store"],
            int(told["port"]),
            told["token"],
            told.get("socket"),
            dict(told.get("show") or {}),
            told.get("time_zone"),
        )
    except (OSError, ValueError, KeyError, TypeError):
        return None


def _answers(address: Address) -> bool:
    try:
        address.connect().close()
    except OSError:
        return False
    return True


def running() -> tuple[Address, ...]:
    """Every daemon on this PC that answers and that this user may talk to."""
    files = [f for folder in runtime_folders() if folder.is_dir() for f in sorted(folder.glob("*.json"))]
    found = [a for f in files if (a := _read_runtime(f)) is not None]
    return tuple(a for a in found if _answers(a))


def find(stand_file: str | None) -> Address:
    """The daemon of ``stand_file``, or the only one on this PC.

    Raises DaemonError when none runs, Refusal when several do and none is named.
    """
    known = running()
    if stand_file:
        wanted = os.path.realpath(stand_file)
        known = tuple(a for a in known if a.stand_file == wanted)
    if not known:
        _check_there(stand_file)
        what = f"runs for the stand file {stand_file}" if stand_file else "is running on this PC"
        raise _none_found(f"No daemon {what}", f"revmark serve --stand {stand_file or 'FILE'}")
    if len(known) > 1:
        names = ", ".join(f"{a.stand} ({a.stand_file})" for a in known)
        raise Refusal(f"Several daemons run: {names}.", "Name one with --stand FILE.")
    return known[0]


def _check_there(stand_file: str | None) -> None:
    """A name typed wrong is said to be that, and not a daemon that does not run."""
    with suppress(PermissionError):
        if stand_file and not Path(stand_file).exists():
            raise DaemonError(
                f"There is no stand file {stand_file}.", "Check its name (--stand, REVMARK_STAND)."
            )


def _none_found(what: str, start: str) -> DaemonError:
    """There may be one all the same, behind a folder that is closed to this user."""
    there = (f for f in runtime_folders() if os.path.isdir(f))  # noqa: PTH112 - Path.is_dir may raise
    closed = next((f for f in there if not os.access(f, os.R_OK | os.X_OK)), None)
    if closed is None:
        return DaemonError(f"{what}.", f"Start it with: {start}")
    return DaemonError(f"{what} that you may talk to: {closed} is closed to you.", _way_in(closed))


def _way_in(folder: Path) -> str:
    with suppress(ImportError, OSError, KeyError):
        import grp

        found = folder.stat()
        if found.st_mode & 0o050 == 0o050:
            group = grp.getgrgid(found.st_gid).gr_name
            return f"Have yourself made a member of the group {group!r}, and log in anew."
    return "Its owner can name a group of operators in the stand file (access.group)."


class Client:
    """Asks one daemon. Every method raises the daemon's own error as one of ours."""

    def __init__(self, address: Address) -> None:
        self.address = address

    def get(self, path: str, wait_s: float = 0.0) -> Any:
        return self._ask("GET", path, None, ANSWER_S + wait_s)

    def post(self, path: str, body: dict[str, Any], wait_s: float = 0.0) -> Any:
        return self._ask("POST", path, body, ANSWER_S + wait_s)

    def _ask(self, verb: str, path: str, body: dict[str, Any] | None, limit_s: float) -> Any:
        data = b"" if body is None else json.dumps(body).encode()
        head = (
            f"{verb} {path} HTTP/1.1\r\nHost: 127.0.0.1:{self.address.port}\r\n"
            f"Authorization: Bearer {self.address.token}\r\nConnection: close\r\n"
        )
        if body is not None:
            head += f"Content-Type: application/json\r\nContent-Length: {len(data)}\r\n"
        try:
            status, answer = _exchange(self.address, head.encode() + b"\r\n" + data, limit_s)
        except OSError as error:
            raise DaemonError(
                f"The daemon of {self.address.stand} did not answer ({error}).",
                "See whether it runs (revmark status), and whether this was done, before you repeat it.",
            ) from error
        return _unpack(status, answer, self.address)


def _exchange(address: Address, request: bytes, limit_s: float) -> tuple[int, bytes]:
    with address.connect() as link:
        link.settimeout(limit_s)
        link.sendall(request)
        received = bytearray()
        while piece := link.recv(65536):
            received += piece
    head, _, body = bytes(received).partition(b"\r\n\r\n")
    try:
        status = int(head.split(b" ", 2)[1])
    except (IndexError, ValueError) as error:
        raise OSError("the answer broke off") from error
    if b"transfer-encoding: chunked" in head.lower():
        body = _unchunk(body)
    return status, body


def _unchunk(body: bytes) -> bytes:
    whole = bytearray()
    while body:
        size, _, body = body.partition(b"\r\n")
        length = int(size or b"0", 16)
        whole += body[:length]
        body = body[length + 2 :]
    return bytes(whole)


def _unpack(status: int, body: bytes, address: Address) -> Any:
    try:
        told = json.loads(body)
    except ValueError as error:
        raise DaemonError(
            f"The daemon of {address.stand} answered {status} without JSON.", "Restart it: revmark serve."
        ) from error
    if status in STRANGER:
        raise DaemonError(f"The daemon of {address.stand} was started anew meanwhile.", "Ask again.")
    low, high = told.get("protocol", [0, 0])
    if not low <= PROTOCOL <= high:
        raise DaemonError(
            f"The daemon of {address.stand} is version {told.get('version', '?')} and speaks protocol "
            f"{low} to {high}, this command {PROTOCOL}.",
            "Restart the daemon with the revmark installed now.",
        )
    if status >= 400:
        raise _error_of(told)
    return told["answer"]


def _error_of(told: dict[str, Any]) -> RevmarkError:
    error = told.get("error") or {}
    cause, remedy = str(error.get("cause", "The daemon refused.")), str(error.get("remedy", ""))
    options = tuple(str(o) for o in error.get("options") or ())
    return NeedsAnswer(cause, remedy, options=options) if options else Refusal(cause, remedy)


def new_key() -> str:
    """A key for one act: sent again with a retry, so that a retry is never a second act."""
    return os.urandom(12).hex()
