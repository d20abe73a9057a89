"""pyserial behind four methods: open, receive, send, close; what goes wrong leaves in the operator's words.

Known of pyserial 3.5 and minded here: a lost device shows as SerialException, OSError, termios.error or
TypeError; ``exclusive`` keeps out only those who ask for it too; ``socket://`` says 1 for any number of bytes
waiting and leaks its socket when the other end is gone; ``spy://`` leaves its file open.
"""

from __future__ import annotations

import contextlib
import errno
import getpass
import logging
import os
import stat
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any
from urllib.parse import quote

import serial

from config.errors import DriverError

PORT_ERRORS: tuple[type[Exception], ...] = (serial.SerialException, OSError, TypeError)
if sys.platform != "win32":
    import termios

    PORT_ERRORS = (*PORT_ERRORS, termios.error)

BY_ID = Path("/dev/serial/by-id")
MOST_BYTES = 65536
WRITE_S = 1.0
WINDOWS_BUFFER = 262144
GONE = (errno.ENOENT, errno.ENODEV, errno.ENXIO, errno.EIO)
FORBIDDEN = (errno.EACCES, errno.EPERM)
BUSY = (errno.EBUSY, errno.EAGAIN)
NO_PORT = (errno.ENOTTY, errno.EINVAL, errno.EISDIR)


class Link:
    """An open port."""

    def __init__(self, port: str, baud: int, log: logging.Logger, trace: Path | None = None) -> None:
        """Opens it. ``trace``: a file for every byte, in hex with times; only for ports of this computer.

        Raises DriverError (``gone``, ``busy``, ``config``)."""
        self.port = port
        self._is_socket = port.lower().startswith("socket://")
        self._port: Any = None
        try:
            self._port = serial.serial_for_url(_url(port, trace), baud, exclusive=True, do_not_open=True)
            if not port.lower().startswith("rfc2217://"):  # which knows no such limit
                self._port.write_timeout = WRITE_S
            self._port.open()
        except ValueError as error:
            raise DriverError(
                f"{port!r} is no serial port: {error}.",
                "Correct source.options.port: a device such as /dev/serial/by-id/... or COM3, or a URL that "
                "begins with socket://, rfc2217:// or hwgrep://.",
                kind="config",
                retryable=False,
            ) from error
        except PORT_ERRORS as error:
            self.close()
            raise cannot_open(port, error) from error
        self._tune()
        others = holders(port)
        if others:
            log.warning("%s is also open in %s, which takes bytes away", port, others)

    def _tune(self) -> None:
        """What helps where it exists: short waits in the adapter, a large buffer on Windows."""
        for tune, argument in (("set_low_latency_mode", True), ("set_buffer_size", WINDOWS_BUFFER)):
            with contextlib.suppress(AttributeError, ValueError, NotImplementedError, *PORT_ERRORS):
                getattr(self._port, tune)(argument)

    def receive(self, timeout_s: float) -> bytes:
        """What has come, after waiting at most ``timeout_s`` for the first byte. Raises DriverError."""
        try:
            self._wait_at_most(timeout_s)
            if not self._is_socket:
                return bytes(self._port.read(max(1, min(self._port.in_waiting, MOST_BYTES))))
            first = self._port.read(1)
            if not first:
                return b""
            self._wait_at_most(0.0)
            return bytes(first + self._port.read(MOST_BYTES))
        except PORT_ERRORS as error:
            raise DriverError(
                f"The digitizer on {self.port} is gone ({_plain(error)}).",
                "Check its plug and its power; it is opened again by itself.",
                kind="gone",
            ) from error

    def send(self, data: bytes) -> None:
        """Raises DriverError when it cannot be sent within a second."""
        try:
            self._port.write(data)
        except PORT_ERRORS as error:
            raise DriverError(
                f"Nothing can be sent to the digitizer on {self.port} ({_plain(error)}).",
                "Check its plug and its power.",
                kind="gone",
            ) from error

    def close(self) -> None:
        """Release the port and what pyserial leaves open."""
        if self._port is None:
            return
        left = [getattr(self._port, "_socket", None)]
        left.append(getattr(getattr(self._port, "formatter", None), "output", None))
        try:
            self._port.close()
        except PORT_ERRORS:
            logging.getLogger(__name__).debug("%s did not close cleanly", self.port, exc_info=True)
        for thing in left:
            if thing is not None and thing is not sys.stderr:
                thing.close()

    def _wait_at_most(self, timeout_s: float) -> None:
        if self._port.timeout != timeout_s:  # setting it configures the port anew
            self._port.timeout = timeout_s


def _url(port: str, trace: Path | None) -> str:
    if trace is None:
        return port
    try:
        trace.open("a").close()
    except OSError as error:
        raise DriverError(
            f"The trace {trace} cannot be written: {error.strerror}.",
            "Correct or remove source.options.trace.",
            kind="config",
            retryable=False,
        ) from error
    return f"spy://{port}?file={quote(str(trace))}"


