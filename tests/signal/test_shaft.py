"""What a real shaft does to the once-per-rev pulse: slots that ring, scratches, drift, sharp edges, the other
edge, a mark that stops under the sensor. Positions of the edges are known from closed forms."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from config.steadiness import PRESETS
from daq.signal.blocks import BlockFitter
from daq.signal.edges import EdgeFinder, edges_in, find_edges, trigger_of, unresolved_deg
from daq.signal.measure import measure
from daq.signal.revolutions import RevolutionClock
from daq.signal.shapes import PulseParams
from daq.signal.steadiness import Probe, judge

RATE = 12_800.0
VOLT = 2**23 / 30
PARAMS = PulseParams(1 / VOLT, (-(2**23), 2**23 - 1))
TURN, WIDTH, EDGE = 400.0, 26.0, 8.0
"""Samples: 32 Hz; the slot lasts 6.5 % of the turn."""


def places(turns: int) -> NDArray[np.float64]:
    return 123.4 + TURN * np.arange(turns)


def slots(turns: int, *, noise_v: float = 0.02, seed: int = 1) -> NDArray[np.float64]:
    """Volts of slots at :func:`places`: from -8 V to -15 V, the middle passed at each place."""
    t = np.arange(int(TURN * turns))
    u = (t - 123.4 + TURN / 2) % TURN - TURN / 2
    inside = np.clip(u / EDGE + 0.5, 0, 1) - np.clip((u - WIDTH) / EDGE + 0.5, 0, 1)
    return -8.0 - 7.0 * inside + np.random.default_rng(seed).normal(0, noise_v, len(t))


def counts(volts: NDArray[np.float64]) -> NDArray[np.int32]:
    return np.rint(volts * VOLT).astype(np.int32)


def ringing(volts: NDArray[np.float64], *, periods: float, at: float) -> NDArray[np.float64]:
    """A decaying oscillation of 6 V from ``at`` samples after the middle of each falling edge."""
    t = np.arange(len(volts))
    u = (t - 123.4) % TURN - at
    shape = np.where(u >= 0, np.exp(-np.maximum(u, 0) / 14) * np.sin(2 * np.pi * u / periods), 0)
    ringing: NDArray[np.float64] = volts + 6.0 * shape
    return ringing


@pytest.mark.parametrize("periods", [5.0, 9.0, 17.0])
@pytest.mark.parametrize("at", [EDGE, WIDTH])
def test_a_slot_that_rings_gives_one_edge(periods: float, at: float) -> None:
    """It rings within the slot, or after it, up to 6 V of a pulse of 7 V: the first edge counts."""
    rung = ringing(slots(60), periods=periods, at=at)
    edges = find_edges(counts(rung), PARAMS)
    assert len(edges) == 60
    # the extremes of the ringing move the level, by 2 V at most: 8 samples of edge are 7 V; no turn differs
    off = edges - places(60)
    assert np.abs(off).max() < 2.5
    assert np.ptp(off) < 0.4


def test_ringing_begins_in_mid_turn_too() -> None:
    """Fed from the middle of a slot, the stream's first edge may be an echo; no later one is."""
    rung = counts(ringing(slots(60), periods=9.0, at=WIDTH))
    finder = EdgeFinder(PARAMS, RATE, trigger_of(rung, PARAMS))
    edges = finder.feed(rung[130:], 130)
    assert 59 <= len(edges) <= 60
    assert np.diff(edges[-59:]) == pytest.approx(TURN, abs=0.4)


def test_shallow_scratches_are_no_pulse() -> None:
    """Of 2.5 V where the pulse has 7 V: they stay 1 V short of the level, -11.5 V."""
    t = np.arange(int(TURN * 60))
    volts = slots(60)
    for at in (90, 170, 200, 290):
        volts -= np.where(np.abs((t - 123.4 - at) % TURN) < 6, 2.5, 0)
    edges = find_edges(counts(volts), PARAMS)
    assert edges == pytest.approx(places(60), abs=0.3)


@pytest.mark.parametrize("drift_v", [0.5, 3.0, -6.0])
def test_a_window_follows_a_gap_that_drifts(drift_v: float) -> None:
    """Over 20 s. A fixed level would be off by up to half the drift, 8 samples of edge being 7 V, or lose
    pulses."""
    volts = slots(640)
    volts += drift_v * np.arange(len(volts)) / len(volts)
    finder, edges = edges_in(counts(volts), PARAMS, RATE)
    assert len(edges) == 640
    # what is left: the first and the last pieces look to one side only, so that the level lags by half of the
    # drift of 2 s; and the level is renewed each 0.25 s
    assert np.abs(edges - places(640)).max() < abs(drift_v) / 20 * 1.3 * EDGE / 7 + 0.1
    assert finder.edge_samples == pytest.approx(EDGE, rel=0.2)  # 1.2 V of drift within 4 s count as pulse


