"""Trial-weight advice, force of a piece, and the questions before a label.

METHODS section 5: 10 % force rule and place; HOUSE: the questions.
"""

from __future__ import annotations

import json
from dataclasses import replace

import pytest

from config.errors import Refusal
from store.balance import cautions
from store.balance.angles import polar
from store.balance.coefficients import from_story
from store.casework import fit_force, label_questions, trial_advice
from store.records import Label, PieceDraft

P = polar


def fresh(kit, critical_hz=None, speed_rpm=3000.0, sensor=0.0, mark=0.0, **machine):
    """Two planes of 150 mm; 120 kg, so 60 kg a plane (METHODS 5)."""
    model = kit.model(first_critical_hz=critical_hz)
    model = replace(model, planes=tuple(replace(p, radius_mm=150.0) for p in model.planes))
    made = kit.machine(model=model, **{"rotor_mass_kg": 120.0, "service_hz": speed_rpm / 60} | machine)
    book = kit.Book(machine=made, speed_hz=speed_rpm / 60, set_up=kit.set_up(sensor_deg=sensor))
    book.mount(mark_deg=mark)
    return book


def test_without_an_o_run_half_the_mass_and_no_place(kit):
    # METHODS 5: 60 kg at 3000 r/min: 596.17283133968 g.mm, 3.974 g at 150 mm; half is 1.987 -> 1.9 g
    advice = trial_advice(fresh(kit).story(), 1)
    assert advice.limit_gmm == pytest.approx(596.17283133968)
    assert (advice.mass_g, advice.halved, advice.place_deg, advice.hole) == (1.9, True, None, None)
    assert "no O reading" in advice.why[1]
    # 1.9 g x 150 mm at 3000 r/min: 0.010966227112322 x 9 x 285 = 28.1284 N
    assert advice.force_n == pytest.approx(28.1284, rel=1e-5)


def test_below_07_of_the_critical_speed_it_is_placed_opposite_the_high_spot(kit):
    book = fresh(kit, critical_hz=100.0)
    book.run(Label.O, P(40, 65), P(20, 200))
    advice = trial_advice(book.story(), 1)
    # lag 65, probe and sensor at 0: 65 + 180 = 245; holes at 240 (17) and 255 (18); 3.974 g -> 3.9 g
    assert (advice.place_deg, advice.hole, advice.hole_deg) == (pytest.approx(245), 17, pytest.approx(240))
    assert (advice.mass_g, advice.halved, advice.channel) == (3.9, False, "probe 1")
    assert trial_advice(book.story(), 2).place_deg == pytest.approx(20)  # probe 2: 200 + 180
    assert "0.50 of the first critical speed" in advice.why[1]


def test_the_place_follows_sensor_and_mark(kit):
    book = fresh(kit, critical_hz=100.0, sensor=90.0, mark=45.0)
    book.run(Label.O, P(40, 65), P(20, 200))
    advice = trial_advice(book.story(), 1)
    # METHODS 5: lag - beta_probe + beta_sensor + 180 = 65 + 90 + 180 = 335 from the mark, which is 45 from
    # hole 1: 335 + 45 = 20 from hole 1, nearest hole 2 (15), 330 from the mark
    assert advice.place_deg == pytest.approx(335)
    assert (advice.hole, advice.hole_deg) == (2, pytest.approx(330))


@pytest.mark.parametrize(("critical", "why"), [(None, "not on record"), (70.0, "0.71 of the first critical")])
def test_otherwise_no_place_and_why(kit, critical, why):
    book = fresh(kit, critical_hz=critical)
    book.run(Label.O, P(40, 65), P(20, 200))
    advice = trial_advice(book.story(), 1)
    assert (advice.place_deg, advice.hole, advice.mass_g) == (None, None, 1.9)
    assert why in advice.why[1]


def test_history_knows_the_lag(kit, rotor):
    old = kit.Book()
    old.mount()
    old.run(Label.O, *rotor.reads(old))
    for plane, hole in ((1, 16), (2, 7)):
        old.fit(plane, 4.5, hole=hole)
        old.run(Label.O_T, *rotor.reads(old))
    found = [(c, old.mounts[0], old.set_up) for c in from_story(old.story())]
    book = kit.Book(machine=kit.machine("F-211"), number="0150", set_up=kit.set_up(99, sensor_deg=30.0))
    book.mount()
    book.run(Label.O, *rotor.reads(book, sensor_with_rotation_deg=30.0))
    advice = trial_advice(book.story(), 1, reuse=found)
    # arg(V0) - arg(alpha) + 180 by truth.json: 70.62500762 - 9.60802308 + 180 = 241.01698454
    assert advice.place_deg == pytest.approx(241.01698454)
    assert (advice.channel, advice.hole, advice.halved) == ("probe 1", 17, False)
    assert "jobs 0142" in advice.why[1]