# --- what cannot be opened -------------------------------------------------------------------------------


def cannot_open(port: str, error: BaseException) -> DriverError:
    """A failed opening in the operator's words, by error number."""
    code = _number(error)
    if code in FORBIDDEN:
        return _forbidden(port)
    if code in BUSY:
        who = holders(port) or "another program"
        return DriverError(
            f"{port} is in use by {who}.",
            "End that program, or wait until it lets go; it is tried again by itself.",
            kind="busy",
        )
    if code in NO_PORT:
        return DriverError(
            f"{port} is no serial port.", f"Correct source.options.port. {_ports_here()}", kind="config"
        )
    if code == errno.ECONNREFUSED:
        return DriverError(
            f"{port} refuses the connection.",
            "Check that the serial server is on and set to raw TCP, and that nobody else is connected: most "
            "take one connection only.",
            kind="gone",
        )
    missing, other = f"There is no serial port {port}.", f"Nothing can be opened at {port} ({_plain(error)})."
    return DriverError(
        missing if code in GONE else other,
        f"Plug the digitizer in and check source.options.port. {_ports_here()}",
        kind="gone",
    )


def _forbidden(port: str) -> DriverError:
    user = getpass.getuser()
    group = _group_of(port)
    if sys.platform == "win32" or group is None:
        remedy = "Give its user the right to open the port (a udev rule with GROUP and MODE on Linux)."
    else:
        remedy = (
            f"Run: sudo usermod -aG {group} {user}   and log in again, or start the service again if it "
            f"runs as {user}."
        )
    return DriverError(f"The user {user} has no right to open {port}.", remedy, kind="config")


def _group_of(port: str) -> str | None:
    """The group that may open the port; None where no group but root's may."""
    try:
        import grp

        there = Path(port).stat()
        name = grp.getgrgid(there.st_gid).gr_name
    except (ImportError, OSError, KeyError):
        return None
    return name if name != "root" and there.st_mode & stat.S_IRGRP else None


def _number(error: BaseException) -> int | None:
    """The system's error number behind an exception of pyserial, which often drops it."""
    seen: BaseException | None = error
    while seen is not None:
        codes = (getattr(seen, "errno", None), *seen.args[:1])  # termios.error has it in args only
        number = next((code for code in codes if isinstance(code, int)), None)
        if number is not None:
            return number
        seen = seen.__cause__ or seen.__context__
    return _windows_number(str(error))


def _windows_number(text: str) -> int | None:
    """On Windows pyserial keeps only the text: access denied there means that somebody has the port."""
    if "PermissionError(13" in text:
        return errno.EBUSY
    return errno.ENOENT if "FileNotFoundError(2" in text else None


def _plain(error: BaseException) -> str:
    text = str(error).strip().rstrip(".")
    return " ".join(text.split())[:160] or type(error).__name__


def holders(port: str) -> str:
    """Who else has the device open, as ``PID n (name), ...``; empty when nobody is seen (Linux only)."""
    if not port.startswith("/") or not Path("/proc/self/fd").exists():
        return ""
    real = Path(os.path.realpath(port))
    found = sorted({int(fd.parts[2]) for fd in _descriptors() if _points_to(fd, real)} - {os.getpid()})
    return ", ".join(f"PID {pid} ({_program(pid)})" for pid in found)


def _descriptors() -> Iterator[Path]:
    for folder in Path("/proc").glob("[0-9]*/fd"):
        with contextlib.suppress(OSError):
            yield from folder.iterdir()


def _points_to(fd: Path, real: Path) -> bool:
    try:
        return fd.readlink() == real
    except OSError:
        return False


def _program(pid: int) -> str:
    try:
        return Path(f"/proc/{pid}/comm").read_text().strip()
    except OSError:
        return "unknown"


def ports_here() -> list[tuple[str, str]]:
    """(name for the stand file, what it says of itself) of this computer's serial ports; none is opened.

    The name is the one that stays with the device where the system has one."""
    from serial.tools import list_ports

    stays = {os.path.realpath(link): str(link) for link in sorted(BY_ID.glob("*"))}
    found = sorted(list_ports.comports())
    return [(stays.get(port.device, port.device), " ".join(_said(port))) for port in found]


def _said(port: Any) -> list[str]:
    words = (port.description, port.manufacturer, port.serial_number and f"serial {port.serial_number}")
    return [str(word) for word in words if word and word != "n/a"]


def _ports_here() -> str:
    try:
        names = [device for device, _ in ports_here()]
    except Exception:
        return ""
    return f"Serial ports here: {', '.join(names)}." if names else "This computer has no serial port now."
