"""Verdicts, against the recordings' truth and hand calculations."""

from __future__ import annotations

import json
from dataclasses import replace

import pytest

from config.errors import Refusal
from store.balance.angles import polar
from store.balance.coefficients import from_story
from store.casework import correction_for, judge
from store.records import Label

P = polar


def vectors(truth, run):
    found = next(r for r in truth["runs"] if r["run"] == run)
    return [P(p["amp_um_pk"], p["lag_deg"]) for p in found["probes"]]


def fan(kit, truth, *, slow=True, **machine):
    book = kit.Book(machine=kit.machine(**machine))
    book.mount()
    if slow:
        book.run(Label.SLOW_ROLL, *vectors(truth, "fan-slow-roll"), speed_hz=233 / 60)
    book.run(Label.O, *vectors(truth, "fan-O"))
    for plane, hole, run in ((1, 16, "fan-T1"), (2, 7, "fan-T2")):
        trial = book.fit(plane, 1.5, hole=hole)
        book.run(Label.O_T, *vectors(truth, run))
        book.remove(trial)
    for p in truth["fitted_in_check"]:
        book.fit(p["plane"], p["mass_g"], hole=p["hole"])
    book.run(Label.CHECK, *vectors(truth, "fan-check"))
    return book


def check_of(book):
    return judge(book.story(), book.runs[-1].readings[0].id)


def test_the_recordings_check(kit, truth):
    verdict = check_of(fan(kit, truth))
    for channel in verdict.channels:
        assert abs(channel.measured - channel.predicted) < 1e-6
        assert channel.innovation < 1e-9
    # what is really left: 300@62 + 266@240 + 42@255 and 215@247 + 112@60 + 98@75, by vector sum
    left = {
        1: P(300, 62) + P(1.9 * 140, 240) + P(0.3 * 140, 255),
        2: P(215, 247) + P(0.8 * 140, 60) + P(0.7 * 140, 75),
    }
    # the slow-roll vector holds (233/2393.7)^2 = 0.95 % of the O response, at most 2.9 and 2.1 g.mm
    for plane in verdict.planes:
        assert abs(plane.residual - left[plane.plane]) < 0.0095 * 300 * 1.05
        assert abs(plane.residual - left[plane.plane]) < plane.slow_roll_bound_gmm
        assert plane.in_tolerance is True
    assert verdict.in_tolerance is True
    assert verdict.slow_roll_run == "0142/1"
    assert not verdict.runout_included
    # U_per = 9549.29658551372 x 6.3 x 40 / 2393.7 (METHODS 4), half for each plane
    assert verdict.permissible_gmm == pytest.approx(9549.29658551372 * 6.3 * 40 / 2393.7)
    assert [p.share_gmm for p in verdict.planes] == [pytest.approx(502.6575, abs=1e-3)] * 2


def test_slow_roll_bound_by_hand(kit):
    """One plane, one probe: 2 (n_slow/n)^2 |V_O| / |alpha| = 2 x 0.01 x 30 / 0.02 = 30 g.mm."""
    book = kit.Book(
        machine=kit.machine(model=kit.model(planes=1)), set_up=kit.set_up(probes=1), speed_hz=40.0
    )
    book.mount()
    book.run(Label.SLOW_ROLL, 1 + 0j, speed_hz=4.0)
    book.run(Label.O, 30 + 0j)
    book.fit(1, 10.0, angle_deg=180.0)
    book.run(Label.CHECK, 2 + 0j)
    book.run(Label.TRIM, 2 + 0j)
    verdict = check_of(book)
    assert verdict.planes[0].slow_roll_bound_gmm == pytest.approx(30.0)
    assert verdict.planes[0].residual == pytest.approx(50.0)  # (2 - 1) / 0.02


def test_without_slow_roll_runout_is_included(kit, truth):
    verdict = check_of(fan(kit, truth, slow=False))
    assert verdict.runout_included
    assert verdict.planes[0].slow_roll_bound_gmm is None
    assert "Runout included: the job has no slow-roll reading." in verdict.notes
    # raw vectors explained by unbalance: |A^-1 V|, the raw correction of truth less the pieces fitted
    raw = {e["plane"]: P(e["gmm"], e["deg_against_rotation"]) for e in truth["correction_from_raw_vectors"]}
    fitted = P(1.9 * 140, 240) + P(0.3 * 140, 255)
    assert verdict.planes[0].residual == pytest.approx(fitted - raw[1], rel=1e-5)


def test_out_of_tolerance_in_one_plane_is_out(kit, truth):
    verdict = check_of(fan(kit, truth, slow=False, grade_mm_s=None, permissible_gmm=60.0))
    assert [p.in_tolerance for p in verdict.planes] == [False, False]
    assert verdict.in_tolerance is False


def test_no_tolerance_on_record(kit, truth):
    verdict = check_of(fan(kit, truth, grade_mm_s=None))
    assert verdict.in_tolerance is None
    assert verdict.planes[0].why_not == "no tolerance is on record"
    assert any("No tolerance is on record" in n for n in verdict.notes)


def test_the_newest_revision_of_the_machine_has_the_tolerance(kit, truth):
    """9549 G m/n = 9549 x 2.5 x 40 / 2393.7 = 398.9 g.mm (ISO 21940-11's own form, from memory)."""
    book = fan(kit, truth, grade_mm_s=None)
    reading = book.runs[-1].readings[0].id
    now = kit.machine(grade_mm_s=2.5, vibration_limit_um_pk=1.0, revision=2, model=kit.model(planes=1))
    verdict = judge(replace(book.story(), machine_now=now), reading)
    assert verdict.permissible_gmm == pytest.approx(398.9, abs=0.1)
    assert [p.plane for p in verdict.planes] == [1, 2]  # the geometry stays the mount's
    assert [p.share_gmm for p in verdict.planes] == pytest.approx([199.45, 199.45], abs=0.1)
    assert verdict.vibration.limit_um_pk == 1.0
    assert correction_for(replace(book.story(), machine_now=now)).permissible_gmm == verdict.permissible_gmm
    other = replace(now, serial="F-999")  # another machine's is never taken
    assert judge(replace(book.story(), machine_now=other), reading).permissible_gmm is None


