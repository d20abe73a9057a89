"""Coefficients of whole jobs, against the known coefficients of the recordings' rotor (truth.json)."""

from __future__ import annotations

from dataclasses import replace

import pytest

from store.balance.angles import polar
from store.balance.coefficients import from_story, unidentified_planes
from store.records import Label, Origin, Sense

SPEED = 2393.7 / 60


def truth_alpha(truth, plane, channel):
    a = truth["coefficients_um_pk_per_gmm"][int(channel[-1]) - 1][plane - 1]
    return polar(a["amp"], a["deg"])


def vectors(truth, run):
    found = next(r for r in truth["runs"] if r["run"] == run)
    return [polar(p["amp_um_pk"], p["lag_deg"]) for p in found["probes"]]


@pytest.fixture
def fan(book, truth):
    """O, T1 (hole 16), T2 (hole 7) with each trial weight taken off again: the recordings."""
    book.mount()
    book.run(Label.O, *vectors(truth, "fan-O"))
    first = book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *vectors(truth, "fan-T1"))
    book.remove(first)
    second = book.fit(2, 1.5, hole=7)
    book.run(Label.O_T, *vectors(truth, "fan-T2"))
    book.remove(second)
    return book


def assert_true(found, truth, count=4, rel=1e-9):
    assert len(found) == count
    for c in found:
        expected = truth_alpha(truth, c.plane, c.channel)
        assert abs(c.value - expected) <= rel * abs(expected)


def test_the_recordings_give_the_coefficients_of_their_rotor(fan, truth):
    found = from_story(fan.story())
    assert_true(found, truth)
    assert [(c.plane, c.channel) for c in found] == [
        (1, "probe 1"), (1, "probe 2"), (2, "probe 1"), (2, "probe 2")
    ]  # fmt: skip
    first = found[0]
    assert (first.job_number, first.machine_serial, first.model_code) == ("0142", "F-204", "KR-22")
    assert first.run_names == ("0142/1", "0142/2", "0142/3")
    assert first.mount_id == fan.mounts[0].id
    assert first.set_up_id == fan.set_up.id
    assert first.at_us == fan.runs[2].started_us
    assert first.origin is Origin.LIVE
    assert first.speed_hz == pytest.approx(SPEED)


def test_standard_error_and_effect_ratio_by_hand(fan, truth):
    # prior s of each run: hypot(3 % |V|, 0.5 um) (REUSE (c)); plane 1 of probe 1 rests on O and T1 only:
    # |V| 6.7033989 and 2.2274912 -> s 0.53892670, 0.50444579; |dV| = 210 x 0.0247711907 = 5.20195006
    c = from_story(fan.story())[0]
    assert c.largest_effect_ratio == pytest.approx(5.20195006 / 0.73817852, rel=1e-6)
    assert c.se == pytest.approx(0.73817852 / 210.0, rel=1e-6)


def test_a_vector_with_a_larger_own_error_counts_with_it(book, kit, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book), sd=2.0)
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book), sd=2.0)
    assert from_story(book.story())[0].se == pytest.approx(2.0 * 2**0.5 / 210.0)


def test_trial_kept_gives_the_same(book, rotor, truth):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    for plane, hole in ((1, 16), (2, 7)):
        book.fit(plane, 1.5, hole=hole)
        book.run(Label.O_T, *rotor.reads(book))
    assert_true(from_story(book.story()), truth)


