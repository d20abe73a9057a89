"""Missed and double pulses repaired: up to a tenth each, on ramps too, whatever the chunks."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from config.steadiness import PRESETS
from daq.signal.blocks import BlockFitter
from daq.signal.measure import measure
from daq.signal.revolutions import turns_of
from daq.signal.rhythm import Mended, Rhythm, _filled
from daq.signal.steadiness import Probe, judge

Floats = NDArray[np.float64]


def faulty_edges(
    seed: int, missed: float, doubles: float, *, turns: int = 300, ramp: float = 0.0, jitter: float = 0.0
) -> tuple[Floats, Floats, int, int]:
    """Edges with faults, the true ones between the first and the last that came, and how many are missed and
    double there. Turns of 100 samples; ``ramp``: change of speed a turn; ``jitter``: sd, turns."""
    rng = np.random.default_rng(seed)
    n = np.arange(turns + 1.0)
    # constant acceleration: (1 + ramp / 2) n' + ... solved for the time of each whole turn
    true = 100 * (n if ramp == 0 else (np.sqrt(1 + 2 * ramp * n) - 1) / ramp)
    came = rng.random(turns + 1) >= missed
    seen = true + rng.normal(0, 100 * jitter, turns + 1)
    cut = np.flatnonzero(rng.random(turns) < doubles)
    extra = true[cut] + rng.uniform(0.03, 0.97, len(cut)) * (true[cut + 1] - true[cut])
    first, last = np.flatnonzero(came)[[0, -1]]
    between = (extra > true[first]) & (extra < true[last])
    edges = np.sort(np.concatenate((seen[came], extra[between])))
    return edges, true[first : last + 1], int((~came[first:last]).sum()), int(between.sum())


@pytest.mark.parametrize("ramp", [0.0, 0.005, -0.001])  # 0.5 % a turn: 10 %/s at 20 Hz
@pytest.mark.parametrize(("missed", "doubles"), [(0.1, 0.0), (0.0, 0.1), (0.1, 0.1)])
def test_a_tenth_missed_and_a_tenth_double_are_repaired(missed: float, doubles: float, ramp: float) -> None:
    for seed in range(6):
        edges, true, gone, extra = faulty_edges(seed, missed, doubles, ramp=ramp, jitter=1e-4)
        turns = turns_of(edges)
        found = turns.edges
        # a first or last turn that was cut may be lost, and three missed in a row across a double
        assert 0 <= len(true) - len(found) <= 4
        nearest = true[np.clip(np.searchsorted(true, found - 50 * (1 - ramp)), 0, len(true) - 1)]
        assert np.abs(found - nearest).max() < 1.01  # a double within 1 % of a missed edge is taken for it
        assert (np.abs(found - nearest) < 0.1).mean() > 0.98
        assert turns.missed == pytest.approx(gone, abs=6)
        assert turns.doubles == pytest.approx(extra, abs=6)


@pytest.mark.parametrize("jitter_deg", [2.0, 6.0])
def test_edges_that_jitter_are_not_repaired(jitter_deg: float) -> None:
    """METHODS 8.4 has 2 degrees a turn; the tolerance follows what the edges do."""
    for seed in range(10):
        rng = np.random.default_rng(seed)
        edges = 100.0 * np.arange(400) + rng.normal(0, jitter_deg / 3.6, 400)
        turns = turns_of(edges)
        assert turns.missed + turns.doubles <= 2
        assert np.isin(turns.edges, edges).mean() > 0.99
        assert len(turns.edges) >= len(edges) - 2  # the first ones may be left out
        assert turns.good.mean() > 0.99


def test_a_filled_edge_lies_on_the_parabola_of_its_neighbours() -> None:
    edges = 50 * np.arange(20.0) - 0.2 * np.arange(20.0) ** 2  # speeds up evenly per turn: a parabola
    turns = turns_of(np.delete(edges, [7, 12, 13]))
    assert turns.edges == pytest.approx(edges, abs=1e-9)
    assert turns.missed == 3


def test_start_from_rest_finds_its_rhythm() -> None:
    """Constant acceleration from rest: edges at sqrt(n), each turn shorter than the one before. The first is
    2.4 times as long as the second, so what is said of the first few is of no use."""
    edges = 1000 * np.sqrt(np.arange(60.0))
    turns = turns_of(edges)
    sound = turns.edges >= edges[4]
    assert np.array_equal(turns.edges[sound], edges[4:])
    assert turns.good[sound[:-1]].all()
    assert turns.missed_in[sound[:-1]].sum() == turns.doubles_in[sound[:-1]].sum() == 0


def test_a_sudden_change_of_speed_costs_no_count() -> None:
    edges = np.concatenate((100.0 * np.arange(30), 2900 + 96.0 * np.arange(1, 30)))
    turns = turns_of(edges)
    assert (turns.missed, turns.doubles) == (0, 0)
    assert np.array_equal(turns.edges, edges)
    assert turns.good.all()


def test_every_second_pulse_missed_is_not_half_the_speed() -> None:
    edges = np.concatenate((100.0 * np.arange(40), 4000 + 200.0 * np.arange(20)))
    turns = turns_of(edges)
    assert turns.missed == 19
    assert turns.speed(1000.0) == pytest.approx(10.0)


@settings(max_examples=25, deadline=None)
@given(
    seed=st.integers(0, 200),
    cuts=st.lists(st.integers(1, 300), max_size=30),
    faults=st.sampled_from([(0.0, 0.0), (0.1, 0.1), (0.3, 0.3)]),
)
def test_repairs_do_not_hang_on_how_the_edges_come(
    seed: int, cuts: list[int], faults: tuple[float, float]
) -> None:
    edges = faulty_edges(seed, *faults, ramp=0.002, jitter=1e-3)[0]
    whole = turns_of(edges)
    pieces = Rhythm()
    for a, b in pairwise(sorted({0, len(edges), *(c for c in cuts if c < len(edges))})):
        pieces.feed(edges[a:b])
    found = pieces.finish()
    assert np.array_equal(found.edges, whole.edges)
    assert np.array_equal(found.good, whole.good)
    assert (int(found.missed.sum()), int(found.doubles.sum())) == (whole.missed, whole.doubles)


def test_few_edges_or_none() -> None:
    for edges in ([], [5.0]):
        turns = turns_of(np.array(edges))
        assert len(turns.good) == 0
        assert (turns.missed, turns.doubles) == (0, 0)
    assert turns_of(np.array([0.0, 100.0])).good.tolist() == [True]
    assert turns_of(np.array([0.0, 100.0, 205.0])).good.tolist() == [True, True]
    assert turns_of(np.array([0.0, 100.0, 205.0]), breaks=[150]).good.tolist() == [True, False]


# --- through measure and the live blocks -----------------------------------------------------------------


def faulty_counts(s: Any, missed: float, doubles: float, seed: int) -> tuple[NDArray[Any], int, int]:
    """The signal's counts with pulses flattened and others added, 7 V deep and 2 % of a turn long, at least
    5 % of the turn away from the mark's own."""
    counts, rng = s.counts(), np.random.default_rng(seed)
    turns = s.turns_at(np.arange(len(counts)) / s.rate_hz)
    last = int(turns[-1])
    pulse = np.rint(turns - 0.03).astype(int)
    gone = rng.random(last + 2) < missed
    near = np.abs(turns - 0.03 - pulse) < 0.2
    counts[gone[pulse] & near, 0] = round(-8.0 / s.volts_per_count)
    places = np.flatnonzero(rng.random(last) < doubles)
    for place in places + rng.uniform(0.13, 0.93, len(places)):
        at = int(np.searchsorted(turns, place))
        counts[at : at + max(3, round(0.02 * s.rate_hz / s.speed_hz)), 0] = round(-15.0 / s.volts_per_count)
    return counts, int(gone[2:last].sum()), len(places)