def test_vibration_limit_is_judged_apart(kit, truth):
    verdict = check_of(fan(kit, truth, vibration_limit_um_pk=1.0))
    assert verdict.in_tolerance is True
    assert verdict.vibration.within is False
    assert verdict.vibration.channel == "probe 2"
    assert verdict.vibration.largest_um_pk == pytest.approx(1.051342879487798)
    assert check_of(fan(kit, truth, vibration_limit_um_pk=1.1)).vibration.within is True
    assert check_of(fan(kit, truth)).vibration is None


def test_the_prediction_uses_only_what_came_before(kit, truth, rotor):
    book = fan(kit, truth)
    before = check_of(book)
    reading = book.runs[-1].readings[0].id
    book.fit(1, 3.0, hole=1)
    book.run(Label.TRIM, 40j, 40)  # something broke
    after = judge(book.story(), reading)
    assert [c.predicted for c in after.channels] == [c.predicted for c in before.channels]
    assert [p.residual for p in after.planes] == [p.residual for p in before.planes]
    assert {run for c in after.coefficients for run in c.behind} == {"0142/2", "0142/3", "0142/4"}


def test_a_check_far_from_the_prediction_is_warned(kit, truth):
    book = fan(kit, truth)
    book.fit(1, 0.2, hole=1)
    book.run(Label.TRIM, 9j, 9)
    verdict = check_of(book)
    assert all(c.innovation > 4.6 for c in verdict.channels)
    assert "probe 1 and probe 2: measured and predicted differ" in verdict.warnings[-1]


def test_innovation_by_hand(kit):
    """O 30 um, weight 1400 g.mm of an alpha of 0.02 found from O+T; check 1 um off."""
    book = kit.Book(machine=kit.machine(model=kit.model(planes=1)), set_up=kit.set_up(probes=1))
    book.mount()
    book.run(Label.O, 30 + 0j)
    trial = book.fit(1, 10.0, angle_deg=90.0)
    book.run(Label.O_T, 30 + 28j)
    book.remove(trial)
    book.fit(1, 10.0, angle_deg=180.0)
    book.run(Label.CHECK, 3 + 0j)
    (channel,) = check_of(book).channels
    assert channel.predicted == pytest.approx(2 + 0j)
    # weights of O and O+T in the prediction: V_O + j (V_T - V_O) = (1 - j) V_O + j V_T; s_O^2 = 1.06,
    # s_T^2 = 0.25 + 0.0009 x 1684 = 1.7656, the check's own 0.25 + 0.0009 x 9 = 0.2581
    variance = 2 * 1.06 + 1.7656 + 0.2581
    assert channel.sd == pytest.approx(variance**0.5)
    assert channel.innovation == pytest.approx(1 / (2 * variance))


def test_a_plane_not_told_apart_leaves_the_verdict_open(kit, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    book.fit(1, 1.5, hole=16)
    book.run(Label.O_T, *rotor.reads(book))
    book.fit(1, 0.5, hole=17)
    book.run(Label.CHECK, *rotor.reads(book))
    verdict = check_of(book)
    assert verdict.in_tolerance is None
    assert verdict.planes[0].residual is not None
    assert verdict.planes[1].residual is None
    assert "no run before it tells" in verdict.planes[1].why_not


def test_an_o_run_alone_can_only_be_compared(kit, rotor):
    book = kit.Book()
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    verdict = check_of(book)
    assert verdict.in_tolerance is None
    assert [c.predicted for c in verdict.channels] == [None, None]
    with pytest.raises(Refusal, match="not in job"):
        judge(book.story(), book.set_up.id)
    book.run(None, 1j, 1j)
    with pytest.raises(Refusal, match="no balancing reading"):
        check_of(book)


def test_a_check_by_reuse_is_judged_with_history_as_it_was_before(kit, truth, rotor):
    old = fan(kit, truth)
    candidates = [(c, old.mounts[0], old.set_up) for c in from_story(old.story())]
    book = kit.Book(machine=kit.machine("F-211"), number="0143", clock_us=old.clock_us + 10**12)
    book.mount()
    book.run(Label.O, *rotor.reads(book))
    advice = correction_for(book.story(), reuse=candidates)
    for plane in advice.planes:
        for piece in plane.pieces:
            book.fit(piece.plane, piece.mass_g, hole=piece.hole)
    book.run(Label.CHECK, *rotor.reads(book))
    reading = book.runs[-1].readings[0].id
    later = [(replace(c, at_us=book.clock_us + 1, value=1j), m, s) for c, m, s in candidates]
    verdict = judge(book.story(), reading, reuse=candidates + later)
    assert {c.source for c in verdict.coefficients} == {"history"}
    for channel, outlook in zip(verdict.channels, advice.channels, strict=True):
        assert channel.predicted == pytest.approx(outlook.predicted)
        assert abs(channel.measured - channel.predicted) < 1e-6
    assert judge(book.story(), reading).in_tolerance is None
    assert "odds of such a prediction are not calibrated" in " ".join(verdict.notes)
    json.dumps(verdict.to_dict(), allow_nan=False)
