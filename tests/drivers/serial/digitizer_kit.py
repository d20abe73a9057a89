"""A digitizer as somebody else would write it, from the page of the frame format alone: it shares no line
with the decoder, its COBS included. And wires to send over: pseudo-terminals and sockets, with troubles.
"""

from __future__ import annotations

import contextlib
import os
import random
import socket
import struct
import threading
import time
import zlib
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan

# --- frames, as the page says ----------------------------------------------------------------------------


def stuffed(data: bytes) -> bytes:
    """COBS, with its delimiter: each code byte says how far the next zero is."""
    out = bytearray()
    for part in data.split(b"\0"):
        whole = len(part) // 254 * 254
        for at in range(0, whole, 254):
            out += b"\xff" + part[at : at + 254]
        out += bytes([len(part) - whole + 1]) + part[whole:]
    return bytes(out) + b"\0"


def sealed(body: bytes) -> bytes:
    return stuffed(body + struct.pack("<I", zlib.crc32(body)))


def description_body(
    sequence: int, rate_hz: float, width: int, bits: int, edge: int, scales: list[float], device: str
) -> bytes:
    head = struct.pack("<BBHBBBBd", 1, 1, sequence % 65536, len(scales), width, bits, edge, rate_hz)
    name = device.encode("ascii")
    return head + struct.pack(f"<{len(scales)}f", *scales) + bytes([len(name)]) + name


def little(counts: NDArray[Any], width: int) -> bytes:
    """Integers of 2, 3 or 4 bytes, lowest byte first."""
    whole = np.ascontiguousarray(counts, "<i4").view(np.uint8).reshape(-1, 4)
    return whole[:, :width].tobytes()


def samples_body(
    sequence: int,
    first: int,
    counts: NDArray[Any],
    width: int,
    scale: float,
    edges: list[float] | None = None,
) -> bytes:
    """``edges``: positions on the counter, in samples."""
    scans, channels = counts.shape
    stamps = [round((edge - first) * 65536) for edge in edges or []]
    head = struct.pack(
        "<BBHBBHQfHH", 1, 2, sequence % 65536, channels, width, scans, first, scale, len(stamps), 0
    )
    return head + little(counts, width) + struct.pack(f"<{len(stamps)}i", *stamps)


def checked_line(text: str, digits: int = 8) -> bytes:
    data = text.encode("ascii")
    xor = 0
    for byte in data:
        xor ^= byte
    check = f"{zlib.crc32(data):08X}" if digits == 8 else f"{xor:02X}"
    return data + b"*" + check.encode() + b"\r\n"


# --- what it measures ------------------------------------------------------------------------------------

UM_PK = (20.0, 12.5)
LAG_DEG = (63.0, 211.0)
GAP_V = (-9.5, -10.4)
VOLTS_PER_UM = 0.007874


@dataclass
class Rotor:
    """Constant speed; x(t) = A cos(theta - lag), theta = 0 where the pulse falls through half its depth."""

    rate_hz: float = 12_800.0
    speed_hz: float = 24.7
    begin_turn: float = 0.35
    noise_v: float = 0.0
    turning: bool = True
    """False: it stands still half a turn from the mark, probes at their gaps."""

    def turns(self, at: NDArray[np.float64]) -> NDArray[np.float64]:
        return at * self.speed_hz / self.rate_hz + self.begin_turn

    def edges(self, begin: float, end: float) -> list[float]:
        """Positions with begin < position <= end, in samples."""
        if not self.turning:
            return []
        first = int(np.floor(self.turns(np.array([begin]))[0])) + 1
        last = int(np.floor(self.turns(np.array([end]))[0]))
        per = self.rate_hz / self.speed_hz
        return [(k - self.begin_turn) * per for k in range(first, last + 1)]

    def volts(self, first: int, scans: int) -> NDArray[np.float64]:
        """Pulse and two probes."""
        at = np.arange(first, first + scans, dtype=np.float64)
        turns = self.turns(at) if self.turning else np.full(scans, 0.5)
        per = self.rate_hz / self.speed_hz
        ramp = 3.0  # samples from high to low
        since = (turns - np.round(turns)) * per  # samples from the nearest edge
        width = 0.05 * per
        down = np.clip(since / ramp + 0.5, 0, 1) - np.clip((since - width) / ramp + 0.5, 0, 1)
        out = [-8.0 - 7.0 * down]
        for um, lag, gap in zip(UM_PK, LAG_DEG, GAP_V, strict=True):
            angle = 2 * np.pi * turns - np.radians(lag)
            moved = um * np.cos(angle) + 0.2 * um * np.cos(2 * angle + 1.0)
            out.append(gap + VOLTS_PER_UM * moved * self.turning)
        volts = np.stack(out, axis=1)
        if self.noise_v:
            volts += np.random.default_rng(first + 1).normal(0, self.noise_v, volts.shape)
        return volts

    def truth(self, probe: int) -> complex:
        return complex(UM_PK[probe] * np.exp(1j * np.radians(LAG_DEG[probe])))


