"""Turns between once-per-rev edges: good or not, the angle of every sample in them, the speed.

The angle within a turn comes from the parabolas through neighbouring edges, because constant speed per turn
is biased on ramps (METHODS 8.8). All positions are sample indices.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daq.signal.rhythm import EVEN, Mended, Rhythm
from daq.signal.shapes import Floats, median

REPAIR_LIMIT_PCT = 10.0
"""Missed pulses that may be filled in, and doubles that may be taken out, of the turns of a window each."""
MEDIAN_TURNS = 7


# --- turns -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Turns:
    """The turns between n edges, repaired; n - 1 of them, each marked good or not."""

    edges: Floats
    """Shape (n,), absolute sample index."""
    good: NDArray[np.bool_]
    """Shape (n - 1,): a whole single turn."""
    curve: Floats
    """Shape (n - 1,): second divided difference of the turn count, turns per sample squared."""
    missed_in: NDArray[np.int64]
    """Shape (n - 1,): pulses that did not come; 1 where the edge at the turn's end is filled in."""
    doubles_in: NDArray[np.int64]
    """Shape (n - 1,): pulses too many, taken out."""

    @property
    def missed(self) -> int:
        return int(self.missed_in.sum())

    @property
    def doubles(self) -> int:
        return int(self.doubles_in.sum())

    @property
    def periods(self) -> Floats:
        lengths: Floats = self.edges[1:] - self.edges[:-1]
        return lengths

    @property
    def first_samples(self) -> NDArray[np.int64]:
        """Shape (n,): the first sample at or after each edge."""
        return np.ceil(self.edges).astype(np.int64)

    def stretches(self) -> list[tuple[int, int]]:
        """Runs of good turns as (first turn, stop turn)."""
        marks = np.diff(np.concatenate(([False], self.good, [False])).astype(np.int8))
        return list(
            zip(np.flatnonzero(marks == 1).tolist(), np.flatnonzero(marks == -1).tolist(), strict=True)
        )

    def speed(self, rate_hz: float) -> float:
        """Mean speed over the good turns, Hz; 0 when there are none."""
        length = float(self.periods[self.good].sum())
        return float(self.good.sum()) * rate_hz / length if length > 0 else 0.0

    def part(self, first: int, stop: int) -> Turns:
        """Turns ``first`` to ``stop`` with the curvature their neighbours gave them."""
        return Turns(
            self.edges[first : stop + 1],
            self.good[first:stop],
            self.curve[first:stop],
            self.missed_in[first:stop],
            self.doubles_in[first:stop],
        )


def turns_of(edges: Floats, breaks: Sequence[int] = ()) -> Turns:
    """Turns between ``edges`` (ascending sample indices), repaired: missed pulses filled in and doubles taken
    out by the rhythm of their neighbours (``daq.signal.rhythm``), both counted.

    ``breaks`` are samples before which others were lost: a turn across one is not good, nor is one across
    which the rhythm was lost."""
    edges = np.asarray(edges, np.float64)
    mended = Mended()
    for part in np.split(edges, np.searchsorted(edges, sorted(breaks))):
        rhythm = Rhythm()
        rhythm.feed(part)
        mended.join(rhythm.finish())
    return turns_between(mended)


def turns_between(mended: Mended) -> Turns:
    """The turns of edges that are repaired already."""
    return Turns(
        mended.edges,
        mended.good,
        _curvature(mended.edges, mended.good),
        mended.missed,
        mended.doubles,
    )


def _curvature(edges: Floats, good: NDArray[np.bool_]) -> Floats:
    """Mean of the parabolas through (previous, own, next) edges; one of them at the ends of a stretch."""
    curve = np.zeros(len(good))
    if len(good) < 2:
        return curve
    periods = edges[1:] - edges[:-1]
    rate = 1 / periods
    both = good[:-1] & good[1:]
    second = (rate[1:] - rate[:-1]) / (periods[1:] + periods[:-1]) * both
    curve[:-1] += second
    curve[1:] += second
    curve[1:-1] /= np.maximum(1, both[1:].astype(np.int64) + both[:-1])
    return curve


