"""Least squares of offset and orders at the measured angles, for all probes at once.

The normal equations are summed block by block, so that each sample is read once. A reference near each
probe's mean is taken off first, as an integer: a gap of -10 V under a small 1X costs no digits. The fit is
the three-parameter sine fit of IEEE 1057 (METHODS 8.1) with more orders beside the first.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.revolutions import Turns, turn_fractions
from daq.signal.shapes import Complexes, Floats

TILE = 32
"""Frames taken together where a whole row of memory is cheaper to work on than single frames."""
PIECE_FRAMES = 8192
"""Frames worked on at a time: basis and samples stay in the cache; part of what makes results repeatable."""


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """A solved fit, in counts. ``V = a + j b`` of ``a cos(n theta) + b sin(n theta)``."""

    orders: tuple[int, ...]
    values: Complexes
    """Shape (orders, probes)."""
    offset: Floats
    """Shape (probes,): mean level, the reference included."""
    residual_sd: Floats
    """Shape (probes,)."""
    ac_rms: Floats
    """Shape (probes,): rms about the mean."""
    cov: Floats
    """Shape (orders, probes, 2, 2): of (a, b), from the residuals taken as white."""
    samples: int

    def value(self, order: int = 1) -> Complexes:
        """Shape (probes,)."""
        found: Complexes = self.values[self.orders.index(order)]
        return found

    def without_first(self) -> Fit:
        """The same without column 0, the once-per-rev channel."""
        return replace(
            self,
            values=self.values[:, 1:],
            offset=self.offset[1:],
            residual_sd=self.residual_sd[1:],
            ac_rms=self.ac_rms[1:],
            cov=self.cov[:, 1:],
        )


def basis(fractions: Floats, orders: Sequence[int]) -> Floats:
    """Rows 1, cos, sin, cos 2, sin 2 ... of ``orders`` at ``fractions`` of a turn; shape (1 + 2 orders, n).

    Multiples come by recurrence from the first order's cosine and sine."""
    out = np.empty((1 + 2 * len(orders), len(fractions)))
    _fill_basis(out, fractions, orders)
    return out


_STEPS = 1024
_CIRCLE = 2 * np.pi * np.arange(_STEPS) / _STEPS
_COS, _SIN = np.cos(_CIRCLE), np.sin(_CIRCLE)


def cos_sin(turns: Floats) -> tuple[Floats, Floats]:
    """Cosine and sine of ``turns`` to 1e-15, quicker than the library where that has no vector form.

    The nearest of 1024 tabled angles is turned by what remains, at most 0.0031 rad, by its power series."""
    at = np.rint(turns * _STEPS)
    x = turns - at * (1.0 / _STEPS)
    x *= 2 * np.pi
    index = at.astype(np.intp) & (_STEPS - 1)
    x2 = x * x
    sin_x = x * (1 - x2 * (1 / 6 - x2 * (1 / 120)))
    cos_x = 1 - x2 * (0.5 - x2 * (1 / 24 - x2 * (1 / 720)))
    cos_t, sin_t = _COS[index], _SIN[index]
    return cos_t * cos_x - sin_t * sin_x, sin_t * cos_x + cos_t * sin_x


def _fill_basis(out: Floats, fractions: Floats, orders: Sequence[int]) -> None:
    cos1, sin1 = cos_sin(fractions)
    cos_k, sin_k = cos1, sin1
    out[0] = 1.0
    for k in range(1, max(orders) + 1):
        if k > 1:
            cos_k, sin_k = cos_k * cos1 - sin_k * sin1, sin_k * cos1 + cos_k * sin1
        if k in orders:
            row = 1 + 2 * orders.index(k)
            out[row], out[row + 1] = cos_k, sin_k


