"""How often the stated 95 % regions of stored vectors hold the truth.

Asked for: 93 to 97 % in 2000 trials with 16 or more parts, white and coloured. Trials are probes with noise
of their own. Larger: tests/bench/bench_bound.py.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
import scipy.signal
import scipy.stats
from window_kit import Floats, Window, covariances, first_orders, inside

from daq.signal.covariance import circle_factor, edge_jitter, parts_of, stated_covariance
from daq.signal.revolutions import turns_of

TRIALS, PROBES = 2000, 200


def white(w: Window, rng: np.random.Generator) -> Floats:
    return rng.normal(size=(w.frames, PROBES))


def remembering(turns: float) -> Callable[[Window, np.random.Generator], Floats]:
    """AR(1) whose correlation falls to 1/e in so many turns."""

    def noise(w: Window, rng: np.random.Generator) -> Floats:
        keep, lead = np.exp(-1 / (turns * w.per_turn)), int(8 * turns * w.per_turn)
        raw = rng.normal(size=(w.frames + lead, PROBES))
        return np.asarray(scipy.signal.lfilter([1], [1, -keep], raw, axis=0)[lead:])

    return noise


def pink(w: Window, rng: np.random.Generator) -> Floats:
    """Power as 1/f, over four times the window."""
    spectrum = np.fft.rfft(rng.normal(size=(4 * w.frames, PROBES)), axis=0)
    spectrum[1:] /= np.sqrt(np.arange(1, len(spectrum)))[:, None]
    spectrum[0] = 0
    return 20 * np.fft.irfft(spectrum, axis=0)[: w.frames]


def coverage(w: Window, noise: Callable[[Window, np.random.Generator], Floats], seed: int) -> float:
    rng = np.random.default_rng(seed)
    held = [inside(w.measured(w.counts(noise(w, rng))), w.vector) for _ in range(TRIALS // PROBES)]
    return float(np.mean(held))


@pytest.mark.parametrize(
    "noise",
    [white, remembering(0.1), remembering(1.0), pink],
    ids=["white", "AR 0.1 turns", "AR 1 turn", "1/f"],
)
def test_sixteen_parts_hold_the_truth_as_often_as_they_say(
    noise: Callable[[Window, np.random.Generator], Floats],
) -> None:
    w = Window(per_turn=24.7, turns=64, stamped=True)
    assert parts_of(w.turns) == 16
    assert 0.93 <= coverage(w, noise, 10) <= 0.97


@pytest.mark.parametrize("turns", [2, 4, 10])
def test_few_turns_hold_it_too(turns: int) -> None:
    """From the residuals below 3 parts, the circle below 8, Hotelling from there on: white noise."""
    w = Window(per_turn=40.3, turns=turns, stamped=True)
    assert 0.93 <= coverage(w, white, turns) <= 0.97


def test_noise_of_the_edges_is_covered() -> None:
    """Jitter moves the phase alone: a 2-D region holds a 1-D error more often, 1 - 2 sf(2.448) = 98.6 % for a
    known variance. With noise in the probes of the same size it is 95 to 98.6 %."""
    rng = np.random.default_rng(12)
    w, held, stated, errors = Window(per_turn=64.3, turns=64), [], [], []
    for _ in range(80):
        late = rng.normal(0, np.radians(0.5) / (2 * np.pi) * w.per_turn, w.turns + 3)
        m = w.measured(w.counts(rng.normal(0, 1.7, (w.frames, 1)), late=late))
        held.append(inside(m, w.vector)[0])
        errors.append(abs(first_orders(m)[0] - w.vector) ** 2)
        stated.append(np.trace(covariances(m)[0]))
    assert np.mean(held) > 0.9  # 80 trials: 0.95 less 2 sd
    assert 0.9 < np.sqrt(np.mean(stated) / np.mean(errors)) < 1.5


def test_edge_jitter_is_read_from_third_differences() -> None:
    """Edges every 100 samples with an sd of 0.3: 2 pi 0.3/100 rad; none on a ramp of 1 % a turn."""
    rng = np.random.default_rng(13)
    k = np.arange(3001)
    assert edge_jitter(turns_of(100.0 * k + rng.normal(0, 0.3, 3001))) == pytest.approx(
        2 * np.pi * 0.003, rel=0.05
    )
    assert edge_jitter(turns_of(100.0 * k[:60] + 0.5 * k[:60] ** 2)) < 1e-12
    assert edge_jitter(turns_of(np.array([0.0, 100.0, 200.0]))) == 0.0


@pytest.mark.parametrize("parts", [3, 5, 7])
def test_the_factor_of_a_circle_is_fishers(parts: int) -> None:
    # scipy.stats as the outside reference: 2 F(0.95; 2, 2 n - 2) over chi square
    want = 2 * scipy.stats.f.ppf(0.95, 2, 2 * parts - 2) / scipy.stats.chi2.ppf(0.95, 2)
    assert circle_factor(parts) == pytest.approx(want, rel=1e-12)


def test_parts() -> None:
    """One a turn up to 16, then 16 until each has four turns, then more of them up to 32."""
    assert [parts_of(n) for n in (1, 3, 16, 40, 64, 100, 128, 5000)] == [1, 3, 16, 16, 16, 25, 32, 32]


def test_the_share_of_an_edge_that_neighbouring_parts_hide() -> None:
    """Parts of one turn: each has the mean of its two edges, so their scatter shows half of what their mean
    has; the other half is added. 1500 windows of 16 turns, worked out from the edges alone."""
    rng = np.random.default_rng(14)
    edges = rng.normal(0, 0.01, (1500, 17))
    parts = 1j * (edges[:, 1:] + edges[:, :-1]) / 2  # of a unit vector at 0 degrees
    means = parts.mean(axis=1).imag
    one_turn = np.array([[0.0, 0.0], [0.0, 0.01**2]])
    stated = [stated_covariance(np.zeros((2, 2)), p, one_turn, 16)[1, 1] for p in parts]
    hotelling = 1.33722  # scipy: 2*15/14*F(0.95; 2, 14)/chi2(0.95; 2), for the scattered half
    want = np.var(means)
    assert np.mean(stated) == pytest.approx((0.5 * hotelling + 0.5) * want, rel=0.09)