@dataclass
class Digitizer:
    """Turns a rotor into frames or lines, one after the other."""

    rotor: Rotor = field(default_factory=Rotor)
    width: int = 2
    bits: int = 16
    range_v: float = 30.0
    scans: int = 64
    stamped: bool = False
    """Probes alone, edges as stamps."""
    lines: int = 0
    """Digits of the check of lines; 0 = binary frames."""
    device: str = "bench digitizer 0042"
    sequence: int = 0
    first: int = 0
    every_s: float = 0.1
    late: int = 0
    """Stamps are sent so many scans after their own."""
    _due: float = 0.0

    @property
    def scale(self) -> float:
        return self.range_v / (1 << (self.bits - 1))

    @property
    def channels(self) -> int:
        return 2 if self.stamped else 3

    def counts(self, first: int, scans: int) -> NDArray[np.int32]:
        volts = self.rotor.volts(first, scans)[:, 1 if self.stamped else 0 :]
        full = 1 << (self.bits - 1)
        return np.clip(np.rint(volts / self.scale), -full, full - 1).astype(np.int32)

    def description(self) -> bytes:
        edge = int(self.stamped)
        if self.lines:
            name, scales = ("none", "falling")[edge], ",".join([repr(self.scale)] * self.channels)
            text = f"D,1,{self.rotor.rate_hz!r},{self.channels},{self.bits},{name},{self.device},{scales}"
            return checked_line(text, self.lines)
        scales = [self.scale] * self.channels
        body = description_body(
            self.sequence, self.rotor.rate_hz, self.width, self.bits, edge, scales, self.device
        )
        self.sequence += 1
        return sealed(body)

    def frame(self) -> bytes:
        """The next frame of samples, or as many lines."""
        counts = self.counts(self.first, self.scans)
        begin, self.first = self.first, self.first + self.scans
        if self.lines:
            return b"".join(self._lines(begin, counts))
        then = begin - 1 - self.late
        edges = self.rotor.edges(then, then + self.scans) if self.stamped else []
        body = samples_body(self.sequence, begin, counts, self.width, self.scale, edges)
        self.sequence += 1
        return sealed(body)

    def _lines(self, begin: int, counts: NDArray[np.int32]) -> Iterator[bytes]:
        for at, scan in enumerate(counts.tolist(), begin):
            if self.stamped:
                for edge in self.rotor.edges(at - 1, at):
                    yield checked_line(f"E,{edge:.6f}", self.lines)
            yield checked_line(f"S,{at}," + ",".join(map(str, scan)), self.lines)

    def frames(self, n: int) -> list[bytes]:
        """``n`` frames of samples, with descriptions among them as the page asks."""
        out = []
        for _ in range(n):
            if self.first >= self._due:
                out.append(self.description())
                self._due = self.first + self.every_s * self.rotor.rate_hz
            out.append(self.frame())
        return out

    def restart(self) -> None:
        """Power off and on: it counts from zero again."""
        self.sequence, self.first, self._due = 0, 0, 0.0


def plan(*, stamped: bool = False) -> ChannelPlan:
    pulse = PulsePlan("once-per-rev", "stamps" if stamped else "1")
    inputs = ("1", "2") if stamped else ("2", "3")
    return ChannelPlan(pulse, tuple(ProbePlan(f"probe {i}", text) for i, text in enumerate(inputs, 1)))


# --- wires -----------------------------------------------------------------------------------------------


class PtyWire:
    """A pseudo-terminal behind a name that stays, as /dev/serial/by-id does."""

    def __init__(self, name: Path) -> None:
        self.name = name
        self._master: int | None = None
        self._slave: int | None = None
        self.plug()

    @property
    def url(self) -> str:
        return str(self.name)

    def plug(self) -> None:
        import tty

        self._master, self._slave = os.openpty()
        tty.setraw(self._master)
        tty.setraw(self._slave)
        os.set_blocking(self._master, False)
        fresh = self.name.with_name(self.name.name + ".new")
        fresh.symlink_to(os.ttyname(self._slave))
        fresh.replace(self.name)

    def unplug(self) -> None:
        """The device goes, and its name with it."""
        self.name.unlink(missing_ok=True)
        for fd in (self._master, self._slave):
            if fd is not None:
                os.close(fd)
        self._master = self._slave = None

    def write(self, data: bytes) -> int:
        """As much as fits now; what nobody reads stays in the terminal and then here."""
        if self._master is None:
            return len(data)
        try:
            return os.write(self._master, data)
        except BlockingIOError:
            return 0

    def received(self) -> bytes:
        with contextlib.suppress(OSError):
            return os.read(self._master, 4096) if self._master is not None else b""
        return b""

    close = unplug


