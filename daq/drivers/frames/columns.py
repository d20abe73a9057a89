"""From a digitizer's channels to the columns of a block; stamped edges become a pulse in column 0.

A block holds counts only, so an edge stamped by hardware is drawn as a pulse whose line between two samples
crosses 0 V exactly where the stamp says: the arithmetic that finds edges in sampled pulses finds these too,
and what is stored can be measured again. The sample before the edge is ``height * f`` and the one after it
``-height * (1 - f)``, for an edge the part f of a sample after the first of them.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
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
                self._tally.bad_edges += 1
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

    def __init__(self, picked: Sequence[int], told: Description, pulse: PulseColumn | None) -> None:
        """``picked``: index of each column's channel; without column 0 when ``pulse`` draws it."""
        self._picked = list(picked)
        self._as_sent = self._picked == list(range(told.channels))
        self._pulse = pulse
        self._held: NDArray[Any] | None = None
        self._lost = 0

    def chunks(self, run: Run) -> list[Chunk]:
        """The chunks that ``run`` completes: none or one, two where a scan held back lies before a gap."""
        counts: Any = run.counts if self._as_sent else np.take(run.counts, self._picked, axis=1)
        if self._pulse is None:
            return [Chunk(counts, lost_before=run.lost_before)]
        return self._drawn(run, counts, self._pulse)

    def _drawn(self, run: Run, counts: NDArray[Any], pulse: PulseColumn) -> list[Chunk]:
        """With column 0 drawn. The last scan is held back: an edge just after it comes with the next run."""
        done: list[Chunk] = []
        if run.lost_before and self._held is not None:
            done += self._chunk(pulse, run.first - run.lost_before - 1, self._held)
            self._held = None
        if run.lost_before:
            pulse.restart()
            self._lost = run.lost_before
        pulse.add(run.edges)
        whole, first = counts, run.first
        if self._held is not None:
            whole, first = np.concatenate((self._held, counts)), first - 1
        self._held = whole[-1:].copy()
        return done + self._chunk(pulse, first, whole[:-1])

    def _chunk(self, pulse: PulseColumn, first: int, probes: NDArray[Any]) -> list[Chunk]:
        if not len(probes):
            return []
        counts = np.empty((len(probes), 1 + probes.shape[1]), probes.dtype)
        counts[:, 1:] = probes
        pulse.draw(first, counts[:, 0])
        lost, self._lost = self._lost, 0
        return [Chunk(counts, lost_before=lost)]