def test_a_still_pulse_has_one_level_for_the_whole_window() -> None:
    column = counts(slots(640))
    one = trigger_of(column, PARAMS)
    finder, edges = edges_in(column, PARAMS, RATE)
    assert finder.trigger == one
    assert np.array_equal(edges, find_edges(column, PARAMS, one))


@settings(max_examples=30, deadline=None)
@given(cuts=st.lists(st.integers(1, 20_000), max_size=20), edge=st.sampled_from(["falling", "rising"]))
def test_ringing_edges_do_not_hang_on_how_the_stream_is_cut(cuts: list[int], edge: Any) -> None:
    rung = counts(ringing(slots(55, noise_v=0.3), periods=9.0, at=WIDTH))
    params = PulseParams(1 / VOLT, PARAMS.full_scale_counts, edge=edge)
    whole = EdgeFinder(params, RATE)
    once = whole.feed(rung, 7)
    pieces = EdgeFinder(params, RATE)
    bounds = sorted({0, len(rung), *cuts})
    cut = np.concatenate([pieces.feed(rung[a:b], 7 + a) for a, b in pairwise(bounds)])
    assert np.array_equal(cut, once)
    for name in ("edge_samples", "pulse_length", "pulse_share", "margin"):
        assert getattr(pieces, name) == getattr(whole, name)


# --- how sharp -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("taken", "want"), [(8.0, 8.0), (4.0, 4.0), (2.0, 2.0), (0.01, 1.0)])
def test_samples_on_an_edge(taken: float, want: float) -> None:
    t = np.arange(40_000)
    u = (t - 100 + 46.3) % 97.3 - 46.3
    inside = np.clip(u / taken + 0.5, 0, 1) - np.clip((u - 12) / taken + 0.5, 0, 1)
    finder, edges = edges_in(counts(-8 - 7 * inside), PARAMS, RATE)
    assert finder.edge_samples == pytest.approx(want, rel=0.06)
    assert finder.pulse_length == pytest.approx(12, abs=1)
    assert finder.pulse_share == pytest.approx(12 / 97.3, abs=0.01)
    assert len(edges) == 412


def test_what_sharp_edges_leave_open() -> None:
    # METHODS 8.3: half a sample; one is 360 f/fs: 0.703125 deg at 25.6 kHz, 50 Hz; 7.2 deg at 10 kHz, 200 Hz
    assert unresolved_deg(1.0, 25_600 / 50) == pytest.approx(0.703125 / 2)
    assert unresolved_deg(1.3, 10_000 / 200) == pytest.approx(3.6)
    assert unresolved_deg(2.0, 50.0) == 0.0
    assert unresolved_deg(float("inf"), 50.0) == 0.0


@pytest.mark.parametrize("low", [4, 40])
def test_edges_stamped_by_hardware_leave_nothing_open(low: int) -> None:
    """As daq/drivers/frames draws them: +h, then h f and -h (1 - f) about the edge, then -h. A line between
    these two is exact, at 20 samples a turn too."""
    rng = np.random.default_rng(5)
    h, turn = 32767, 5 * low + 0.37
    places = 30 + turn * np.arange(200) + rng.uniform(-0.4, 0.4, 200)
    column = np.full(int(places[-1]) + 60, h, np.int32)
    for place in places:
        at, part = int(place), place % 1
        column[at : at + 2 + low] = [round(h * part), -round(h * (1 - part)), *[-h] * low]
    finder, edges = edges_in(column, PulseParams(5 / h, (-h - 1, h)), RATE)
    assert edges == pytest.approx(places, abs=2e-3)
    assert finder.edge_samples == pytest.approx(2.0, abs=0.05)
    assert unresolved_deg(finder.edge_samples, turn) == 0.0
    assert finder.pulse_length >= 3


def fits_of(s: Any, changed: NDArray[Any], **pulse: Any) -> tuple[BlockFitter, list[Any]]:
    params = PulseParams(s.volts_per_count, s.scale, **pulse)
    fitter = BlockFitter(params, s.channels, s.rate_hz, block_s=1.0)
    fits = [f for i in range(0, len(changed), 640) for f in fitter.feed(changed[i : i + 640], i)]
    return fitter, fits


