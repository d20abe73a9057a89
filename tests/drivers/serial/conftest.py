"""Digitizers on pseudo-terminals and sockets, and a driver that reads them."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).parent))  # for digitizer_kit

from digitizer_kit import Digitizer, PtyWire, Sender, SocketWire, plan

from daq.clock import SystemClock
from daq.drivers.registry import AnyDriver, make_driver


@pytest.fixture
def send(tmp_path: Path) -> Iterator[Callable[..., Sender]]:
    """``send(digitizer, "socket", speed=8)`` starts a digitizer on a wire of its own."""
    started: list[Sender] = []

    def start(digitizer: Digitizer | None = None, wire: str = "pty", **more: Any) -> Sender:
        made = SocketWire() if wire == "socket" else PtyWire(tmp_path / f"port{len(started)}")
        started.append(Sender(made, digitizer or Digitizer(), **more))
        return started[-1]

    yield start
    for sender in started:
        sender.close()


@pytest.fixture
def driver(tmp_path: Path) -> Iterator[Callable[..., AnyDriver]]:
    """``driver(sender, rate_hz=...)``: a closed driver that fits the sender's digitizer."""
    made: list[AnyDriver] = []

    def make(sender: Sender | None = None, **options: Any) -> AnyDriver:
        channels = options.pop("plan", None)
        if sender is not None:
            of = sender.digitizer
            fitting = {
                "port": sender.wire.url,
                "channels": of.channels,
                "codec": "lines" if of.lines else "binary",
            }
            options = fitting | options
            channels = channels or plan(stamped=of.stamped)
        channels = channels or plan()
        made.append(make_driver("serial", options, channels, clock=SystemClock(), folder=tmp_path))
        return made[-1]

    yield make
    for source in made:
        source.close()
