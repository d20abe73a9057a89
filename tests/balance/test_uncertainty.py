"""Errors against METHODS section 10 (closed forms; Monte Carlo there agrees)."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from store.balance.angles import angle_deg, polar
from store.balance.influence import coefficient, coefficient_matrix, correction, inverse
from store.balance.scatter import prior_sd, scatter_from_repeats
from store.balance.uncertainty import (
    amplitude_quantile,
    chance_within,
    effect_ratio,
    pool_effects,
    sd_coefficient,
    sd_correction,
    sd_correction_one_plane,
    sd_correction_reused,
)

P = polar


def test_one_plane():  # METHODS 10.2
    v0, v1, trial, s = P(2.6, 312), P(1.7, 251), P(10, 0), 0.03
    assert sd_coefficient(s, trial) == pytest.approx(0.004242640687, rel=1e-9)
    assert sd_correction_one_plane(v0, v1, trial, s) == pytest.approx(0.173729365413, rel=1e-11)
    alpha = coefficient(v0, v1, trial)
    w = -v0 / alpha
    assert sd_correction_reused(alpha, 0.004 * abs(alpha), w, s) == pytest.approx(0.1370909835, rel=1e-9)


def test_two_planes():  # METHODS 10.2, example 1.1(a), s 0.05: 0.10434257, 0.12766162
    v0 = [P(8.5, 60), P(6.5, 205)]
    runs = [([P(6.0, 125), P(4.5, 230)], P(10, 270)), ([P(6.0, 35), P(10.5, 160)], P(12, 180))]
    A = coefficient_matrix(v0, runs)
    found = sd_correction(inverse(A), correction(A, v0), [P(10, 270), P(12, 180)], 0.05)
    assert found == pytest.approx([0.10434257, 0.12766162], rel=1e-7)


def test_one_plane_formula_is_the_two_plane_formula_of_one():
    v0, v1, trial = P(2.6, 312), P(1.7, 251), P(10, 0)
    A = np.array([[coefficient(v0, v1, trial)]])
    assert sd_correction(inverse(A), correction(A, [v0]), [trial], 0.03) == pytest.approx([0.173729365413])


def test_effect_ratio():  # METHODS 5: s 1 %, |dV| 30 % -> relative sd of alpha 0.0471404520791
    assert 1 / effect_ratio(1, 1.3, 0.01) == pytest.approx(0.0471404520791)


def test_pooling():  # METHODS 10.3
    trials = [P(10, 0), P(8, 45), P(15, 200), P(12, 310)]
    alphas = [P(0.160, 142), P(0.151, 139), P(0.163, 143.5), P(0.158, 146)]
    pooled = pool_effects(trials, [a * w for a, w in zip(alphas, trials, strict=True)])
    assert abs(pooled) == pytest.approx(0.159538971655, rel=1e-11)
    assert angle_deg(pooled) == pytest.approx(143.3755958279, rel=1e-12)


@pytest.mark.parametrize(
    ("mean", "s", "limit", "chance"),
    [  # METHODS 10.4 (ncx2, rice and mpmath integral agree)
        (0.3, 0.1, 0.5, 0.969322397916),
        (0.0, 0.1, 0.2, 0.864664716763),
        (0.45, 0.1, 0.5, 0.653154273468),
        (1.0, 0.2, 0.8, 0.132950204922),
    ],
)
def test_chance_within(mean, s, limit, chance):
    assert chance_within(limit, mean, s) == pytest.approx(chance, rel=1e-11)


def test_quantiles_of_a_zero_vector():  # METHODS 10.4: 95 % circle; the median of Rayleigh is sqrt(2 ln 2)
    assert amplitude_quantile(0.95, 0.0, 1.0) == pytest.approx(2.447746830681, rel=1e-11)
    assert amplitude_quantile(0.5, 0.0, 0.1) == pytest.approx(0.1 * math.sqrt(2 * math.log(2)))
    assert chance_within(0.1, 0.0, 0.1) == pytest.approx(0.393469340287, rel=1e-11)


def test_no_spread_is_certain():
    assert amplitude_quantile(0.9, 0.7, 0.0) == 0.7
    assert (chance_within(0.8, 0.7, 0.0), chance_within(0.6, 0.7, 0.0)) == (1.0, 0.0)


@given(st.floats(0, 20), st.floats(0.05, 5), st.floats(0.05, 0.95))
def test_quantile_and_chance_are_inverse(mean, s, share):
    assert chance_within(amplitude_quantile(share, mean, s), mean, s) == pytest.approx(share, abs=1e-6)


def test_scatter_prior():  # REUSE (c): stop, restart, same state: 3 % + 1 um pp or 0.05 mm/s rms
    assert prior_sd(0.0, "um", 40.0) == 0.5
    assert prior_sd(100.0, "um", 40.0) == pytest.approx(math.sqrt(9.25))
    assert prior_sd(0.0, "mm/s", 40.0) == pytest.approx(0.0707106781)
    # acceleration: 0.0707106781 mm/s at 50 Hz is 0.0222144147 m/s2 (times 2 pi 50 / 1000)
    assert prior_sd(0.0, "m/s2", 50.0) == pytest.approx(0.0222144147)


def test_scatter_update():
    # two runs 2 um apart about 0: s0 0.5, (4 x 0.25 + 2) / (4 + 2) = 0.5 -> s 0.70710678
    found = scatter_from_repeats([[1 + 0j, -1 + 0j]], "um", 40.0)
    assert found.run_to_run(0.0) == pytest.approx(0.70710678)
    assert found.repeats_dof == 2
    assert not found.is_prior
    assert scatter_from_repeats([[5j]], "um", 40.0).is_prior
    assert found.sd(0j, own_sd=3.0) == 3.0
