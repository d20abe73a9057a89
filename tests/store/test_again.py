"""Readings measured again: another version beside the first, a corrected set-up, all or nothing."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest
from store_kit import SET_UP, Stand, measured, reading, vector

from cli.runshow import reading_lines
from config.errors import Refusal
from store import consult
from store.again import Remeasured, RunAgain
from store.casework import correction_for
from store.records import Label, SetUpDraft, Trace, TracePoint


def with_sensitivity(volts_per_unit: float) -> SetUpDraft:
    """The stand of the tests with another sensitivity of probe 1."""
    first, *rest = SET_UP.channels
    return replace(SET_UP, channels=(replace(first, volts_per_unit=volts_per_unit), *rest))


def a_job(stand: Stand) -> None:
    """10 um at 0 deg; 3 g at 140 mm in hole 16 make it 4 + 3j."""
    stand.mount()
    stand.run(Label.O, measured=measured())
    stand.fit()
    stand.run(Label.O_T, 4 + 3j, measured=measured(4 + 3j))


def values(run: Any) -> list[complex]:
    return [v.value for r in run.readings for v in r.vectors if v.order == 1]


def test_the_new_version_stands_and_the_old_one_is_kept(stand: Stand) -> None:
    a_job(stand)
    before = stand.history.run("0142/2")
    kept = stand.again("0142/2", 5 + 3j, why="wrong scale")
    (now,) = kept.readings
    assert (now.version, values(kept)) == (2, [5 + 3j, 5 + 3j])
    assert now.label is Label.O_T
    assert [lv.channel for lv in now.levels] == ["probe 1", "probe 2"]
    assert stand.history.run("0142/2") == kept
    assert stand.history.run_as("0142/2", 2) == kept
    old = stand.history.run_as("0142/2", 1)
    assert (values(old), old.readings[0].vectors) == ([4 + 3j, 4 + 3j], before.readings[0].vectors)
    first, second = stand.history.measured(now.id)
    assert (first.version, first.why, first.who) == (1, "live", "")
    assert (second.version, second.why, second.who) == (2, "wrong scale", "ana")
    assert first.vectors == before.readings[0].vectors
    assert [values(r) for r in stand.history.job_story("0142").runs] == [[10, 10], [5 + 3j, 5 + 3j]]


def test_versions_are_counted_on(stand: Stand) -> None:
    a_job(stand)
    for n in range(2, 5):
        assert stand.again("0142/1", 10 + n).readings[0].version == n
    (found,) = stand.history.run("0142/1").readings
    assert [m.vectors[0].value for m in stand.history.measured(found.id)] == [10, 12, 13, 14]
    with pytest.raises(Refusal, match=r"Run 0142/1 has no version 5 of any reading\. Newest: 4\."):
        stand.history.run_as("0142/1", 5)


def test_the_coefficient_follows_and_so_does_the_correction(stand: Stand) -> None:
    """(V1 - V0) / U with V doubled: the coefficient doubles, the weights needed stay where they are."""
    a_job(stand)
    (before,) = stand.history.coefficients(plane=1, channel="probe 1")
    advice = correction_for(stand.history.job_story("0142")).planes[0]
    half = with_sensitivity(7874.0 / 2)
    runs = [stand.history.run(n) for n in ("0142/1", "0142/2")]
    again = [
        RunAgain(r.id, r.set_up_id, half, (Remeasured(r.readings[0].id, 1, measured(2 * value)),))
        for r, value in zip(runs, (10 + 0j, 4 + 3j), strict=True)
    ]
    kept = stand.ledger.keep_again(again, "the sensitivity was double", "ana")
    (after,) = stand.history.coefficients(plane=1, channel="probe 1")
    assert after.value == pytest.approx(2 * before.value, rel=1e-12)
    assert len({r.set_up_id for r in kept}) == 1
    assert after.set_up_id == kept[0].set_up_id != before.set_up_id
    found = stand.history.set_up(kept[0].set_up_id).channel("probe 1")
    assert found is not None
    assert found.volts_per_unit == 3937.0
    assert correction_for(stand.history.job_story("0142")).planes[0].add == pytest.approx(
        advice.add, rel=1e-9
    )


def test_a_run_left_behind_is_not_pooled(stand: Stand) -> None:
    """Only one of two runs revised: the other was measured with another sensitivity, and is left out."""
    a_job(stand)
    stand.again("0142/2", 8 + 6j, with_sensitivity(3937.0))
    assert stand.history.coefficients(plane=1, channel="probe 1") == ()
    assert len(stand.history.coefficients(plane=1, channel="probe 2")) == 1  # nothing changed there


def test_all_or_nothing(stand: Stand) -> None:
    a_job(stand)
    run, other = stand.history.run("0142/1"), stand.history.run("0142/2")
    good = RunAgain(run.id, run.set_up_id, None, (Remeasured(run.readings[0].id, 1, measured(9 + 0j)),))
    stale = RunAgain(other.id, other.set_up_id, None, (Remeasured(other.readings[0].id, 2, measured()),))
    before = dict(stand.history.counts())
    with pytest.raises(Refusal, match="measured again meanwhile"):
        stand.ledger.keep_again([good, stale], "why", "ana")
    with pytest.raises(Refusal, match="named twice"):
        stand.ledger.keep_again([good, good], "why", "ana")
    with pytest.raises(Refusal, match="Nothing says why"):
        stand.ledger.keep_again([good], " ", "ana")
    moved = replace(good, set_up_id=other.readings[0].id)
    with pytest.raises(Refusal, match="meanwhile"):
        stand.ledger.keep_again([moved], "why", "ana")
    assert dict(stand.history.counts()) == before


def test_an_open_run_is_refused(stand: Stand) -> None:
    stand.mount()
    run = stand.begin()
    found, _ = stand.ledger.add_reading(run.id, reading(measured=measured()), slow_roll_limit_hz=5.0)
    with pytest.raises(Refusal, match=r"Run 0142/1 is still open"):
        stand.ledger.keep_again(
            [RunAgain(run.id, run.set_up_id, None, (Remeasured(found.id, 1, measured()),))], "why", "ana"
        )


def test_an_answer_is_known_again(stand: Stand) -> None:
    assert stand.ledger.answered("key-1", "revise", {"run": "0142/1"}) is None
    stand.ledger.once("key-1", "revise", {"run": "0142/1"}, lambda: {"done": 3})
    assert stand.ledger.answered("key-1", "revise", {"run": "0142/1"}) == {"done": 3}
    with pytest.raises(Refusal, match="used for another request"):
        stand.ledger.answered("key-1", "revise", {"run": "0142/2"})


def test_a_set_up_that_corrects_the_past_is_not_the_stands(stand: Stand) -> None:
    a_job(stand)
    stand.again("0142/1", 8 + 6j, with_sensitivity(3937.0))
    newest = stand.history.newest_set_up()
    assert newest is not None
    assert newest.id == stand.set_up_id


def test_a_vector_of_another_version_is_not_mixed_in(stand: Stand) -> None:
    """A second version with fewer vectors stands alone."""
    a_job(stand)
    (found,) = stand.history.run("0142/1").readings
    run = stand.history.run("0142/1")
    alone = measured(vectors=(vector(9 + 0j),), levels=())
    stand.ledger.keep_again(
        [RunAgain(run.id, run.set_up_id, None, (Remeasured(found.id, 1, alone),))], "why", "ana"
    )
    (now,) = stand.history.run("0142/1").readings
    assert ([v.value for v in now.vectors], now.levels) == ([9 + 0j], ())


def test_traces_follow_a_corrected_sensitivity(stand: Stand) -> None:
    """A trace has no counts: half the sensitivity, the other sense of positive, so -2 times the vectors."""
    stand.mount()
    run = stand.begin()
    step = TracePoint(0.5, 12.0, 1, (3 + 4j, 2j), (0.1, 0.1), (-9.8, -10.1))
    stand.ledger.add_trace(run.id, Trace("up", ("probe 1", "probe 2"), ("um", "um"), 1000, 1.0, (step,)))
    stand.ledger.add_reading(run.id, reading(measured=measured()), slow_roll_limit_hz=5.0)
    stand.end(run.id)
    half = with_sensitivity(3937.0)
    first, second = half.channels
    stand.again("0142/1", -20 + 0j, replace(half, channels=(replace(first, positive=1), second)))
    (trace,) = stand.history.traces(run.id)
    (point,) = trace.points
    assert (point.vectors, point.se, point.gap_v) == ((-6 - 8j, 2j), (0.2, 0.1), (-9.8, -10.1))
    (before,) = stand.history.traces(run.id, run.set_up_id)
    assert before.points == (step,)
    assert stand.history.run_as("0142/1", 1).set_up_id == run.set_up_id


def test_run_show_tells_the_versions(stand: Stand) -> None:
    a_job(stand)
    stand.again("0142/1", 11 + 0j, with_sensitivity(3937.0), why="other probe")
    told = consult.run_json(stand.history, "0142/1")
    (one,) = told["readings"]
    assert (told["set_up_revision"], one["version"]) == (2, 2)
    assert [(v["version"], v["why"], v["who"]) for v in one["versions"]] == [
        (1, "live", ""),
        (2, "other probe", "ana"),
    ]
    assert one["vectors"][0]["amplitude_pk"] == 11.0
    first = consult.run_json(stand.history, "0142/1", version=1)
    assert (first["set_up_revision"], first["readings"][0]["version"]) == (1, 1)
    assert first["readings"][0]["vectors"][0]["amplitude_pk"] == 10.0
    assert list(reading_lines(one, {}))[1] == "version 2 of 2 of its arithmetic: other probe"
