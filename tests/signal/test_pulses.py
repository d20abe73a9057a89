"""Several pulses a turn: the one that counts is told from the others, or it is said that it cannot be."""

from __future__ import annotations

import json
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from daq.signal.blocks import BlockFitter
from daq.signal.edges import EdgeFinder, edges_in, trigger_of
from daq.signal.measure import measure
from daq.signal.pulses import MarkTeller
from daq.signal.revolutions import turns_of
from daq.signal.setting import Setting
from daq.signal.shapes import ChannelParams, PulseParams

RATE, HZ, START = 12_800.0, 41.7, 0.3
VOLT = 2**23 / 30
SCALE = (-(2**23), 2**23 - 1)
LAG_DEG = 70.0
PROBE = ChannelParams("probe 1", 1 / VOLT, SCALE, 0.007874)

LONG_2, LONG_4 = (
    PulseParams(1 / VOLT, SCALE, pulses=2, marked="long"),
    PulseParams(1 / VOLT, SCALE, pulses=4, marked="long"),
)


def spaced(*degrees: float) -> PulseParams:
    return PulseParams(1 / VOLT, SCALE, pulses=len(degrees), spacing_deg=degrees)


KINDS = {
    "two, one long": LONG_2,
    "four, one long": LONG_4,
    "two by spacing": spaced(100.0, 260.0),
    "three by spacing": spaced(110.0, 120.0, 130.0),
    "four within 1.8 deg": spaced(90.0, 88.2, 91.8, 90.0),
    "a tooth missing of 20": spaced(*[18.0] * 18, 36.0),
}


def turns_at(t: NDArray[np.float64], ramp: float) -> NDArray[np.float64]:
    return START + HZ * (t + ramp * t**2 / 2)


def signal_of(
    params: PulseParams,
    *,
    seconds: float = 4.0,
    ramp: float = 0.0,
    noise_v: float = 0.05,
    gone: float = 0.0,
    even: bool = False,
    seed: int = 1,
) -> tuple[NDArray[np.int32], int]:
    """Counts of pulse and probe (5 um at ``LAG_DEG``), and how many of the pulses that count are missing.

    The pulse that counts passes at whole turns. ``even``: none differs from another, whatever is told."""
    rng = np.random.default_rng(seed)
    t = np.arange(int(seconds * RATE)) / RATE
    turns = turns_at(t, ramp)
    n = params.pulses
    gaps = np.full(n, 360.0 / n) if even or not params.spacing_deg else np.array(params.spacing_deg)
    starts = np.concatenate(([0.0], np.cumsum(gaps)[:-1])) / 360
    width = 0.15 * gaps.min() / 360
    volts = np.full(len(t), -8.0)
    missing = 0
    for k, start in enumerate(starts):
        wide = width * (1.6 if k == 0 and params.marked and not even else 1.0)
        past = (turns - start + 0.5) % 1 - 0.5
        edge = width / 4
        inside = np.clip(past / edge + 0.5, 0, 1) - np.clip((past - wide) / edge + 0.5, 0, 1)
        turn = np.rint(turns - start - wide / 2).astype(int)
        lost = rng.random(turn[-1] + 2) < gone
        volts -= 7 * inside * ~lost[turn]
        missing += int(lost[2 : turn[-1] - 1].sum()) if k == 0 else 0
    volts += rng.normal(0, noise_v, len(t))
    x = 5 * np.cos(2 * np.pi * turns - np.radians(LAG_DEG)) + rng.normal(0, 0.1, len(t))
    return np.rint(np.column_stack((volts, -10 + 0.007874 * x)) * VOLT).astype(np.int32), missing


def places_of(edges: NDArray[np.float64], ramp: float = 0.0) -> NDArray[np.float64]:
    """Where in the turn each edge is, -0.5 to 0.5."""
    found: NDArray[np.float64] = (turns_at(edges / RATE, ramp) + 0.5) % 1 - 0.5
    return found


@pytest.mark.parametrize("params", KINDS.values(), ids=KINDS)
@pytest.mark.parametrize(("ramp", "noise_v"), [(0.0, 0.05), (0.1, 0.05), (-0.05, 0.05), (0.0, 0.3)])
def test_only_the_pulse_that_counts_gives_edges(params: PulseParams, ramp: float, noise_v: float) -> None:
    """0.3 V of noise on 7 V; ramps to 10 %/s. An edge is known to noise over slope, the level to
    a few percent of the pulse."""
    counts, _ = signal_of(params, ramp=ramp, noise_v=noise_v)
    finder, edges = edges_in(counts[:, 0], params, RATE)
    assert len(edges) == int(turns_at(np.array([4.0]), ramp)[0])
    assert np.abs(places_of(edges, ramp)).max() < 0.004
    assert np.round(turns_at(edges / RATE, ramp)).astype(int).tolist() == list(range(1, len(edges) + 1))
    assert finder.untold == 0
    assert not finder.mark_lost


