"""What goes wrong below the driver, told by code, in words an operator can act on.

The table is by code, never by message: messages are translated and change. Codes and names are those of
``nidaqmx.error_codes``; a test compares them. The library's own text goes to the log.
"""

from __future__ import annotations

import logging
import struct
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from config.errors import DriverError, DriverTrouble

OVERRUN = (-200279, -200222)
"""The PC did not fetch the samples in time."""
DEVICE_OVERRUN = (-200361, -200010, -200019)
"""The device could not hand them over in time."""
USB = (-50405, -50401, -50808)
NETWORK = (-201252, -201253, -201390)
ABSENT = (-201003, -200220, -200045, -200175, -89130)
BUSY = (-50103,)
BUSY_ELSEWHERE = (-201273, -201420)
LATE = (-200284, -200474, -50400)
CONFIG = (-200077, -200170, -200452, -200478, -201425)

NOT_YET = -200284
"""A read came back with fewer samples than asked for."""
WITHOUT_SYNC = -201425
INSTALL = "python -m pip install 'revmark[ni]'"


@dataclass(frozen=True, slots=True)
class Where:
    """What a sentence may name."""

    devices: str
    """``Dev1`` or ``Dev1 and Dev2``."""
    server: str | None = None
    at: str = ""
    """Time of day now."""
    silent_s: float = 0.0
    """Since samples were last fetched."""

    @property
    def link(self) -> str:
        return self.devices if self.server is None else f"{self.devices} at {self.server}"


@dataclass(frozen=True, slots=True)
class _Sentence:
    kind: DriverTrouble
    cause: str
    remedy: str


_AGAIN = "It is started again by itself; a run in progress is closed as interrupted."
_BACK = "It is looked for by itself."
_SENTENCES: tuple[tuple[tuple[int, ...], _Sentence], ...] = (
    (
        OVERRUN,
        _Sentence(
            "lost_data",
            "Samples were lost at {at}: the PC did not collect data of {devices} for {silent_s:.1f} s",
            _AGAIN,
        ),
    ),
    (
        DEVICE_OVERRUN,
        _Sentence(
            "lost_data",
            "Samples were lost at {at}: {devices} could not hand them to the PC fast enough",
            _AGAIN,
        ),
    ),
    (
        USB,
        _Sentence(
            "gone",
            "The USB link to {link} failed",
            f"Try a powered hub or another port, and turn off USB power saving. {_BACK}",
        ),
    ),
    (
        NETWORK,
        _Sentence("gone", "The network link to {link} failed", f"Check its cable and power. {_BACK}"),
    ),
    (ABSENT, _Sentence("gone", "{link} was removed or has no power", f"Plug it in again. {_BACK}")),
    (
        BUSY,
        _Sentence(
            "busy",
            "{link} is in use by another program, or by one that crashed",
            "End that program; it is tried again by itself. If none is left, restart the device server if "
            "there is one, or reset the device with its maker's tool; that ends all measurements on it.",
        ),
    ),
    (
        BUSY_ELSEWHERE,
        _Sentence("busy", "{link} is reserved by another computer", "Release it there; it is tried again."),
    ),
    (
        LATE,
        _Sentence(
            "timeout", "{link} did not deliver in time", "Check its clock and its link; it is tried again."
        ),
    ),
    (
        CONFIG,
        _Sentence(
            "config",
            "{link} refuses what the stand file asks of it",
            "Compare inputs, range_v, terminal and coupling with the device's manual.",
        ),
    ),
)
_BY_CODE = {code: sentence for codes, sentence in _SENTENCES for code in codes}
KINDS: dict[int, DriverTrouble] = {code: sentence.kind for code, sentence in _BY_CODE.items()}
"""The kind behind each code of the table."""


@contextmanager
def border(where: Callable[[], Where], log: logging.Logger) -> Iterator[None]:
    """The library's exceptions leave as DriverError, the original kept."""
    try:
        yield
    except Exception as error:
        if not is_foreign(error):
            raise
        log.info("%s: %s", type(error).__name__, " ".join(str(error).split()))
        raise translated(error, where()) from error


