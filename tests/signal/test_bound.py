"""Errors of the stored vectors against the least that any estimator can have.

The bound is computed here from METHODS, never by the package: 8.2 [M: Kay] var of each component 2 s^2/N
over whole turns, where offset and harmonics are orthogonal to 1X; 8.3 noise s on a slope S, linear
interpolation at any fraction: sd t = (s/S) sqrt(2/3); 8.4 jitter e rad a turn, M turns: phase sd e/sqrt(M)
for small e.
More of the grid: tests/bench/bench_bound.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from window_kit import Window, covariances, first_orders, inside

GRID = [  # samples a turn, turns, r/min, signal to noise
    (60.3, 8, 60.0, 3.0),
    (60.7, 64, 600.0, 30.0),
    (60.3, 512, 3000.0, 3.0),
    (20.7, 8, 60_000.0, 10.0),  # these from hardware stamps
    (20.3, 64, 3000.0, 1000.0),
    (257.3, 16, 3000.0, 100.0),
    (1000.7, 8, 6000.0, 1000.0),
    (4000.3, 8, 60_000.0, 3.0),
]


def squared_errors(w: Window, signal_to_noise: float, probes: int, rng: np.random.Generator) -> np.ndarray:
    """|error|^2 of each probe over its bound 4 s^2/N."""
    s = abs(w.vector) / signal_to_noise
    m = w.measured(w.counts(rng.normal(0, s, (w.frames, probes))))
    assert m.revolutions == w.turns
    return np.abs(first_orders(m) - w.vector) ** 2 / (4 * s**2 / (w.per_turn * w.turns))


def test_white_noise_costs_what_it_must() -> None:
    """Every window alone within what chance leaves to its few hundred errors, all of them within 5 %."""
    rng = np.random.default_rng(82)
    every = []
    for per_turn, turns, rpm, signal_to_noise in GRID:
        w = Window(per_turn=per_turn, turns=turns, rpm=rpm, stamped=per_turn < 60)
        probes = int(np.clip(6e6 / w.frames, 60, 400))
        errors = squared_errors(w, signal_to_noise, probes, rng)
        # the mean of n exponential variables has sd 1/sqrt(n)
        assert np.mean(errors) < 1.05**2 * (1 + 3 / np.sqrt(probes)), (per_turn, turns)
        every.append(errors)
    assert sum(map(len, every)) > 2000
    assert np.sqrt(np.mean(np.concatenate(every))) < 1.05


def test_jitter_of_the_edges_costs_what_it_must() -> None:
    """Noise on the once-per-rev channel alone, 0.15 degrees a turn: the error is in the phase."""
    rng = np.random.default_rng(83)
    w, e = Window(per_turn=64.3, turns=8), np.radians(0.15)
    slope_v = 7.0 / w.edge_samples
    noise_v = e / (2 * np.pi) * w.per_turn * slope_v / np.sqrt(2 / 3)
    got = []
    for _ in range(300):
        m = w.measured(w.counts(np.zeros((w.frames, 1)), rng.normal(0, noise_v, w.frames)))
        got.append(np.angle(first_orders(m)[0] / w.vector))
    bound = e / np.sqrt(8)
    assert abs(np.mean(got)) < 4 * bound / np.sqrt(300)
    assert np.sqrt(np.mean(np.square(got))) < 1.05 * bound * (1 + 1 / np.sqrt(600))  # chance: 4 %


def test_edges_that_jitter_by_five_degrees_cost_no_amplitude() -> None:
    """METHODS 8.4 has exp(-e^2/2) = 0.9962 at 5 degrees for turns shifted whole; interpolation loses 0.29 %
    (three quarters of it), and that is given back: what is left is chance and the correction's own spread."""
    rng = np.random.default_rng(84)
    w, e = Window(per_turn=200.3, turns=120), np.radians(5.0)
    size = []
    for _ in range(25):
        late = rng.normal(0, e / (2 * np.pi) * w.per_turn, w.turns + 3)
        m = w.measured(w.counts(np.zeros((w.frames, 1)), late=late))
        size.append(abs(first_orders(m)[0] / w.vector))
        assert inside(m, w.vector)[0] or abs(np.angle(first_orders(m)[0] / w.vector)) > 2 * e / np.sqrt(120)
    assert np.mean(size) == pytest.approx(1.0, abs=4e-4)
    assert np.std(size) < 2e-3


@pytest.mark.parametrize("per_turn", [60.31, 256.0, 1013.7])
@pytest.mark.parametrize("ramp", [0.0, 0.01, -0.01])
def test_no_bias_in_sixteen_bits(per_turn: float, ramp: float) -> None:
    """0.02 % and 0.02 degrees: -10 V of gap, harmonics of 50 and 30 %, 1 %/s, amplitude 510 steps, noise of
    0.55 steps; the mean over probes with noise of their own leaves a tenth of that to chance."""
    step = 30 / 2**15 / 0.007874
    size = 510 * step
    w = Window(
        per_turn=per_turn,
        turns=64,
        ramp=ramp,
        vector=size * np.exp(2j),
        harmonics={2: 0.5 * size * np.exp(1j), 3: 0.3 * size * np.exp(4j)},
        um_per_count=step,
    )
    probes = int(np.clip(1.5e6 / w.frames, 20, 200))
    rng = np.random.default_rng(int(per_turn))
    gaps = rng.uniform(-step / 2, step / 2, probes)
    m = w.measured(w.counts(gaps + rng.normal(0, 0.55 * step, (w.frames, probes))))
    mean = np.mean(first_orders(m)) / w.vector
    assert abs(mean) == pytest.approx(1.0, abs=2e-4)
    assert np.degrees(np.angle(mean)) == pytest.approx(0.0, abs=0.02)
    assert np.sqrt(np.trace(covariances(m)[0]) / 2 / probes) / size < 2e-5


