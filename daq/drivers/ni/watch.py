"""Once a second beside the reading: how far it is behind, and whether powered sensors are connected."""

from __future__ import annotations

import logging
from typing import Any

from config.errors import DriverError
from daq.drivers.ni.trouble import is_foreign

EVERY_S = 1.0
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

    def __init__(self, stream: Any, buffer: int, *, powered: bool, log: logging.Logger) -> None:
        self._stream = stream
        self._buffer = buffer
        self._log = log
        self._due_s = 0.0
        self._level = 0
        self._faults: dict[str, tuple[str, ...]] = dict.fromkeys(FAULTS, ()) if powered else {}

    def look(self, now_s: float, fetched: int) -> None:
        """``fetched``: samples a channel since the start. Raises DriverError when the counts disagree."""
        if now_s < self._due_s:
            return
        self._due_s = now_s + EVERY_S
        self._backlog(int(self._stream.total_samp_per_chan_acquired) - fetched)
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
