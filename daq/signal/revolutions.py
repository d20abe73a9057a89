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

from daq.signal.shapes import Floats, median

MISSED_RATIO = 1.6
DOUBLE_RATIO = 0.6
MEDIAN_TURNS = 7


# --- turns -----------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class Turns:
    """The turns between n edges, n - 1 of them, each marked good or not."""

    edges: Floats
    """Shape (n,), absolute sample index."""
    good: NDArray[np.bool_]
    """Shape (n - 1,): a whole single turn."""
    curve: Floats
    """Shape (n - 1,): second divided difference of the turn count, turns per sample squared."""
    missed_in: NDArray[np.int64]
    """Shape (n - 1,): pulses that did not come in each turn."""
    doubles_in: NDArray[np.int64]
    """Shape (n - 1,): pulses too many, booked to the last of the turns they cut."""

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
    """Turns between ``edges`` (ascending sample indices), judged against the median of their neighbours.

    A turn over 1.6 times the median has missed pulses in it; under 0.6 times it is cut by a double pulse, and
    then its neighbours do not count either: nobody knows which of the two pulses was the mark.
    ``breaks`` are samples before which others were lost: a turn across one is not good either."""
    edges = np.asarray(edges, np.float64)
    if len(edges) < 2:
        none = np.zeros(0, np.int64)
        return Turns(edges, np.zeros(0, bool), np.zeros(0), none, none)
    ratio = _ratio_to_neighbours(edges[1:] - edges[:-1])
    long, short = ratio > MISSED_RATIO, ratio < DOUBLE_RATIO
    good = ~(long | short)
    missed = np.where(long, np.rint(ratio) - 1, 0).astype(np.int64)
    doubles = np.zeros(len(ratio), np.int64)
    if short.any():
        doubles = _count_doubles(ratio, short)
        good[1:] &= ~short[:-1]
        good[:-1] &= ~short[1:]
    for sample in breaks:
        at = int(np.searchsorted(edges, sample))
        good[max(0, at - 1) : at] = False
    return Turns(edges, good, _curvature(edges, good), missed, doubles)


def _ratio_to_neighbours(periods: Floats) -> Floats:
    """Each period over the median of the (up to) seven around it; at the ends of the first and last seven."""
    width = min(MEDIAN_TURNS, len(periods))
    lead = (width - 1) // 2
    last = len(periods) - width
    windows = periods[np.arange(last + 1)[:, None] + np.arange(width)]
    medians = np.partition(windows, lead, axis=1)[:, lead]
    before = np.full(lead, medians[0])
    after = np.full(width - 1 - lead, medians[-1])
    ratio: Floats = periods / np.concatenate((before, medians, after))
    return ratio


def _count_doubles(ratio: Floats, short: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Pulses too many: in each run of short turns, how many more than the turns they add up to."""
    extra = np.zeros(len(ratio), np.int64)
    starts, stops = _runs(short)
    total = np.concatenate(([0.0], np.cumsum(ratio)))
    extra[stops - 1] = (stops - starts) - np.rint(total[stops] - total[starts]).astype(np.int64)
    return extra


def _runs(marked: NDArray[np.bool_]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First and stop index of each run of True."""
    marks = np.concatenate(([False], marked, [False]))
    change = np.flatnonzero(marks[1:] != marks[:-1])
    return change[::2], change[1::2]


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
    edge is 0, each further one 2 pi more. For tests and small arrays; ValueError outside the edges."""
    positions = np.asarray(positions, np.float64)
    turns = turns_of(edges)
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
        turns = turns_of(np.array(self._edges))
        good = np.flatnonzero(turns.good)
        period = turns.periods[good[-1]] if len(good) else median(turns.periods)
        return float(self.rate_hz / period)
