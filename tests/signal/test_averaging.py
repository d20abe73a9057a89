"""The standard error of a mean of blocks: white noise, coloured noise, few blocks."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from daq.signal.averaging import chi_square_quantile, colour, widening


def complex_noise(rng: np.random.Generator, n: int, columns: int) -> NDArray[np.complex128]:
    return rng.normal(size=(n, columns)) + 1j * rng.normal(size=(n, columns))


@pytest.mark.parametrize(
    ("freedom", "sd", "quantile"),
    # 95 % and 99.9 % points of a textbook's table of chi square, from memory
    [(10, 1.6449, 18.307), (10, 3.0902, 29.588), (12, 3.0902, 32.909), (30, 3.0902, 59.703)],
)
def test_chi_square(freedom: int, sd: float, quantile: float) -> None:
    assert chi_square_quantile(freedom, sd) * freedom == pytest.approx(quantile, rel=0.01)


def test_white_noise_is_seldom_widened_by_much() -> None:
    rng = np.random.default_rng(1)
    factors = widening(complex_noise(rng, 8, 20_000), np.ones(20_000))
    assert factors.min() == 1.0
    assert np.mean(factors) < 1.25
    # beyond chance in 0.1 % of cases only, by its definition; then the factor is about 3 or more
    assert np.mean(factors > 2.5) < 0.004


@pytest.mark.parametrize(
    ("blocks", "memory", "largest_share"),
    [(8, 0.0, 0.09), (16, 0.0, 0.06), (64, 0.0, 0.05), (16, 0.3, 0.17), (64, 0.3, 0.08), (64, 0.5, 0.11)],
)
def test_coloured_noise_is_not_taken_for_white(blocks: int, memory: float, largest_share: float) -> None:
    """Blocks scatter by 5 of what their residuals say, and each keeps ``memory`` of the one before. 95 % of
    means lie within 2.448 standard errors (METHODS 10.4), ideally. Noise slower than a block takes many
    blocks to show: with 8 blocks and a memory of 0.5 no more than 56 % would lie within."""
    rng = np.random.default_rng(2)
    noise = 5 * complex_noise(rng, blocks + 20, 4000) * np.sqrt(1 - memory**2)
    for k in range(1, len(noise)):
        noise[k] += memory * noise[k - 1]
    noise = noise[20:]
    se = np.sqrt(widening(noise, np.ones(4000)) / blocks)
    plain = np.mean(np.abs(noise.mean(axis=0)) > 2.448 / np.sqrt(blocks))
    assert plain > 0.8  # by the residuals alone
    assert np.mean(np.abs(noise.mean(axis=0)) > 2.448 * se) < largest_share


def test_a_slow_drift_is_no_noise() -> None:
    drifting = np.linspace(10, 11, 8)[:, None] + 0j
    assert widening(drifting, np.array([1e-4])) == pytest.approx([1.0])


def test_scatter_below_the_white_error_is_luck() -> None:
    assert colour(np.array([0.2]), np.array([1.0]), 12) == pytest.approx([1.0])
    assert colour(np.array([1.5]), np.array([1.0]), 12) == pytest.approx([1.25])
    assert colour(np.array([9.0]), np.array([1.0]), 12) == pytest.approx([9.0 * 12 / 10])
