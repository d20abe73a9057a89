"""Stored vectors against what was not made here: rotor tables, scipy, an estimator of another kind."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.optimize
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from window_kit import LEVEL_V, VOLTS_PER_COUNT, VOLTS_PER_UM, Floats, Window, covariances, first_orders

from daq.signal.shapes import Measurement

STEP_UM = VOLTS_PER_COUNT / VOLTS_PER_UM
"""Of 24 bits: without noise its errors repeat each turn, so a tenth of it is what remains (METHODS 8.5)."""


def at(amplitude: float, lag_deg: float) -> complex:
    return complex(amplitude * np.exp(1j * np.radians(lag_deg)))


def motions(w: Window, vectors: list[complex]) -> Floats:
    """x = A cos(theta - lag) of each probe, (frames, probes)."""
    theta = 2 * np.pi * w.angle()[:, None]
    return np.asarray(np.abs(vectors) * np.cos(theta - np.angle(vectors)))


def through_the_chain(w: Window, vectors: list[complex]) -> Measurement:
    """Counts and pulses of a rotor that shows these vectors, measured."""
    return w.measured(w.counts(motions(w, vectors)))


@pytest.mark.parametrize(
    ("ratio", "size", "lag_deg"),
    [  # METHODS 7.1 [M]: X/e and lag of a Jeffcott rotor with zeta 0.05
        (0.5, 0.33259505261887, 3.8140748342904),
        (0.9, 3.8527771026514, 25.346175941947),
        (1.0, 10.0, 90.0),
        (1.1, 5.10407694137613, 152.35402463626),
        (2.0, 1.33038021047548, 176.18592516571),
        (5.0, 1.04144068409178, 178.80651057602),
    ],
)
def test_jeffcott_rotor(ratio: float, size: float, lag_deg: float) -> None:
    """An eccentricity of 8 um, critical at 2400 r/min, 12.8 kS/s."""
    rpm = 2400 * ratio
    w = Window(per_turn=12_800 * 60 / rpm, turns=40, rpm=rpm, vector=0j)
    (v,) = first_orders(through_the_chain(w, [8 * at(size, lag_deg)]))
    assert abs(v) == pytest.approx(8 * size, abs=STEP_UM / 10)
    assert np.degrees(np.angle(v / at(1, lag_deg))) == pytest.approx(0.0, abs=1e-3)


@pytest.mark.parametrize(
    ("rpm", "a11", "a12", "a21", "a22", "first", "second"),
    [  # METHODS 7.2 [D; verified by ODE]: um per g.mm, and um of 80 g.mm@40 and 55 g.mm@200
        (
            1800.0,
            at(0.0175985436484, 5.6680295828),
            at(0.00375897265403, 7.2362140560),
            at(0.00342681922386, 7.1434740132),
            at(0.0138773333659, 5.3585831087),
            at(1.21350764553, 48.7558423805),
            at(0.518761097564, 194.0481677875),
        ),
        (
            3000.0,
            at(0.0711872885185, 14.7036459832),
            at(0.0270946374978, 21.5613765453),
            at(0.0255942316155, 21.6056755400),
            at(0.0567019182832, 14.1451971327),
            at(4.25731332413, 59.2684838440),
            at(1.60813440722, 178.1910998690),
        ),
    ],
    ids=["1800", "3000"],
)
def test_rotor_on_two_bearings(
    rpm: float, a11: complex, a12: complex, a21: complex, a22: complex, first: complex, second: complex
) -> None:
    """Coefficients times unbalance -> motion and pulses -> counts -> vectors: the table's."""
    u1, u2 = at(80, 40), at(55, 200)
    w = Window(per_turn=25_600 * 60 / rpm, turns=50, rpm=rpm, vector=0j)
    got = first_orders(through_the_chain(w, [a11 * u1 + a12 * u2, a21 * u1 + a22 * u2]))
    for v, want in zip(got, (first, second), strict=True):
        assert abs(v) == pytest.approx(abs(want), abs=STEP_UM / 10)
        assert np.degrees(np.angle(v / want)) == pytest.approx(0.0, abs=1e-3)


def whole_turns(w: Window, counts: NDArray[np.int32]) -> tuple[Floats, Floats]:
    """Exact angle (turns) and displacement (um) of the samples between the first and the last edge."""
    turns = w.angle()
    inside = (turns >= 1) & (turns < 1 + w.turns)
    return turns[inside], counts[inside, 1] * VOLTS_PER_COUNT / VOLTS_PER_UM


