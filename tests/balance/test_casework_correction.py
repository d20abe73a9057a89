"""Corrections of whole jobs, fed with the recordings' true vectors (tests/recordings/truth.json)."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from config.errors import Refusal
from store.balance.angles import angle_deg, difference_deg, polar
from store.casework import correction_for
from store.casework_correction import _sd_of_add, system
from store.casework_scene import base_of, scene_now, sources
from store.records import Label, Origin

P = polar


def vectors(truth, run):
    found = next(r for r in truth["runs"] if r["run"] == run)
    return [P(p["amp_um_pk"], p["lag_deg"]) for p in found["probes"]]


def fan(kit, truth, *, slow=True):
    book = kit.Book()
    book.mount()
    if slow:
        book.run(Label.SLOW_ROLL, *vectors(truth, "fan-slow-roll"), speed_hz=233 / 60)
    book.run(Label.O, *vectors(truth, "fan-O"))
    first = book.fit(1, 1.5, hole=16)  # 210 g.mm at 225 deg
    book.run(Label.O_T, *vectors(truth, "fan-T1"))
    book.remove(first)
    second = book.fit(2, 1.5, hole=7)  # 210 g.mm at 90 deg
    book.run(Label.O_T, *vectors(truth, "fan-T2"))
    book.remove(second)
    return book


def assert_adds(advice, expected, rel=1e-6):
    assert [p.plane for p in advice.planes] == [e["plane"] for e in expected]
    for plane, e in zip(advice.planes, expected, strict=True):
        wanted = P(e["gmm"], e["deg_against_rotation"])
        assert abs(plane.add - wanted) <= rel * abs(wanted)


def test_correction_from_raw_vectors(kit, truth):
    advice = correction_for(fan(kit, truth).story())
    assert_adds(advice, truth["correction_from_raw_vectors"])
    assert (advice.base_run, advice.base_label, advice.slow_roll_run) == ("0142/2", "O", None)
    assert "Runout included: no slow-roll vector was subtracted." in advice.notes
    assert advice.left_out == ()
    assert {c.source for c in advice.coefficients} == {"own"}


def test_correction_minus_slow_roll(kit, truth):
    advice = correction_for(fan(kit, truth).story(), subtract_slow_roll=True)
    assert_adds(advice, truth["correction_minus_slow_roll"])
    assert advice.slow_roll_run == "0142/1"
    # rounded to 0.1 g in the neighbouring holes: 297.563 g.mm at 242.05 = 1.840 g at 240 and 0.294 g at 255;
    # 213.013 at 67.057 = 0.813 at 60 and 0.722 at 75 (METHODS 3, by hand)
    pieces = [(p.plane, p.hole, p.mass_g) for plane in advice.planes for p in plane.pieces]
    assert sorted(pieces) == [(1, 17, 1.8), (1, 18, 0.3), (2, 5, 0.8), (2, 6, 0.7)]


def test_predicted_check_is_the_measured_one(kit, truth):
    """With the pieces of fan-check fitted, what is expected now is what fan-check reads."""
    book = fan(kit, truth)
    for p in truth["fitted_in_check"]:
        book.fit(p["plane"], p["mass_g"], hole=p["hole"])
    advice = correction_for(book.story())
    for channel, measured in zip(advice.channels, vectors(truth, "fan-check"), strict=True):
        assert abs(channel.now - measured) < 1e-6


def test_pieces_leave_what_is_predicted(kit, truth, rotor):
    book = fan(kit, truth)
    advice = correction_for(book.story(), subtract_slow_roll=True)
    for plane in advice.planes:
        for piece in plane.pieces:
            book.fit(piece.plane, piece.mass_g, hole=piece.hole)
    for channel, reads in zip(advice.channels, rotor.reads(book), strict=True):
        assert abs(channel.predicted - reads) < 1e-6
        assert channel.median_pk < channel.p90_pk


def test_trial_weights_kept_give_the_correction_less_them(kit, truth, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    for plane, hole in ((1, 16), (2, 7)):
        book.fit(plane, 1.5, hole=hole)
        book.run(Label.O_T, *rotor.reads(book))
    advice = correction_for(book.story())
    kept = {1: P(210, 225), 2: P(210, 90)}
    for plane, e in zip(advice.planes, truth["correction_from_raw_vectors"], strict=True):
        total = P(e["gmm"], e["deg_against_rotation"])
        assert plane.add == pytest.approx(total - kept[plane.plane], rel=1e-6)
        assert plane.fitted_now == pytest.approx(kept[plane.plane])
        assert sum(p.unbalance for p in plane.instead) == pytest.approx(total, abs=14)  # 0.1 g steps


def test_after_a_check_the_correction_starts_from_it(kit, truth, rotor):
    book = fan(kit, truth)
    book.fit(1, 1.0, hole=3)
    book.run(Label.CHECK, *rotor.reads(book))
    advice = correction_for(book.story())
    assert (advice.base_label, advice.base_run) == ("check", "0142/5")
    raw = {e["plane"]: P(e["gmm"], e["deg_against_rotation"]) for e in truth["correction_from_raw_vectors"]}
    assert advice.planes[0].add == pytest.approx(raw[1] - P(140, 30), rel=1e-6)
    assert advice.planes[1].add == pytest.approx(raw[2], rel=1e-6)


@settings(max_examples=25, deadline=None)
@given(st.floats(0, 359), st.floats(0, 359))
def test_the_holes_do_not_depend_on_where_mark_and_sensor_are(kit, rotor, mark, sensor):
    """A mark or a sensor elsewhere: other vectors, other angles from the mark, the same holes and masses."""

    def job(mark, sensor):
        book = kit.Book(set_up=kit.set_up(sensor_deg=sensor))
        book.mount(mark_deg=mark)
        book.run(Label.O, *rotor.reads(book, mark, sensor))
        for plane, hole in ((1, 16), (2, 7)):
            book.fit(plane, 1.5, hole=hole)
            book.run(Label.O_T, *rotor.reads(book, mark, sensor))
        return correction_for(book.story())

    here, there = job(0.0, 0.0), job(mark, sensor)
    for a, b in zip(here.planes, there.planes, strict=True):
        assert abs(a.add) == pytest.approx(abs(b.add))
        assert difference_deg(angle_deg(a.add) - mark, angle_deg(b.add)) == pytest.approx(0.0, abs=1e-6)
        assert [(p.hole, p.mass_g) for p in a.pieces] == [(p.hole, p.mass_g) for p in b.pieces]


def test_a_remount_with_a_moved_mark_still_knows_the_o_run(kit, truth, rotor):
    book = fan(kit, truth)
    book.mount(mark_deg=40.0)
    advice = correction_for(book.story())
    for plane, e in zip(advice.planes, truth["correction_from_raw_vectors"], strict=True):
        assert plane.add == pytest.approx(P(e["gmm"], e["deg_against_rotation"] - 40.0), rel=1e-6)


def test_a_remount_whose_mark_was_not_measured_does_not(kit, truth):
    book = fan(kit, truth)
    book.mount(mark_deg=40.0, how=None)
    with pytest.raises(Refusal, match="how the rotor mark stands to that mount's was not measured"):
        correction_for(book.story())


def test_one_plane_is_left_out_and_named(kit, truth, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    advice = correction_for(book.story())
    assert [p.plane for p in advice.planes] == [1]
    assert [p.plane for p in advice.left_out] == [2]
    assert "no run tells" in advice.left_out[0].why
    # least squares over two probes, by hand from truth: w = -sum conj(a) V / sum |a|^2
    a = [row[0] for row in rotor.A]
    v = vectors(truth, "fan-O")
    w = -sum(x.conjugate() * y for x, y in zip(a, v, strict=True)) / sum(abs(x) ** 2 for x in a)
    assert advice.planes[0].add == pytest.approx(w - P(210, 225), rel=1e-6)


def test_a_plane_may_be_named(kit, truth):
    advice = correction_for(fan(kit, truth).story(), planes=(2,))
    assert [p.plane for p in advice.planes] == [2]
    # the other one's unbalance stays: the correction that it is not given, turned by 180 deg
    (left,) = advice.left_out
    told = truth["correction_from_raw_vectors"][0]
    assert (left.plane, left.why, told["plane"]) == (1, "not asked for (--plane)", 1)
    assert left.stays == pytest.approx(-P(told["gmm"], told["deg_against_rotation"]), rel=1e-6)
    with pytest.raises(Refusal, match="no plane 7"):
        correction_for(fan(kit, truth).story(), planes=(7,))


def test_without_an_o_run(kit, truth, rotor):
    book = kit.Book()
    book.mount()
    with pytest.raises(Refusal, match="Job 0142 has no O run"):
        correction_for(book.story())
    book.run(None, *rotor.reads(book))
    with pytest.raises(Refusal, match="Job 0142 has no O run at 2394 r/min"):
        correction_for(book.story())


def test_without_a_trial(kit, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    with pytest.raises(Refusal, match="tells the effect of a weight in plane 1 or 2"):
        correction_for(book.story())


def test_without_a_slow_roll(kit, truth):
    with pytest.raises(Refusal, match="no slow-roll reading"):
        correction_for(fan(kit, truth, slow=False).story(), subtract_slow_roll=True)


def one_plane(kit, trial_gmm, v0=30 + 0j, alpha=0.02 + 0j):
    """One plane, one probe; |dV| = 0.02 x trial; s = hypot(3 % |V|, 0.5)."""
    book = kit.Book(machine=kit.machine(model=kit.model(planes=1)), set_up=kit.set_up(probes=1))
    book.mount()
    book.run(Label.O, v0)
    book.fit(1, trial_gmm / 140, angle_deg=90.0)
    book.run(Label.O_T, v0 + alpha * P(trial_gmm, 90))
    return book


def test_an_effect_below_five_times_the_scatter_is_refused_with_a_larger_weight(kit):
    # |dV| 6 um; s^2 = 0.25 + 0.0009 |V|^2 with |V|^2 900 and 936: 1.06 + 1.0924 -> 6 / 1.46711 = 4.09.
    # offered: 300 g.mm x 10 / 4.09 = 734 g.mm = 5.2 g at 140 mm
    with pytest.raises(Refusal, match=r"only 4\.1 times its scatter") as refusal:
        correction_for(one_plane(kit, 300.0).story())
    assert "5.2 g (734 g.mm)" in str(refusal.value)


def test_an_effect_between_five_and_ten_is_warned(kit):
    # |dV| 10 um, |V|^2 900 and 1000: s^2 1.06 and 1.15 -> 10 / 1.48661 = 6.73
    advice = correction_for(one_plane(kit, 500.0).story())
    assert "only 6.7 times the scatter" in advice.warnings[0]
    # |dV| 20 um, |V|^2 900 and 1300: s^2 1.06 and 1.42 -> 20 / 1.57480 = 12.7: no warning
    assert correction_for(one_plane(kit, 1000.0).story()).warnings == ()


def test_two_planes_need_two_channels(kit, rotor):
    book = kit.Book(set_up=kit.set_up(probes=1))
    book.mount()
    book.run(Label.O, rotor.reads(book)[0])
    for plane, hole in ((1, 16), (2, 7)):
        book.fit(plane, 3.0, hole=hole)
        book.run(Label.O_T, rotor.reads(book)[0])
    with pytest.raises(Refusal, match=r"2 planes cannot be solved from 1 channel"):
        correction_for(book.story())
    assert len(correction_for(book.story(), planes=(1,)).planes) == 1


def test_planes_that_look_alike_are_refused(kit):
    A = ((0.02 + 0j, 0.02 + 0j), (0.01 + 0j, 0.01 + 1e-9j))
    book, rotor = kit.Book(), kit.Rotor(A, (500 + 0j, 100j))
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    for plane in (1, 2):
        book.fit(plane, 5.0, hole=9)
        book.run(Label.O_T, *rotor.reads(book))
    with pytest.raises(Refusal, match="look alike"):
        correction_for(book.story())


def test_another_weight_in_an_unknown_plane_is_refused(kit, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    book.fit(2, 1.0, hole=1)
    with pytest.raises(Refusal, match="Plane 2 holds other weights now than at run 0142/1"):
        correction_for(book.story(), planes=(1,))


def test_a_run_whose_weight_has_no_place_is_named(kit, truth):
    book = fan(kit, truth)
    event = book.fit(1, 1.0, hole=99)
    book.run(Label.O_T, 1j, 1j)
    book.remove(event)
    advice = correction_for(book.story())
    assert any(n.startswith("Run 0142/5 was not taken: Plane 1") for n in advice.notes)


def test_simulated_jobs_say_so_and_stay_apart_from_live_runs(kit, rotor):
    book = kit.Book(origin=Origin.SIMULATED)
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16), book.fit(2, 1.5, hole=7)
    book.run(Label.O_T, *rotor.reads(book), origin=Origin.LIVE)
    book.run(Label.O, *rotor.reads(book), origin=Origin.SIMULATED)
    with pytest.raises(Refusal, match="plane 1 or 2"):
        correction_for(book.story())
    book.fit(2, 3.0, hole=3)
    book.run(Label.O_T, *rotor.reads(book))
    assert "From simulated runs." in correction_for(book.story()).notes
    mixed = correction_for(book.story(), any_origin=True)
    assert "From live and simulated runs." in mixed.notes
    assert mixed.origins == ("live", "simulated")


def test_housing_readings_keep_their_runout(kit, truth):
    """METHODS 9: never compensate housing (velocity, acceleration) readings."""
    made = kit.set_up()
    from dataclasses import replace

    velocity = replace(made.channels[1], kind="velocity", unit="mm/s")
    book = kit.Book(set_up=replace(made, channels=(made.channels[0], velocity)))
    book.mount()
    book.run(Label.SLOW_ROLL, 1 + 0j, 1 + 0j, speed_hz=4.0)
    book.run(Label.O, 10 + 0j, 5 + 0j)
    for plane, weight in ((1, 10.0), (2, 10.0)):
        book.fit(plane, weight, angle_deg=0.0)
        book.run(Label.O_T, 10 + 14j * plane, 5 + 9 * plane)
    advice = correction_for(book.story(), planes=(1,), subtract_slow_roll=True)
    assert [c.slow_roll for c in advice.channels] == [1 + 0j, None]
    assert "Slow roll was subtracted from displacement channels only." in advice.notes


def test_sd_of_the_weight_is_that_of_methods_10_2_for_one_plane(kit):
    """s 3.0 on every vector, 100 times METHODS' 0.03: first order, so 100 times its 0.173729365413."""
    book = kit.Book(machine=kit.machine(model=kit.model(planes=1)), set_up=kit.set_up(probes=1))
    book.mount()
    book.run(Label.O, P(2.6, 312), sd=3.0)
    book.fit(1, 10.0, angle_deg=0.0, radius_mm=1.0)
    book.run(Label.O_T, P(1.7, 251), sd=3.0)
    scene = scene_now(book.story())
    found = sources(scene, None)
    made = system(scene, found, base_of(scene), {}, scene.planes)
    add = {1: P(11.2258053869, 320.061389485) - 10}
    since = {1: 10 + 0j}
    assert _sd_of_add(made, add, since) == pytest.approx([17.3729365413], rel=1e-9)


