"""Live blocks: the same whatever the chunks, whole turns, nothing across a gap."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from daq.signal.blocks import BlockFitter, speed_spread_hz, usable_orders
from daq.signal.measure import measure
from daq.signal.shapes import BlockFit


def fitter(s: Any, block_s: float = 0.5, **options: Any) -> BlockFitter:
    return BlockFitter(s.pulse, s.channels, s.rate_hz, block_s=block_s, **options)


def feed(f: BlockFitter, counts: NDArray[Any], step: int = 640, first: int = 0) -> list[BlockFit]:
    return [fit for i in range(0, len(counts), step) for fit in f.feed(counts[i : i + step], first + i)]


def test_blocks_are_whole_turns_of_at_least_their_length(signal: Callable[..., Any]) -> None:
    s = signal(seconds=4.0, noise_um=0.25)
    fits = feed(fitter(s), s.counts())
    assert len(fits) >= 6
    for fit in fits:
        # 41.7 Hz: 21 turns are the first whole number over half a second
        assert fit.revolutions == 21
        assert fit.t_end_s - fit.t_start_s == pytest.approx(21 / 41.7, rel=1e-5)
        assert fit.speed_hz == pytest.approx(41.7, rel=1e-4)
        assert fit.vectors[0] == pytest.approx(s.probes[0][1], abs=0.05)
        assert fit.se[0] == pytest.approx(0.25 * np.sqrt(2 / (21 / 41.7 * 12_800)), rel=0.05)  # METHODS 8.2
        assert fit.residual_sd[0] == pytest.approx(0.25, rel=0.03)
        assert fit.ac_rms[0] == pytest.approx(np.sqrt(6**2 / 2 + 0.25**2), rel=0.01)
        assert fit.gap_v[0] == pytest.approx(-10.0, abs=1e-3)
        assert fit.flags == ()
    for one, following in pairwise(fits):
        assert following.first_sample == one.stop_sample
        assert following.t_start_s == one.t_end_s


def test_a_block_is_what_measure_says_of_its_samples(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.25, ramp=0.02)
    counts = s.counts()
    fit = feed(fitter(s), counts)[2]
    m = measure(counts, s.pulse, s.channels, s.rate_hz, start=fit.first_sample - 5, stop=fit.stop_sample + 5)
    v = m.vector("probe 1")
    assert v is not None
    assert m.revolutions == fit.revolutions
    # the level is taken over other samples, and the curve of the first and last turn from one side
    assert v.value == pytest.approx(fit.vectors[0], abs=2e-3)
    assert m.speed_hz == pytest.approx(fit.speed_hz, rel=1e-5)


@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(cuts=st.lists(st.integers(1, 25_599), max_size=40))
def test_blocks_do_not_hang_on_how_the_stream_is_cut(signal: Callable[..., Any], cuts: list[int]) -> None:
    s = signal(seconds=2.0, noise_um=0.25, pulse_noise_v=0.02)
    counts = s.counts()
    whole = fitter(s).feed(counts, 0)
    f = fitter(s)
    edges = sorted({0, len(counts), *cuts})
    cut = [fit for a, b in pairwise(edges) for fit in f.feed(counts[a:b], a)]
    assert len(cut) == len(whole) == 3
    for one, other in zip(whole, cut, strict=True):
        assert (one.first_sample, one.stop_sample) == (other.first_sample, other.stop_sample)
        assert one.vectors == pytest.approx(other.vectors, rel=1e-10)
        assert one.se == pytest.approx(other.se, rel=1e-8)


@pytest.mark.parametrize("gap", ["segment", "samples"])
def test_nothing_is_computed_across_a_gap(signal: Callable[..., Any], gap: str) -> None:
    s = signal(seconds=6.0)
    counts = s.counts()
    f = fitter(s)
    before = feed(f, counts[:30_000])
    # the gap: half a turn is lost, so that vectors across it would cancel
    at = 30_000 + round(12_800 / 41.7 / 2)
    fits = []
    for i in range(at, len(counts), 640):
        segment, first = (1, i) if gap == "segment" else (0, i)
        fits += f.feed(counts[i : i + 640], first, segment)
    assert before
    assert fits
    assert fits[0].first_sample >= at
    assert all(fit.vectors[0] == pytest.approx(s.probes[0][1], abs=2e-3) for fit in fits)


def test_a_standstill_between_two_runs_holds_no_samples(signal: Callable[..., Any]) -> None:
    s = signal(seconds=2.0)
    turning = s.counts()
    still = np.tile(turning[:1], (12_800 * 30, 1))
    f = fitter(s)
    assert feed(f, turning)
    assert f.clock.turning
    assert feed(f, still, first=len(turning)) == []
    assert not f.clock.turning
    assert sum(len(c) for _, c in f._chunks) < 12_800
    again = feed(f, s.counts(), first=len(turning) + len(still))
    assert again
    assert again[0].first_sample > len(turning) + len(still)
    assert again[0].vectors[0] == pytest.approx(s.probes[0][1], abs=2e-3)


def test_missed_pulses_are_counted_once_and_their_turns_left_out(signal: Callable[..., Any]) -> None:
    s = signal(seconds=6.0)
    counts = s.counts()
    t = np.arange(len(counts)) / s.rate_hz
    at = np.rint(s.turns_at(t) - 0.03)
    counts[np.isin(at, [60, 90, 130, 131]), 0] = int(-8.0 / s.volts_per_count)
    fits = feed(fitter(s), counts)
    assert sum(f.missed for f in fits) == 4
    assert sum(f.doubles for f in fits) == 0
    assert {"missed_pulses" in f.flags for f in fits if f.missed} == {True}
    assert all(f.vectors[0] == pytest.approx(s.probes[0][1], abs=2e-3) for f in fits)
    for one, following in pairwise(fits):
        assert following.first_sample == one.stop_sample


def test_a_slow_turn_is_waited_for(signal: Callable[..., Any]) -> None:
    """24 r/min: 2.5 s a turn, longer than a block."""
    s = signal(speed_hz=0.4, seconds=20.0, rate_hz=2000.0, noise_um=0.1)
    fits = feed(fitter(s, longest_turn_s=6.0), s.counts(), 200)
    assert len(fits) >= 4
    assert all(f.revolutions == 1 for f in fits)
    assert fits[-1].vectors[0] == pytest.approx(s.probes[0][1], abs=0.02)


def test_orders_need_samples() -> None:
    assert usable_orders((1, 2, 3), 7.0) == (1, 2, 3)
    assert usable_orders((1, 2, 3), 6.0) == (1, 2)
    assert usable_orders((1, 2, 3), 2.0) == ()


def test_speed_spread_is_over_tenths_of_a_second() -> None:
    # 1000 samples/s; ten turns a step: alternate steps of 100 and 99 Hz have sd 0.5 Hz * sqrt(n/(n-1))
    periods = np.concatenate([np.full(10, 10.0 if k % 2 else 1000 / 99) for k in range(20)])
    assert speed_spread_hz(periods, 1000.0) == pytest.approx(0.5 * np.sqrt(20 / 19), rel=1e-6)
    # jitter from turn to turn is not hunting: it ends within a step
    assert speed_spread_hz(np.tile([9.0, 11.0], 100), 1000.0) == pytest.approx(0.0, abs=1e-9)
    assert speed_spread_hz(np.array([10.0]), 1000.0) == 0.0
