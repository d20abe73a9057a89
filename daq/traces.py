"""Run-up and coast-down as vectors against speed, from the same counts and edges as everything else.

While the speed holds only the edges are looked at. Once it has moved by ``REVERSAL`` a stretch begins where
it left, is cut into steps of at most ``STEP`` of the speed (one turn where that is coarser), and each step
gives 1X of every probe by least squares at the measured quadratic angles. A stretch ends where the speed
turns back, holds, or the pulses or samples end: up and down are never joined. Memory is bounded: samples of
the last two seconds (or a dozen turns), and one point for each 1 % of a speed that only goes one way.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.ring import Chunk
from daq.signal.basis import basis
from daq.signal.blocks import usable_orders
from daq.signal.revolutions import MEDIAN_TURNS, Turns, turns_between
from daq.signal.rhythm import Mended, Rhythm
from daq.signal.shapes import ChannelParams, Complexes, Floats, median
from daq.signal.vectors import turn_pieces
from store.records import Direction, Trace, TracePoint

STEP = 0.01
"""A step covers at most this share of its speed, or one turn."""
REVERSAL = 0.03
"""Hunting up to this share of the speed neither begins nor ends a stretch."""
SAME = 0.002
"""Of speeds as close as this to the lowest or highest, the newest is where a stretch begins or ends."""
WINDOW_S = 2.0
"""Of a step that lasts longer, the last two seconds are measured."""
SMOOTH_SAMPLES = 200
"""The speed is judged over so many samples or more: half a sample of jitter is a quarter of a per cent."""
SHORTEST_HOLD_S, LONGEST_HOLD_S, HOLD_STEPS = 5.0, 60.0, 10
"""The speed holds when no step is complete after so many of the stretch's own steps, within these limits."""
FEWEST_STEPS = 4
"""Fewer are no run-up."""
KEPT_TURNS, KEPT_S = 12, 15.0
"""Turns held beside ``WINDOW_S``, but no more than so many seconds."""
ORDERS = (1, 2, 3)
FEW = 4
"""With fewer samples than so many for each unknown only offset and 1X are fitted."""

Span = tuple[float, float]
"""First and last edge of a step, source sample positions."""


@dataclass(frozen=True, slots=True, eq=False)
class Step:
    """1X of all probes over a few whole turns."""

    start: float
    stop: float
    """First and last edge, source sample positions."""
    speed_hz: float
    revolutions: int
    vectors: Complexes
    """Shape (probes,), 0-peak, base units."""
    se: Floats
    """Shape (probes,): standard error per component."""
    gap_v: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Stretch:
    """A finished stretch in which the speed went one way."""

    direction: Direction
    steps: tuple[Step, ...]