def test_both_planes_at_once_in_two_patterns_are_told_apart(book, rotor, truth):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16), book.fit(2, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    book.fit(2, 3.0, hole=4)
    book.run(Label.O_T, *rotor.reads(book))
    assert_true(from_story(book.story()), truth)


def test_planes_changed_only_together_are_named_not_guessed(book, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    for _ in range(2):
        book.fit(1, 1.5, hole=16), book.fit(2, 1.5, hole=16)
        book.run(Label.O_T, *rotor.reads(book))
    assert from_story(book.story()) == ()
    assert unidentified_planes(book.story(), SPEED) == (1, 2)


def test_a_plane_that_no_run_tells_apart_is_left_out(book, rotor, truth):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    assert_true(from_story(book.story()), truth, count=2)
    assert unidentified_planes(book.story(), SPEED) == (2,)


def test_check_and_trim_count_and_slow_roll_void_and_unlabelled_do_not(book, rotor, truth):
    book.mount()
    book.run(Label.SLOW_ROLL, 99j, 99)
    book.run(Label.O, *rotor.reads(book))
    book.run(None, 99j, 99)
    book.fit(1, 1.5, hole=16)
    book.run(Label.CHECK, *rotor.reads(book))
    book.run(Label.O_T, 50j, 50, void="probe loose")
    book.fit(2, 1.0, hole=3)
    book.run(Label.TRIM, *rotor.reads(book))
    assert_true(from_story(book.story()), truth)


def test_a_weight_after_a_void_run_still_finds_its_place(book, rotor, truth):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.run(Label.O, 50j, 50, void="wrong machine")
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    story = book.story()
    kept = replace(story, runs=tuple(r for r in story.runs if r.void is None))
    assert_true(from_story(story), truth, count=2)
    assert_true(from_story(kept), truth, count=2)


def test_a_remount_with_a_moved_mark_belongs_to_the_same_job(book, rotor, truth):
    book.mount(mark_deg=0.0)
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    book.mount(mark_deg=40.0)
    book.fit(2, 1.5, hole=7)
    book.run(Label.O_T, *rotor.reads(book, mark_deg=40.0))
    assert_true(from_story(book.story()), truth)


def test_a_remount_whose_mark_was_not_measured_stands_alone(book, rotor):
    book.mount(mark_deg=0.0)
    book.run(Label.O, *rotor.reads(book))
    book.mount(mark_deg=40.0, how=None)
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book, mark_deg=40.0))
    assert from_story(book.story()) == ()


def test_a_moved_sensor_within_a_job_is_turned_exactly(kit, rotor, truth):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.set_up = kit.set_up(2, sensor_deg=30.0)  # clockwise from drive, rotation too: 30 with rotation
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book, sensor_with_rotation_deg=30.0))
    found = from_story(book.story())
    assert len(found) == 2
    for c in found:
        # METHODS 6.1: sensor moved d with rotation reads -d
        assert c.value == pytest.approx(truth_alpha(truth, c.plane, c.channel) * polar(1, -30.0))
        assert c.set_up_id == book.set_up.id


def test_other_rotation_is_never_mixed(book, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.mount(rotation=Sense("counterclockwise", "drive"))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    assert from_story(book.story()) == ()


def test_live_runs_are_fitted_with_live_runs_only(book, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book), origin=Origin.SIMULATED)
    assert from_story(book.story()) == ()


def test_simulated_runs_give_coefficients_of_their_own_kind(kit, rotor):
    book = kit.Book(origin=Origin.SIMULATED)
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    assert {c.origin for c in from_story(book.story())} == {Origin.SIMULATED}


def test_speeds_more_than_half_a_percent_apart_are_fitted_apart(book, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.run(Label.O, *rotor.reads(book), speed_hz=SPEED * 1.02)
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book), speed_hz=SPEED * 1.0049)
    found = from_story(book.story())
    assert {c.run_names for c in found} == {("0142/1", "0142/3")}
    book.run(Label.O_T, *rotor.reads(book), speed_hz=SPEED * 1.021)
    assert len(from_story(book.story())) == 4


def test_a_weight_that_cannot_be_placed_leaves_its_run_out_without_raising(book, rotor):
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=99)
    book.run(Label.O_T, 1j, 1j)
    assert from_story(book.story()) == ()


def test_nothing_recorded_yet_gives_nothing(book):
    assert from_story(book.story()) == ()
    book.mount()
    assert from_story(book.story()) == ()
    assert unidentified_planes(book.story(), SPEED) == ()


def test_repeats_update_the_scatter(book):
    # one plane, two O runs 1 um apart: s0 = hypot(0.03 x 10, 0.5) = 0.58309519 at the mean;
    # s^2 = (4 s0^2 + 2 x 0.5^2) / (4 + 2) (REUSE (c) "update") -> factor sqrt(0.91176471)
    book.mount()
    book.run(Label.O, 9.5, 0)
    book.run(Label.O, 10.5, 0)
    book.fit(1, 1.0, angle_deg=0.0)
    book.run(Label.O_T, 20.0, 0)
    c = next(c for c in from_story(book.story()) if c.channel == "probe 1")
    s1, s2 = (0.25 + (0.03 * 9.5) ** 2) ** 0.5, (0.25 + (0.03 * 10.5) ** 2) ** 0.5
    s3 = (0.25 + (0.03 * 20.0) ** 2) ** 0.5
    variance = 1 / (1 / s1**2 + 1 / s2**2) + s3**2
    assert c.se == pytest.approx((0.91176471 * variance) ** 0.5 / 140.0, rel=1e-6)
