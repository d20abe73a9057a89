"""A clock that moves only when somebody waits, and a plan of two probes."""

from __future__ import annotations

import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan

sys.path.insert(0, str(Path(__file__).parent))  # for served
sys.path.insert(0, str(Path(__file__).parent / "ni"))  # for ni_kit
sys.path.insert(0, str(Path(__file__).parent / "serial"))  # for digitizer_kit

from ni_kit import DeviceServer, world


class FakeClock:
    def __init__(self) -> None:
        self.now_s = 100.0

    def monotonic(self) -> float:
        return self.now_s

    def now_us(self) -> int:
        return round(self.now_s * 1e6)

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds

    def wait(self, event: threading.Event, seconds: float) -> bool:
        if not event.is_set():
            self.now_s += seconds
        return event.is_set()


@pytest.fixture
def clock() -> FakeClock:
    return FakeClock()


@pytest.fixture
def plan() -> ChannelPlan:
    return ChannelPlan(PulsePlan("tacho", "1"), (ProbePlan("probe 1", "2"), ProbePlan("probe 2", "3")))


@pytest.fixture
def recordings() -> Path:
    return Path(__file__).parent.parent / "recordings"


@pytest.fixture(scope="session")
def device_server() -> Iterator[DeviceServer]:
    """A device server of the daqmx driver, one for all that do not break it."""
    server = DeviceServer(world())
    yield server
    server.close()