def test_scipy_fits_the_same_three_parameters() -> None:
    """IEEE 1057's three-parameter model (METHODS 8.1) by scipy.optimize.least_squares on the same samples."""
    rng = np.random.default_rng(57)
    w = Window(per_turn=37.3, turns=20, stamped=True)
    counts = w.counts(rng.normal(0, 1.0, (w.frames, 1)))
    turns, y = whole_turns(w, counts)
    arms = np.stack((np.cos(2 * np.pi * turns), np.sin(2 * np.pi * turns), np.ones(len(turns))))
    fitted = scipy.optimize.least_squares(
        lambda p: p @ arms - y, [1.0, 1.0, y.mean()], xtol=1e-15, ftol=1e-15
    )
    m = w.measured(counts, orders=(1,))
    (v,) = first_orders(m)
    assert v.real == pytest.approx(fitted.x[0], abs=2e-5)
    assert v.imag == pytest.approx(fitted.x[1], abs=2e-5)
    assert m.levels[0].gap_v == pytest.approx(fitted.x[2] * VOLTS_PER_UM, abs=1e-6)
    assert m.levels[0].residual_sd == pytest.approx(np.sqrt(2 * fitted.cost / (len(y) - 3)), rel=1e-5)


def test_scipy_fits_the_same_vector_beside_a_line() -> None:
    """Offset, 1X to 3X and a line whose frequency is free: 10 parameters by scipy.optimize.least_squares."""
    rng = np.random.default_rng(58)
    w = Window(per_turn=50.3, turns=64, harmonics={2: 2j, 3: 1 + 0j})
    whirl = 5.0 * np.cos(2 * np.pi * 0.437 * w.angle()[:, None] + 1.0)
    counts = w.counts(whirl + rng.normal(0, 0.3, (w.frames, 1)))
    turns, y = whole_turns(w, counts)

    def model(p: Floats) -> Floats:
        angles = 2 * np.pi * np.outer((1.0, 2.0, 3.0, p[8]), turns)
        arms = np.concatenate((np.ones((1, len(turns))), np.cos(angles), np.sin(angles)))
        return np.asarray(p[[0, 1, 2, 3, 9, 4, 5, 6, 7]] @ arms - y)

    begin = np.array([y.mean(), 1, 0, 0, 1, 0, 0, 1.0, 0.4371, 1.0])
    fitted = scipy.optimize.least_squares(model, begin, x_scale=np.array([1.0] * 8 + [1e-3, 1]))
    m = w.measured(counts)
    (v,) = first_orders(m)
    sd = np.sqrt(2 * 0.3**2 / len(y))
    assert abs(v - complex(fitted.x[1], fitted.x[4])) < 0.1 * sd
    (line,) = m.lines
    assert line.order == pytest.approx(fitted.x[8], abs=2e-6)
    assert line.amplitude == pytest.approx(np.hypot(fitted.x[9], fitted.x[7]), rel=1e-3)


def averaged(counts: NDArray[np.int32], points: int = 512) -> NDArray[np.complex128]:
    """1X of all probes by synchronous averaging: splines through the samples, equal angles between edges
    found here, the mean over turns, FFT (METHODS 8.6, 8.7). Shares nothing with the package; more points than
    samples, so that each sample counts."""
    pulse, level = counts[:, 0].astype(float), LEVEL_V / VOLTS_PER_COUNT
    i = np.flatnonzero((pulse[:-1] >= level) & (pulse[1:] < level))
    edges = i + (pulse[i] - level) / (pulse[i] - pulse[i + 1])
    grid = np.arange((len(edges) - 1) * points) / points
    when = CubicSpline(np.arange(len(edges)), edges)(grid)
    um = CubicSpline(np.arange(len(counts)), counts[:, 1:] * VOLTS_PER_COUNT / VOLTS_PER_UM)(when)
    mean = um.reshape(len(edges) - 1, points, -1).mean(axis=0)
    # METHODS 6.2: the phase of an FFT is minus the lag
    return np.asarray(np.conj(np.fft.rfft(mean, axis=0)[1]) * 2 / points)


def test_a_synchronous_average_agrees_within_the_stated_uncertainty() -> None:
    """24 random cases, 4 probes each, speed, turns, ramp, gap, harmonics and noise at random. The two weigh
    the same noise differently, so they may differ by part of the stated radius, but not by more."""
    rng = np.random.default_rng(59)
    shares, errors = [], []
    for _ in range(24):
        truth = at(rng.uniform(1, 20), rng.uniform(0, 360))
        w = Window(
            per_turn=rng.uniform(60, 400),
            turns=int(rng.integers(8, 100)),
            rpm=rng.uniform(600, 30_000),
            ramp=rng.uniform(-0.01, 0.01),
            vector=truth,
            harmonics={k: abs(truth) * at(rng.uniform(0, 0.5), rng.uniform(0, 360)) for k in (2, 3)},
            gap_v=rng.uniform(-12, -8),
        )
        counts = w.counts(rng.normal(0, abs(truth) / rng.uniform(3, 300), (w.frames, 4)))
        m = w.measured(counts)
        radius = 2.4477 * np.sqrt(np.trace(covariances(m), axis1=1, axis2=2) / 2)  # METHODS 10.4
        shares.append(np.abs(averaged(counts) - first_orders(m)) / radius)
        errors.append(np.abs(first_orders(m) - truth) / radius)
    assert np.max(shares) < 1.0
    assert np.mean(shares) < 0.35
    assert 0.25 < np.mean(errors) < 0.6  # 0.51 for a known covariance: sqrt(pi/2)/2.4477