class Tracer:
    """Fed with each chunk and the edges found in it; ``take`` gives the stretches that have ended."""

    def __init__(
        self,
        channels: tuple[ChannelParams, ...],
        units: tuple[str, ...],
        rate_hz: float,
        *,
        minimum_hz: float = 0.0,
    ) -> None:
        self._names, self._units = tuple(c.name for c in channels), units
        self._measure = StepFitter(channels, rate_hz)
        self._rate_hz = rate_hz
        self._minimum_hz = minimum_hz
        """Steps below this speed are left out, as runs are."""
        self._done: deque[Stretch] = deque(maxlen=8)
        self._fresh: Floats = np.empty(0)
        """Edges that the rhythm has not seen: it is asked when the speed does not plainly hold."""
        self._extreme = (0.0, 0)
        """Speed and turn up to which the stretch has come."""
        self._next = -1
        self._newest: float | None = None
        """The newest edge."""
        self._clear()

    def feed(self, chunk: Chunk, edges: Floats) -> None:
        """``edges``: those of the once-per-rev pulse found with this chunk (they may lie before it)."""
        if chunk.first_sample != self._next:
            self.restart()
        self._next = chunk.next_sample
        self._measure.hold(chunk.first_sample, chunk.counts)
        if len(edges):
            holds = self._holds(edges)
            self._fresh = np.concatenate((self._fresh, edges))
            self._newest = float(edges[-1])
            if not holds:
                self._judge_new(last=False)
        self._trim()

    def take(self, since: float, at_us: Callable[[int], int]) -> list[Trace]:
        """Stretches ended since the last call that reach beyond sample ``since``, oldest first.

        ``at_us`` gives the UTC of a sample."""
        found = [self._trace(s, at_us) for s in self._done if s.steps[-1].stop > since]
        self._done.clear()
        return found

    def _trace(self, stretch: Stretch, at_us: Callable[[int], int]) -> Trace:
        begun, rate_hz = stretch.steps[0].start, self._rate_hz
        return Trace(
            direction=stretch.direction,
            channels=self._names,
            units=self._units,
            started_us=at_us(int(begun)),
            duration_s=(stretch.steps[-1].stop - begun) / rate_hz,
            points=tuple(
                TracePoint(
                    t_s=((s.start + s.stop) / 2 - begun) / rate_hz,
                    speed_hz=s.speed_hz,
                    revolutions=s.revolutions,
                    vectors=tuple(s.vectors.tolist()),
                    se=tuple(s.se.tolist()),
                    gap_v=tuple(s.gap_v.tolist()),
                )
                for s in stretch.steps
            ),
        )

    def stop(self) -> None:
        """The pulses or the run have ended: what goes on ends here."""
        self._judge_new(last=True)
        if self._direction:
            self._finish(self._last_of_stretch())
        self._hold_from(None)
        self._rhythm, self._judged = Rhythm(), 0

    def restart(self) -> None:
        """Samples are missing: nothing is joined across the gap."""
        self.stop()
        self._clear()

    # --- turns -------------------------------------------------------------------------------------------

    def _clear(self) -> None:
        self._measure.clear()
        self._fresh = np.empty(0)
        self._newest = None
        self._turn = 0.0
        """Length of the newest turns, samples."""
        self._rhythm = Rhythm()
        self._judged = 0
        """Turns of the rhythm's edges that have been taken over."""
        self._starts: Floats = np.empty(0)
        self._stops: Floats = np.empty(0)
        self._speeds: Floats = np.empty(0)
        self._smooth: Floats = np.empty(0)
        self._base = 0
        """Number of the first turn held, counted since the last gap."""
        self._at = 0
        """Number of the next turn to judge."""
        self._steps: list[Step] = []
        self._spans: list[Span] = []
        self._hold_from(None)

    def _hold_from(self, turn: int | None) -> None:
        """No direction; one is looked for from the speed of ``turn``, None = of the next one."""
        self._direction = 0
        self._low = self._high = (0.0 if turn is None else self._speed(turn), turn or 0)
        self._anchored = turn is not None

    def _holds(self, edges: Floats) -> bool:
        """Quick look: all new turns lie well within the band in which the speed holds."""
        if self._direction or not self._anchored or self._newest is None:
            return False
        speeds = self._rate_hz / (edges - np.concatenate(([self._newest], edges[:-1])))
        lowest, highest = float(speeds.min()), float(speeds.max())
        half = REVERSAL / 2
        return lowest > self._high[0] * (1 - half) and highest < self._low[0] * (1 + half)

    def _judge_new(self, *, last: bool) -> None:
        """Judge the turns that have come; ``last``: nothing follows them."""
        self._rhythm.feed(self._fresh)
        self._fresh = np.empty(0)
        if last:
            self._rhythm.finish()
        mended, first = self._rhythm.mended, self._judged
        self._judged = max(0, len(mended.edges) - 1)
        new = between_marks(mended)[first:]
        starts, stops = mended.edges[first:-1][new], mended.edges[first + 1 :][new]
        self._starts = np.concatenate((self._starts, starts))
        self._stops = np.concatenate((self._stops, stops))
        self._speeds = np.concatenate((self._speeds, self._rate_hz / (stops - starts)))
        if not len(self._speeds):
            return
        self._turn = self._rate_hz / median(self._speeds[-MEDIAN_TURNS:])
        width = max(1, int(np.ceil(SMOOTH_SAMPLES / self._turn)))
        self._smooth = smoothed(self._speeds, width)
        unsettled = 0 if last else 2 + width // 2
        self._judge(self._base + len(self._smooth) - unsettled)
        self._measure_steps()

    def _judge(self, stop: int) -> None:
        while self._at < stop:
            if not self._direction and self._all_hold(stop):
                return
            self._judge_turn(self._at, self._speed(self._at))

    def _speed(self, turn: int) -> float:
        return float(self._smooth[turn - self._base])

    def _all_hold(self, stop: int) -> bool:
        """True when every turn up to ``stop`` stays in the band; what they change of it is kept."""
        part = self._smooth[self._at - self._base : stop - self._base]
        if not self._anchored:
            self._hold_from(self._at)
        low = self._newest_near(min(self._low[0], float(part.min())), part, self._low[1])
        high = self._newest_near(max(self._high[0], float(part.max())), part, self._high[1])
        if high[0] >= low[0] * (1 + REVERSAL) or low[0] <= high[0] * (1 - REVERSAL):
            return False
        self._low, self._high, self._at = low, high, stop
        return True

    def _newest_near(self, hz: float, part: Floats, otherwise: int) -> tuple[float, int]:
        near = np.flatnonzero(np.abs(part - hz) <= SAME * hz)
        return hz, self._at + int(near[-1]) if len(near) else otherwise

    def _judge_turn(self, turn: int, hz: float) -> None:
        self._at = turn + 1
        if not self._direction:
            if hz <= self._low[0] * (1 + SAME):
                self._low = (min(hz, self._low[0]), turn)
            if hz >= self._high[0] * (1 - SAME):
                self._high = (max(hz, self._high[0]), turn)
            if hz >= self._low[0] * (1 + REVERSAL):
                self._set_out(+1, self._low[1])
            elif hz <= self._high[0] * (1 - REVERSAL):
                self._set_out(-1, self._high[1])
            return
        far = self._extreme[0]
        if self._direction * (hz - far) > -SAME * far:
            self._extreme = (max(hz, far) if self._direction > 0 else min(hz, far), turn)
        elif abs(hz - far) >= REVERSAL * far:
            back = self._extreme[1]
            self._finish(back)
            self._set_out(-self._direction, back)
            return
        self._cut(turn, hz)

    # --- a stretch ---------------------------------------------------------------------------------------

    def _set_out(self, direction: int, turn: int) -> None:
        """A stretch begins at a turn in the past, or at the oldest one still held; judge again from there."""
        turn = max(turn, self._base)
        hz = self._speed(turn)
        self._direction, self._extreme = direction, (hz, turn)
        self._first, self._first_hz, self._at = turn, hz, turn + 1
        self._step_end = float(self._starts[turn - self._base])
        self._lasted: deque[float] = deque(maxlen=HOLD_STEPS)

    def _cut(self, turn: int, hz: float) -> None:
        """End the step before ``turn`` when the speed has moved enough by it, or the stretch if it holds."""
        turns = turn - self._first
        moved = self._direction * (hz - self._first_hz) * (turns + 1) / max(turns, 1)
        stop = float(self._stops[turn - self._base])
        if turns and moved > STEP * self._first_hz:
            self._add(self._first, turn)
            self._first, self._first_hz = turn, hz
        elif stop - self._step_end > self._patience_s() * self._rate_hz:
            self._finish(self._last_of_stretch())
            self._hold_from(turn)

    def _patience_s(self) -> float:
        own_s = HOLD_STEPS * median(self._lasted) / self._rate_hz if self._lasted else 0.0
        return min(max(own_s, SHORTEST_HOLD_S), LONGEST_HOLD_S)

    def _last_of_stretch(self) -> int:
        """The newest turn judged, or where the speed was farthest if it has come back by a step since."""
        newest = self._at - 1
        far, turn = self._extreme
        near = newest >= self._base and abs(self._speed(newest) - far) <= STEP * far
        return newest if near else turn

    def _add(self, first: int, stop: int) -> None:
        """Measure the step of turns ``first`` up to, not with, ``stop``; of a long one its end."""
        first = max(first, self._base)
        if first >= stop:
            return
        starts, end = self._starts[: stop - self._base], float(self._stops[stop - 1 - self._base])
        late = int(np.searchsorted(starts, end - WINDOW_S * self._rate_hz)) + self._base
        begin = float(starts[min(max(first, late), stop - 1) - self._base])
        self._lasted.append(end - self._step_end)
        self._step_end = end
        self._spans.append((begin, end))

    def _measure_steps(self) -> None:
        found = self._measure.steps(self._spans, self._rhythm.mended) if self._spans else []
        self._steps += [s for s in found if s.speed_hz >= self._minimum_hz]
        self._spans = []

    def _finish(self, last: int) -> None:
        """End the stretch with turn ``last``; the turns since the last step are a step of their own."""
        self._add(self._first, last + 1)
        self._measure_steps()
        if len(self._steps) >= FEWEST_STEPS:
            self._done.append(Stretch("up" if self._direction > 0 else "down", tuple(self._steps)))
        self._steps = []

    def _trim(self) -> None:
        """Let go of samples, edges and turns that no step will ask for again."""
        kept = min(WINDOW_S * self._rate_hz + KEPT_TURNS * self._turn, KEPT_S * self._rate_hz)
        before = self._next - kept
        self._measure.let_go(before)
        if len(self._fresh) and self._fresh[0] < before:
            self._fresh = self._fresh[int(np.searchsorted(self._fresh, before)) :]
            self._rhythm, self._judged = Rhythm(), 0
        gone = int(np.searchsorted(self._rhythm.mended.edges, before)) - MEDIAN_TURNS
        if min(gone, self._judged) > 0:
            self._rhythm.mended.drop(min(gone, self._judged))
            self._judged -= min(gone, self._judged)
        gone = min(int(np.searchsorted(self._starts, before)), self._at - self._base)
        if gone > 0:
            self._base += gone
            self._starts, self._stops = self._starts[gone:], self._stops[gone:]
            self._speeds, self._smooth = self._speeds[gone:], self._smooth[gone:]