@pytest.mark.parametrize("steps", [4.3, 40.3, 204.8])
@pytest.mark.parametrize("per_turn", [64.0, 61.7])
def test_steps_of_the_converter_are_in_the_stated_uncertainty(steps: float, per_turn: float) -> None:
    """METHODS 8.5: without noise the amplitude's error does not average; 64 samples that repeat each turn,
    gaps anywhere within a step. The regions hold the truth, and are not absurdly large."""
    w = Window(per_turn=per_turn, turns=64, vector=steps * np.exp(0.7j), um_per_count=1.0)
    gaps = np.random.default_rng(85).uniform(-0.5, 0.5, 300)
    m = w.measured(w.counts(np.broadcast_to(gaps, (w.frames, 300))))
    errors = np.abs(first_orders(m) - w.vector)
    assert np.mean(inside(m, w.vector)) > 0.92
    stated = np.sqrt(np.mean(np.trace(covariances(m), axis1=1, axis2=2)))
    assert stated < 3.5 * np.sqrt(np.mean(errors**2))


def test_the_amplitude_error_of_steps_is_that_of_methods() -> None:
    """METHODS 8.5: 12 bits over 20 V, 1 V: rms 4.506e-5 V over all offsets; here the envelope of J1, at most
    sqrt 2 of it. Noise of half a step makes it vanish beside the white 2 s^2/N."""
    from daq.signal.covariance import step_covariance

    lsb = 20 / 4096
    size = np.array([[1 / lsb + 0j]])
    quiet = step_covariance(size, 0, np.array([1 / lsb]), np.array([12**-0.5]), 1e12)
    assert 4.506e-5 <= np.sqrt(quiet[0, 0, 0, 0]) * lsb < 4.506e-5 * 2**0.5
    assert quiet[0, 0, 1, 1] < 1e-12  # the amplitude alone
    noisy = step_covariance(size, 0, np.array([1 / lsb]), np.array([(0.25 + 1 / 12) ** 0.5]), 1e12)
    # METHODS 8.5: the k = 1 term is multiplied by 0.00719188
    assert np.sqrt(noisy[0, 0, 0, 0] / quiet[0, 0, 0, 0]) == pytest.approx(0.00719188, rel=0.1)


def test_half_a_sample_of_a_sharp_edge_is_in_every_phase_and_never_averages() -> None:
    """METHODS 8.3: with fewer than two samples on the edge the error is up to half a sample; 100 samples a
    turn: 1.8 degrees, across the vector, twice that in 2X."""
    w = Window(per_turn=100.0, turns=64, harmonics={2: 2j}, start=0.304)
    counts = w.counts(np.zeros((w.frames, 1)))
    past = (w.angle() % 1.0) * 100
    counts[:, 0] = np.where(past < 5, -15.0, -8.0) / (30 / 2**23)  # a step between two samples
    m = w.measured(counts)
    assert m.edge_deg == pytest.approx(1.8, rel=1e-6)
    for order, size in ((1, 6.0), (2, 2.0)):
        v = m.vector("p0", order)
        assert v is not None
        cov = np.array([[v.var_re, v.cov], [v.cov, v.var_im]])
        across = np.array([-v.value.imag, v.value.real]) / abs(v.value)
        along = np.array([v.value.real, v.value.imag]) / abs(v.value)
        assert np.sqrt(across @ cov @ across) == pytest.approx(size * order * np.radians(1.8), rel=0.01)
        # along it as far as an arc of that angle leaves its tangent: 1 - cos
        leaves = size * (1 - np.cos(order * np.radians(1.8)))
        assert np.sqrt(along @ cov @ along) == pytest.approx(leaves, rel=0.02)


def test_a_sharp_edge_at_few_samples_a_turn_keeps_its_truth_in_the_region() -> None:
    """A logic-level pulse at ten samples a turn: the phase is off by up to half a sample, 18 degrees, and a
    vector turned that far leaves its tangent; the region must follow. 0.1 of a sample from the worst places
    of the edge and in the middle between them, 12 probes each; signal-to-noise 200."""
    rng = np.random.default_rng(31)
    for start in (0.3001, 0.335, 0.3499, 0.365, 0.3999):
        w = Window(per_turn=10.0, turns=100, start=start)
        counts = w.counts(rng.normal(0, 0.03, (w.frames, 12)))
        counts[:, 0] = np.where(w.angle() % 1.0 < 0.4, -15.0, -8.0) / (30 / 2**23)
        m = w.measured(counts)
        assert m.edge_deg == pytest.approx(18.0, rel=1e-6)
        assert inside(m, w.vector).mean() >= 0.9