@pytest.mark.parametrize(
    ("speed_hz", "ramp", "seconds"), [(41.7, 0.0, 6.0), (41.7, 0.1, 6.0), (12.3, 0.1, 10.0)]
)
def test_vectors_of_repaired_pulses_are_as_good_as_of_clean_ones(
    signal: Callable[..., Any], speed_hz: float, ramp: float, seconds: float
) -> None:
    """A tenth missed and a tenth double, at 0 and 10 %/s, over all turns: rms error within 1.5 times that of
    the clean pulses (measured: 1.0 to 1.1)."""
    clean, repaired = [], []
    for seed in range(5):
        s = signal(speed_hz=speed_hz, ramp=ramp, seconds=seconds, noise_um=0.3, pulse_noise_v=0.05, seed=seed)
        truth = s.probes[0][1]
        whole = measure(s.counts(), s.pulse, s.channels, s.rate_hz)
        counts, gone, extra = faulty_counts(s, 0.1, 0.1, seed)
        m = measure(counts, s.pulse, s.channels, s.rate_hz)
        v, w = m.vector("probe 1"), whole.vector("probe 1")
        assert v is not None
        assert w is not None
        repaired.append(abs(v.value - truth))
        clean.append(abs(w.value - truth))
        assert whole.revolutions - m.revolutions <= 3
        assert m.missed == pytest.approx(gone, abs=4)
        assert m.doubles == pytest.approx(extra, abs=3)
        assert {"missed_pulses", "double_pulses"} <= set(m.flags)
    assert np.sqrt(np.mean(np.square(repaired))) < 1.5 * np.sqrt(np.mean(np.square(clean)))


