"""Which steady windows become readings: the first of a run, then one per change and one per ten minutes.

A mark asked while turning wants one whose samples all lie after the asking.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

EVERY_S = 600.0
"""A plateau that does not change is stored again after this time."""


@dataclass(frozen=True, slots=True)
class Window:
    """A steady window that may become a reading."""

    first_sample: int
    end_s: float
    speed_hz: float
    vectors: NDArray[np.complex128]
    """1X by channel, base units."""
    allowed_change: NDArray[np.float64]
    """By channel: a vector moved by more than this is another plateau."""


class PlateauWatch:
    """Remembers the run's newest reading and says whether a steady window is worth another."""

    def __init__(self, speed_band_pct: float) -> None:
        self._band = speed_band_pct / 100
        self._last: Window | None = None
        self._wanted_from: int | None = None
        self.speeds_hz: list[float] = []
        """Of the readings taken in this run."""

    def new_run(self) -> None:
        self._last = None
        self.speeds_hz = []

    def want_fresh(self, from_sample: int) -> None:
        """Take the next steady window that begins at or after ``from_sample``."""
        self._wanted_from = from_sample

    def takes(self, window: Window) -> bool:
        """True when the window shall become a reading; it is then remembered as the newest one."""
        wanted = self._wanted_from is not None and window.first_sample >= self._wanted_from
        if not (wanted or self._differs(window)):
            return False
        if wanted:
            self._wanted_from = None
        self._last = window
        self.speeds_hz.append(window.speed_hz)
        return True

    def _differs(self, window: Window) -> bool:
        last = self._last
        if last is None:
            return True
        if abs(window.speed_hz - last.speed_hz) > self._band * last.speed_hz:
            return True
        moved = np.abs(window.vectors - last.vectors) > np.maximum(window.allowed_change, last.allowed_change)
        return bool(moved.any()) or window.end_s - last.end_s >= EVERY_S
