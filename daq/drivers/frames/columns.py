"""From a digitizer's channels to the columns of a block; stamped edges become a pulse in column 0.

A block holds counts only, so an edge stamped by hardware is drawn as a pulse whose line between two samples
crosses 0 V exactly where the stamp says: the arithmetic that finds edges in sampled pulses finds these too,
and what is stored can be measured again. The sample before the edge is ``height * f`` and the one after it
``-height * (1 - f)``, for an edge the part f of a sample after the first of them.
"""

from __future__ import annotations

import math
from bisect import bisect_left
from collections import deque
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.drivers.base import Chunk
from daq.drivers.frames.records import EDGE_UNITS, Description, Tally
from daq.drivers.frames.stream import Run

STAMPS = "stamps"
"""Input of the once-per-rev channel when its edges come stamped."""
PULSE_SHARE = 0.125
"""Of the last turn, for which the drawn pulse lasts ..."""
PULSE_SAMPLES, PULSE_S = 4, 0.1
"""... at least so many samples, at most so many seconds."""
PULSE_VOLTS = 5.0
"""The drawn pulse goes from +5 V to -5 V, or back for rising edges."""
LATE_S = 0.25
"""Scans are held back so long for stamps that come later than they; FORMAT.md promises it. It is as
long as a frame may be, so a stamp may come with the frame after its own."""
MOST_WAITING = 4096
"""Stamps that wait for their scans."""


@dataclass(frozen=True, slots=True)
class _Pulse:
    before: int
    """Counter of the last scan at or before the edge."""
    part: float
    """Where the edge lies between that scan and the next one, 0 to 1."""
    low: int
    """Scans that stay low, after the one behind the edge."""

    @property
    def end(self) -> int:
        return self.before + 2 + self.low


class PulseColumn:
    """Draws the pulses of stamped edges, for scans in ascending order."""

    def __init__(self, full_counts: int, rate_hz: float, *, falling: bool, tally: Tally) -> None:
        self._height = full_counts - 1
        self._sign = 1 if falling else -1
        self._most = max(PULSE_SAMPLES, int(PULSE_S * rate_hz))
        self._tally = tally
        self.restart()

    @property
    def volts_per_count(self) -> float:
        return PULSE_VOLTS / self._height

    def restart(self) -> None:
        """A gap: the edges before it say nothing about what follows."""
        self._pulses: deque[_Pulse] = deque()
        self._last: int | None = None

    def add(self, edges: Sequence[int]) -> None:
        """Take edges in ``EDGE_UNITS``, ascending; their scans must not have been drawn yet."""
        for edge in edges:
            before, part = divmod(edge, EDGE_UNITS)
            if self._pulses and before <= self._pulses[-1].end:
                self._tally.close_stamps += 1
                continue
            low = PULSE_SAMPLES
            if self._last is not None:
                low = int(min(max(PULSE_SHARE * (edge - self._last) / EDGE_UNITS, low), self._most))
            self._last = edge
            self._pulses.append(_Pulse(before, part / EDGE_UNITS, low))

    def draw(self, first: int, out: NDArray[Any]) -> None:
        """Fill ``out`` with the counts of scans ``first`` on."""
        out[:] = self._height
        for pulse in self._pulses:
            at, stop = pulse.before - first, pulse.end - first
            out[max(at + 2, 0) : max(stop, 0)] = -self._height
            if 0 <= at < len(out):
                out[at] = round(self._height * pulse.part)
            if 0 <= at + 1 < len(out):
                out[at + 1] = -round(self._height * (1 - pulse.part))
        out *= self._sign
        while len(self._pulses) > 1 and self._pulses[0].end <= first + len(out):
            self._pulses.popleft()


class Columns:
    """Picks the channels that the stand file names and draws column 0 where it comes as stamps."""

    def __init__(
        self, picked: Sequence[int], told: Description, pulse: PulseColumn | None, tally: Tally
    ) -> None:
        """``picked``: index of each column's channel; without column 0 when ``pulse`` draws it."""
        self._picked = list(picked)
        self._as_sent = self._picked == list(range(told.channels))
        self._pulse = pulse
        self._tally = tally
        self._patience = math.ceil(LATE_S * told.rate_hz) + 1
        self._held: deque[NDArray[Any]] = deque()
        self._first, self._begin, self._end = 0, 0, 0
        """Counters: of the segment's first scan, of the first one held, and behind the newest."""
        self._waiting: list[int] = []
        """Stamps of scans not drawn yet, ascending."""
        self._lost = 0

    @property
    def held(self) -> int:
        """Scans that wait for late stamps."""
        return sum(map(len, self._held))

    def chunks(self, run: Run) -> list[Chunk]:
        """The chunks that ``run`` completes; what was held back comes out before a gap."""
        counts: Any = run.counts if self._as_sent else np.take(run.counts, self._picked, axis=1)
        if self._pulse is None:
            return [Chunk(counts, lost_before=run.lost_before)]
        done: list[Chunk] = []
        edges: Iterable[int] = run.edges
        if run.lost_before:
            last = (self._end - 1) * EDGE_UNITS
            self._wait_for(edge for edge in edges if edge <= last)
            edges = [edge for edge in edges if edge > last]
            done += self.rest()
            self._lost = run.lost_before
        overdue: float = (run.first - 1 - self._patience) * EDGE_UNITS
        if run.lost_before or not self._end:
            self._pulse.restart()
            self._first = self._begin = run.first
            overdue = -math.inf  # stamps may come for all that was left out
        self._end = run.first + len(counts)
        self._held.append(counts)
        early, self._waiting = self._waiting, []
        self._wait_for([*early, *edges], overdue)
        ready = []
        while self.held - len(self._held[0]) >= self._patience:
            ready.append(self._held.popleft())
        return done + self._drawn(self._pulse, ready)

    def rest(self) -> list[Chunk]:
        """What is held back, at the end of a segment or of the stream."""
        ready = list(self._held)
        self._held.clear()
        return self._drawn(self._pulse, ready) if self._pulse is not None else []

    def _wait_for(self, edges: Iterable[int], overdue: float = -math.inf) -> None:
        """Keep the stamps whose scans are still to be drawn; count the others."""
        tally, waiting = self._tally, self._waiting
        before = (self._first - 1) * EDGE_UNITS
        drawn = self._begin * EDGE_UNITS if self._begin > self._first else before + 1
        for edge in edges:
            if edge < drawn and overdue <= edge <= before:
                tally.gap_stamps += 1
            elif edge < drawn:
                tally.late_stamps += 1
            elif edge > (self._end - 1 + self._patience) * EDGE_UNITS or len(waiting) >= MOST_WAITING:
                tally.early_stamps += 1
            else:
                waiting.append(edge)
        waiting.sort()

    def _drawn(self, pulse: PulseColumn, parts: Sequence[NDArray[Any]]) -> list[Chunk]:
        """The scans of ``parts``, the oldest held, with their pulses."""
        if not parts:
            return []
        scans, first = sum(map(len, parts)), self._begin
        counts = np.empty((scans, 1 + parts[0].shape[1]), parts[0].dtype)
        np.concatenate(parts, out=counts[:, 1:])
        due = bisect_left(self._waiting, (first + scans) * EDGE_UNITS)
        pulse.add(self._waiting[:due])
        del self._waiting[:due]
        pulse.draw(first, counts[:, 0])
        self._begin = first + scans
        lost, self._lost = self._lost, 0
        return [Chunk(counts, lost_before=lost)]