def test_a_step_at_60_samples_a_turn_is_refused_with_its_figure(signal: Callable[..., Any]) -> None:
    """Half of 6 degrees; the phase is off by so much at most, and turns of whole samples repeat the error."""
    limits = PRESETS["small"]
    s = signal(
        rate_hz=2502.0,
        speed_hz=41.7,
        seconds=20.0,
        edge_turns=1e-6,
        mark_turns=0.08,
        noise_um=0.1,
        start_turns=0.307,
    )
    m = measure(s.counts(), s.pulse, s.channels, s.rate_hz)
    v = m.vector("probe 1")
    assert v is not None
    assert abs(np.degrees(np.angle(v.value / s.probes[0][1]))) <= 3.0
    _, fits = fits_of(s, s.counts())
    assert fits[0].edge_deg == pytest.approx(3.0)
    found = next(
        f for f in judge(fits, limits, [Probe("probe 1", "displacement")]).figures if f.name == "edge"
    )
    assert not found.ok
    assert found.sentence.startswith("the once-per-rev edge is placed to 3 deg only, phase target 0.3 deg")


def test_three_samples_on_the_pulse_are_needed(signal: Callable[..., Any]) -> None:
    s = signal(rate_hz=1000.0, speed_hz=10.0, seconds=20.0, edge_turns=1e-6, mark_turns=0.02, noise_um=0.1)
    _, fits = fits_of(s, s.counts())
    figures = judge(fits, PRESETS["small"], [Probe("probe 1", "displacement")]).figures
    found = next(f for f in figures if f.name == "pulse")
    assert (found.value, found.ok) == (2.0, False)
    assert "few_samples" in fits[0].flags


# --- which edge, which level -----------------------------------------------------------------------------


def test_the_other_edge_of_a_mark_is_suspected() -> None:
    """The rising edge of a slot begins the rest of the turn: 93.5 % of it."""
    column = counts(slots(60))
    right, _ = edges_in(column, PARAMS, RATE)
    wrong, _ = edges_in(column, PulseParams(1 / VOLT, PARAMS.full_scale_counts, edge="rising"), RATE)
    assert right.pulse_share == pytest.approx(0.065, abs=0.005)
    assert wrong.pulse_share == pytest.approx(0.935, abs=0.005)


@pytest.mark.parametrize(
    ("changes", "noise_v", "margin"),
    [
        ({}, 0.001, 5.0),  # half of the pulse over a tenth of it
        ({"level_v": -8.7}, 0.001, 1.0),
        ({"level_v": -14.65}, 0.001, 0.5),
        ({"hysteresis_v": 1.75}, 0.001, 2.0),
        ({}, 0.5, 2.0),  # 3.5 V over 4 times 0.5 V, and the extremes of noise make the pulse higher
    ],
)
def test_the_margin_of_the_level(changes: dict[str, Any], noise_v: float, margin: float) -> None:
    params = PulseParams(1 / VOLT, PARAMS.full_scale_counts, **changes)
    trigger = trigger_of(counts(slots(60, noise_v=noise_v)), params)
    assert trigger is not None
    assert trigger.margin == pytest.approx(margin, rel=0.25 if noise_v > 0.1 else 0.02)


@pytest.mark.parametrize("stop_at", [0.0, 0.0003, -0.0003, 0.001])
def test_a_mark_that_stops_under_the_sensor_is_not_turning(stop_at: float) -> None:
    """From 10 Hz to rest in 6 s, the falling edge's middle within a third of a degree of the sensor. Pulses
    may be waited for 2.5 s; from then on nothing turns, while the level forgets the pulses."""
    t = np.arange(int(14 * RATE)) / RATE
    turns = np.where(t < 6, 10 * t - 10 / 12 * t**2, 30.0) + stop_at
    u = (turns + 0.5) % 1 - 0.5
    inside = np.clip(u / 0.02 + 0.5, 0, 1) - np.clip((u - 0.06) / 0.02 + 0.5, 0, 1)
    column = counts(-8 - 7 * inside + np.random.default_rng(3).normal(0, 0.1, len(t)))
    finder, clock = EdgeFinder(PARAMS, RATE), RevolutionClock(RATE)
    turning = []
    for i in range(0, len(column), 1280):
        clock.feed(finder.feed(column[i : i + 1280], i), i + 1280)
        turning.append(clock.turning)
    assert turning[20]
    assert not any(turning[86:])  # 8.6 s
