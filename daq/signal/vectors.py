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

from daq.signal.basis import TILES, DirectRows, Rows, rows_at_turns
from daq.signal.revolutions import Turns, turn_fractions
from daq.signal.shapes import Complexes, Floats

WIDE = 16
"""Frames taken together where a whole row of memory is cheaper to work on than single frames."""
CACHEFUL = 1 << 17
"""Samples worked on at a time: 1 MiB as float64, so that each is read from memory once."""
PIECE_FRAMES = 32768
"""Frames whose angles are worked on at a time; part of what makes results repeatable, as ``CACHEFUL`` is."""


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


class Accumulator:
    """Sums of the normal equations: ``add`` blocks, ``combine`` with others, ``solve``."""

    def __init__(self, orders: Sequence[int] = (1, 2, 3)) -> None:
        self.orders = tuple(orders)
        self.samples = 0
        size = 1 + 2 * len(self.orders)
        self._counts = _Counts()
        self._gram: Floats = np.zeros((size, size))
        self._cross: Floats = np.zeros((size, 0))
        self._square: Floats = np.zeros(0)
        self._reference: Floats | None = None

    def add(self, fractions: Floats, counts: NDArray[Any]) -> None:
        """Add frames: ``fractions`` (n,) of a turn, ``counts`` (n, probes) integers."""
        if len(fractions):
            self._add(DirectRows(fractions, self.orders), [counts], self._step(counts))

    def add_turns(self, turns: Turns, start: int, parts: Sequence[NDArray[Any]]) -> None:
        """Add frames that begin with sample ``start`` of one stretch of good turns, in ``parts`` that follow
        each other: what ``add`` would do at their fractions of a turn, to 1e-11 of each amplitude, in less
        time."""
        frames = sum(len(part) for part in parts)
        if frames:
            step = self._step(parts[0])
            self._add(rows_at_turns(turns, start, start + frames, self.orders, step), parts, step)

    def _step(self, counts: NDArray[Any]) -> int:
        """Frames taken at a time, in whole tiles."""
        tiles: int = CACHEFUL // (counts.shape[1] * TILES[0])
        return max(1, tiles) * TILES[0]

    def _add(self, rows: Rows, parts: Sequence[NDArray[Any]], step: int) -> None:
        reference = self._begin(parts[0]) if self._reference is None else self._reference
        cross, square, frames = self._counts.products(rows, parts, reference, step)
        self._gram += rows.gram
        self._cross += cross
        self._square += square
        self.samples += frames

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


class _Counts:
    """Products of rows and counts, a cacheful of frames at a time in memory that is used again."""

    def __init__(self) -> None:
        self._y: Floats = np.empty((0, 0))
        self._tiled: Floats = np.empty(0)

    def products(
        self, rows: Rows, parts: Sequence[NDArray[Any]], reference: Floats, step: int
    ) -> tuple[Floats, Floats, int]:
        """``rows`` (m, n) times the counts less ``reference``: (m, probes); each probe's sum of squares; n.

        Counts of 16 bits lose the reference afterwards: their sums and sums of squares are whole numbers
        below 2^53, exact in any order. Wider ones lose it before, as whole numbers of float64."""
        columns, frames = parts[0].shape[1], sum(len(part) for part in parts)
        exact = parts[0].dtype.itemsize <= 2
        cross, squares = np.zeros((len(rows.gram), columns)), np.zeros(WIDE * columns)
        memory = self._shaped(step + rows.room, columns)
        for at in range(0, frames, step):
            used = _fill(memory, parts, at, min(step, frames - at))
            wide = memory[:used].reshape(-1, WIDE * columns)
            if not exact:
                wide -= self._repeated(reference)
                memory[frames - at : used] = 0.0
            squares += np.einsum("ij,ij->j", wide, wide)
            cross += rows.times(at, used, memory)
        square = squares.reshape(WIDE, columns).sum(axis=0)
        if exact:
            square += reference * (frames * reference - 2 * cross[0])
            cross -= np.outer(rows.gram[0], reference)
        return cross, square, frames

    def _shaped(self, frames: int, columns: int) -> Floats:
        if len(self._y) < frames or self._y.shape[1] != columns:
            self._y = np.empty((frames, columns))
        return self._y

    def _repeated(self, reference: Floats) -> Floats:
        if len(self._tiled) != WIDE * len(reference):
            self._tiled = np.tile(reference, WIDE)
        return self._tiled


def _fill(y: Floats, parts: Sequence[NDArray[Any]], first: int, frames: int) -> int:
    """``frames`` of the ``parts`` from ``first`` on into ``y``, and zero rows below up to whole tiles; how
    many there are then. Fresh memory may hold signalling NaNs, and arithmetic on them warns."""
    at = -first
    for part in parts:
        a, b = max(0, at), min(frames, at + len(part))
        if a < b:
            y[a:b] = part[a - at : b - at]
        at += len(part)
    whole = -(-frames // TILES[0]) * TILES[0]
    y[frames:whole] = 0.0
    return whole


def _white_covariance(inverse: Floats, variance: Floats) -> Floats:
    """Shape (orders, probes, 2, 2) from the inverse normal matrix and each probe's residual variance."""
    count = (len(inverse) - 1) // 2
    blocks = np.stack([inverse[1 + 2 * k : 3 + 2 * k, 1 + 2 * k : 3 + 2 * k] for k in range(count)])
    cov: Floats = blocks[:, None] * variance[None, :, None, None]
    return cov


def pieces(start: int, stop: int) -> list[tuple[int, int]]:
    """``start`` to ``stop`` in steps of ``PIECE_FRAMES``."""
    return list(pairwise([*range(start, stop, PIECE_FRAMES), stop]))


def stretch_pieces(turns: Turns) -> Iterator[tuple[Turns, int, int]]:
    """All samples in good turns, piece by piece: (the stretch they lie in, first sample, stop sample)."""
    bounds = turns.first_samples
    for first, stop in turns.stretches():
        stretch = turns.part(first, stop)
        for a, b in pieces(int(bounds[first]), int(bounds[stop])):
            yield stretch, a, b


def turn_pieces(turns: Turns) -> Iterator[tuple[Floats, int, int]]:
    """The same with the samples' fractions of a turn."""
    for stretch, a, b in stretch_pieces(turns):
        yield turn_fractions(stretch, a, b), a, b