class StepFitter:
    """Least squares over single steps, from the samples held."""

    def __init__(self, channels: tuple[ChannelParams, ...], rate_hz: float) -> None:
        self._rate_hz = rate_hz
        self._scale = np.array([c.units_per_count for c in channels])
        self._volts = np.array([c.volts_per_count for c in channels])
        self._skew_s = np.array([c.skew_s for c in channels])
        self._memory: Floats = np.empty((0, 1 + len(channels)))
        self.clear()

    def clear(self) -> None:
        self._chunks: deque[tuple[int, NDArray[Any]]] = deque()

    def hold(self, first_sample: int, counts: NDArray[Any]) -> None:
        """``counts`` (frames, 1 + probes) are kept by reference."""
        self._chunks.append((first_sample, counts))

    def let_go(self, before: float) -> None:
        while self._chunks and self._chunks[0][0] + len(self._chunks[0][1]) <= before:
            self._chunks.popleft()

    def steps(self, spans: Sequence[Span], mended: Mended) -> list[Step]:
        """The steps of whole turns between pairs of edges, in order; those that can be measured."""
        real = Mended()
        real.join(mended)
        real.good = between_marks(mended)
        turns = turns_between(real)
        at = [(_nearest(turns.edges, a), _nearest(turns.edges, b)) for a, b in spans]
        held = self._chunks[0][0] if self._chunks else np.inf
        at = [(i, k) for i, k in at if turns.first_samples[i] >= held and turns.good[i:k].any()]
        found: list[Step | None] = []
        while at:
            apart = (n for n in range(1, len(at)) if at[n][0] != at[n - 1][1])
            stop = next(apart, len(at))
            found += self._measured(turns, at[:stop])
            at = at[stop:]
        return [s for s in found if s is not None]

    def _measured(self, turns: Turns, at: Sequence[tuple[int, int]]) -> list[Step | None]:
        """Steps (first turn, stop turn) that follow each other without a gap: one basis for them all."""
        whole = turns.part(at[0][0], at[-1][1])
        orders = usable_orders(ORDERS, float(whole.periods[whole.good].min()))
        if not orders:
            return []
        bounds = turns.first_samples[[at[0][0], *(k for _, k in at)]]
        sums = [_Sums(1 + 2 * len(orders), 1 + len(self._scale)) for _ in at]
        reference = np.rint(self._less(0.0, int(bounds[0]), int(bounds[1]))[:256].mean(axis=0))
        for fractions, a, b in turn_pieces(whole):
            rows, y = basis(fractions, orders), self._less(reference, a, b)
            for n in range(int(np.searchsorted(bounds, a, "right")) - 1, len(at)):
                low, high = max(int(bounds[n]), a) - a, min(int(bounds[n + 1]), b) - a
                if low >= high:
                    break
                sums[n].add(rows[:, low:high], y[low:high])
        return [self._step(turns.part(*span), one, reference) for span, one in zip(at, sums, strict=True)]

    def _step(self, turns: Turns, sums: _Sums, reference: Floats) -> Step | None:
        solved = sums.solved()
        if solved is None:
            return None
        offset, vectors, se = solved
        speed_hz = turns.speed(self._rate_hz)
        return Step(
            start=float(turns.edges[0]),
            stop=float(turns.edges[-1]),
            speed_hz=speed_hz,
            revolutions=int(turns.good.sum()),
            vectors=vectors[1:] * self._scale * np.exp(2j * np.pi * speed_hz * self._skew_s),
            se=se[1:] * np.abs(self._scale),
            gap_v=(offset + reference)[1:] * self._volts,
        )

    def _less(self, reference: Floats | float, start: int, stop: int) -> Floats:
        """Counts of samples ``start`` to ``stop`` less ``reference``, in memory that is used again."""
        frames = stop - start
        if len(self._memory) < frames:
            self._memory = np.empty((frames, 1 + len(self._scale)))
        y = self._memory[:frames]
        for at, counts in self._chunks:
            low, high = max(start, at), min(stop, at + len(counts))
            if low < high:
                np.subtract(counts[low - at : high - at], reference, out=y[low - start : high - start])
        return y


