"""Flags follow the readings into every answer that rests on them; no lag is told below the noise floor.

Vectors by hand: one plane, one or two probes; METHODS 6.3 for the pair.
"""

from __future__ import annotations

import json
from dataclasses import replace

import pytest

from cli.flagged import flag_lines
from store.balance.angles import polar
from store.casework import correction_for, judge, trial_advice
from store.casework_flags import flagged_in_job
from store.casework_polar import polar_picture
from store.records import Label


def one_plane(kit, probes=1, **machine):
    model = kit.model(planes=1, first_critical_hz=100.0)
    set_up = kit.set_up(probes=probes)
    book = kit.Book(machine=kit.machine(model=model, **machine), set_up=set_up, speed_hz=40.0)
    book.mount()
    return book


def marked(book, index, *flags, floor=None):
    """The same run, its reading with these flags and its vectors with this noise floor."""
    run = book.runs[index]
    (reading,) = run.readings
    vectors = reading.vectors
    if floor is not None:
        vectors = tuple(replace(v, noise_floor=floor) for v in vectors)
    book.runs[index] = replace(run, readings=(replace(reading, flags=flags, vectors=vectors),))


def a_trial(kit, probes=1):
    """Slow roll, O, a trial weight, O+T: run 0142/2's O is much like the slow roll in no channel."""
    book = one_plane(kit, probes)
    book.run(Label.SLOW_ROLL, *[1 + 0j] * probes, speed_hz=4.0)
    book.run(Label.O, *[30 + 0j] * probes)
    book.fit(1, 10.0, angle_deg=180.0)
    book.run(Label.O_T, *[-30 + 0j] * probes)
    return book


def balanced(book, *vectors):
    """The trial weight off, half of it on, and a check."""
    book.remove(book.weights[0])
    book.fit(1, 5.0, angle_deg=180.0)
    return book.run(Label.CHECK, *vectors)


def test_a_correction_tells_the_flags_of_its_base_and_of_its_sources(kit):
    book = a_trial(kit)
    marked(book, 1, "clipped:probe 1", "flat:a probe not used")
    marked(book, 2, "clipped:probe 1", "missed_pulses")
    told = json.loads(json.dumps(correction_for(book.story()).to_dict()))["flags"]
    assert told == [
        {"run": "0142/2", "reading": 1, "label": "O", "flag": "clipped:probe 1"},
        {"run": "0142/3", "reading": 1, "label": "O+T", "flag": "clipped:probe 1"},
        {"run": "0142/3", "reading": 1, "label": "O+T", "flag": "missed_pulses"},
    ]
    first, second = flag_lines(told)
    assert first.startswith("flag of 0142/2 (O), 0142/3 (O+T): probe 1 is clipped: its voltage reaches")
    assert second.startswith("flag of 0142/3 (O+T): Some once-per-rev pulses were missed;")
    marked(book, 1)
    marked(book, 2)
    assert correction_for(book.story()).to_dict()["flags"] == []


def test_the_slow_roll_counts_where_it_is_subtracted(kit):
    book = a_trial(kit)
    marked(book, 0, "speed_hunting")
    assert correction_for(book.story()).flags == ()
    (found,) = correction_for(book.story(), subtract_slow_roll=True).flags
    assert (found.run, found.label, found.flag) == ("0142/1", "slow-roll", "speed_hunting")


def test_derived_flags_come_with_them(kit):
    """The check reads 1.2 um where the slow roll is 1: mostly runout, and it is the newest base."""
    book = a_trial(kit)
    balanced(book, 1.2 + 0j)
    (found,) = correction_for(book.story()).flags
    assert (found.run, found.flag) == ("0142/4", "mostly_runout:probe 1")


def test_a_base_below_its_floor_has_no_lag(kit):
    book = a_trial(kit)
    balanced(book, 0.4 + 0j)
    marked(book, 3, floor=0.5)
    (channel,) = correction_for(book.story()).to_dict()["channels"]
    assert channel["base"]["lag_deg"] is None
    assert channel["now"]["lag_deg"] is None
    assert channel["base"]["amplitude_pk"] == 0.4
    book.fit(1, 1.0, angle_deg=90.0)
    (channel,) = correction_for(book.story()).to_dict()["channels"]
    assert channel["base"]["lag_deg"] is None
    assert channel["now"]["lag_deg"] is not None  # 0.4 and what the weight does, 6 um, by the coefficient


