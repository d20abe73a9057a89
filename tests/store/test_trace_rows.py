"""Run-ups and coast-downs in the store: each apart, as they came, whole or not at all."""

from __future__ import annotations

import math
from dataclasses import replace
from uuid import uuid4

import pytest
from store_kit import SET_UP, Stand

from config.errors import Refusal
from store.records import Trace, TracePoint

UP = Trace(
    direction="up",
    channels=("probe 1", "seismo"),
    units=("um", "mm/s"),
    started_us=1_700_000_000_000_000,
    duration_s=12.5,
    points=(
        TracePoint(0.25, 5.0, 1, (3 + 4j, 0.5j), (0.1, 0.02), (-9.8, 0.0)),
        TracePoint(0.75, 5.05, 2, (-3.5 + 4.5j, 0.125 - 1j), (0.05, 0.01), (-9.75, 0.001)),
        TracePoint(1.25, 1 / 3, 3, (0j, 1e-300 + 0j), (0.0, 5e-324), (-9.75, 0.0)),
    ),
)
DOWN = replace(UP, direction="down", points=UP.points[:1], started_us=5)


def test_traces_come_back_as_they_were(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    assert stand.ledger.add_trace(run.id, UP) == 1
    assert stand.history.traces(run.id) == (replace(UP, number=1),)  # while the run is open too
    assert stand.ledger.add_trace(run.id, DOWN) == 2
    stand.end(run.id)
    assert stand.history.traces(run.id) == (replace(UP, number=1), replace(DOWN, number=2))
    other, _ = stand.run(None)
    assert stand.history.traces(other.id) == ()


def test_traces_follow_a_run_that_is_given_to_a_job(stand: Stand) -> None:
    run = stand.begin()
    stand.ledger.add_trace(run.id, UP)
    stand.end(run.id)
    stand.mount()
    stand.ledger.assign_run("U/1", "0142", "ana")
    assert len(stand.history.traces(stand.history.run("0142/1").id)) == 1


def test_a_corrected_sensitivity_scales_the_traces(stand: Stand) -> None:
    """Of probe 1: twice the volts per um and the other sense: minus half the amplitude, half the error."""
    run = stand.begin()
    stand.ledger.add_trace(run.id, replace(UP, channels=("probe 1", "probe 2"), units=("um", "um")))
    stand.end(run.id)
    one, two = SET_UP.channels
    right = replace(one, volts_per_unit=2 * one.volts_per_unit, positive=-one.positive)
    told = stand.ledger.set_up(replace(SET_UP, channels=(right, two)))
    stand.ledger.revise_run("U/1", told.id, "read again", "ana")
    (found,) = stand.history.traces(run.id)
    assert found.points[0].vectors == (-1.5 - 2j, 0.5j)
    assert found.points[0].se == (0.05, 0.02)
    assert found.points[0].gap_v == (-9.8, 0.0)


@pytest.mark.parametrize(
    "wrong",
    [
        replace(UP, points=()),
        replace(UP, channels=("probe 1",)),
        replace(UP, units=("um",)),
        replace(UP, points=(replace(UP.points[0], se=(0.1,)),)),
        replace(UP, points=(replace(UP.points[0], vectors=(complex(math.nan, 0), 1j)),)),
        replace(UP, points=(replace(UP.points[0], speed_hz=math.inf),)),
        replace(UP, points=(replace(UP.points[0], gap_v=(math.nan, 0.0)),)),
    ],
)
def test_what_is_no_trace_is_refused_and_nothing_kept(stand: Stand, wrong: Trace) -> None:
    run = stand.begin()
    with pytest.raises(Refusal, match="is not kept"):
        stand.ledger.add_trace(run.id, wrong)
    assert stand.history.traces(run.id) == ()
    assert stand.history.counts()["trace"] == stand.history.counts()["trace_vector"] == 0


def test_a_run_that_has_ended_takes_none(stand: Stand) -> None:
    run, _ = stand.run(None)
    with pytest.raises(Refusal, match="has ended and takes no more traces"):
        stand.ledger.add_trace(run.id, UP)
    with pytest.raises(Refusal, match="There is no run"):
        stand.ledger.add_trace(uuid4(), UP)
