"""Slow motion of vectors over some blocks: a straight trend, or a swing of up to two windows' period.

Of a swing a window may hold half a period only, with half of its travel in it; a sine fitted with an offset
of its own tells the whole of it, as far as noise lets it.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

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
    cos, sin, moments, gain, hz = _trials(times_s, block_s, slowest_s)
    centred = values - values.mean(axis=0)
    cc, ss, cs = moments
    along_c, along_s = cos @ centred, sin @ centred
    det = (cc * ss - cs**2)[:, None]
    a = (ss[:, None] * along_c - cs[:, None] * along_s) / det
    b = (cc[:, None] * along_s - cs[:, None] * along_c) / det
    explained = np.real(np.conj(a) * along_c + np.conj(b) * along_s)
    best = np.argmax(explained, axis=0)
    columns = np.arange(centred.shape[1])
    worst = 1 / np.sqrt(_least(cc, ss, cs))
    total = np.sum(np.abs(centred) ** 2, axis=0)
    taken = explained[best, columns]
    return Swing(
        travel=_travel(a[best, columns], b[best, columns]) / gain[best],
        explained=taken,
        left=np.maximum(0.0, total - taken),
        per_se=2 * worst[best] / gain[best],
        period_s=1 / hz[best],
    )


def told_over_block_se(times_s: Floats, slowest_s: float, sd: float) -> float:
    """Amplitude of a swing of the slowest period that noise cannot hide, over the standard error per
    component of one block: ``sd`` times its own standard error in the direction known worst."""
    hz = np.array([1.0 / slowest_s])
    _, _, moments = _waves(times_s, hz)
    return sd / float(np.sqrt(_least(*moments)[0]))


def _trials(
    times_s: Floats, block_s: float, slowest_s: float
) -> tuple[Floats, Floats, tuple[Floats, Floats, Floats], Floats, Floats]:
    hz = _trial_hz(times_s[-1] - times_s[0] + block_s, block_s, slowest_s)
    cos, sin, moments = _waves(times_s, hz)
    good = _least(*moments) > 1e-6 * len(times_s)  # at two blocks a period one of the two may vanish
    cc, ss, cs = (m[good] for m in moments)
    return cos[good], sin[good], (cc, ss, cs), np.sinc(hz[good] * block_s), hz[good]


def _trial_hz(length_s: float, block_s: float, slowest_s: float) -> Floats:
    """Frequencies from the slowest to two blocks a period."""
    at, last = length_s / slowest_s, 0.5 * length_s / block_s + 0.01
    parts = []
    for until, steps in STEPS:
        parts.append(np.arange(at, min(until, last), 1.0 / steps))
        at = max(at, min(until, last))
    found: Floats = np.concatenate(parts) / length_s
    return found


def _waves(times_s: Floats, hz: Floats) -> tuple[Floats, Floats, tuple[Floats, Floats, Floats]]:
    """Cosines and sines (trials, n) about their means, and their sums of squares and of products."""
    turns = 2 * np.pi * np.outer(hz, times_s - times_s.mean())
    cos, sin = np.cos(turns), np.sin(turns)
    cos -= cos.mean(axis=1, keepdims=True)
    sin -= sin.mean(axis=1, keepdims=True)
    sums = tuple(np.einsum("ij,ij->i", p, q) for p, q in ((cos, cos), (sin, sin), (cos, sin)))
    return cos, sin, (sums[0], sums[1], sums[2])


def _least(cc: Floats, ss: Floats, cs: Floats) -> Floats:
    """Smaller eigenvalue of each [[cc, cs], [cs, ss]]."""
    least: Floats = (cc + ss) / 2 - np.hypot((cc - ss) / 2, cs)
    return least


def _travel(a: Complexes, b: Complexes) -> Floats:
    """Longest diameter of the ellipse ``a cos + b sin``."""
    even, odd = (np.abs(a) ** 2 + np.abs(b) ** 2) / 2, (np.abs(a) ** 2 - np.abs(b) ** 2) / 2
    longest: Floats = 2 * np.sqrt(even + np.hypot(odd, np.real(a * np.conj(b))))
    return longest
