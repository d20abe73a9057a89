"""Notices when the wall clock is set: nothing here depends on it, but whoever reads the record must know.

Everything inside a session goes by sample counters and the monotonic clock; UTC is a label. The distance
between the two clocks is looked at again and again: a jump is a step of the wall clock. On Linux the
monotonic clock stands still while the PC sleeps, so that waking up shows as a step forward.
"""

from __future__ import annotations

from daq.clock import Clock

STEP_S = 0.5
"""A smaller jump is jitter, or a time service that slews."""


class ClockWatch:
    """Ask it every so often; it compares with the time before."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._apart_s = self._distance_s()

    def _distance_s(self) -> float:
        return self._clock.now_us() / 1e6 - self._clock.monotonic()

    def look(self) -> float | None:
        """By how many seconds the wall clock was set since the last look; None = it was not."""
        before, self._apart_s = self._apart_s, self._distance_s()
        step_s = self._apart_s - before
        return step_s if abs(step_s) > STEP_S else None


def step_text(step_s: float) -> str:
    """The event's text."""
    way = "forward" if step_s > 0 else "back"
    return f"the wall clock was set {way} by {abs(step_s):.1f} s; times before and after do not compare"
