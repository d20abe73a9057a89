"""The covariance that is stated with a vector: what the scatter of its parts shows, and what it cannot show.

Parts of a window are cut, each gives its vector, and their scatter holds all that varies from part to part:
noise of any colour, jitter of the edges, a hunting speed. What stays the same in every part is added: the
sampling of a sharp edge, the steps of the converter, a line too near an order.
"""

from __future__ import annotations

import numpy as np

from daq.signal.revolutions import Turns
from daq.signal.shapes import Complexes, Floats

CHI_SQUARE_95 = 5.991464547107979
"""95 % point of chi square with two degrees of freedom, -2 ln 0.05."""
FULL_PARTS = 8
"""From so many parts on their scatter tells both axes and the tilt; with fewer it is taken as a circle."""
FEWEST_PARTS = 3
FEWEST_SPREAD, MOST_SPREAD, SPREAD_TURNS = 16, 32, 4
"""Parts of at least four turns and at most 32 of them, but 16 as soon as there are so many turns: measured on
noise with a memory of up to a turn, shorter parts overstate and fewer need a larger small-sample factor."""
PATH_SHARE = 91 / 120
"""Mean square of the angle's error between jittered edges over that of an edge: the parabolas through four
edges weigh them by (1-u)+g, u+g, -g, -g with g = u(1-u)/4; their squares summed, mean over u. [D]"""
BESSEL_TOP = 0.5818652242815963
"""Largest value of J1 (from memory; scipy agrees)."""
STEP_TERMS = np.arange(1.0, 9.0)


def parts_of(turns: int) -> int:
    """Into how many parts so many good turns are cut."""
    return min(turns, max(FEWEST_SPREAD, min(MOST_SPREAD, turns // SPREAD_TURNS)))


# --- scatter ---------------------------------------------------------------------------------------------


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
    if parts < FEWEST_PARTS:
        return float("inf")
    return (parts - 1) * float(0.05 ** (-2.0 / (parts - 2)) - 1.0) / CHI_SQUARE_95


def circle_factor(parts: int) -> float:
    """The same when both components are known to have one variance: F(0.95; 2, 2 parts - 2) instead.

    4 parts give 1.72 where Hotelling needs 9.5. Infinite below 2."""
    if parts < 2:
        return float("inf")
    return 2 * (parts - 1) * float(0.05 ** (-1.0 / (parts - 1)) - 1.0) / CHI_SQUARE_95


def stated_covariance(
    white: Floats, parts: Complexes, jitter: Floats | None = None, turns: int = 0
) -> Floats:
    """The covariance of vectors as the scatter of ``parts`` (M, ...) has it, so that the 95 % region of a
    normal with it holds the truth 95 % of the time: (..., 2, 2).

    ``white`` (..., 2, 2) from the residuals counts below three parts only. ``jitter`` (..., 2, 2): what one
    turn's edge costs a vector, over ``turns`` turns. Neighbouring parts share an edge, and their scatter
    misses that share of it; few parts are scattered by noise alone, and jitter comes on top."""
    m = len(parts)
    share = np.zeros_like(white) if jitter is None or turns < 1 else jitter / turns
    if m < FEWEST_PARTS:
        return np.asarray(white + share, np.float64)
    scatter = scatter_covariance(parts)
    if m >= FULL_PARTS:
        return np.asarray(scatter * small_sample_factor(m) + share * (m / (2 * max(turns, m))), np.float64)
    circle = np.trace(scatter, axis1=-2, axis2=-1)[..., None, None] / 2 * np.eye(2)
    return np.asarray(circle * circle_factor(m) + share, np.float64)


# --- jitter of the edges ---------------------------------------------------------------------------------


def edge_jitter(turns: Turns) -> float:
    """Standard deviation of an edge's place, rad of a turn, from the third differences of the edges in runs
    of three good turns; 0 with fewer. Ramps and slow hunting leave none, a rotor that really jumps does."""
    run = turns.good[:-2] & turns.good[1:-1] & turns.good[2:]
    if not run.any():
        return 0.0
    periods = turns.periods
    third = (periods[2:] - 2 * periods[1:-1] + periods[:-2])[run]
    return float(2 * np.pi * np.sqrt(np.mean(third**2) / 20) / np.median(periods[turns.good]))


def tangent(values: Complexes, sd_rad: Floats) -> Floats:
    """Covariance (..., 2, 2) of vectors ``values`` whose phase alone has the error ``sd_rad``; the two
    broadcast."""
    across = np.stack([-values.imag * sd_rad, values.real * sd_rad], axis=-1)
    cov: Floats = across[..., :, None] * across[..., None, :]
    return cov


def radial(values: Complexes, sd: Floats) -> Floats:
    """Covariance (..., 2, 2) of vectors ``values`` whose amplitude alone has the error ``sd``."""
    size = np.abs(values)
    unit = np.divide(values, size, out=np.ones_like(values), where=size > 0) * sd
    along = np.stack([unit.real, unit.imag], axis=-1)
    cov: Floats = along[..., :, None] * along[..., None, :]
    return cov


def amplitude_gain(orders: Floats, jitter_rad: float) -> Floats:
    """What the amplitudes of ``orders`` lost by jittered edges, as the factor that gives it back.

    METHODS 8.4 has exp(-e^2/2) for turns that are shifted whole; between interpolated edges the angle is off
    by less, see ``PATH_SHARE``."""
    gain: Floats = np.exp(PATH_SHARE / 2 * (orders * jitter_rad) ** 2)
    return gain


# --- steps of the converter ------------------------------------------------------------------------------


def step_covariance(
    values: Complexes, first: int, swing: Floats, noise_sd: Floats, per_turn: float
) -> Floats:
    """What the converter's steps leave in vectors (orders, probes), all in counts: (orders, probes, 2, 2);
    ``first`` is the place of 1X among them.

    METHODS 8.5: the amplitude is off by (2/pi) sum (-1)^k/k J1(2 pi k A) cos(2 pi k offset), here with the
    envelope of J1 at the ``swing`` (probes,) and a random offset; noise of ``noise_sd`` (probes,) damps each
    term by exp(-2 pi^2 k^2 s^2). Beside it 1/12 spread over the samples of one turn only, for a speed that
    divides the sampling rate repeats the same steps each turn."""
    own = noise_sd**2 - 1 / 12
    damping = np.exp(-4 * np.pi**2 * np.maximum(own, 0.0)[:, None] * STEP_TERMS**2)
    envelope = np.minimum(BESSEL_TOP**2, 1 / (np.pi**2 * STEP_TERMS * np.maximum(swing, 1e-9)[:, None]))
    amplitude = (2 / np.pi) ** 2 / 2 * (envelope / STEP_TERMS**2 * damping).sum(axis=1)
    spread = damping[:, 0] / 12 * 2 / per_turn
    both = np.broadcast_to(amplitude + spread, values.shape)[..., None, None] * np.eye(2)
    both[first] = radial(values[first], np.sqrt(amplitude)) + spread[:, None, None] * np.eye(2)
    return np.asarray(both, np.float64)