def turn_fractions(turns: Turns, start: int, stop: int) -> Floats:
    """Where in its turn each sample ``start`` <= i < ``stop`` lies, in turns 0..1 from the edge.

    All of these samples must lie between the first and the last edge, within one stretch of good turns."""
    first = turns.first_samples
    k0 = int(np.searchsorted(first, start, side="right")) - 1
    k1 = int(np.searchsorted(first, stop, side="left"))
    edges, curve = turns.edges[k0 : k1 + 1], turns.curve[k0:k1]
    periods = edges[1:] - edges[:-1]
    slope = 1 / periods - curve * periods
    u = np.arange(stop - start, dtype=np.float64)  # relative to start: positions keep their digits
    if k1 - k0 == 1:
        u -= edges[0] - start
        single: Floats = u * (slope[0] + curve[0] * u)
        return single
    bounds = first[k0 : k1 + 1].copy()
    bounds[0], bounds[-1] = start, stop
    lengths = bounds[1:] - bounds[:-1]
    u -= np.repeat(edges[:-1] - start, lengths)
    out = np.repeat(curve, lengths)
    out *= u
    out += np.repeat(slope, lengths)
    out *= u
    return out


def angles_at(edges: Floats, positions: Floats) -> Floats:
    """Angle in radians at any ``positions`` (sample indices) between the first and the last edge; the first
    edge is 0, each further one 2 pi more, none repaired. For tests and small arrays; ValueError outside."""
    positions = np.asarray(positions, np.float64)
    whole = Mended()
    whole.add(np.asarray(edges, np.float64))
    turns = turns_between(whole)
    if len(edges) < 2 or positions.min() < edges[0] or positions.max() > edges[-1]:
        raise ValueError("an angle is known between the first and the last edge only")
    k = np.clip(np.searchsorted(edges, positions, side="right") - 1, 0, len(edges) - 2)
    t, p = positions - edges[k], turns.periods[k]
    return 2 * np.pi * (k + t / p + turns.curve[k] * t * (t - p))


# --- the clock -------------------------------------------------------------------------------------------


class RevolutionClock:
    """Speed, and whether it turns, from the newest edges of a stream. Positions are source sample indices."""

    def __init__(self, rate_hz: float, *, longest_turn_s: float = 2.5) -> None:
        self.rate_hz = rate_hz
        self.longest_turn_s = longest_turn_s
        """No pulse for longer than this is "no pulses", however slow it turned."""
        self.pulses = 0
        """Edges seen since the start."""
        self._edges: deque[float] = deque(maxlen=MEDIAN_TURNS + 1)
        self._now = 0.0

    def restart(self) -> None:
        """A gap in the samples: edges before it say nothing about the turn across it."""
        self._edges.clear()

    def feed(self, edges: Floats, next_sample: int) -> None:
        """Take the edges found in samples before ``next_sample``."""
        self._edges.extend(edges.tolist())
        self.pulses += len(edges)
        self._now = float(next_sample)

    @property
    def since_edge_s(self) -> float:
        """Time from the last edge to the newest sample; inf when there is no edge."""
        return (self._now - self._edges[-1]) / self.rate_hz if self._edges else float("inf")

    @property
    def patience_s(self) -> float:
        """A longer wait than this means that the pulses have stopped: four turns, 0.25 s at least."""
        if len(self._edges) < 2:
            return self.longest_turn_s
        turn_s = (self._edges[-1] - self._edges[-2]) / self.rate_hz
        return min(max(4 * turn_s, 0.25), self.longest_turn_s)

    @property
    def turning(self) -> bool:
        """True while pulses come: two or more, and the last not longer ago than ``patience_s``."""
        return len(self._edges) >= 2 and self.since_edge_s <= self.patience_s

    @property
    def speed_hz(self) -> float | None:
        """Speed over the newest turn that is neither too long nor too short; None when not turning."""
        if not self.turning:
            return None
        edges = np.array(self._edges)
        periods = edges[1:] - edges[:-1]
        if periods.min() >= EVEN * periods.max():  # nothing to repair
            return float(self.rate_hz / periods[-1])
        turns = turns_of(edges)
        good = np.flatnonzero(turns.good)
        period = turns.periods[good[-1]] if len(good) else median(turns.periods)
        return float(self.rate_hz / period)
