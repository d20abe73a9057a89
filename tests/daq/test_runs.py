"""Runs begin and end as HOUSE ("The record") says; times are literal."""

from __future__ import annotations

import math

from daq.board import StandState
from daq.runs import Began, Ended, Hop, RunWatch


def hop(t_s, speed_hz=None, since_s=0.01, vibrating=False):
    """A step of 0.1 s at 1000 samples/s."""
    since = since_s if speed_hz else max(since_s, 5.0)
    return Hop(t_s, round(t_s * 1000), since, 0.25, speed_hz, vibrating)


def fed(watch, hops):
    return [e for h in hops if (e := watch.step(h, 0)) is not None]


def test_a_run_begins_after_the_minimum_duration_at_its_first_fast_step():
    watch = RunWatch(minimum_hz=1.0, minimum_s=2.0)
    events = fed(watch, [hop(t / 10, 20.0) for t in range(10, 40)])
    assert events == [Began(1.0, 1000, 0)]
    assert watch.open


def test_jogging_makes_no_run():
    watch = RunWatch(1.0, 2.0)
    jogs = [hop(t / 10, 20.0 if t % 25 < 15 else None) for t in range(100)]
    assert fed(watch, jogs) == []


def test_windmilling_below_minimum_speed_makes_no_run_but_is_turning():
    watch = RunWatch(1.0, 2.0)
    assert fed(watch, [hop(t / 10, 0.9) for t in range(100)]) == []
    assert watch.state is StandState.TURNING


def test_a_run_ends_when_pulses_end_and_nothing_vibrates():
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, 20.0) for t in range(30)])
    assert fed(watch, [hop(3.0 + t / 10) for t in range(3)]) == [Ended("complete", "pulses ended")]
    assert watch.state is StandState.NO_PULSES


def test_pulses_lost_while_vibrating_leave_the_run_open():
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, 20.0) for t in range(30)])
    assert fed(watch, [hop(3.0 + t / 10, vibrating=True) for t in range(100)]) == []
    assert watch.state is StandState.PULSES_LOST
    assert watch.open
    assert fed(watch, [hop(13.0)]) == [Ended("complete", "pulses ended")]


def test_vibration_alone_is_not_a_turning_rotor():
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, vibrating=True) for t in range(20)])
    assert watch.state is StandState.NO_PULSES


def test_one_second_without_a_pulse_is_not_yet_their_end():
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, 20.0) for t in range(30)])
    watch.step(Hop(3.0, 3000, 0.9, 0.25, None, False), 0)
    assert watch.state is StandState.TURNING
    watch.step(Hop(3.2, 3200, 1.1, 0.25, None, False), 0)
    assert watch.state is StandState.NO_PULSES


def test_a_run_ends_below_minimum_speed():
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, 20.0) for t in range(30)])
    assert fed(watch, [hop(3.0 + t / 10, 0.5) for t in range(25)]) == [
        Ended("complete", "below minimum speed")
    ]


def test_waiting_for_an_overdue_pulse_is_not_slowness():
    """At 80 r/min the next pulse is waited for 2.5 s, longer than the shortest run: no end before that."""
    watch = RunWatch(1.0, 2.0)
    fed(watch, [hop(t / 10, 80 / 60) for t in range(30)])
    waits = [Hop(3.0 + t / 10, 3000 + 100 * t, t / 10, 2.5, None, True) for t in range(60)]
    assert fed(watch, waits) == []
    assert watch.state is StandState.PULSES_LOST
    assert watch.open


def test_the_end_of_the_source_completes_the_run_and_its_loss_interrupts_it():
    for act, ended in (
        ("source_ended", Ended("complete", "end of source")),
        ("source_lost", Ended("interrupted", "end of source")),
    ):
        watch = RunWatch(1.0, 2.0)
        fed(watch, [hop(t / 10, 20.0) for t in range(30)])
        assert getattr(watch, act)("end of source") == ended
        assert getattr(watch, act)("again") is None


def test_no_edge_at_all_is_no_pulses():
    watch = RunWatch(1.0, 2.0)
    watch.step(Hop(0.1, 100, math.inf, 2.5, None, True), 0)
    assert watch.state is StandState.NO_PULSES
