"""A window folded small: sums of counts over equal shares of each turn, for what is no order of the speed.

Sixteen sums a turn carry everything up to 8X, so a spectrum of them costs next to nothing beside the samples.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.revolutions import Turns
from daq.signal.shapes import Floats

MOST_ROWS = 8192
"""Memory is bounded: a longer window is folded from its beginning only."""
FINE, COARSE = 16, 8
"""Sums a turn."""
FEWEST_TURNS = 12
"""With fewer turns a spectrum tells nothing from anything."""


def turn_numbers(turns: Turns) -> Floats:
    """Turns made at each edge since the first, shape (edges,), whole numbers: what a stretch that is not good
    holds is rounded from its length."""
    lengths = turns.periods
    typical = float(np.median(lengths[turns.good])) if turns.good.any() else 1.0
    total = np.concatenate(([0.0], np.cumsum(np.where(turns.good, 1.0, lengths / typical))))
    wrong = np.concatenate(([0.0], np.cumsum(np.where(turns.good, 0.0, lengths / typical))))
    numbers: Floats = total + np.rint(wrong) - wrong
    return np.rint(numbers)


class Fold:
    """Sums over bins of equal angle: ``add`` the pieces of a window, then ask for ``rows``."""

    def __init__(self, turns: Turns, columns: int) -> None:
        good = turns.periods[turns.good]
        per_turn = float(np.median(good)) if len(good) else 0.0
        self._numbers = turn_numbers(turns)
        self.bins = 0
        """In a turn; 0 when there is nothing to fold."""
        if len(good) >= FEWEST_TURNS and per_turn >= 2 * COARSE:
            fine = per_turn >= 2 * FINE and len(good) * FINE <= MOST_ROWS
            self.bins = FINE if fine else COARSE
        held = MOST_ROWS // self.bins if self.bins else 0
        self.complete: bool = bool(self.bins) and len(turns.good) <= held
        """Whether all turns are folded."""
        self._turns = turns.part(0, min(len(turns.good), held))
        self._bounds = self._make_bounds()
        self._sums = np.zeros((max(0, len(self._bounds) - 1), columns), np.int64)

    def _make_bounds(self) -> NDArray[np.int64]:
        """First sample of each bin, and the stop of the last."""
        if not self.bins:
            return np.zeros(0, np.int64)
        share = np.arange(self.bins) / self.bins
        inner = self._turns.edges[:-1, None] + self._turns.periods[:, None] * share
        bounds: NDArray[np.int64] = np.ceil(np.append(inner.ravel(), self._turns.edges[-1])).astype(np.int64)
        return bounds

    def add(self, counts: NDArray[Any], start: int) -> None:
        """Take (frames, columns) counts of samples from ``start`` on."""
        bounds = self._bounds
        if not len(bounds) or start >= bounds[-1]:
            return
        stop = min(start + len(counts), int(bounds[-1]))
        first = int(np.searchsorted(bounds, start, side="right")) - 1
        last = int(np.searchsorted(bounds, stop, side="left"))
        at = bounds[first:last] - start
        at[0] = 0
        self._sums[first:last] += np.add.reduceat(counts[: stop - start], at, axis=0, dtype=np.int64)

    def rows(self) -> Rows | None:
        """What was folded; None when that is nothing."""
        if not self.bins:
            return None
        turns, bounds = self._turns, self._bounds
        size = bounds[1:] - bounds[:-1]
        used = np.repeat(turns.good, self.bins) & (size > 0)  # a turn may have fewer samples than bins
        which = np.repeat(np.arange(len(turns.good)), self.bins)[used]
        size = size[used]
        middle = (bounds[1:] + bounds[:-1] - 1)[used] / 2 - turns.edges[which]
        period, curve = turns.periods[which], turns.curve[which]
        angle = self._numbers[which] + middle * (1 / period - curve * period + curve * middle)
        mean = self._sums[used, 1:] / size[:, None]
        mean -= mean.mean(axis=0)
        bins = np.tile(np.arange(self.bins), len(turns.good))[used]
        slot = self._numbers[which].astype(np.int64) * self.bins + bins
        return Rows(mean, angle, size, size / period, slot, which, self.bins)


@dataclass(frozen=True, slots=True, eq=False)
class Rows:
    """Means of bins, and where they lie; n rows."""

    values: Floats
    """Shape (n, probes): counts less their mean."""
    angle: Floats
    """Middle of each bin, turns."""
    size: NDArray[np.int64]
    """Samples in each bin."""
    width: Floats
    """Share of a turn that those samples span."""
    slot: NDArray[np.int64]
    """Number of each bin counted along the turns, those left out included."""
    turn: NDArray[np.int64]
    """Index of the turn in the window."""
    bins: int
    """In a turn."""

    @property
    def turns(self) -> float:
        """From the first bin to the last."""
        return float((self.slot[-1] - self.slot[0] + 1) / self.bins)

    @property
    def middle(self) -> float:
        return float(self.angle.mean())

    def part(self, first: int, stop: int) -> Rows:
        """Those of turns ``first`` to ``stop`` of the window."""
        a, b = np.searchsorted(self.turn, (first, stop)).tolist()
        return replace(
            self,
            values=self.values[a:b],
            angle=self.angle[a:b],
            size=self.size[a:b],
            width=self.width[a:b],
            slot=self.slot[a:b],
            turn=self.turn[a:b],
        )

    def pull(self, order: float) -> Floats:
        """By what a cosine of ``order`` is smaller averaged over each bin's samples (n,)."""
        half = np.pi * order * self.width / self.size
        under = self.size * np.sin(half)
        pulled: Floats = np.divide(np.sin(half * self.size), under, out=np.ones_like(half), where=under != 0)
        return pulled

    def sum_of(self, order: int, line: float, origin: float) -> complex:
        """Sum of e^{j 2 pi (order theta + line (theta - origin))} over all samples."""
        turned = (order * self.angle) % 1.0 + (line * (self.angle - origin)) % 1.0
        return complex(np.sum(self.size * self.pull(order + line) * np.exp(2j * np.pi * turned)))

    def columns(self, orders: Floats) -> Floats:
        """Cosines and sines of ``orders`` (m,), whole or not, averaged over the samples of each bin, with the
        middle of the record as angle zero: shape (n, 2 m), cosine and sine side by side."""
        out, middle = np.empty((len(self.angle), 2 * len(orders))), self.middle
        for k, order in enumerate(orders):
            pull = self.pull(order)
            turned = 2 * np.pi * ((order * (self.angle - middle)) % 1.0)
            out[:, 2 * k], out[:, 2 * k + 1] = pull * np.cos(turned), pull * np.sin(turned)
        return out
