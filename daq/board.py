"""The live state of the stand, written by the threads, read by the control channel.

A snapshot is a frozen value: whoever holds one sees one moment. "No pulses" is not standstill, and no
state here says or implies that the rotor is at rest.
"""

from __future__ import annotations

import threading
from dataclasses import asdict, dataclass, field, replace
from enum import StrEnum
from typing import Any

from daq.clock import Clock


class StandState(StrEnum):
    STARTING = "starting"
    TURNING = "turning"
    NO_PULSES = "no pulses"
    PULSES_LOST = "once-per-rev lost"
    SOURCE_LOST = "source lost"


@dataclass(frozen=True, slots=True)
class LiveVector:
    """A 1X vector as it stands now, 0-peak in the channel's base unit."""

    channel: str
    unit: str
    amplitude_pk: float
    lag_deg: float | None
    """None while the amplitude is within its own 95 % uncertainty."""
    se_pk: float = 0.0
    """Standard error per component."""


@dataclass(frozen=True, slots=True)
class Live:
    """One moment of the stand."""

    state: StandState = StandState.STARTING
    detail: str = ""
    speed_hz: float | None = None
    run: str | None = None
    steady: bool = False
    still_out: str = ""
    """While not steady: which figure is still out and by how much."""
    steadiness_notes: tuple[str, ...] = ()
    """While steady: what a person should know of it all the same."""
    vectors: tuple[LiveVector, ...] = ()
    flags: tuple[str, ...] = ()
    sample: int = 0
    segment: int = 0
    source: str = "not opened"
    store: str = "ok"
    held_records: int = 0
    """Run borders, readings and events that wait in memory while the store is blocked."""
    lost_samples: int = 0
    dropped_readings: int = 0
    notes: tuple[str, ...] = field(default=())

    @property
    def may_be_turning(self) -> bool:
        """True while pulses arrive, or the probes vibrate without them."""
        return self.state in (StandState.TURNING, StandState.PULSES_LOST)

    def as_dict(self) -> dict[str, Any]:
        return {**asdict(self), "state": str(self.state)}


class Board:
    """Holds the newest :class:`Live`; every change wakes those who wait for one."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._changed = threading.Condition()
        self._live = Live()
        self.closed = False
        """The daemon stops: nobody shall wait any longer."""

    def read(self) -> Live:
        with self._changed:
            return self._live

    def post(self, **changes: Any) -> None:
        """Replace fields of the live state."""
        with self._changed:
            self._live = replace(self._live, **changes)
            self._changed.notify_all()

    def stir(self) -> None:
        """Wake the waiting without a change of the live state (a mark ended, say)."""
        with self._changed:
            self._changed.notify_all()

    def wait(self, seconds: float) -> Live:
        """The live state after the next change, or as it is once ``seconds`` have passed."""
        with self._changed:
            if not self.closed:
                self._changed.wait(seconds)
            return self._live

    def close(self) -> None:
        """Wake the waiting, and let nobody wait again."""
        with self._changed:
            self.closed = True
            self._changed.notify_all()
