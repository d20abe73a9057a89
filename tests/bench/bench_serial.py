"""How much of a core the serial driver takes: run as a script, prints, asserts nothing.

    python tests/bench/bench_serial.py [seconds] [million samples a second]

A digitizer in a process of its own sends binary frames of int16 in real time, over a TCP connection and over
a pseudo-terminal, 16 channels with 200 scans in a frame, and 3 channels with 64; the driver reads them.
Beside it, in the same process: the bare decoder on prepared bytes, and as reference the same bytes received
from the same sender and thrown away.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import socket
import struct
import sys
import tempfile
import time
import tty
import zlib
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from cobs import cobs

from daq.clock import SystemClock
from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.records import Tally
from daq.drivers.frames.stream import Stream
from daq.drivers.registry import make_driver

SHAPES = ((16, 200), (3, 64))
SCALE = 30 / 32768


def sealed(body: bytes) -> bytes:
    return cobs.encode(body + struct.pack("<I", zlib.crc32(body))) + b"\0"


class Maker:
    """Frames of noise about -10 V, with what the frame page asks."""

    def __init__(self, channels: int, scans: int, rate_hz: float) -> None:
        self.channels, self.scans, self.rate_hz = channels, scans, rate_hz
        self.sequence = self.first = 0
        noise = np.random.default_rng(1).normal(-10_922, 300, (64, scans, channels))
        self._data = [part.astype("<i2").tobytes() for part in noise]

    def description(self) -> bytes:
        head = struct.pack("<BBHBBBBd", 1, 1, self.sequence % 65536, self.channels, 2, 16, 0, self.rate_hz)
        self.sequence += 1
        return sealed(head + struct.pack(f"<{self.channels}f", *[SCALE] * self.channels) + b"\5bench")

    def frame(self) -> bytes:
        head = struct.pack("<BBHBBH", 1, 2, self.sequence % 65536, self.channels, 2, self.scans)
        head += struct.pack("<QfHH", self.first, SCALE, 0, 0)
        data = self._data[self.sequence % 64]
        self.sequence, self.first = self.sequence + 1, self.first + self.scans
        return sealed(head + data)


def send(fd: int, maker: Maker, seconds: float) -> None:
    """In real time; a wire that is full delays, and is caught up with."""
    begin_s, told = time.monotonic(), -1.0
    while maker.first < seconds * maker.rate_hz:
        parts = []
        if maker.first / maker.rate_hz > told + 0.4:
            told = maker.first / maker.rate_hz
            parts.append(maker.description())
        due = min((time.monotonic() - begin_s) * maker.rate_hz, seconds * maker.rate_hz)
        while maker.first <= due and len(parts) < 16:
            parts.append(maker.frame())
        left = memoryview(b"".join(parts))
        while left:
            left = left[os.write(fd, left) :]
        time.sleep(max(0.0, begin_s + maker.first / maker.rate_hz - time.monotonic()))


def serve(port: Any, maker: Maker, seconds: float) -> None:
    """One connection, then another one."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        port.put(server.getsockname()[1])
        for _ in range(2):
            peer, _ = server.accept()
            with peer:
                maker.first = maker.sequence = 0
                with contextlib.suppress(OSError):  # the reader has seen enough
                    send(peer.fileno(), maker, seconds)


def terminal(ready: Any, name: str, maker: Maker, seconds: float) -> None:
    master, slave = os.openpty()
    tty.setraw(master)
    tty.setraw(slave)
    Path(name).symlink_to(os.ttyname(slave))
    ready.put(0)
    time.sleep(0.5)
    send(master, maker, seconds)
    time.sleep(1.0)


def drive(url: str, channels: int, scans: int, seconds: float) -> None:
    """Read all of it; how much came, what of a core it took, and how late the last sample was."""
    probes = tuple(ProbePlan(f"probe {i}", str(i)) for i in range(2, channels + 1))
    wired = ChannelPlan(PulsePlan("once-per-rev", "1"), probes)
    driver = make_driver("serial", {"port": url, "channels": channels}, wired, clock=SystemClock())
    info = driver.open()
    begin_s, cpu_s, got, worst, reads = time.monotonic(), time.thread_time(), 0, 0.0, 0
    while time.monotonic() - begin_s < seconds - 1.5:
        block = driver.read(0.2)
        reads += 1
        if block is not None:
            got += len(block.counts)
            worst = max(worst, time.monotonic() - begin_s - got / info.rate_hz)
    took_s = time.monotonic() - begin_s
    cpu = (time.thread_time() - cpu_s) / took_s
    tally = driver.tally  # type: ignore[attr-defined]
    driver.close()
    print(
        f"  driver    {got * channels / took_s / 1e6:.2f} of {info.rate_hz * channels / 1e6:.2f} Msamples/s, "
        f"{100 * cpu:5.1f} % of a core, {reads / took_s:.0f} reads/s, latest {1e3 * worst:.0f} ms, "
        f"lost {tally.lost_samples}, damaged {tally.damaged}"
    )


def throw_away(port: int, seconds: float) -> None:
    """The reference: the same bytes, received and dropped."""
    with socket.create_connection(("127.0.0.1", port)) as peer:
        begin_s, cpu_s, got = time.monotonic(), time.thread_time(), 0
        while time.monotonic() - begin_s < seconds - 1.5:
            got += len(peer.recv(65536))
        took_s = time.monotonic() - begin_s
        cpu = (time.thread_time() - cpu_s) / took_s
    print(f"  reference {got / took_s / 1e6:6.2f} MB/s received and dropped, {100 * cpu:5.1f} % of a core")


def bare(channels: int, scans: int) -> None:
    maker = Maker(channels, scans, 1e5)
    data = b"\0" + maker.description() + b"".join(maker.frame() for _ in range(2000))
    tally = Tally()
    stream = Stream(BinaryCodec(tally), tally)
    begin_s = time.perf_counter()
    for at in range(0, len(data), 65536):
        stream.feed(data[at : at + 65536])
    took_s = time.perf_counter() - begin_s
    print(
        f"  decoder   {2000 * scans * channels / took_s / 1e6:.1f} Msamples/s, "
        f"{len(data) / took_s / 1e6:.0f} MB/s, {1e6 * took_s / tally.frames:.1f} us a frame"
    )


def main() -> None:
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 10.0
    total = 1e6 * (float(sys.argv[2]) if len(sys.argv) > 2 else 5.0)
    context = multiprocessing.get_context("spawn")
    for channels, scans in SHAPES:
        print(f"{channels} channels, {scans} scans in a frame, {total / channels:.0f} scans/s")
        bare(channels, scans)
        ready = context.Queue()
        maker = Maker(channels, scans, total / channels)
        sender = context.Process(target=serve, args=(ready, maker, seconds))
        sender.start()
        port = ready.get(timeout=20)
        print(" socket")
        drive(f"socket://127.0.0.1:{port}", channels, scans, seconds)
        time.sleep(2.0)
        throw_away(port, seconds)
        sender.join(30)
        with tempfile.TemporaryDirectory() as folder:
            name = f"{folder}/port"
            sender = context.Process(target=terminal, args=(ready, name, maker, seconds))
            sender.start()
            ready.get(timeout=20)
            print(" pseudo-terminal")
            drive(name, channels, scans, seconds)
            sender.kill()
            sender.join(30)


if __name__ == "__main__":
    main()
