"""Rows 1, cos, sin, cos 2, sin 2 ... of the least squares at the angles of a stretch of turns.

At many samples a turn the angle hardly bends within a few dozen of them: there cosines and sines are taken at
twelve angles of a tile only and carried to its samples by a polynomial through these (Chebyshev's nodes),
one matrix product for many tiles. For e^{jx} over x = -a..a the polynomial is off by at most
2 (a/2)^12 / 12! (the remainder of interpolation at these nodes). Tiles are kept so short that a is at most
``SPAN_RAD`` for the highest order: 2.3e-15 for the rows, and 9e-12 for the products of two rows, which are
summed by the same polynomial. With fewer samples a turn every angle is worked on.
"""

from __future__ import annotations

from bisect import bisect_left
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from daq.signal.revolutions import Turns, turn_fractions
from daq.signal.shapes import Floats

SPAN_RAD = 0.6
"""Half of the angle, times the highest order, that a tile may span."""
NODES = 12
TILES = (64, 32)
"""Frames in a tile, the longer the better; shorter ones cost more than they save."""
HEIGHT = 4
"""The number of rows is a multiple of this, the rows added zero: products are faster so."""
SMALL_PRODUCT = 1 << 18
"""Multiplications in one matrix product at most. So small a one stays in the cache, and the linear algebra
library never gives it to several threads: the number of these must not change the last bit of a result."""
_STEPS = 1024
_CIRCLE = 2 * np.pi * np.arange(_STEPS) / _STEPS
_COS, _SIN = np.cos(_CIRCLE), np.sin(_CIRCLE)


def basis(fractions: Floats, orders: Sequence[int]) -> Floats:
    """Rows 1, cos, sin, cos 2, sin 2 ... of ``orders`` at ``fractions`` (n,) of a turn: (1 + 2 orders, n)."""
    out = np.empty((1 + 2 * len(orders), len(fractions)))
    out[0] = 1.0
    _fill(out[1:], *cos_sin(fractions), orders)
    return out


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


def _fill(out: Floats, cos1: Floats, sin1: Floats, orders: Sequence[int]) -> None:
    """Cosine and sine of each of ``orders`` into the rows of ``out``: by recurrence from the first's."""
    cos_k, sin_k = cos1, sin1
    for k in range(1, max(orders) + 1):
        if k > 1:
            cos_k, sin_k = cos_k * cos1 - sin_k * sin1, sin_k * cos1 + cos_k * sin1
        if k in orders:
            row = 2 * orders.index(k)
            out[row], out[row + 1] = cos_k, sin_k


@dataclass(frozen=True, slots=True)
class _Tile:
    """A tile of so many frames: its nodes and how to get from them to the frames."""

    frames: int
    nodes: Floats
    """Shape (NODES,): positions in frames from the tile's first one."""
    spread: Floats
    """Shape (NODES, frames): values at the nodes -> at the frames."""
    sums: Floats
    """Shape (frames + 1, NODES): weights of the nodes in the sum over the frames before each."""


@lru_cache
def _tile(frames: int) -> _Tile:
    """Lagrange's polynomials at Chebyshev's nodes, in barycentric form."""
    angle = (np.arange(NODES) + 0.5) * np.pi / NODES
    nodes = (frames - 1) / 2 * (1 - np.cos(angle))
    weight = np.where(np.arange(NODES) % 2, -1.0, 1.0) * np.sin(angle)
    terms = weight[:, None] / (np.arange(frames) - nodes[:, None])  # no node is a whole number here
    spread = terms / terms.sum(axis=0)
    sums = np.zeros((frames + 1, NODES))
    np.cumsum(spread.T, axis=0, out=sums[1:])
    return _Tile(frames, nodes, spread, sums)


def tile_frames(samples_per_turn: float, highest: int) -> int | None:
    """The longest tile that ``SPAN_RAD`` allows; None where every angle must be worked on."""
    longest = SPAN_RAD * samples_per_turn / (np.pi * highest)
    return next((frames for frames in TILES if frames <= longest), None)


class Rows(Protocol):
    """Rows at some samples, made when they are asked for."""

    height: int
    """Number of rows, those of zeros included."""
    gram: Floats
    """Sums of their products: the normal matrix, shape (1 + 2 orders, 1 + 2 orders)."""

    def part(self, start: int, stop: int) -> Floats:
        """Rows of the samples ``start`` to ``stop``, counted from the first; shape
        (``height``, n). To be used before the next ones are asked for."""
        ...


