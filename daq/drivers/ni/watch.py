"""Once a second beside the reading: how far it is behind, the two clocks, sensors that are powered."""

from __future__ import annotations

import logging
from typing import Any

from config.errors import DriverError
from daq.drivers.ni.trouble import is_foreign

EVERY_S = 1.0
CLOCKS_AFTER_S, CLOCKS_TIMES = 60.0, 4.0
"""The device's clock is compared with the PC's after so long, then each time it runs so many times longer."""
CLOCKS_APART = 1e-3
"""Crystals agree within 1e-4; further apart the device does not run at the rate it tells."""
WARN_SHARE, ALARM_SHARE = 0.25, 0.60
"""Of the buffer, when the reader is behind."""
FAULTS = {
    "open_chans": "has no sensor at the end of its cable, or a broken cable",
    "overloaded_chans": "is overloaded",
    "excit_fault_chans": "does not get its excitation current",
}
"""What the library can list, and what it means."""


class Watch:
    """``look`` may be called at any pace; it asks the device once in ``EVERY_S``."""

    def __init__(
        self, stream: Any, rate_hz: float, buffer: int, *, powered: bool, log: logging.Logger
    ) -> None:
        self._stream = stream
        self._rate_hz = rate_hz
        self._buffer = buffer
        self._first: tuple[float, int] | None = None
        self._compare_s = CLOCKS_AFTER_S
        self._log = log
        self._due_s = 0.0
        self._level = 0
        self._faults: dict[str, tuple[str, ...]] = dict.fromkeys(FAULTS, ()) if powered else {}

    def look(self, now_s: float, fetched: int) -> None:
        """``fetched``: samples a channel since the start. Raises DriverError when the counts disagree."""
        if now_s < self._due_s:
            return
        self._due_s = now_s + EVERY_S
        total = int(self._stream.total_samp_per_chan_acquired)
        self._backlog(total - fetched)
        self._clocks(now_s, total)
        for fault in tuple(self._faults):
            self._look_for(fault)

    def _backlog(self, behind: int) -> None:
        if behind < 0:
            raise DriverError(
                f"The device says it took {-behind} samples fewer than it delivered.",
                "It is started again by itself.",
                kind="protocol",
            )
        share = behind / self._buffer
        level = (share > WARN_SHARE) + (share > ALARM_SHARE)
        if level > self._level:
            say = self._log.error if level > 1 else self._log.warning
            say("the reader is behind: %.0f %% of the device's buffer is full", 100 * share)
        self._level = level

    def _clocks(self, now_s: float, total: int) -> None:
        """Phase needs no clock but the device's; this is for whoever wonders about the stamps."""
        self._first = self._first or (now_s, total)
        ran_s = now_s - self._first[0]
        if ran_s < self._compare_s:
            return
        self._compare_s *= CLOCKS_TIMES
        apart = (total - self._first[1]) / (ran_s * self._rate_hz) - 1
        say = self._log.warning if abs(apart) > CLOCKS_APART else self._log.info
        say("the device runs %+.0f ppm beside the PC's clock, over %.0f s", 1e6 * apart, ran_s)

    def _look_for(self, fault: str) -> None:
        try:
            there = getattr(self._stream, f"{fault}_exist")
            found = tuple(getattr(self._stream, fault)) if there else ()
        except Exception as error:
            if getattr(error, "error_code", None) is None or not is_foreign(error):
                raise
            self._log.debug("the device does not tell %s: %s", fault, error)
            del self._faults[fault]
            return
        for name in set(found) - set(self._faults[fault]):
            self._log.warning("input %s %s", name, FAULTS[fault])
        self._faults[fault] = found