class Accumulator:
    """Sums of the normal equations: ``add`` blocks, ``combine`` with others, ``solve``."""

    def __init__(self, orders: Sequence[int] = (1, 2, 3)) -> None:
        self.orders = tuple(orders)
        size = 1 + 2 * len(self.orders)
        self.samples = 0
        self._gram: Floats = np.zeros((size, size))
        self._cross: Floats = np.zeros((size, 0))
        self._square: Floats = np.zeros(0)
        self._reference: Floats | None = None
        self._work = _Workspace(size)

    def add(self, fractions: Floats, counts: NDArray[Any]) -> None:
        """Add frames: ``fractions`` (n,) of a turn, ``counts`` (n, probes) integers."""
        if not len(fractions):
            return
        reference = self._begin(counts) if self._reference is None else self._reference
        rows = self._work.rows(len(fractions))
        _fill_basis(rows, fractions, self.orders)
        y, square = self._work.reduced(counts, reference)
        size = len(self._gram)
        self._gram += (rows @ rows.T)[:size, :size]
        self._cross += (rows @ y)[:size]
        self._square += square
        self.samples += len(y)

    def combine(self, other: Accumulator) -> None:
        """Add the sums of ``other`` (same orders and probes), whatever its reference."""
        if other._reference is None:
            return
        if self._reference is None:
            self._reference = other._reference
            self._cross = np.zeros_like(other._cross)
            self._square = np.zeros_like(other._square)
        shift = other._reference - self._reference
        sums = other._cross[0]
        self._gram = self._gram + other._gram
        self._cross = self._cross + other._cross + np.outer(other._gram[:, 0], shift)
        self._square = self._square + other._square + 2 * shift * sums + other.samples * shift**2
        self.samples += other.samples

    def only(self, orders: Sequence[int]) -> Accumulator:
        """The same sums with some of the orders left out."""
        if tuple(orders) == self.orders:
            return self
        at = [self.orders.index(k) for k in orders]
        rows = np.array([0, *(r for k in at for r in (1 + 2 * k, 2 + 2 * k))])
        kept = Accumulator(orders)
        kept.samples, kept._reference, kept._square = self.samples, self._reference, self._square
        kept._gram, kept._cross = self._gram[np.ix_(rows, rows)], self._cross[rows]
        return kept

    def solve(self) -> Fit | None:
        """The fit; None with fewer samples than twice the unknowns or angles that do not tell them apart."""
        size = len(self._gram)
        if self._reference is None or self.samples < 2 * size:
            return None
        if np.linalg.cond(self._gram) > 1e8:
            return None
        inverse = np.asarray(np.linalg.inv(self._gram), np.float64)
        found = np.linalg.solve(self._gram, self._cross)
        rss = np.maximum(0.0, self._square - np.einsum("ij,ij->j", found, self._cross))
        variance = rss / (self.samples - size)
        mean = self._cross[0] / self.samples
        return Fit(
            orders=self.orders,
            values=found[1::2] + 1j * found[2::2],
            offset=found[0] + self._reference,
            residual_sd=np.sqrt(variance),
            ac_rms=np.sqrt(np.maximum(0.0, self._square / self.samples - mean**2)),
            cov=_white_covariance(inverse, variance),
            samples=self.samples,
        )

    def _begin(self, counts: NDArray[Any]) -> Floats:
        """Take the reference, whole counts near the mean, from the first frames."""
        reference: Floats = np.rint(counts[:256].mean(axis=0, dtype=np.float64))
        self._reference = reference
        self._cross = np.zeros((len(self._gram), counts.shape[1]))
        self._square = np.zeros(counts.shape[1])
        return reference


class _Workspace:
    """Memory of an accumulator, used again for each piece."""

    def __init__(self, size: int) -> None:
        self._height = -(-size // 4) * 4  # the product is faster in fours; the rows added are zero
        self._rows: Floats = np.empty((0, 0))
        self._y: Floats = np.empty((0, 0))
        self._tile: Floats = np.empty(0)

    def rows(self, frames: int) -> Floats:
        """Room for the basis, rows beyond it zero."""
        if self._rows.shape[1] != frames:
            self._rows = np.zeros((self._height, frames))
        return self._rows

    def reduced(self, counts: NDArray[Any], reference: Floats) -> tuple[Floats, Floats]:
        """``counts`` less ``reference`` as float64, and each column's sum of squares."""
        frames, columns = counts.shape
        padded = -(-frames // TILE) * TILE
        if self._y.shape[0] < padded or self._y.shape[1] != columns:
            self._y = np.empty((padded, columns))
            self._tile = np.tile(reference, TILE)
        y = self._y[:padded]
        y[:frames] = counts
        y[frames:] = 0.0  # fresh memory may hold signalling NaNs, and arithmetic on them warns
        tiles = y.reshape(-1, TILE * columns)
        tiles -= self._tile
        y[frames:] = 0.0
        square = np.einsum("ij,ij->j", tiles, tiles).reshape(TILE, columns).sum(axis=0)
        return y[:frames], square


def _white_covariance(inverse: Floats, variance: Floats) -> Floats:
    """Shape (orders, probes, 2, 2) from the inverse normal matrix and each probe's residual variance."""
    count = (len(inverse) - 1) // 2
    blocks = np.stack([inverse[1 + 2 * k : 3 + 2 * k, 1 + 2 * k : 3 + 2 * k] for k in range(count)])
    cov: Floats = blocks[:, None] * variance[None, :, None, None]
    return cov


def pieces(start: int, stop: int) -> list[tuple[int, int]]:
    """``start`` to ``stop`` in steps of ``PIECE_FRAMES``."""
    return list(pairwise([*range(start, stop, PIECE_FRAMES), stop]))


def turn_pieces(turns: Turns) -> Iterator[tuple[Floats, int, int]]:
    """All samples in good turns, piece by piece: (fractions of a turn, first sample, stop sample)."""
    bounds = turns.first_samples
    for first, stop in turns.stretches():
        stretch = turns.part(first, stop)
        for a, b in pieces(int(bounds[first]), int(bounds[stop])):
            yield turn_fractions(stretch, a, b), a, b