def between_marks(mended: Mended) -> NDArray[np.bool_]:
    """Shape (edges - 1,): the good turns that begin and end with a pulse that came. Where one is filled in on
    a fast ramp its place is a guess, and a step is often a single turn."""
    filled = mended.missed > 0
    found: NDArray[np.bool_] = mended.good & ~filled
    found[1:] &= ~filled[:-1]
    return found


def _nearest(edges: Floats, position: float) -> int:
    return int(np.argmin(np.abs(edges - position)))


class _Sums:
    """Normal equations of one step; column 0 is the once-per-rev channel, which is cheaper left in."""

    def __init__(self, size: int, columns: int) -> None:
        self._gram = np.zeros((size, size))
        self._cross = np.zeros((size, columns))
        self._square = np.zeros(columns)
        self._samples = 0

    def add(self, rows: Floats, y: Floats) -> None:
        self._gram += rows @ rows.T
        self._cross += rows @ y
        self._square += np.einsum("ij,ij->j", y, y)
        self._samples += len(y)

    def solved(self) -> tuple[Floats, Complexes, Floats] | None:
        """Offset, 1X and its standard error per component, by column; of few samples no harmonics."""
        size = len(self._gram) if self._samples >= FEW * len(self._gram) else 3
        if self._samples <= 2 * size:
            return None
        try:
            inverse = np.linalg.inv(self._gram[:size, :size])
        except np.linalg.LinAlgError:
            return None
        found = inverse @ self._cross[:size]
        rest = np.maximum(0.0, self._square - np.einsum("ij,ij->j", found, self._cross[:size]))
        variance = rest / (self._samples - size) * (inverse[1, 1] + inverse[2, 2]) / 2
        if not np.isfinite(variance).all():
            return None
        return found[0], found[1] + 1j * found[2], np.sqrt(variance)


def smoothed(values: Floats, width: int) -> Floats:
    """Running median of five (a single wild turn does not count), then running mean over ``width``.

    A series that only rises or only falls passes the median unchanged."""
    padded = np.concatenate((values[:1], values[:1], values, values[-1:], values[-1:]))
    windows = np.lib.stride_tricks.sliding_window_view(padded, 5)
    middle: Floats = np.partition(windows, 2, axis=1)[:, 2]
    if width == 1:
        return middle
    ones = np.ones(min(width, len(values)))
    mean: Floats = np.convolve(middle, ones, "same") / np.convolve(np.ones(len(values)), ones, "same")
    return mean
