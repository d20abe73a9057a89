"""When a run begins and ends, and what the stand's state is: a pure state machine in source time.

A run is pulses begin -> pulses end, above a minimum speed for a minimum time (so that jogging and
windmilling make no runs). Pulses lost while the probes still vibrate leave the run open.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from daq.board import StandState

SHORTEST_QUIET_S = 1.0
"""Pulses have not ended before this time without one, however fast it turned."""
ROUNDING_S = 1e-6
"""Steps that fill a time exactly do so wherever they stand in the source."""


@dataclass(frozen=True, slots=True)
class Hop:
    """What one step of the analysis saw. Times are seconds of source time in one opening of the source."""

    t_s: float
    sample: int
    since_edge_s: float
    """Time since the newest pulse; inf = none yet."""
    patience_s: float
    """A longer wait than this means that pulses have stopped, at the speed it had."""
    speed_hz: float | None
    """Over the newest good turn; None while pulses do not come."""
    vibrating: bool
    """The probes move much as they did while turning."""


@dataclass(frozen=True, slots=True)
class Began:
    """A run has begun; ``sample`` and ``t_s`` are of its first step above minimum speed."""

    t_s: float
    sample: int
    segment: int


@dataclass(frozen=True, slots=True)
class Ended:
    state: Literal["complete", "interrupted"]
    reason: str


class RunWatch:
    """Feed it hops; it says when a run began or ended and keeps the stand's state."""

    def __init__(self, minimum_hz: float, minimum_s: float) -> None:
        self._minimum_hz = minimum_hz
        self._minimum_s = minimum_s
        self.state = StandState.NO_PULSES
        self.open = False
        self._since: tuple[float, int, int] | None = None
        self._slow_since_s: float | None = None

    def step(self, hop: Hop, segment: int) -> Began | Ended | None:
        self.state = self._state(hop)
        fast = self.state is StandState.TURNING and self._is_fast(hop)
        if not self.open:
            return self._waits(hop, segment, fast=fast)
        if self.state is StandState.NO_PULSES:
            return self._end("complete", "pulses ended")
        if fast or self.state is StandState.PULSES_LOST:
            self._slow_since_s = None
            return None
        if hop.speed_hz is None:  # a pulse is overdue, which is not slowness: the next steps tell
            return None
        if self._slow_since_s is None:
            self._slow_since_s = hop.t_s
        if hop.t_s - self._slow_since_s >= self._minimum_s - ROUNDING_S:
            return self._end("complete", "below minimum speed")
        return None

    def source_ended(
        self, reason: str, state: Literal["complete", "interrupted"] = "complete"
    ) -> Ended | None:
        """The source ends by itself, perhaps while turning; ``interrupted`` when a fault ended it."""
        self.state = StandState.NO_PULSES
        self._since = None
        return self._end(state, reason) if self.open else None

    def source_lost(self, reason: str) -> Ended | None:
        """The source failed; nothing is known of the rotor until it is back."""
        self.state = StandState.SOURCE_LOST
        self._since = None
        return self._end("interrupted", reason) if self.open else None

    def _state(self, hop: Hop) -> StandState:
        if hop.since_edge_s <= max(hop.patience_s, SHORTEST_QUIET_S):
            return StandState.TURNING
        was_turning = self.state in (StandState.TURNING, StandState.PULSES_LOST)
        return StandState.PULSES_LOST if was_turning and hop.vibrating else StandState.NO_PULSES

    def _is_fast(self, hop: Hop) -> bool:
        return hop.speed_hz is not None and hop.speed_hz >= self._minimum_hz

    def _waits(self, hop: Hop, segment: int, *, fast: bool) -> Began | None:
        if not fast:
            self._since = None
            return None
        if self._since is None:
            self._since = (hop.t_s, hop.sample, segment)
        if hop.t_s - self._since[0] < self._minimum_s - ROUNDING_S:
            return None
        self.open, self._slow_since_s = True, None
        t_s, sample, first_segment = self._since
        return Began(t_s, sample, first_segment)

    def _end(self, state: Literal["complete", "interrupted"], reason: str) -> Ended:
        self.open, self._since, self._slow_since_s = False, None, None
        return Ended(state, reason)
