"""Live 1X of short blocks: fed with the stream, gives one fit per block of whole turns.

What is stored comes from ``daq.signal.measure`` over the whole window; these blocks tell whether and when the
window is worth it.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.edges import EdgeFinder, unresolved_deg
from daq.signal.health import RangeScan, full_scales, mark_flags, probe_flags, pulse_flags
from daq.signal.revolutions import MEDIAN_TURNS, RevolutionClock, Turns, turns_between
from daq.signal.rhythm import Rhythm
from daq.signal.shapes import BlockFit, ChannelParams, Floats, PulseParams, check_columns, median
from daq.signal.vectors import Accumulator, Fit, pieces

SPEED_STEP_S = 0.1
"""Shortest time over which a speed is taken: jitter of the edges is not hunting."""
WORK_S = 0.5
"""Turns are worked on when so much of them has come, or a block is complete."""
LEAD_S = 0.1
"""Samples kept while there is no edge: a slow edge is confirmed after it has passed."""


def usable_orders(orders: Sequence[int], samples_per_turn: float) -> tuple[int, ...]:
    """Those of ``orders`` that the sampling can tell: at least 2.2 samples in each of their periods."""
    return tuple(k for k in orders if samples_per_turn >= 2.2 * k)


def speed_spread_hz(periods: Floats, rate_hz: float) -> float:
    """Standard deviation of the speed over steps of ``SPEED_STEP_S`` or one turn; ``periods`` in samples."""
    if len(periods) < 2:
        return 0.0
    step = max(1, int(np.ceil(SPEED_STEP_S * rate_hz / median(periods))))
    steps = len(periods) // step
    if steps < 2:
        return 0.0
    lengths = periods[: steps * step].reshape(steps, step).sum(axis=1)
    return float(np.std(step * rate_hz / lengths, ddof=1))


class BlockFitter:
    """Turns a stream of counts into :class:`BlockFit` s, each of whole turns over ``block_s`` or more.

    A turn is worked on once the edge after its end is known, so that the result does not hang on how the
    stream is cut. A new segment, or samples that do not follow each other, start everything anew.
    """

    def __init__(
        self,
        pulse: PulseParams,
        channels: Sequence[ChannelParams],
        rate_hz: float,
        *,
        block_s: float,
        orders: Sequence[int] = (1, 2, 3),
        min_signal_to_noise: float = 3.0,
        longest_turn_s: float = 2.5,
    ) -> None:
        self.channels = tuple(channels)
        self.rate_hz = rate_hz
        self.block_s = block_s
        self.finder = EdgeFinder(pulse, rate_hz)
        self.clock = RevolutionClock(rate_hz, longest_turn_s=longest_turn_s)
        """Speed and turning, as of the newest sample fed."""
        self._untold = 0
        self.newest_edges: Floats = np.empty(0)
        """Those found with the counts fed last, source sample positions."""
        self._orders = tuple(orders)
        self._min_signal_to_noise = min_signal_to_noise
        self._scale = np.array([c.units_per_count for c in self.channels])
        self._volts = np.array([c.volts_per_count for c in self.channels])
        self._skew_s = np.array([c.skew_s for c in self.channels])
        self._scales = full_scales(self.channels)
        self._segment: int | None = None
        self._next = 0
        self._fresh: Floats = np.empty(0)
        """Edges that the rhythm has not seen: it is asked when enough of them have come to work on."""
        self._forget()

    def feed(self, counts: NDArray[Any], first_sample: int, segment: int = 0) -> list[BlockFit]:
        """Take (frames, 1 + probes) counts; the blocks completed by them, oldest first.

        ``counts`` is kept for a while and must not be written to afterwards."""
        check_columns(counts, self.channels)
        if segment != self._segment or first_sample != self._next:
            self.finder.restart()
            self.clock.restart()
            self._forget()
        self._segment, self._next = segment, first_sample + len(counts)
        self._chunks.append((first_sample, counts))
        edges = self.newest_edges = self.finder.feed(np.ascontiguousarray(counts[:, 0]), first_sample)
        self.clock.feed(edges, self._next)
        done: list[BlockFit] = []
        if len(edges):
            self._fresh = np.concatenate((self._fresh, edges))
            if edges[-1] >= self._worth_it():
                done = list(self._work())
        if self._oldest() is not None and not self._patient():
            self._forget()
        self._trim()
        return done

    # --- state -------------------------------------------------------------------------------------------

    def _forget(self) -> None:
        """No edges, no samples, no block begun."""
        self._rhythm = Rhythm()
        self._fresh = np.empty(0)
        self._at = 0
        self._chunks: list[tuple[int, NDArray[Any]]] = []
        self._missed = self._doubles = 0
        self._begin_block()

    def _begin_block(self) -> None:
        self._sums = Accumulator(self._orders)
        self._scan = RangeScan(self._scales)
        self._periods: list[Floats] = []
        self._start: float | None = None

    def _patient(self) -> bool:
        return self.clock.since_edge_s <= self.clock.patience_s

    def _trim(self) -> None:
        """Drop the samples and the edges that nothing will ask for again."""
        extra = self._at - MEDIAN_TURNS
        if extra > 0:
            self._rhythm.mended.drop(extra)
            self._at -= extra
        edges, waiting = self._rhythm.mended.edges, self._held_from()
        needed = edges[self._at] if len(edges) else waiting
        while self._chunks and self._chunks[0][0] + len(self._chunks[0][1]) <= needed:
            del self._chunks[0]

    def _held_from(self) -> float:
        """From where samples are kept while no edge is settled."""
        waiting = (self._next - LEAD_S * self.rate_hz, self._oldest(), self.finder.undecided)
        return min(w for w in waiting if w is not None)

    def _oldest(self) -> float | None:
        """The oldest edge held; None when there is none."""
        if self._rhythm.oldest is not None:
            return self._rhythm.oldest
        return float(self._fresh[0]) if len(self._fresh) else None

    # --- work --------------------------------------------------------------------------------------------

    def _work(self) -> Iterator[BlockFit]:
        """Work on all turns that are ready: those with an edge known after their end."""
        self._rhythm.feed(self._fresh)
        self._fresh = self._fresh[:0]
        edges = self._rhythm.mended.edges
        ready = len(edges) - 2
        if ready <= self._at or edges[ready] < self._worth_it():
            return
        turns = turns_between(self._rhythm.mended)
        held = self._chunks[0][0]
        while self._at < ready and turns.first_samples[self._at] < held:
            self._at += 1
        while self._at < ready and edges[ready] >= self._worth_it():
            if self._start is None:
                self._start = float(edges[self._at])
            due = self._start + self.block_s * self.rate_hz
            stop = self._at + 1 + int(np.searchsorted(edges[self._at + 1 : ready], due))
            stop = min(stop, ready)
            self._take(turns.part(self._at, stop))
            self._at = stop
            if edges[stop] >= due:
                fit = self._finish(float(edges[stop]))
                self._begin_block()
                if fit is not None:
                    yield fit

    def _worth_it(self) -> float:
        """Where the turns that are ready must reach before they are worked on: many small steps cost more."""
        edges = self._rhythm.mended.edges
        if not len(edges):
            return -np.inf
        begun = float(edges[self._at])
        due = (begun if self._start is None else self._start) + self.block_s * self.rate_hz
        return min(begun + WORK_S * self.rate_hz, due)

    def _take(self, turns: Turns) -> None:
        self._missed += turns.missed
        self._doubles += turns.doubles
        self._periods.append(turns.periods[turns.good])
        bounds = turns.first_samples
        for first, stop in turns.stretches():
            stretch = turns.part(first, stop)
            for start, parts in self._samples(int(bounds[first]), int(bounds[stop])):
                self._sums.add_turns(stretch, start, parts)
                for counts in parts:
                    self._scan.add(counts)

    def _samples(self, start: int, stop: int) -> Iterator[tuple[int, list[NDArray[Any]]]]:
        """Counts of samples ``start`` to ``stop`` piece by piece, in parts as fed; and its first sample."""
        for a, b in pieces(start, stop):
            yield (
                a,
                [
                    counts[max(a - at, 0) : b - at]
                    for at, counts in self._chunks
                    if at < b and at + len(counts) > a
                ],
            )

    def _finish(self, end: float) -> BlockFit | None:
        periods = np.concatenate(self._periods)
        fit = self._solved(periods)
        if fit is None or self._start is None:
            return None
        speed_hz = len(periods) * self.rate_hz / float(periods.sum())
        block = self._block(fit, speed_hz, self._start, end, periods)
        self._missed = self._doubles = 0
        return block

    def _solved(self, periods: Floats) -> Fit | None:
        if not len(periods):
            return None
        orders = usable_orders(self._orders, median(periods))
        fit = self._sums.only(orders).solve() if 1 in orders else None
        return fit.without_first() if fit is not None else None

    def _block(self, fit: Fit, speed_hz: float, start: float, end: float, periods: Floats) -> BlockFit:
        size = np.abs(self._scale)
        white = fit.cov[fit.orders.index(1)]
        vectors = fit.value(1) * self._scale * np.exp(2j * np.pi * speed_hz * self._skew_s)
        gap_v = fit.offset * self._volts
        residual_sd = fit.residual_sd * size
        finder, untold = self.finder, self.finder.untold - self._untold
        self._untold = finder.untold
        flags = (
            pulse_flags(self._missed, self._doubles, finder.pulse_length, self.rate_hz / speed_hz)
            + mark_flags(finder.margin, finder.pulse_share, untold)
            + probe_flags(
                self.channels, self._scan, gap_v, np.abs(vectors), residual_sd, self._min_signal_to_noise
            )
        )
        return BlockFit(
            segment=self._segment or 0,
            first_sample=int(np.ceil(start)),
            stop_sample=int(np.ceil(end)),
            t_start_s=start / self.rate_hz,
            t_end_s=end / self.rate_hz,
            revolutions=len(periods),
            speed_hz=speed_hz,
            speed_sd_hz=speed_spread_hz(periods, self.rate_hz),
            vectors=vectors,
            se=np.sqrt(np.trace(white, axis1=1, axis2=2) / 2) * size,
            residual_sd=residual_sd,
            ac_rms=fit.ac_rms * size,
            gap_v=gap_v,
            missed=self._missed,
            doubles=self._doubles,
            flags=tuple(flags),
            edge_deg=unresolved_deg(self.finder.edge_samples, self.rate_hz / speed_hz),
            pulse_samples=self.finder.pulse_length,
        )
