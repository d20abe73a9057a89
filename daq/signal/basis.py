"""Rows 1, cos, sin, cos 2, sin 2 ... of the least squares at the angles of a stretch of turns, times counts.

At many samples a turn the angle hardly bends within a few dozen of them. There cosines and sines are taken
at the eight Chebyshev nodes of each tile of samples only; what they are between is the polynomial through
these. So the counts of a tile are summed first with the weights that carry the nodes' values to the samples,
the same for every tile, and eight sums a tile are then multiplied with cosines and sines. For e^{jx} over
x = -a..a the polynomial is off by at most 2 (a/2)^8 / 8! (the remainder of interpolation at these nodes).
Tiles are kept so short that a is at most ``SPAN_RAD`` for the highest order: 3e-11. With fewer samples a turn
every angle is worked on.
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

SPAN_RAD = 1 / 3
"""Half of the angle, times the highest order, that a tile may span."""
NODES = 8
TILES = (64, 32, 16)
"""Frames in a tile, the longer the better; shorter ones cost more than they save."""
HEIGHT = 4
"""The number of rows is a multiple of this, the rows added zero: products are faster so."""
SMALL_PRODUCT = 1 << 18
"""Multiplications in one matrix product at most. The linear algebra library never gives so small a one to
several threads: their number must not change the last bit of a result."""
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
    """Rows at some samples that follow each other."""

    gram: Floats
    """Sums of their products: the normal matrix, shape (1 + 2 orders, 1 + 2 orders)."""
    room: int
    """So many frames more than ``step`` must ``times`` have for itself."""

    def times(self, first: int, frames: int, y: Floats) -> Floats:
        """The rows from sample ``first`` on, a multiple of ``step``, times ``y[:frames]`` (frames, probes):
        (1 + 2 orders, probes). ``frames`` is a multiple of ``TILES[0]``, ``y`` 0 beyond the last sample, and
        used up."""
        ...


def padded(rows: int) -> int:
    """``rows`` and the zero ones below them."""
    return -(-rows // HEIGHT) * HEIGHT


def rows_at_turns(turns: Turns, start: int, stop: int, orders: Sequence[int], step: int) -> Rows:
    """Rows at the samples ``start`` to ``stop``, all of which lie in one stretch of good turns. They are
    taken ``step`` samples at a time, a multiple of ``TILES[0]``."""
    span = Span.of(turns, start, stop)
    frames = tile_frames(float(span.periods.min()), max(orders))
    if frames is None:
        return DirectRows(turn_fractions(turns, start, stop), orders)
    return TiledRows(span, _tile(frames), orders, step)


def _product(one: Floats, other: Floats) -> Floats:
    """``one`` (m, n) times ``other`` (n, k), in slices of ``SMALL_PRODUCT``."""
    step = max(1, SMALL_PRODUCT // (len(one) * other.shape[1]))
    found: Floats = one[:, :step] @ other[:step]
    for at in range(step, len(other), step):
        found += one[:, at : at + step] @ other[at : at + step]
    return found


class DirectRows:
    """Every angle worked on."""

    def __init__(self, fractions: Floats, orders: Sequence[int]) -> None:
        size = 1 + 2 * len(orders)
        tall, self.room = padded(size), 0
        self._rows = np.zeros((tall, len(fractions)))
        self._rows[0] = 1.0
        _fill(self._rows[1:], *cos_sin(fractions), orders)
        self.gram: Floats = _product(self._rows, self._rows.T)[:size, :size]

    def times(self, first: int, frames: int, y: Floats) -> Floats:
        rows = self._rows[:, first : first + frames]
        return _product(rows, y[: rows.shape[1]])[: len(self.gram)]


class TiledRows:
    """Angles worked on at the nodes of tiles. A tile in which a turn ends is there twice: for the samples
    before that, and, after the other tiles of its step, for those after it."""

    def __init__(self, span: Span, tile: _Tile, orders: Sequence[int], step: int) -> None:
        self._tile, self._ends, self._step = tile, span.ends.tolist(), step
        self._size = 1 + 2 * len(orders)
        whole = np.arange(-(-span.samples // TILES[0]) * TILES[0] // tile.frames)
        before = np.searchsorted(span.ends, whole * tile.frames, side="right")
        ends = np.arange(len(span.ends))
        at = np.concatenate((whole, span.ends // tile.frames))
        steps = at * tile.frames // step
        order = np.argsort(steps, kind="stable")
        self._firsts = np.searchsorted(steps[order], np.arange(steps.max() + 2)).tolist()
        turn = np.concatenate((before, 1 + ends))[order]
        self._values: Floats = np.zeros((padded(self._size), len(at), NODES))
        self._values[0] = 1.0
        fractions = span.fractions((at[order] * tile.frames)[:, None] + tile.nodes, turn)
        _fill(self._values[1 : self._size], *cos_sin(fractions), orders)
        self.gram: Floats = self._products(self._used(span, at)[:, order])
        self._values = self._values.reshape(len(self._values), -1)
        self.room = tile.frames * int(np.bincount(span.ends // step, minlength=1).max())
        self._sums: Floats = np.empty((0, 0, 0))

    def times(self, first: int, frames: int, y: Floats) -> Floats:
        long, columns = self._tile.frames, y.shape[1]
        for i in range(bisect_left(self._ends, first), bisect_left(self._ends, first + frames)):
            end = self._ends[i] - first
            tile, within = divmod(end, long)
            y[frames : frames + within] = 0.0
            y[frames + within : frames + long] = y[end : (tile + 1) * long]
            y[end : (tile + 1) * long] = 0.0
            frames += long
        tiles = frames // long
        if self._sums.shape != (tiles, NODES, columns):
            self._sums = np.empty((tiles, NODES, columns))
        np.matmul(self._tile.spread, y[:frames].reshape(tiles, long, columns), out=self._sums)
        a, b = self._firsts[first // self._step : first // self._step + 2]
        values = self._values[:, NODES * a : NODES * b]
        return _product(values, self._sums.reshape(-1, columns))[: self._size]

    def _used(self, span: Span, at: NDArray[np.int64]) -> NDArray[np.int64]:
        """First and stop frame of each tile that its angle holds for: (2, tiles)."""
        long, again = self._tile.frames, len(at) - len(span.ends)
        used = np.empty((2, len(at)), np.int64)
        used[0], used[1] = 0, np.clip(span.samples - at * long, 0, long)
        split = span.ends % long
        used[0, again:] = split
        used[1, span.ends // long] = split
        return used

    def _products(self, used: NDArray[np.int64]) -> Floats:
        """Sums of the rows' products over the frames that are ``used`` of each tile."""
        weighted = self._values * (self._tile.sums[used[1]] - self._tile.sums[used[0]])
        tall = len(weighted)
        found = _product(weighted.reshape(tall, -1), self._values.reshape(tall, -1).T)
        return found[: self._size, : self._size]


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
