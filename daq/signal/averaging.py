"""How well the mean of some blocks' vectors is known, noise that is not white included.

The residuals of the blocks tell it for white noise, precisely. Where the blocks scatter about their own slow
trend by more, noise is coloured, and the scatter tells it, roughly: that of 8 blocks is good to 30 %.
"""

from __future__ import annotations

import numpy as np

from daq.signal.shapes import Complexes, Floats

BEYOND_SD = 3.1
"""A scatter beyond so many standard deviations of chance (0.1 %, one side) shows coloured noise."""
FEWEST_GROUPS = 6
"""Blocks are also taken in groups of 2 and 4 while so many groups remain: noise slower than a block."""


def chi_square_quantile(freedom: float, sd: float) -> float:
    """Quantile of chi square over its degrees of freedom at ``sd`` of a normal (Wilson, Hilferty 1931)."""
    spread = 2.0 / (9.0 * freedom)
    return float((1.0 - spread + sd * np.sqrt(spread)) ** 3)


def colour(scatter: Floats, white: Floats, freedom: float) -> Floats:
    """Factor by which a white variance is to be widened, 1 or more; all of any one shape.

    ``scatter``: the same variance from ``freedom`` degrees of freedom of scatter. Within chance the two are
    averaged, so that a white record does not wait for luck; beyond it the scatter counts, with what a Student
    t of as many degrees has more than a normal (variance n / (n - 2))."""
    ratio = np.divide(scatter, white, out=np.ones_like(white), where=white > 0)
    shown = ratio * freedom / max(freedom - 2.0, 1.0)
    within = np.maximum(1.0, (1.0 + ratio) / 2)
    found: Floats = np.where(ratio > chi_square_quantile(freedom, BEYOND_SD), shown, within)
    return found


def trend_residuals(vectors: Complexes) -> Complexes:
    """What a straight line leaves of ``vectors`` (n, probes), evenly spaced."""
    at = np.arange(len(vectors)) - (len(vectors) - 1) / 2
    centred = vectors - vectors.mean(axis=0)
    left: Complexes = centred - np.outer(at, at @ centred / (at @ at))
    return left


def _scatter(vectors: Complexes) -> tuple[Floats, int]:
    """Variance per component of the mean of ``vectors``, about their trend, and its degrees of freedom."""
    freedom = 2 * (len(vectors) - 2)
    square = np.sum(np.abs(trend_residuals(vectors)) ** 2, axis=0)
    return square / freedom / len(vectors), freedom


def widening(vectors: Complexes, white: Floats) -> Floats:
    """Shape (probes,): factor on the white variance of a mean of blocks; ``vectors`` (blocks, probes) in
    order of time, ``white`` (probes,) the variance per component of one of them."""
    count = len(vectors)
    if count < 4:
        return np.ones(len(white))
    found = colour(*_own(vectors, white))
    together = 2
    while count // together >= FEWEST_GROUPS:
        groups = count // together
        means = vectors[count - groups * together :].reshape(groups, together, -1).mean(axis=1)
        scatter, own, freedom = _own(means, white / together)
        slow = scatter > own * chi_square_quantile(freedom, BEYOND_SD)
        found = np.where(slow, np.maximum(found, colour(scatter, own, freedom)), found)
        together *= 2
    return found


def _own(vectors: Complexes, white: Floats) -> tuple[Floats, Floats, int]:
    scatter, freedom = _scatter(vectors)
    return scatter, white / len(vectors), freedom