@pytest.mark.parametrize("kept", [False, True])
def test_sd_of_the_weights_is_that_of_methods_10_2_for_two_planes(kit, kept):
    """Example 1.1(a) with s 50, 1000 times METHODS' 0.05: 0.10434257, 0.12766162 (trial weights removed)."""
    book = kit.Book()
    book.mount()
    book.run(Label.O, P(8.5, 60), P(6.5, 205), sd=50.0)
    first = book.fit(1, 10.0, angle_deg=270.0, radius_mm=1.0)
    book.run(Label.O_T, P(6.0, 125), P(4.5, 230), sd=50.0)
    book.remove(first)
    second = book.fit(2, 12.0, angle_deg=180.0, radius_mm=1.0)
    book.run(Label.O_T, P(6.0, 35), P(10.5, 160), sd=50.0)
    if not kept:
        book.remove(second)
    scene = scene_now(book.story())
    made = system(scene, sources(scene, None), base_of(scene), {}, scene.planes)
    since = {2: P(12, 180)} if kept else {}
    add = {1: P(10.0561386990, 325.554803852), 2: P(5.87736166287, 68.2559339695) - since.get(2, 0j)}
    assert _sd_of_add(made, add, since) == pytest.approx([104.34257, 127.66162], rel=1e-7)


def test_json_holds_units_and_plain_numbers(kit, truth):
    advice = correction_for(fan(kit, truth).story(), subtract_slow_roll=True)
    text = json.dumps(advice.to_dict(), allow_nan=False)
    back = json.loads(text)
    assert back["planes"][0]["add"]["gmm"] == pytest.approx(297.5631317976367, rel=1e-6)
    assert back["planes"][0]["add"]["against_rotation_deg"] == pytest.approx(242.04971060485306, rel=1e-6)
    assert back["channels"][0]["base"]["unit"] == "um"
    assert back["planes"][0]["pieces"][0]["hole"] == 17
    assert np.isfinite(back["condition_number"])
