"""Slow motion of vectors over some blocks: a straight trend, or a swing of up to two windows' period.

Of a swing a window may hold half a period only, with half of its travel in it; a sine fitted with an offset
of its own tells the whole of it, as far as noise lets it.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from daq.signal.shapes import Complexes, Floats

STEPS = ((1.0, 40), (3.0, 10), (np.inf, 6))
"""Up to so many cycles over the stretch, trial frequencies differ by this part of a cycle: below one, where
the offset makes the travel hang on the frequency, they lie close. Between two it reads 4 % low at most."""


@dataclass(frozen=True, slots=True, eq=False)
class Trend:
    """A straight line through the vectors."""

    rate: Complexes
    """Shape (columns,): per second."""
    spread_s: float
    """Root of the sum of squares of the times about their mean: the rate's standard error per component is
    that of one block over it."""


def trend(times_s: Floats, values: NDArray[np.complex128 | np.float64]) -> Trend:
    """Line through ``values`` (n, columns) at ``times_s`` (n,)."""
    t = times_s - times_s.mean()
    square = float(t @ t)
    return Trend(t @ values / square, float(np.sqrt(square)))


@dataclass(frozen=True, slots=True, eq=False)
class Swing:
    """The sine that fits each column best. All shapes are (columns,)."""

    travel: Floats
    """Largest distance between two of its positions, what a block averages out put back."""
    explained: Floats
    """Sum of squares that it takes away."""
    left: Floats
    """Sum of squares that it leaves, of both components."""
    per_se: Floats
    """Standard error of the travel over that of one block, in the direction known worst."""
    period_s: Floats

    def apart(self) -> tuple[Swing, Swing]:
        """The first column, and the others."""
        first = {f.name: getattr(self, f.name)[:1] for f in fields(self)}
        others = {f.name: getattr(self, f.name)[1:] for f in fields(self)}
        return Swing(**first), Swing(**others)


def swing(
    times_s: Floats, values: NDArray[np.complex128 | np.float64], block_s: float, slowest_s: float
) -> Swing:
    """Fit offset, cosine and sine to ``values`` (n, columns) at periods from two blocks to ``slowest_s``."""
    trials = _trials(_in_blocks(times_s, block_s), round(slowest_s / block_s, 2))
    centred = np.asarray(values - values.mean(axis=0), np.complex128)
    along = (trials.pairs @ centred.view(np.float64)).reshape(2, -1, centred.shape[1], 2)
    explained = np.einsum("pfci,pfci->fc", along, along)
    best = np.argmax(explained, axis=0)
    columns = np.arange(centred.shape[1])
    first, second = along[0, best, columns].view(np.complex128), along[1, best, columns].view(np.complex128)
    b = second[:, 0] * trials.second[best]
    a = first[:, 0] * trials.first[best] - b * trials.mixed[best]
    taken = explained[best, columns]
    return Swing(
        travel=_travel(a, b) / trials.gain[best],
        explained=taken,
        left=np.maximum(0.0, np.sum(np.abs(centred) ** 2, axis=0) - taken),
        per_se=2 * trials.worst[best] / trials.gain[best],
        period_s=block_s / trials.per_block[best],
    )


def told_over_block_se(times_s: Floats, block_s: float, slowest_s: float, sd: float) -> float:
    """Amplitude of a swing of the slowest period that noise cannot hide, over the standard error per
    component of one block: ``sd`` times its own standard error in the direction known worst."""
    return sd * float(_trials(_in_blocks(times_s, block_s), round(slowest_s / block_s, 2)).worst[0])


@dataclass(frozen=True, slots=True, eq=False)
class _Trials:
    """Of each trial frequency (in cycles a block) cosine and sine about their means, made orthonormal."""

    pairs: Floats
    """Shape (2 trials, n): the first of all pairs, then the second of all."""
    first: Floats
    """What makes the coefficient of the cosine from the projections; the sine's from ``second``."""
    second: Floats
    mixed: Floats
    gain: Floats
    """What a block's mean leaves of it."""
    worst: Floats
    """Standard error of the amplitude over that of one block, in the direction known worst."""
    per_block: Floats


def _in_blocks(times_s: Floats, block_s: float) -> tuple[float, ...]:
    """Times from the middle, to a thousandth of a block: at a steady speed the same again and again."""
    found: list[float] = np.round((times_s - times_s.mean()) / block_s, 3).tolist()
    return tuple(found)


@lru_cache(maxsize=8)
def _trials(at: tuple[float, ...], slowest: float) -> _Trials:
    per_block = _trial_frequencies(len(at), slowest)
    turns = 2 * np.pi * np.outer(per_block, at)
    cos, sin = np.cos(turns), np.sin(turns)
    cos -= cos.mean(axis=1, keepdims=True)
    sin -= sin.mean(axis=1, keepdims=True)
    cc, ss, cs = (np.einsum("ij,ij->i", p, q) for p, q in ((cos, cos), (sin, sin), (cos, sin)))
    least = (cc + ss) / 2 - np.hypot((cc - ss) / 2, cs)
    good = least > 1e-6 * len(at)  # at two blocks a period one of the two may vanish
    cos, sin, cc, ss, cs = cos[good], sin[good], cc[good], ss[good], cs[good]
    first, mixed = 1 / np.sqrt(cc), cs / cc
    second = 1 / np.sqrt(ss - cs * mixed)
    pairs = np.concatenate((first[:, None] * cos, second[:, None] * (sin - mixed[:, None] * cos)))
    per_block = per_block[good]
    return _Trials(pairs, first, second, mixed, np.sinc(per_block), 1 / np.sqrt(least[good]), per_block)


def _trial_frequencies(blocks: int, slowest: float) -> Floats:
    """Cycles a block, from one in ``slowest`` blocks to one in two; closer below a cycle seen."""
    at, last = blocks / slowest, 0.5 * blocks + 0.01
    parts = []
    for until, steps in STEPS:
        parts.append(np.arange(at, min(until, last), 1.0 / steps))
        at = max(at, min(until, last))
    found: Floats = np.concatenate(parts) / blocks
    return found


def _travel(a: Complexes, b: Complexes) -> Floats:
    """Longest diameter of the ellipse ``a cos + b sin``."""
    even, odd = (np.abs(a) ** 2 + np.abs(b) ** 2) / 2, (np.abs(a) ** 2 - np.abs(b) ** 2) / 2
    longest: Floats = 2 * np.sqrt(even + np.hypot(odd, np.real(a * np.conj(b))))
    return longest