@pytest.mark.parametrize("params", KINDS.values(), ids=KINDS)
def test_pulses_that_are_missed_move_no_mark(params: PulseParams) -> None:
    """2 % of all pulses are missing: marks among them are filled in, none of the others is taken for one."""
    counts, missing = signal_of(params, seconds=8.0, gone=0.02)
    _, edges = edges_in(counts[:, 0], params, RATE)
    assert np.abs(places_of(edges)).max() < 0.004
    turns = turns_of(edges)
    assert turns.missed == pytest.approx(missing, abs=2)
    assert turns.doubles == 0


@pytest.mark.parametrize("params", [LONG_4, KINDS["four within 1.8 deg"]], ids=["long", "spacing"])
def test_where_none_differs_none_is_guessed(params: PulseParams) -> None:
    counts, _ = signal_of(params, even=True)
    finder, edges = edges_in(counts[:, 0], params, RATE)
    assert len(edges) == 0
    assert finder.untold == pytest.approx(4 * 4.0 * HZ, abs=3)
    assert finder.mark_lost
    m = measure(counts, params, (PROBE,), RATE)
    assert m.vectors == ()
    assert m.flags == ("mark_untold",)


def test_what_is_told_wrong_of_the_rotor_is_said() -> None:
    """A rotor with four pulses and a stand file that speaks of others: no edge, no vector."""
    counts, _ = signal_of(LONG_4)
    for params in (spaced(90.0, 80.0, 100.0, 90.0), spaced(100.0, 120.0, 140.0), spaced(100.0, 260.0)):
        finder, edges = edges_in(counts[:, 0], params, RATE)
        assert len(edges) == 0
        assert finder.mark_lost


CUTS = st.lists(st.integers(1, 25_599), max_size=25)


@settings(max_examples=30, deadline=None)
@given(cuts=CUTS, kind=st.sampled_from(sorted(KINDS)), gone=st.sampled_from([0.0, 0.03]))
def test_marks_do_not_hang_on_how_the_stream_is_cut(cuts: list[int], kind: str, gone: float) -> None:
    params = KINDS[kind]
    column = signal_of(params, seconds=2.0, gone=gone)[0][:, 0]
    trigger = trigger_of(column, params)
    whole, pieces = EdgeFinder(params, RATE, trigger), EdgeFinder(params, RATE, trigger)
    once = np.concatenate((whole.feed(column, 0), whole.finish()))
    bounds = sorted({0, len(column), *cuts})
    cut = [pieces.feed(column[a:b], a) for a, b in pairwise(bounds)]
    assert np.array_equal(np.concatenate((*cut, pieces.finish())), once)
    assert pieces.untold == whole.untold
    assert len(once) > 70


@pytest.mark.parametrize("params", KINDS.values(), ids=KINDS)
def test_live_blocks_and_measure_have_the_phase_of_the_mark(params: PulseParams) -> None:
    counts, _ = signal_of(params)
    truth = 5 * np.exp(1j * np.radians(LAG_DEG))
    fitter = BlockFitter(params, (PROBE,), RATE, block_s=0.5)
    fits = [f for i in range(0, len(counts), 640) for f in fitter.feed(counts[i : i + 640], i)]
    assert len(fits) >= 5
    v = measure(counts, params, (PROBE,), RATE).vector("probe 1")
    assert v is not None
    for value in [v.value, *(f.vectors[0] for f in fits)]:
        # 0.004 turns at most (above) are 1.4 deg and 0.13 um; noise 0.1 um leaves less
        assert abs(value - truth) < 0.15
    assert all(f.speed_hz == pytest.approx(HZ, rel=1e-4) for f in fits)
    few = {"few_samples"} if params.pulses > 10 else set()  # pulses of 2.3 samples
    assert all(set(f.flags) == few for f in fits)


def test_after_a_gap_the_mark_is_told_anew() -> None:
    counts, _ = signal_of(LONG_4)
    fitter = BlockFitter(LONG_4, (PROBE,), RATE, block_s=0.5)
    at = 20_000 + round(RATE / HZ / 3)  # a third of a turn is lost
    fits = fitter.feed(counts[:20_000], 0) + fitter.feed(counts[at:], at, 1)
    assert {f.segment for f in fits} == {0, 1}
    assert all(abs(np.degrees(np.angle(f.vectors[0])) - LAG_DEG) < 1.5 for f in fits)


def test_a_setting_with_a_pattern_survives_json() -> None:
    for params in KINDS.values():
        setting = Setting(params, (PROBE,), RATE)
        assert Setting.from_json(json.loads(json.dumps(setting.to_json()))) == setting


def test_nothing_told_is_refused() -> None:
    with pytest.raises(ValueError, match="one must be marked"):
        MarkTeller(PulseParams(1.0, SCALE, pulses=3))


def test_sixty_pulses_a_turn() -> None:
    """All 5.9 degrees apart but one pair, 11.9."""
    params = spaced(*[5.9] * 59, 360 - 59 * 5.9)
    edges = np.cumsum(np.resize(np.array(params.spacing_deg), 60 * 20)) / 360 * 1024
    teller = MarkTeller(params)
    marks = teller.feed(edges, np.full(len(edges), 4.0))
    assert np.diff(marks) == pytest.approx(1024)
    assert len(marks) == 20
