"""Once-per-rev edges: place, noise, chunking, level."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from daq.signal.edges import EdgeFinder, Trigger, find_edges, trigger_of
from daq.signal.shapes import PulseParams

SCALE = (-(2**23), 2**23 - 1)
PARAMS = PulseParams(1e-6, SCALE)  # a count is a microvolt: pulses of volts are millions of counts


def pulses(
    positions: NDArray[np.float64], frames: int, *, slope: float, low: float = -4e6, high: float = 0.0
) -> NDArray[np.float64]:
    """Volts in counts: falls through the middle at each position with ``slope`` per sample, back after 12
    samples."""
    t = np.arange(frames, dtype=np.float64)
    middle = (low + high) / 2
    k = np.clip(np.searchsorted(positions, t + 20) - 1, 0, len(positions) - 1)
    u = t - positions[k]
    fall = middle - slope * u
    rise = middle + slope * (u - 12)
    return np.clip(np.where(u < 6, fall, rise), low, high)


@pytest.mark.parametrize(
    ("fraction", "want"),
    # METHODS 8.3 [D]: s/S = 0.02 samples
    [(0.25, 0.01581139), (0.5, 0.01414214), (None, 0.01632993)],
)
def test_noise_of_an_edge_by_its_place_between_samples(fraction: float | None, want: float) -> None:
    rng = np.random.default_rng(83)
    n = 12_000
    offset = rng.uniform(0, 1, n) if fraction is None else np.full(n, fraction)
    positions = 30.0 + 50 * np.arange(n) + offset
    slope = 4e5
    clean = pulses(positions, 50 * n + 60, slope=slope)
    counts = np.rint(clean + rng.normal(0, 0.02 * slope, len(clean))).astype(np.int32)
    edges = find_edges(counts, PARAMS, Trigger(-2e6, 4e5, 4e6))
    assert len(edges) == n
    error = edges - positions
    assert np.std(error) == pytest.approx(want, rel=4 / np.sqrt(2 * n))
    assert abs(np.mean(error)) < 4 * want / np.sqrt(n)


def test_edges_of_a_clean_pulse_are_exact() -> None:
    positions = 30.0 + 47.3 * np.arange(200)
    counts = np.rint(pulses(positions, 9600, slope=4e5)).astype(np.int32)
    edges = find_edges(counts, PARAMS, Trigger(-2e6, 4e5, 4e6))
    assert edges == pytest.approx(positions, abs=1e-5)  # a count is 2.5e-6 samples
    automatic = find_edges(counts, PARAMS)
    assert automatic == pytest.approx(positions, abs=0.006)  # the level is known to a bin, 4096 counts


def test_the_rising_edge_comes_after_the_width_of_the_mark() -> None:
    positions = 30.0 + 47.3 * np.arange(100)
    counts = np.rint(pulses(positions, 4800, slope=4e5)).astype(np.int32)
    rising = find_edges(counts, PulseParams(1e-6, SCALE, edge="rising"), Trigger(-2e6, 4e5, 4e6))
    assert rising == pytest.approx(positions + 12, abs=1e-5)


def test_a_slow_edge_full_of_noise_gives_one_edge_and_favours_no_side() -> None:
    """Noise of 1.5 samples of slope: the signal crosses the level several times on most edges."""
    rng = np.random.default_rng(6)
    n = 3000
    positions = 60.0 + 100 * np.arange(n) + rng.uniform(0, 1, n)
    t = np.arange(100 * n + 100, dtype=np.float64)
    k = np.clip(np.searchsorted(positions, t + 50) - 1, 0, n - 1)
    u = t - positions[k]
    clean = np.clip(-2e6 - 1e5 * np.where(u < 25, u, 50 - u), -4e6, 0)
    counts = np.rint(clean + rng.normal(0, 1.5e5, len(clean))).astype(np.int32)
    edges = find_edges(counts, PARAMS, Trigger(-2e6, 6e5, 4e6))
    assert len(edges) == n
    error = edges - positions
    assert abs(error.mean()) < 4 * error.std() / np.sqrt(n)
    assert error.std() < 1.5


def noisy_pulses(seed: int) -> NDArray[np.int32]:
    """Turning at a speed that drifts, slow and noisy edges, pulses lost and doubled, and standstill."""
    rng = np.random.default_rng(seed)
    positions = 40 + np.cumsum(rng.uniform(60, 90, 150))
    positions = np.delete(positions, [20, 21, 77])
    clean = pulses(positions, 13_000, slope=rng.choice([8e4, 4e5, 4e6]))
    clean[6000:7500] = 0.0
    clean[9000:9004] = -4e6
    return np.rint(clean + rng.normal(0, 1e5, len(clean))).astype(np.int32)


CUTS = st.lists(st.integers(1, 12_999), max_size=30).map(lambda cuts: sorted({0, 13_000, *cuts}))


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 50), cuts=CUTS, follow=st.booleans())
def test_edges_do_not_hang_on_how_the_stream_is_cut(seed: int, cuts: list[int], follow: bool) -> None:
    counts = noisy_pulses(seed)

    def finder() -> EdgeFinder:
        # at 2000 samples/s the automatic level is renewed every 500 samples
        return EdgeFinder(PARAMS, 2000.0, None if follow else Trigger(-2e6, 4e5, 4e6))

    once = finder()
    whole = once.feed(counts, 1000)
    pieces = finder()
    cut = np.concatenate([pieces.feed(counts[a:b], 1000 + a) for a, b in pairwise(cuts)])
    assert np.array_equal(cut, whole)
    assert len(whole) > 90
    assert pieces.pulse_length == once.pulse_length


def test_single_samples_are_chunks_too() -> None:
    counts = noisy_pulses(3)[:3000]
    whole = EdgeFinder(PARAMS, 2000.0).feed(counts, 0)
    pieces = EdgeFinder(PARAMS, 2000.0)
    single = np.concatenate([pieces.feed(counts[i : i + 1], i) for i in range(len(counts))])
    assert np.array_equal(single, whole)


def test_automatic_level_is_the_middle_of_the_pulse(signal: Callable[..., Any]) -> None:
    s = signal(pulse_noise_v=0.02)
    trigger = trigger_of(s.counts()[:, 0], s.pulse)
    assert trigger is not None
    # the pulse of the signal runs from -8 V to -15 V; noise of 0.02 V moves its extremes by two or three sd
    assert trigger.level * s.volts_per_count == pytest.approx(-11.5, abs=0.03)
    assert trigger.height * s.volts_per_count == pytest.approx(7.0, abs=0.15)
    assert trigger.band == pytest.approx(0.1 * trigger.height)


def test_level_in_volts_is_taken_as_given(signal: Callable[..., Any]) -> None:
    s = signal()
    given_v = PulseParams(s.volts_per_count, s.scale, level_v=-10.0, hysteresis_v=0.5)
    trigger = trigger_of(s.counts()[:, 0], given_v)
    assert trigger is not None
    assert trigger.level * s.volts_per_count == pytest.approx(-10.0)
    assert trigger.band * s.volts_per_count == pytest.approx(0.5)


@pytest.mark.parametrize(
    ("volts", "noise_v"),
    [(0.0, 0.05), (0.6, 0.02), (3.0, 0.5)],
    ids=["nothing but noise", "lower than a volt", "six times its noise"],
)
def test_a_pulse_that_does_not_stand_out_is_refused(volts: float, noise_v: float) -> None:
    rng = np.random.default_rng(2)
    t = np.arange(40_000)
    x = -8 - volts * ((t % 800) < 40) + rng.normal(0, noise_v, len(t))
    counts = np.rint(x / 1e-6).astype(np.int32)
    params = PulseParams(1e-6, (-(2**24), 2**24))
    assert trigger_of(counts, params) is None
    assert len(find_edges(counts, params)) == 0


def test_the_level_follows_a_gap_that_moves() -> None:
    """The whole pulse sinks by twice its height over 40 s; a level held fixed would lose it."""
    positions = 100.0 + 100 * np.arange(800)
    clean = pulses(positions, 80_200, slope=4e5)
    moved = np.rint(clean - 8e6 * np.arange(len(clean)) / len(clean)).astype(np.int32)
    params = PulseParams(1e-6, (-(2**24), 2**24))
    edges = EdgeFinder(params, 2000.0).feed(moved, 0)
    assert len(edges) >= 780  # it looks for half a second before the first
    nearest = positions[np.searchsorted(positions, edges - 50)]
    assert np.abs(edges - nearest).max() < 2.5  # 1.6 V of lag of the level at 0.4 V a sample is 4


def test_samples_on_the_pulse_are_counted() -> None:
    positions = 30.0 + 50 * np.arange(100)
    counts = np.rint(pulses(positions, 5000, slope=4e6)).astype(np.int32)
    finder = EdgeFinder(PARAMS, 1000.0, Trigger(-2e6, 4e5, 4e6))
    finder.feed(counts, 0)
    assert finder.pulse_length == 12


def test_after_a_gap_half_an_edge_is_no_edge() -> None:
    counts = np.concatenate((np.zeros(50), np.full(10, -4e6))).astype(np.int32)
    finder = EdgeFinder(PARAMS, 1000.0, Trigger(-2e6, 4e5, 4e6))
    assert len(finder.feed(counts[:50], 0)) == 0
    finder.restart()
    assert len(finder.feed(counts[50:], 9000)) == 0


def test_sixteen_bit_counts_at_the_end_of_their_scale() -> None:
    """A logic pulse that saturates the converter: -32768 must not wrap for the other edge."""
    t = np.arange(5000)
    counts = np.where((t % 100) < 30, -32768, 32767).astype(np.int16)
    falling = find_edges(counts, PulseParams(1e-3, (-32768, 32767)))
    rising = find_edges(counts, PulseParams(1e-3, (-32768, 32767), edge="rising"))
    assert falling == pytest.approx(99.5 + 100 * np.arange(49), abs=1e-9)
    assert rising == pytest.approx(29.5 + 100 * np.arange(50), abs=1e-2)


@pytest.mark.parametrize("share", [0.025, 0.05])
def test_noise_on_the_pulse_does_not_shift_its_level(share: float) -> None:
    """Noise of 2.5 and 5 % of the pulse would move the level by half of itself; the middle is 0 here."""
    rng = np.random.default_rng(5)
    turn = (np.arange(200_000) / 1000.3) % 1.0
    pulse = 8000 * np.clip(np.minimum(turn, 0.1 - turn) / 0.0075, -0.5, 0.5) * -1.0
    noisy = np.rint(pulse + rng.normal(0, share * 8000, len(pulse))).astype(np.int16)
    trigger = trigger_of(noisy, PulseParams(30 / 32768, (-32768, 32767)))
    assert trigger is not None
    assert abs(trigger.level) < 0.1 * share * 8000  # a tenth of the noise: 0.03 deg and less on this edge
