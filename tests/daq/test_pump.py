"""The driver thread with a source that comes and goes, on a clock that moves only when somebody waits."""

from __future__ import annotations

import threading
from dataclasses import replace

import numpy as np
import pytest

from config.errors import DriverError
from daq.board import Board
from daq.drivers.base import ChannelPlan, Chunk, Driver, DriverOptions, ProbePlan, PulsePlan, SourceInfo
from daq.pump import Pump

GONE = DriverError("Dev1 was removed.", "Plug it in again.", kind="gone")
BUSY = DriverError("Dev1 is in use.", "Wait.", kind="busy")
INFO = SourceInfo(1000.0, "int16", (1e-3, 1e-3), (-32768, 32767), "live", "made up")


class Clock:
    """Stops the pump when its time is up."""

    def __init__(self) -> None:
        self.now_s, self.end_s = 100.0, 1e9

    def monotonic(self) -> float:
        return self.now_s

    def now_us(self) -> int:
        return round(self.now_s * 1e6)

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds

    def wait(self, event: threading.Event, seconds: float) -> bool:
        self.now_s += seconds
        if self.now_s >= self.end_s:
            event.set()
        return event.is_set()


class Scripted(Driver[DriverOptions]):
    """Each open takes the next item: an error is raised; an info is opened and delivers for a second."""

    name = "scripted"
    Options = DriverOptions

    def _prepare(self) -> None:
        self.script: list[DriverError | SourceInfo] = []
        self.opens_s: list[float] = []

    def _open(self) -> SourceInfo:
        self.opens_s.append(self.clock.monotonic())
        item = self.script.pop(0) if len(self.script) > 1 else self.script[0]
        if isinstance(item, DriverError):
            raise item
        self.left = 10
        return item

    def _read(self, timeout_s: float) -> Chunk | None:
        self.left -= 1
        if self.left < 0:
            raise GONE
        self._pause(0.1)
        return Chunk(np.zeros((100, 2), "int16"))

    def _close(self) -> None:
        pass


def run(script: list[DriverError | SourceInfo], seconds: float) -> tuple[Pump, Scripted]:
    clock = Clock()
    clock.end_s = clock.now_s + seconds
    plan = ChannelPlan(PulsePlan("tacho", "1"), (ProbePlan("probe 1", "2"),))
    driver = Scripted(DriverOptions(), plan, clock=clock)
    driver.script = script
    pump = Pump(driver, Board(clock), clock)
    pump.run(threading.Event(), lambda: None)
    return pump, driver


def test_a_source_that_is_away_is_looked_for_twice_a_second_and_said_once() -> None:
    pump, driver = run([INFO, *([GONE] * 40), INFO], seconds=30.0)
    waits_s = np.diff(driver.opens_s[1:42])
    assert len(waits_s) == 40
    assert waits_s.max() <= 0.5 + 1e-9
    said = [(n.kind, n.text) for n in pump.notices][:2]
    assert said[0] == ("lost", "Dev1 was removed.")
    assert said[1][0] == "back"
    assert said[1][1].endswith("back after 20 s")


def test_a_source_in_use_is_tried_less_and_less_often() -> None:
    _, driver = run([BUSY], seconds=40.0)
    waits_s = np.diff(driver.opens_s)
    assert waits_s[0] == pytest.approx(0.5)
    assert waits_s.max() == pytest.approx(5.0, abs=0.25)


def test_another_trouble_is_said_too() -> None:
    pump, _ = run([INFO, GONE, BUSY, BUSY, GONE, INFO], seconds=8.0)
    assert [n.text for n in pump.notices if n.kind == "lost"][:3] == [GONE.cause, BUSY.cause, GONE.cause]


@pytest.mark.parametrize("change", [{"rate_hz": 1001.0}, {"skew_s": (0.0, 1e-5)}])
def test_a_source_that_came_back_as_another_ends_the_pump(change: dict[str, float]) -> None:
    pump, _ = run([INFO, replace(INFO, **change)], seconds=8.0)
    assert pump.fatal is not None
    assert pump.fatal.kind == "config"