def padded(rows: int) -> int:
    """``rows`` and the zero ones below them."""
    return -(-rows // HEIGHT) * HEIGHT


def rows_at_turns(turns: Turns, start: int, stop: int, orders: Sequence[int]) -> Rows:
    """Rows at the samples ``start`` to ``stop``, all of which lie in one stretch of good turns."""
    span = Span.of(turns, start, stop)
    frames = tile_frames(float(span.periods.min()), max(orders))
    if frames is None:
        return DirectRows(turn_fractions(turns, start, stop), orders)
    return TiledRows(span, _tile(frames), orders)


class DirectRows:
    """Every angle worked on."""

    def __init__(self, fractions: Floats, orders: Sequence[int]) -> None:
        size = 1 + 2 * len(orders)
        self.height = tall = padded(size)
        self._rows = np.zeros((tall, len(fractions)))
        self._rows[0] = 1.0
        _fill(self._rows[1:], *cos_sin(fractions), orders)
        gram = np.zeros((tall, tall))
        step = SMALL_PRODUCT // tall**2
        for at in range(0, len(fractions), step):
            part = self._rows[:, at : at + step]
            gram += part @ part.T
        self.gram: Floats = gram[:size, :size]

    def part(self, start: int, stop: int) -> Floats:
        return self._rows[:, start:stop]


class TiledRows:
    """Angles worked on at the nodes of tiles. A tile in which a turn ends is there twice: by the angle before
    that and by the angle after it."""

    def __init__(self, span: Span, tile: _Tile, orders: Sequence[int]) -> None:
        self._tile, self._ends, self._size = tile, span.ends.tolist(), 1 + 2 * len(orders)
        whole = np.arange(-(-span.samples // tile.frames))
        self._whole = len(whole)
        at = np.concatenate((whole, span.ends // tile.frames))
        turn = np.concatenate(
            (
                np.searchsorted(span.ends, whole * tile.frames, side="right"),
                np.arange(1, 1 + len(span.ends)),
            )
        )
        self._values = np.empty((self._size, len(at), NODES))
        self._values[0] = 1.0
        angle = 2 * np.pi * span.fractions((at * tile.frames)[:, None] + tile.nodes, turn)
        _fill(self._values[1:], np.cos(angle), np.sin(angle), orders)
        self.gram: Floats = self._products(span, at)
        self._after = (self._values[1:, len(whole) :].reshape(-1, NODES) @ tile.spread).reshape(
            self._size - 1, -1, tile.frames
        )
        self.height = padded(self._size)
        self._memory: Floats = np.zeros((self.height, 0))

    def part(self, start: int, stop: int) -> Floats:
        long = self._tile.frames
        first, last = start // long, -(-stop // long)
        rows = self._shaped((last - first) * long)
        values = self._values[1:, first:last].reshape(-1, NODES)
        np.matmul(values, self._tile.spread, out=rows[1 : self._size].reshape(-1, long))
        for i in range(bisect_left(self._ends, first * long), bisect_left(self._ends, last * long)):
            end, at = self._ends[i] - first * long, self._ends[i] % long
            rows[1 : self._size, end : end + long - at] = self._after[:, i, at:]
        return rows[:, start - first * long : stop - first * long]

    def _shaped(self, frames: int) -> Floats:
        """Room for rows that lie close together; ones in the first, zeros below the last."""
        if self._memory.shape[1] != frames:
            self._memory = np.zeros((self.height, frames))
            self._memory[0] = 1.0
        return self._memory

    def _products(self, span: Span, at: NDArray[np.int64]) -> Floats:
        """Sums of the rows' products over the frames of each tile that its angle holds for."""
        long = self._tile.frames
        used = np.empty((2, len(at)), np.int64)
        used[0], used[1] = 0, np.minimum(span.samples - at * long, long)
        split = span.ends % long
        used[0, self._whole :] = split
        used[1, span.ends // long] = split
        weighted = self._values * (self._tile.sums[used[1]] - self._tile.sums[used[0]])
        found: Floats = weighted.reshape(self._size, -1) @ self._values.reshape(self._size, -1).T
        return found


@dataclass(frozen=True, slots=True)
class Span:
    """Samples of one stretch of good turns, counted from the first of them."""

    samples: int
    edges: Floats
    periods: Floats
    slope: Floats
    curve: Floats
    ends: NDArray[np.int64]
    """The first sample of each turn but the first."""

    @classmethod
    def of(cls, turns: Turns, start: int, stop: int) -> Span:
        first = turns.first_samples
        k0 = int(np.searchsorted(first, start, side="right")) - 1
        k1 = int(np.searchsorted(first, stop, side="left"))
        edges, curve = turns.edges[k0 : k1 + 1] - start, turns.curve[k0:k1]
        periods = edges[1:] - edges[:-1]
        return cls(
            stop - start, edges, periods, 1 / periods - curve * periods, curve, first[k0 + 1 : k1] - start
        )

    def fractions(self, positions: Floats, turn: NDArray[np.int64]) -> Floats:
        """By the angle of ``turn`` (n,), also a little beyond its ends; ``positions``, found: (n, m)."""
        u = positions - self.edges[turn][:, None]
        found: Floats = u * (self.slope[turn][:, None] + self.curve[turn][:, None] * u)
        return found