class SocketWire:
    """A serial server that takes one connection at a time."""

    def __init__(self) -> None:
        self._peer: socket.socket | None = None
        self._port = 0
        self.plug()

    @property
    def url(self) -> str:
        return f"socket://127.0.0.1:{self._port}"

    def plug(self) -> None:
        self._server = socket.create_server(("127.0.0.1", self._port))
        self._server.setblocking(False)
        self._port = self._server.getsockname()[1]

    def unplug(self) -> None:
        self._server.close()
        self._drop()

    def _drop(self) -> None:
        if self._peer is not None:
            self._peer.close()
        self._peer = None

    def write(self, data: bytes) -> int:
        with contextlib.suppress(BlockingIOError, OSError):
            newcomer, _ = self._server.accept()
            newcomer.setblocking(False)
            newcomer.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, 1 << 20)
            self._drop()
            self._peer = newcomer
        if self._peer is None:
            return len(data)
        try:
            return self._peer.send(data)
        except BlockingIOError:
            return 0
        except OSError:
            self._drop()
            return len(data)

    def received(self) -> bytes:
        with contextlib.suppress(OSError, AttributeError):
            return self._peer.recv(4096)  # type: ignore[union-attr]
        return b""

    def close(self) -> None:
        with contextlib.suppress(OSError):
            self.unplug()


Wire = PtyWire | SocketWire


class Sender:
    """A thread that sends what ``make`` gives, at its rate. ``hold`` silences the wire, ``spoil`` damages."""

    def __init__(
        self, wire: Wire, digitizer: Digitizer, *, speed: float = 1.0, make: Callable[[], bytes] | None = None
    ) -> None:
        self.wire = wire
        self.digitizer = digitizer
        self.speed = speed
        self.hold = threading.Event()
        self.spoil: Callable[[bytes], bytes] = lambda data: data
        self.failed: BaseException | None = None
        self.drops = False
        """What does not fit into the wire is lost, as in a receiver that nobody empties."""
        self._make = make or (lambda: b"".join(digitizer.frames(1)))
        self._lock = threading.Lock()
        self._stop = threading.Event()
        self._plugged = True
        self._thread = threading.Thread(target=self._run, name="digitizer")
        self._thread.start()

    def _run(self) -> None:
        try:
            self._send()
        except BaseException as error:  # shown by close()
            self.failed = error

    def _send(self) -> None:
        begin_s, begun, left = time.monotonic(), self.digitizer.first, b""
        while not self._stop.is_set():
            with self._lock:
                now_s = time.monotonic()
                per_s = self.digitizer.rotor.rate_hz * self.speed
                if not self._plugged or self.hold.is_set():
                    begin_s, begun, left = now_s, self.digitizer.first, b""
                elif left:
                    sent = self.wire.write(left)
                    left = b"" if self.drops else left[sent:]
                elif now_s >= begin_s + (self.digitizer.first - begun) / per_s:
                    left = self.spoil(self._make())
                    continue
            self._stop.wait(0.0005)

    def swallow(self, frames: int) -> int:
        """The next ``frames`` frames never leave; returns how many."""
        left = [frames]

        def spoil(data: bytes) -> bytes:
            if not left[0]:
                return data
            left[0] -= 1
            return b""

        self.spoil = spoil
        return frames

    def unplug(self) -> None:
        with self._lock:
            self._plugged = False
            self.wire.unplug()

    def replug(self, *, restarted: bool = True) -> None:
        with self._lock:
            if restarted:
                self.digitizer.restart()
            self.wire.plug()
            self._plugged = True

    def close(self) -> None:
        self._stop.set()
        self._thread.join(5)
        self.wire.close()
        if self.failed is not None:
            raise self.failed

    def __enter__(self) -> Sender:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()


# --- damage ----------------------------------------------------------------------------------------------


class Damage:
    """Flips bits, drops, doubles and inserts bytes."""

    def __init__(self, seed: int) -> None:
        self.random = random.Random(seed)

    def frame(self, data: bytes) -> bytes:
        """One frame, spoilt inside: its delimiter stays."""
        body, end = data[:-1], data[-1:]
        kind = self.random.randrange(3)
        at = self.random.randrange(len(body))
        if kind == 0:
            flipped = body[at] ^ (1 << self.random.randrange(8))
            return body[:at] + bytes([flipped]) + body[at + 1 :] + end
        if kind == 1:
            return body[:at] + body[at + self.random.randint(1, 39) :] + end
        return (
            body[:at]
            + self.random.randbytes(self.random.randint(1, 9)).replace(b"\0", b"\1")
            + body[at:]
            + end
        )
