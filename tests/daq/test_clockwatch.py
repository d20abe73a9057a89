"""A wall clock that is set is noticed, whatever the monotonic clock does meanwhile; slewing is not."""

from __future__ import annotations

import pytest

from daq.clockwatch import ClockWatch, step_text


class TwoClocks:
    """Wall and monotonic time, set by hand."""

    def __init__(self) -> None:
        self.wall_s, self.mono_s = 1_700_000_000.0, 12.0

    def now_us(self) -> int:
        return round(self.wall_s * 1e6)

    def monotonic(self) -> float:
        return self.mono_s

    def sleep(self, seconds: float) -> None:
        raise AssertionError("nothing sleeps here")

    def wait(self, event: object, seconds: float) -> bool:
        raise AssertionError("nothing waits here")

    def passes(self, seconds: float, wall_s: float | None = None) -> None:
        self.mono_s += seconds
        self.wall_s += seconds if wall_s is None else wall_s


@pytest.mark.parametrize("step_s", [0.6, -0.6, 3600.0, -3600.0, 86400.0 * 365])
def test_a_step_is_told_once_with_its_size(step_s: float) -> None:
    clock = TwoClocks()
    watch = ClockWatch(clock)
    clock.passes(0.5)
    assert watch.look() is None
    clock.passes(0.5, 0.5 + step_s)
    assert watch.look() == pytest.approx(step_s, abs=1e-5)
    clock.passes(0.5)
    assert watch.look() is None


@pytest.mark.parametrize("step_s", [0.4, -0.4])
def test_a_small_step_is_none(step_s: float) -> None:
    clock = TwoClocks()
    watch = ClockWatch(clock)
    clock.passes(0.5, 0.5 + step_s)
    assert watch.look() is None


def test_slewing_never_adds_up_to_a_step() -> None:
    """A time service slews by at most 500 us a second (adjtime): over an hour that is 1.8 s."""
    clock = TwoClocks()
    watch = ClockWatch(clock)
    for _ in range(3600):
        clock.passes(1.0, 1.0005)
        assert watch.look() is None


def test_a_long_pause_of_the_watch_is_no_step() -> None:
    clock = TwoClocks()
    watch = ClockWatch(clock)
    clock.passes(7200.0)
    assert watch.look() is None


def test_the_event_names_the_way_and_the_size() -> None:
    assert step_text(3599.96).startswith("the wall clock was set forward by 3600.0 s;")
    assert step_text(-2.0).startswith("the wall clock was set back by 2.0 s;")
