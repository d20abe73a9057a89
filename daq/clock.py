"""The clock, injected everywhere: monotonic time for intervals, UTC microseconds as labels."""

from __future__ import annotations

import threading
import time
from typing import Protocol


class Clock(Protocol):
    """What waits or stamps takes one of these; tests hand in their own."""

    def monotonic(self) -> float:
        """Seconds of a clock that never steps."""
        ...

    def now_us(self) -> int:
        """UTC in microseconds: a label, never an interval."""
        ...

    def sleep(self, seconds: float) -> None: ...

    def wait(self, event: threading.Event, seconds: float) -> bool:
        """Wait for ``event`` at most ``seconds``; True when it is set."""
        ...


class SystemClock:
    """The computer's own clocks."""

    def monotonic(self) -> float:
        return time.monotonic()

    def now_us(self) -> int:
        return time.time_ns() // 1000

    def sleep(self, seconds: float) -> None:
        time.sleep(seconds)

    def wait(self, event: threading.Event, seconds: float) -> bool:
        return event.wait(seconds)
