"""Least squares at the measured angles against METHODS section 8, scipy and an independent estimator."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.optimize
import scipy.signal
import scipy.stats
from numpy.typing import NDArray

from daq.signal.basis import basis
from daq.signal.covariance import scatter_covariance, small_sample_factor, stated_covariance
from daq.signal.vectors import Accumulator, Fit


def fit(turns: NDArray[np.float64], y: NDArray[np.float64], orders: tuple[int, ...] = (1,)) -> Fit:
    sums = Accumulator(orders)
    sums.add(turns, y.reshape(len(turns), -1))
    solved = sums.solve()
    assert solved is not None
    return solved


def test_three_parameter_fit_of_ieee_1057() -> None:
    # METHODS 8.1 [M]: ten unevenly spaced samples, 61.7 Hz
    t = np.array([0, 0.0011, 0.0027, 0.0040, 0.0062, 0.0081, 0.0105, 0.0130, 0.0161, 0.0197])
    y = np.array([1.23, 1.91, 2.38, 2.05, 0.35, -1.15, -1.93, -0.62, 1.75, 1.30])
    got = fit(61.7 * t, y)
    v = got.value(1)[0]
    assert v.real == pytest.approx(1.317515552715651, rel=1e-12)
    assert v.imag == pytest.approx(1.469532741681531, rel=1e-12)
    assert got.offset[0] == pytest.approx(0.1979097824298918, rel=1e-11)
    assert abs(v) == pytest.approx(1.97367011187829, rel=1e-12)
    assert np.degrees(np.angle(v)) == pytest.approx(48.1220561180068, rel=1e-12)
    # METHODS prints the rms over all ten samples; ours is the sd over the 7 degrees of freedom left
    assert got.residual_sd[0] * np.sqrt(7 / 10) == pytest.approx(0.2858945064597461, rel=1e-12)
    radial = np.array([v.real, v.imag]) / abs(v)
    across = np.array([-radial[1], radial[0]])
    cov = got.cov[0, 0]
    assert np.sqrt(radial @ cov @ radial) == pytest.approx(0.154037267919, rel=1e-9)
    assert np.degrees(np.sqrt(across @ cov @ across) / abs(v)) == pytest.approx(4.769701424433, rel=1e-9)
    corr = radial @ cov @ across / np.sqrt(radial @ cov @ radial * (across @ cov @ across))
    assert abs(corr) == pytest.approx(0.0570249376, rel=1e-6)


def test_lag_is_the_argument_and_the_fft_has_the_other_sign() -> None:
    # METHODS 6.2 [D]: 3 @ 312 deg has a = 2.007391819076575, b = -2.229434476432183; rfft reads 48
    turns = np.arange(256) / 64
    y = 3 * np.cos(2 * np.pi * turns - np.radians(312))
    v = fit(turns, y).value(1)[0]
    assert v.real == pytest.approx(2.007391819076575, abs=1e-12)
    assert v.imag == pytest.approx(-2.229434476432183, abs=1e-12)
    spectrum = np.fft.rfft(y)[4] * 2 / 256
    assert np.degrees(np.angle(spectrum)) == pytest.approx(48.0, abs=1e-9)
    assert spectrum.conj() == pytest.approx(v, abs=1e-12)


def test_turns_that_are_not_whole_are_exact_once_the_second_order_is_modelled() -> None:
    # METHODS 8.9 [D]: 10.3 turns, DC 2, 1X 1@30, 2X 0.5@100
    turns = np.arange(1030) / 100
    y = 2 + np.cos(2 * np.pi * turns - np.radians(30)) + 0.5 * np.cos(4 * np.pi * turns - np.radians(100))
    alone = fit(turns, y).value(1)[0]
    assert abs(alone) == pytest.approx(1.0128341572, rel=5e-6)  # METHODS' sampling is not stated
    assert np.degrees(np.angle(alone)) == pytest.approx(30.24466819, abs=1e-3)
    both = fit(turns, y, (1, 2))
    assert abs(both.value(1)[0]) == pytest.approx(1.0, abs=1e-12)
    assert np.degrees(np.angle(both.value(1)[0])) == pytest.approx(30.0, abs=1e-10)
    assert both.value(2)[0] == pytest.approx(0.5 * np.exp(1j * np.radians(100)), abs=1e-12)
    assert both.offset[0] == pytest.approx(2.0, abs=1e-12)


def test_noise_of_amplitude_and_phase_reaches_the_cramer_rao_bound() -> None:
    # METHODS 8.2 [M]: N 512, A 1, sd 0.2, 16 turns: sd A 0.0125, sd phase 0.7161972439 deg; 3000 trials
    rng = np.random.default_rng(82)
    turns = np.arange(512) / 32
    y = np.cos(2 * np.pi * turns - 0.7)[:, None] + rng.normal(0, 0.2, (512, 3000))
    got = fit(turns, y)
    v = got.value(1) * np.exp(-0.7j)
    chance = 4 / np.sqrt(2 * 3000)  # four standard deviations of a standard deviation
    assert np.std(np.abs(v)) == pytest.approx(0.0125, rel=chance)
    assert np.degrees(np.std(np.angle(v))) == pytest.approx(0.7161972439, rel=chance)
    stated = np.sqrt(got.cov[0, :, 0, 0]).mean()
    assert stated == pytest.approx(0.0125, rel=0.01)
    # amplitudes read high near the floor: METHODS 8.2, + sd^2 / (2 A) = 0.00007813
    assert np.mean(np.abs(v)) - 1 == pytest.approx(0.00007813, abs=4 * 0.0125 / np.sqrt(3000))


def test_scipy_least_squares_agrees() -> None:
    rng = np.random.default_rng(5)
    turns = np.sort(rng.uniform(0, 7.4, 400))
    y = 3 + 2 * np.cos(2 * np.pi * turns - 1) + 0.3 * np.cos(6 * np.pi * turns - 2) + rng.normal(0, 0.3, 400)

    def residual(p: NDArray[np.float64]) -> NDArray[np.float64]:
        angle = 2 * np.pi * turns
        model = p[0] + sum(p[2 * k - 1] * np.cos(k * angle) + p[2 * k] * np.sin(k * angle) for k in (1, 2, 3))
        return np.asarray(model - y)

    outside = scipy.optimize.least_squares(residual, np.zeros(7), xtol=1e-14, ftol=1e-14, gtol=1e-14)
    got = fit(turns, y, (1, 2, 3))
    assert got.offset[0] == pytest.approx(outside.x[0], rel=1e-7)
    for k in (1, 2, 3):
        want = outside.x[2 * k - 1] + 1j * outside.x[2 * k]
        assert got.value(k)[0] == pytest.approx(want, abs=1e-7)
    cov = np.linalg.inv(outside.jac.T @ outside.jac) * 2 * outside.cost / (400 - 7)
    assert got.cov[0, 0] == pytest.approx(cov[1:3, 1:3], rel=1e-5)
    assert got.residual_sd[0] == pytest.approx(np.sqrt(2 * outside.cost / 393), rel=1e-9)


def test_a_large_gap_costs_a_small_vector_no_digits() -> None:
    """24 bits, -10 V of 30 V, 1X of 40 counts under 2.8 million: exact values by rational least squares of
    the deviation alone (numpy lstsq on the counts less the gap)."""
    rng = np.random.default_rng(7)
    turns = np.arange(40_000) / 97.3
    wave = 40 * np.cos(2 * np.pi * turns - 2.1) + rng.normal(0, 3, len(turns))
    deviation = np.rint(wave)
    counts = (deviation - 2_796_203).astype(np.int32)
    a = basis(turns % 1, (1, 2, 3)).T
    want, *_ = np.linalg.lstsq(a, deviation, rcond=None)
    got = fit(turns % 1, counts, (1, 2, 3))
    assert got.value(1)[0] == pytest.approx(want[1] + 1j * want[2], rel=1e-12)
    assert got.offset[0] + 2_796_203 == pytest.approx(want[0], abs=1e-8)
    assert got.residual_sd[0] == pytest.approx(np.std(deviation - a @ want, ddof=7), rel=1e-10)


def test_parts_combined_are_the_whole_whatever_their_reference() -> None:
    rng = np.random.default_rng(4)
    turns = np.arange(3000) / 60
    y = np.rint(rng.normal(0, 500, (3000, 3)) + np.linspace(-9000, 9000, 3000)[:, None]).astype(np.int16)
    whole, parts = Accumulator(), Accumulator()
    whole.add(turns, y)
    for at in (0, 7, 1000, 2000):
        part = Accumulator()
        stop = {0: 7, 7: 1000, 1000: 2000, 2000: 3000}[at]
        part.add(turns[at:stop], y[at:stop])
        parts.combine(part)
    one, other = whole.solve(), parts.solve()
    assert one is not None
    assert other is not None
    assert other.samples == 3000
    assert other.values == pytest.approx(one.values, rel=1e-11)
    assert other.residual_sd == pytest.approx(one.residual_sd, rel=1e-11)
    assert other.ac_rms == pytest.approx(np.std(y, axis=0), rel=1e-11)


def test_no_fit_from_too_few_samples_or_from_a_single_angle() -> None:
    sums = Accumulator((1, 2, 3))
    assert sums.solve() is None
    sums.add(np.linspace(0, 1, 13), np.zeros((13, 1)))
    assert sums.solve() is None
    stuck = Accumulator((1,))
    stuck.add(np.full(100, 0.25), np.ones((100, 1)))
    assert stuck.solve() is None


@pytest.mark.parametrize("parts", [4, 8, 16, 64])
def test_small_sample_factor_is_hotelling_over_chi_square(parts: int) -> None:
    # scipy.stats as the outside reference
    t2 = 2 * (parts - 1) / (parts - 2) * scipy.stats.f.ppf(0.95, 2, parts - 2)
    assert small_sample_factor(parts) == pytest.approx(t2 / scipy.stats.chi2.ppf(0.95, 2), rel=1e-12)


def test_scatter_covariance_of_repeated_vectors() -> None:
    # METHODS 10.1: five vectors, rotated to their mean: radial sd 0.0477803401765, tangential 0.0843418375954
    amp = np.array([2.60, 2.67, 2.55, 2.63, 2.57])
    lag = np.radians([312.0, 314.2, 309.4, 313.1, 311.0])
    v = amp * np.exp(1j * lag)
    turned = v * np.exp(-1j * np.angle(v.mean()))
    cov = scatter_covariance(turned)
    assert np.sqrt(5 * cov[0, 0]) == pytest.approx(0.0477803401765, rel=1e-9)
    assert np.sqrt(5 * cov[1, 1]) == pytest.approx(0.0843418375954, rel=1e-9)
    assert np.sqrt(cov[0, 0]) == pytest.approx(0.0213680177245, rel=1e-9)


def coverage(noise: NDArray[np.float64]) -> float:
    """Share of trials (columns) whose 95 % region holds the truth; 16 parts of 4 turns of 64 samples."""
    turns = np.arange(4096) / 64
    truth = 2.0 * np.exp(0.5j)
    y = (truth.conjugate() * np.exp(2j * np.pi * turns)).real[:, None] + noise
    parts = [fit(t, part, (1, 2, 3)) for t, part in zip(np.split(turns, 16), np.split(y, 16), strict=True)]
    whole = fit(turns, y, (1, 2, 3))
    cov = stated_covariance(whole.cov, np.stack([p.values for p in parts]))[0]
    d = whole.value(1) - truth
    off = np.stack([d.real, d.imag], axis=-1)
    distance = np.einsum("ni,nij,nj->n", off, np.linalg.inv(cov), off)
    return float(np.mean(distance < 5.991464547107979))


def test_the_stated_covariance_covers_white_noise() -> None:
    rng = np.random.default_rng(11)
    assert 0.94 <= coverage(rng.normal(0, 1, (4096, 1500))) <= 0.995


def test_the_stated_covariance_covers_coloured_noise() -> None:
    """AR(1) with 0.98 from sample to sample: near 1X it holds many times the power that white noise of its
    variance would, so the residuals alone cover far too little."""
    rng = np.random.default_rng(12)
    noise = scipy.signal.lfilter([1], [1, -0.98], rng.normal(0, 1, (6096, 1500)), axis=0)[2000:]
    assert 0.92 <= coverage(np.asarray(noise)) <= 0.99


def test_padding_of_fresh_memory_is_never_computed_with(monkeypatch):
    """Rows beyond the samples come from fresh memory; a signalling NaN there must not warn or reach a sum."""
    real = np.empty

    def soiled(shape, *rest, **more):
        made = real(shape, *rest, **more)
        if made.dtype == np.float64:
            made.view(np.uint64).fill(0x7FF0000000000001)
        return made

    monkeypatch.setattr(np, "empty", soiled)
    sums = Accumulator((1,))
    fractions = np.arange(101) / 25 % 1.0
    counts = np.round(1000 * np.cos(2 * np.pi * fractions)).astype(np.int16)[:, None]
    sums.add(fractions, counts)
    found = sums.solve()
    assert found is not None
    assert abs(found.value(1)[0]) == pytest.approx(1000.0, abs=0.5)