def is_foreign(error: Exception) -> bool:
    """True for what the library, its channel to a server or its loading may raise."""
    if isinstance(error, OSError | ImportError):
        return True
    module = type(error).__module__
    return module.startswith(("nidaqmx", "grpc"))


def translated(error: Exception, where: Where) -> DriverError:
    """The DriverError for an exception for which ``is_foreign``."""
    code = getattr(error, "error_code", None)
    if code is not None:
        return _by_code(int(code), str(error), where)
    status = getattr(error, "rpc_code", None)
    if status is not None:
        return _by_rpc(str(getattr(status, "name", status)), str(error), where)
    if isinstance(error, ModuleNotFoundError):
        return missing_library(error)
    return _by_type(error)


def missing_library(error: ModuleNotFoundError) -> DriverError:
    """``nidaqmx`` itself, or the extra that a device server needs."""
    needs = "a device server" if error.name != "nidaqmx" else "the daqmx driver"
    return DriverError(
        f"The Python package {error.name!r}, which {needs} needs, is not installed.",
        f"Install it in revmark's environment: {INSTALL}.",
        kind="no_driver",
        retryable=False,
    )


def _by_code(code: int, text: str, where: Where) -> DriverError:
    found = _BY_CODE.get(code)
    if found is None:
        return DriverError(
            f"{where.link} reported code {code}: {_first_line(text)}.",
            "It is tried again by itself; the log holds the whole message.",
            kind="protocol",
        )
    said = found.cause.format(devices=where.devices, link=where.link, at=where.at, silent_s=where.silent_s)
    why = f": {_first_line(text)}" if found.kind == "config" else ""
    remedy = found.remedy
    if code == WITHOUT_SYNC:
        remedy = "These devices cannot share a clock: wire probes and once-per-rev to one device."
    return DriverError(
        f"{said} (code {code}{why}).", remedy, kind=found.kind, retryable=found.kind != "config"
    )


def _by_rpc(name: str, text: str, where: Where) -> DriverError:
    server = f"The device server {where.server}"
    if name in ("UNAVAILABLE", "NOT_FOUND", "CANCELLED"):
        return DriverError(
            f"{server} does not answer.",
            f"Check that it runs, and the network to it. {_BACK}",
            kind="gone",
        )
    if name == "DEADLINE_EXCEEDED":
        return DriverError(
            f"{server} did not answer in time.",
            f"Check that it runs, and the network to it. {_BACK}",
            kind="timeout",
        )
    if name == "UNIMPLEMENTED":
        return DriverError(
            f"{server} lacks a function that is needed.",
            "Bring the device server up to date.",
            kind="no_driver",
            retryable=False,
        )
    return DriverError(
        f"{server} failed with {name}: {_first_line(text)}.",
        "It is tried again by itself; the log holds the whole message.",
        kind="protocol",
    )


def _by_type(error: Exception) -> DriverError:
    """The driver is not there, or not one that this Python can load."""
    bits = struct.calcsize("P") * 8
    server = 'give source.options.server = "host:port" when the device hangs on another PC'
    remedy = f"Install the driver from the device's maker, or {server}."
    name = type(error).__name__
    if name == "DaqNotFoundError":
        cause = f"The DAQmx driver is not installed on this PC (searched by a Python of {bits} bits)."
    elif name == "DaqNotSupportedError":
        cause = f"There is no DAQmx driver for this system ({sys.platform})."
        remedy = f"Use a PC with a system that has one, or {server}."
    elif name == "DaqFunctionNotSupportedError":
        cause = "The DAQmx driver on this PC is too old: it lacks a function that is needed."
        remedy = "Bring the driver up to date."
    elif isinstance(error, OSError):
        cause = f"The DAQmx driver cannot be loaded by a Python of {bits} bits: {error}."
        remedy = f"Install a driver and a Python of the same number of bits, or {server}."
    else:
        cause = f"The DAQmx driver failed: {name}: {_first_line(str(error))}."
    return DriverError(cause, remedy, kind="no_driver", retryable=False)


def _first_line(text: str) -> str:
    lines = [line.strip() for line in text.splitlines() if line.strip()]
    return lines[0].rstrip(".") if lines else "no text"