@pytest.mark.parametrize(
    ("missed", "doubles", "name"), [(0.125, 0.0, "missed_pulses"), (0.0, 0.125, "double_pulses")]
)
def test_an_eighth_is_refused_with_the_figure(
    signal: Callable[..., Any], missed: float, doubles: float, name: str
) -> None:
    s = signal(seconds=21.0, noise_um=0.1)
    counts = s.counts()
    turns = s.turns_at(np.arange(len(counts)) / s.rate_hz)
    pulse = np.rint(turns - 0.03)
    if missed:
        counts[(pulse % 8 == 0) & (np.abs(turns - 0.03 - pulse) < 0.2), 0] = round(-8.0 / s.volts_per_count)
    else:
        extra = (np.floor(turns) % 8 == 0) & (np.abs(turns % 1 - 0.4) < 0.02)
        counts[extra, 0] = round(-15.0 / s.volts_per_count)
    limits = PRESETS["small"]
    fitter = BlockFitter(s.pulse, s.channels, s.rate_hz, block_s=limits.window_s / limits.blocks)
    fits = [f for i in range(0, len(counts), 1280) for f in fitter.feed(counts[i : i + 1280], i)]
    verdict = judge(fits, limits, [Probe("probe 1", "displacement")])
    found = next(f for f in verdict.figures if f.name == name)
    assert not verdict.steady
    assert not found.ok
    assert found.value == pytest.approx(12.5, abs=0.6)
    assert "limit 10 %" in verdict.sentence


@settings(max_examples=10, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(cuts=st.lists(st.integers(1, 51_199), max_size=30), seed=st.integers(0, 3))
def test_blocks_of_repaired_turns_do_not_hang_on_the_chunks(
    signal: Callable[..., Any], cuts: list[int], seed: int
) -> None:
    s = signal(seconds=4.0, noise_um=0.25, pulse_noise_v=0.02)
    counts, *_ = faulty_counts(s, 0.1, 0.1, seed)

    def fitter() -> BlockFitter:
        return BlockFitter(s.pulse, s.channels, s.rate_hz, block_s=0.5)

    whole = fitter().feed(counts, 0)
    f = fitter()
    cut = [fit for a, b in pairwise(sorted({0, len(counts), *cuts})) for fit in f.feed(counts[a:b], a)]
    assert len(cut) == len(whole) >= 5
    for one, other in zip(whole, cut, strict=True):
        assert (one.first_sample, one.stop_sample) == (other.first_sample, other.stop_sample)
        assert (one.missed, one.doubles) == (other.missed, other.doubles)
        assert one.vectors == pytest.approx(other.vectors, rel=1e-9)


@pytest.mark.parametrize("after", [0.5, 1.0, 16.0, 100.0])
def test_turns_that_shrink_to_nothing_end_the_rhythm(after: float) -> None:
    """Turns of 16, 15, ... 1: the parabola foretells the next edge where the newest one is, and no distance
    can be counted in turns of no length. Warnings are errors here."""
    edges = np.cumsum([0.0, *range(16, 0, -1), *[after] * 12])
    turns = turns_of(edges)
    assert (turns.periods > 0).all()
    assert turns.periods[-1] == pytest.approx(after)


def test_edges_filled_in_never_turn_back() -> None:
    """Turns of 300, then four in 400: the parabola through 0, 300 and 700 would be at 720 after three of
    them. Four in 420 after one of 100, by hand: 100 + 105 n + n (n - 4) (105 - 100) / 5."""
    assert _filled(0.0, 300.0, 700.0, 4).tolist() == [400.0, 500.0, 600.0]
    assert _filled(0.0, 100.0, 520.0, 4).tolist() == [202.0, 306.0, 412.0]


def test_edges_that_come_one_by_one_do_not_copy_all_before_them() -> None:
    mended, sizes = Mended(), set()
    for edge in range(5000):
        mended.add(np.array([float(edge)]), doubles=edge % 2)
        sizes.add(len(mended._edges))
    assert len(sizes) <= 14  # 2^13 > 5000: doubled thirteen times
    assert mended.edges.tolist() == list(range(5000))
    assert mended.good.all()
    assert (len(mended.good), mended.doubles.sum()) == (4999, 2500)
