"""Turns between edges: good, missed, double; angles on ramps; the clock."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.signal.revolutions import RevolutionClock, angles_at, turn_fractions, turns_of


def test_steady_edges_are_all_good_turns() -> None:
    turns = turns_of(10.5 + 100.0 * np.arange(12))
    assert turns.good.all()
    assert len(turns.good) == 11
    assert (turns.missed, turns.doubles) == (0, 0)
    assert turns.speed(5000.0) == pytest.approx(50.0)
    assert turns.stretches() == [(0, 11)]


@pytest.mark.parametrize("gone", [[5], [5, 6], [3, 8], [6, 7, 8]])
def test_missed_pulses_are_counted_and_filled_in(gone: list[int]) -> None:
    turns = turns_of(np.delete(100.0 * np.arange(15), gone))
    assert (turns.missed, turns.doubles) == (len(gone), 0)
    assert turns.edges == pytest.approx(100.0 * np.arange(15), abs=1e-9)
    assert turns.good.all()
    assert np.flatnonzero(turns.missed_in).tolist() == [g - 1 for g in gone]  # the turns that end there


def test_four_missed_in_a_row_are_not_guessed_at() -> None:
    turns = turns_of(np.delete(100.0 * np.arange(30), [9, 10, 11, 12]))
    assert turns.missed == 4
    assert turns.periods[~turns.good].tolist() == [500.0]
    assert turns.periods[turns.good] == pytest.approx(100.0)
    assert turns.good.sum() == 24


@pytest.mark.parametrize("at", [0.07, 0.3, 0.5, 0.7, 0.93])
def test_double_pulses_are_counted_and_taken_out(at: float) -> None:
    edges = np.sort(np.append(100.0 * np.arange(15), 600 + 100 * at))
    turns = turns_of(edges)
    assert (turns.missed, turns.doubles) == (0, 1)
    assert turns.edges == pytest.approx(100.0 * np.arange(15), abs=1e-9)
    assert turns.good.all()
    assert np.flatnonzero(turns.doubles_in).tolist() == [6]


def test_three_pulses_too_many_in_one_turn() -> None:
    edges = np.sort(np.append(100.0 * np.arange(15), [603, 606, 609]))
    turns = turns_of(edges)
    assert turns.doubles == 3
    assert turns.good.sum() == 14
    assert turns.periods[turns.good] == pytest.approx(100.0)


def test_the_curve_of_a_repaired_turn_is_that_of_its_neighbours() -> None:
    edges = np.delete(100.0 * np.arange(20), 9) + 0.0
    turns = turns_of(edges)
    assert turns.curve == pytest.approx(0.0, abs=1e-15)


def test_a_break_in_the_samples_spoils_the_turn_across_it() -> None:
    turns = turns_of(100.0 * np.arange(10), breaks=[250, 500])
    assert np.flatnonzero(~turns.good).tolist() == [2, 4]


def accelerated(times_turns: np.ndarray, speed: float, rate: float) -> np.ndarray:
    """When constant acceleration has made so many turns: speed t + rate t^2 / 2 = turns (the root, exact)."""
    return np.asarray(2 * times_turns / (speed + np.sqrt(speed**2 + 2 * rate * times_turns)))


@pytest.mark.parametrize("rate", [3e-8, -1.5e-8, 4e-7])
def test_angles_are_exact_under_constant_acceleration(rate: float) -> None:
    speed = 1 / 300
    edges = accelerated(np.arange(40.0), speed, rate)
    t = np.linspace(edges[0], edges[-1], 5001)[:-1]
    want = 2 * np.pi * (speed * t + rate * t**2 / 2)
    assert angles_at(edges, t) == pytest.approx(want, abs=1e-9)
    turns = turns_of(edges)
    start, stop = int(np.ceil(edges[0])), int(np.ceil(edges[-1]))
    samples = np.arange(start, stop)
    exact = (speed * samples + rate * samples**2 / 2) % 1
    got = turn_fractions(turns, start, stop)
    assert np.abs((got - exact + 0.5) % 1 - 0.5).max() < 1e-10


def test_constant_speed_within_the_turn_would_be_wrong_by_the_known_amount() -> None:
    # METHODS 8.8 [D]: speed changes by rel over the turn: largest angle error 45 rel deg. With two edges only
    # a straight line is possible: this shows what the parabolas save.
    rel, speed = 0.01, 1 / 400
    rate = rel * speed / 400
    edges = accelerated(np.arange(2.0), speed, rate)
    t = np.linspace(edges[0], edges[1], 2001)
    want = 360 * (speed * t + rate * t**2 / 2)
    assert np.abs(np.degrees(angles_at(edges, t)) - want).max() == pytest.approx(0.45, rel=0.01)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 1000), cut=st.floats(0.01, 0.99))
def test_fractions_do_not_hang_on_where_the_samples_are_cut(seed: int, cut: float) -> None:
    rng = np.random.default_rng(seed)
    turns = turns_of(5.3 + np.cumsum(rng.uniform(21.5, 22.5, 50)))
    first, last = int(turns.first_samples[0]), int(turns.first_samples[-1])
    middle = first + int(cut * (last - first))
    whole = turn_fractions(turns, first, last)
    parts = np.concatenate((turn_fractions(turns, first, middle), turn_fractions(turns, middle, last)))
    assert parts == pytest.approx(whole, abs=1e-11)
    assert whole.min() >= -1e-12
    assert whole.max() < 1 + 1e-12
    want = angles_at(turns.edges, np.arange(first, last, dtype=np.float64)) / (2 * np.pi) % 1
    assert np.abs((whole - want + 0.5) % 1 - 0.5).max() < 1e-9


def test_angles_outside_the_edges_are_not_guessed() -> None:
    with pytest.raises(ValueError, match="between the first and the last edge"):
        angles_at(np.array([10.0, 20.0, 30.0]), np.array([9.0]))


def test_the_clock_turns_while_pulses_come() -> None:
    clock = RevolutionClock(1000.0)
    assert not clock.turning
    assert clock.speed_hz is None
    assert clock.since_edge_s == float("inf")
    clock.feed(np.array([100.0]), 150)
    assert not clock.turning  # one edge is no turn
    clock.feed(np.array([200.0, 300.0, 400.0]), 450)
    assert clock.turning
    assert clock.speed_hz == pytest.approx(10.0)
    assert clock.since_edge_s == pytest.approx(0.05)
    assert clock.patience_s == pytest.approx(0.4)
    clock.feed(np.empty(0), 790)
    assert clock.turning
    clock.feed(np.empty(0), 801)
    assert not clock.turning
    assert clock.speed_hz is None


def test_the_clock_never_waits_longer_than_its_longest_turn() -> None:
    clock = RevolutionClock(1000.0, longest_turn_s=2.0)
    clock.feed(np.array([0.0, 1500.0]), 3400)
    assert clock.turning
    clock.feed(np.empty(0), 3501)
    assert not clock.turning


def test_the_clock_passes_over_a_missed_and_a_double_pulse() -> None:
    clock = RevolutionClock(1000.0)
    clock.feed(np.array([0.0, 100, 200, 300, 400, 600]), 650)
    assert clock.speed_hz == pytest.approx(10.0)
    clock.feed(np.array([700.0, 720.0]), 760)
    assert clock.speed_hz == pytest.approx(10.0)
    clock.restart()
    assert not clock.turning
