"""A sine or a line through blocks, of which the stretch holds less than a period."""

from __future__ import annotations

import numpy as np
import pytest

from daq.signal.slow import swing, told_over_block_se, trend

TIMES = (np.arange(8) + 0.5) * 0.375
"""A window of 3 s in 8 blocks."""


def test_a_line_gives_its_rate() -> None:
    values = np.outer(TIMES, [2.0, 0.5j]) + 7.0
    found = trend(TIMES, values)
    assert found.rate == pytest.approx([2.0, 0.5j])
    # sum of squares of -3.5 .. 3.5 is 42
    assert found.spread_s == pytest.approx(0.375 * np.sqrt(42))


@pytest.mark.parametrize("period_s", [0.9, 1.7, 3.0, 4.5, 6.0])
@pytest.mark.parametrize("phase", [0.0, 0.8, np.pi / 2, 2.5])
def test_a_swing_is_told_whole_from_half_a_period(period_s: float, phase: float) -> None:
    """To and fro by 1 along 1+j, and round by 0.5; blocks hold means over 0.375 s: sinc(0.375 / period)."""
    gain = np.sin(np.pi * 0.375 / period_s) / (np.pi * 0.375 / period_s)
    turn = 2 * np.pi * TIMES / period_s + phase
    to_and_fro = 10 + gain * np.cos(turn) * (1 + 1j) / np.sqrt(2)
    found = swing(TIMES, np.column_stack((to_and_fro, 3j + 0.5 * gain * np.exp(1j * turn))), 0.375, 6.0)
    assert found.travel == pytest.approx([2.0, 1.0], rel=0.04)
    assert (found.left < 0.01 * found.explained).all()
    assert found.period_s == pytest.approx([period_s, period_s], rel=0.05)


def test_what_noise_hides_of_half_a_period() -> None:
    """Worst is a cosine about the middle of half its period: its variance about its own mean is
    1/2 - (2/pi)**2 = 0.0947 (integrals by hand), so its amplitude has sd 1 / sqrt(0.0947 n) of a block's."""
    times = (np.arange(800) + 0.5) * 0.00375
    assert told_over_block_se(times, 0.00375, 6.0, 5.0) == pytest.approx(5 / np.sqrt(800 * 0.0947), rel=2e-3)


def test_noise_alone_seldom_makes_a_swing() -> None:
    """What the best of all periods takes away, in variances of noise; beyond 22 (BEAT_SE2) in under 1 %."""
    rng = np.random.default_rng(1)
    noise = rng.normal(size=(8, 20_000)) + 1j * rng.normal(size=(8, 20_000))
    found = swing(TIMES, noise, 0.375, 6.0)
    beyond = np.mean(found.explained > 22)
    assert 1e-4 < beyond < 0.01
