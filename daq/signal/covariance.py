"""The covariance that is stated with a vector."""

from __future__ import annotations

import numpy as np

from daq.signal.shapes import Complexes, Floats

CHI_SQUARE_95 = 5.991464547107979
"""95 % point of chi square with two degrees of freedom, -2 ln 0.05."""


def scatter_covariance(parts: Complexes) -> Floats:
    """Covariance of the mean of sub-window vectors; ``parts`` (M, ...) -> (..., 2, 2). Needs M >= 2."""
    m = len(parts)
    d = parts - parts.mean(axis=0)
    stacked = np.stack([d.real, d.imag], axis=-1)
    cov: Floats = np.einsum("m...i,m...j->...ij", stacked, stacked) / ((m - 1) * m)
    return cov


def small_sample_factor(parts: int) -> float:
    """How much larger the 95 % region of a mean of ``parts`` 2-D vectors is (squared) than with a known
    covariance: Hotelling's T2 over the chi square, whose quantile F(0.95; 2, n) has a closed form.

    16 parts give 1.34, 8 parts 2.0; infinite below 3."""
    if parts < 3:
        return float("inf")
    return (parts - 1) * float(0.05 ** (-2.0 / (parts - 2)) - 1.0) / CHI_SQUARE_95


def stated_covariance(white: Floats, parts: Complexes) -> Floats:
    """The covariance to state: from the residuals, or from the scatter of the sub-windows where larger.

    ``white`` (..., 2, 2) and ``parts`` (M, ...). Noise that is not white, a hunting speed and jitter of the
    edges show in the scatter only. Where it exceeds the white one beyond chance (1 % point of its own chi
    square, by a normal approximation) it is taken with the small-sample factor; below that the white one is
    widened to it."""
    m = len(parts)
    if m < 3:
        return white
    scatter = scatter_covariance(parts)
    trace_white = np.trace(white, axis1=-2, axis2=-1)
    trace_scatter = np.trace(scatter, axis1=-2, axis2=-1)
    ratio = np.divide(
        trace_scatter, trace_white, out=np.full_like(trace_white, np.inf), where=trace_white > 0
    )
    beyond = 1 + 2.33 * np.sqrt(1.0 / (m - 1))
    widened = white * np.where(np.isfinite(ratio), np.maximum(1.0, ratio), 1.0)[..., None, None]
    chosen: Floats = np.where((ratio > beyond)[..., None, None], scatter * small_sample_factor(m), widened)
    return chosen