def test_a_verdict_tells_the_flags_before_it_and_no_lag_below_the_floor(kit):
    book = a_trial(kit)
    marked(book, 1, "clipped:probe 1")
    balanced(book, 0.4 + 0j)
    marked(book, 3, "level_marginal", floor=0.5)
    told = judge(book.story(), book.runs[-1].readings[0].id).to_dict()
    assert [(f["run"], f["flag"]) for f in told["flags"]] == [("0142/2", "clipped:probe 1")]
    assert told["channels"][0]["measured"]["lag_deg"] is None
    assert told["channels"][0]["predicted"]["lag_deg"] is None  # 0 um is foreseen, give or take


def test_a_foreseen_lag_is_told_only_above_what_may_come_of_it(kit):
    """18 um with 3 % and 0.5 um of scatter is far above its 95 % circle, what a correction leaves is not."""
    book = a_trial(kit)
    book.remove(book.weights[0])
    book.fit(1, 2.0, angle_deg=180.0)
    book.run(Label.CHECK, 18 + 0j)
    told = judge(book.story(), book.runs[-1].readings[0].id).to_dict()["channels"][0]["predicted"]
    assert (told["amplitude_pk"], told["lag_deg"]) == (pytest.approx(18.0), pytest.approx(0.0, abs=1e-6))
    (channel,) = correction_for(book.story()).to_dict()["channels"]
    assert channel["predicted"]["lag_deg"] is None


def test_no_place_for_a_trial_weight_from_a_lag_below_the_floor(kit):
    """Below 0.7 of the critical speed a place is named, but not from an amplitude of less than 2.448 sd."""
    book = one_plane(kit)
    book.run(Label.O, polar(3.0, 70), sd=1.0)
    assert trial_advice(book.story(), 1).place_deg is not None
    book.runs.clear()
    book.run(Label.O, polar(2.0, 70), sd=1.0)
    marked(book, 0, "weak_1x:probe 1", floor=2.448)
    advice = trial_advice(book.story(), 1)
    assert (advice.place_deg, advice.halved) == (None, True)
    assert "below its noise floor" in advice.why[1]
    assert [f.flag for f in advice.flags] == ["weak_1x:probe 1", "below_floor:probe 1"]


def test_a_polar_plot_knows_each_vectors_flags(kit):
    book = a_trial(kit, probes=2)
    marked(book, 1, "clipped:probe 2")
    balanced(book, 1.2 + 0j, 20 + 0j)
    picture = polar_picture(book.story(), [])
    told = {c.channel: {v.run: v.flags for v in c.vectors} for c in picture.channels}
    assert told["probe 1"] == {
        "0142/1": (), "0142/2": (), "0142/3": (), "0142/4": ("mostly_runout:probe 1",)
    }  # fmt: skip
    assert told["probe 2"]["0142/2"] == ("clipped:probe 2",)


def test_flags_of_another_jobs_readings(kit):
    book = a_trial(kit)
    marked(book, 2, "clipped:probe 1", "flat:probe 2")
    assert [f.flag for f in flagged_in_job(book.story(), ["probe 1"], 40.0)] == ["clipped:probe 1"]
    assert flagged_in_job(book.story(), ["probe 1"], 45.0) == ()


@pytest.mark.parametrize(("limit", "within"), [(6.0, False), (6.6, True)])
def test_the_vibration_limit_is_judged_by_the_major_axis(kit, limit, within):
    """2@50 and 1@50 times 2.9: a line of 2.9 x 2.236 = 6.485 um, though the larger probe reads 5.8."""
    book = one_plane(kit, probes=2, vibration_limit_um_pk=limit)
    first, second = book.set_up.channels
    pair = (replace(first, pair="bearing 1"), replace(second, angle_deg=90.0, pair="bearing 1"))
    book.set_up = replace(book.set_up, channels=pair)
    book.run(Label.O, polar(20, 50), polar(10, 50))
    book.fit(1, 10.0, angle_deg=180.0)
    book.run(Label.CHECK, polar(5.8, 50), polar(2.9, 50))
    verdict = judge(book.story(), book.runs[-1].readings[0].id)
    assert verdict.vibration.channel == "bearing 1 (major axis)"
    assert verdict.vibration.largest_um_pk == pytest.approx(2.9 * 2.236067977500)
    assert verdict.vibration.within is within