def test_the_force_is_taken_at_the_highest_speed(kit):
    book = fresh(kit, speed_rpm=1500.0, service_hz=50.0)
    assert trial_advice(book.story(), 1).speed_hz == 50.0
    book = fresh(kit, speed_rpm=3000.0, service_hz=25.0)
    assert trial_advice(book.story(), 1).speed_hz == 50.0


def test_bearing_loads_are_used_and_named(kit):
    advice = trial_advice(fresh(kit, bearing_loads_kg=(90.0, 30.0)).story(), 2)
    assert advice.static_load_kg == 30.0
    assert "bearing beside this plane" in advice.load_how


def test_a_mass_below_the_step_is_left_as_it_is(kit):
    advice = trial_advice(fresh(kit, speed_rpm=30000.0).story(), 1)
    assert advice.mass_g == pytest.approx(596.17283133968 / 100 / 150 / 2)


def test_a_hole_in_use_is_named(kit):
    book = fresh(kit, critical_hz=100.0)
    book.fit(1, 1.0, hole=17)
    book.run(Label.O, P(40, 65), P(20, 200))
    assert trial_advice(book.story(), 1).notes == (
        "Hole 17 holds a weight already; add to it or take a neighbour.",
    )


def test_bad_requests(kit):
    with pytest.raises(Refusal, match="no plane 3"):
        trial_advice(fresh(kit).story(), 3)
    with pytest.raises(Refusal, match="Nothing of job 0142 is mounted"):
        trial_advice(kit.Book().story(), 1)


def test_force_of_a_piece(kit):
    book = fresh(kit)
    # 3.9744855 g at 150 mm, 3000 r/min: exactly 10 % of 60 kg x 9.80665 = 58.8399 N (METHODS 5)
    force = fit_force(book.mounts[0], PieceDraft(1, 3.9744855422645, hole=1), (50.0,))
    assert force.force_n == pytest.approx(58.8399)
    assert force.share_of_load == pytest.approx(0.1)
    assert force.caution == "At 3000 r/min it pulls with 58.8 N, 10 % of the static load on its bearing."
    assert fit_force(book.mounts[0], PieceDraft(1, 1.0, hole=1), (100.0,)).speed_hz == 100.0
    assert fit_force(book.mounts[0], PieceDraft(1, 1.0, hole=1, radius_mm=300.0)).radius_mm == 300.0


def test_cautions_are_one_line_each():
    for line in (*cautions.WEIGHT_FIT, *cautions.CORRECTION, *cautions.SERVE):
        assert "\n" not in line
        assert len(line) < 110


def test_o_is_questioned_when_the_weights_differ_from_those_listed(kit):
    book = fresh(kit)
    listed = book.fit(1, 2.0, hole=1, at_mount=True)
    assert label_questions(book.story(), Label.O, set_up=book.set_up) == ()
    extra = book.fit(1, 1.0, hole=5)
    assert "listed at the mount" in label_questions(book.story(), Label.O, set_up=book.set_up)[0]
    book.remove(extra)
    assert label_questions(book.story(), Label.O, set_up=book.set_up) == ()
    book.remove(listed)
    assert label_questions(book.story(), Label.O, set_up=book.set_up) != ()
    assert label_questions(book.story(), Label.CHECK, set_up=book.set_up) == ()


def test_o_t_is_questioned_when_the_weights_are_those_of_o(kit):
    book = fresh(kit)
    assert label_questions(book.story(), Label.O_T, set_up=book.set_up) == ()
    book.run(Label.O, 1j, 1j)
    (question,) = label_questions(book.story(), Label.O_T)
    assert "those of the O run 0142/1" in question
    book.fit(2, 1.0, hole=5)
    assert label_questions(book.story(), Label.O_T) == ()
    run = book.run(None, 1j, 1j)
    assert label_questions(book.story(), Label.O_T, run=run) == ()
    assert label_questions(book.story(), Label.O, run=run) != ()


def test_json(kit):
    book = fresh(kit)
    text = trial_advice(book.story(), 1).to_dict()
    assert json.loads(json.dumps(text, allow_nan=False))["mass_g"] == 1.9
    force = fit_force(book.mounts[0], PieceDraft(1, 1.0, hole=1)).to_dict()
    assert json.loads(json.dumps(force))["unbalance_gmm"] == 150.0
