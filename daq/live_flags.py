"""Flags of the vectors as they stand now that need the job's records: slow roll, rotation, noise floor."""

from __future__ import annotations

import cmath
import math

from daq.board import Live, LiveVector
from daq.clock import Clock
from daq.signal.health import BELOW_FLOOR, flag
from daq.signal.shapes import CIRCLE_95
from store import consult
from store.history import History
from store.records import JobStory, Run, Vector
from store.standing_flags import derived_flags

KEEP_S = 2.0
"""The records are read again after this: status is asked more often than a slow roll is marked."""


class LiveFlags:
    """Made for one daemon; may be asked by several threads."""

    def __init__(self, history: History, clock: Clock) -> None:
        self._history = history
        self._clock = clock
        self._kept: tuple[float, str | None, tuple[JobStory, Run] | None] = (-math.inf, None, None)

    def of(self, live: Live) -> list[str]:
        """As ``code:channel``; beside the flags that ``live`` has itself."""
        low = [flag(BELOW_FLOOR, v.channel) for v in live.vectors if v.lag_deg is None]
        vectors = tuple(_vector(v, v.lag_deg) for v in live.vectors if v.lag_deg is not None)
        told = self._records(live.run) if vectors else None
        if told is None:
            return low
        return [
            *low,
            *derived_flags(*told, consult.reading_now(told[1], vectors, live.flags, live.speed_hz or 0.0)),
        ]

    def _records(self, run: str | None) -> tuple[JobStory, Run] | None:
        """The open run with its job's story; None while there is none, or it belongs to no job."""
        now = self._clock.monotonic()
        at, kept_run, told = self._kept
        if kept_run != run or now - at > KEEP_S:
            told = consult.open_run_told(self._history) if run else None
            self._kept = (now, run, told)
        return told


def _vector(live: LiveVector, lag_deg: float) -> Vector:
    value, variance = cmath.rect(live.amplitude_pk, math.radians(lag_deg)), live.se_pk**2
    return Vector(live.channel, 1, value, variance, variance, 0.0, CIRCLE_95 * live.se_pk, live.unit)
