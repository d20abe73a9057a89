"""What was typed wrong and is put right by later records: mark positions, weights, labels, machines."""

from __future__ import annotations

import cmath
import math
from dataclasses import replace
from typing import Any

import pytest
from store_kit import MACHINE, Stand

from config.errors import NeedsAnswer, Refusal
from store.balance.weights import pieces_at
from store.casework import correction_for
from store.records import Label, MachineDraft, MarkPosition, PieceDraft, Sense, WeightPlane


def at(*degrees: float) -> tuple[MarkPosition, ...]:
    return tuple(MarkPosition(i, d) for i, d in enumerate(degrees, 1))


def phasor(size: float, degrees: float) -> complex:
    return cmath.rect(size, math.radians(degrees))


def alpha(stand: Stand, job: str = "0142") -> complex:
    (found,) = (c for c in stand.history.coefficients(plane=1, channel="probe 1") if c.job_number == job)
    return found.value


# --- the rotor mark ----------------------------------------------------------------------------------


def test_another_mark_position_is_asked(stand: Stand) -> None:
    first = stand.mount(marks=at(0.0))
    with pytest.raises(NeedsAnswer) as asked:
        stand.mount(marks=at(37.5))
    assert asked.value.cause == (
        "Plane 1's rotor mark was 0 deg from hole 1, now 37.5: was the mark moved, or mistyped before?"
    )
    assert asked.value.options == ("--mark-moved", "--mark-mistyped")
    assert stand.history.current_mount() == first  # nothing was written


def test_the_same_position_and_other_jobs_ask_nothing(stand: Stand) -> None:
    stand.mount(marks=at(0.0))
    stand.mount(marks=at(359.5))  # within the 1 deg that two measurements may differ by (judgement)
    stand.mount(marks=at(90.0), job_number="0143")
    stand.mount(marks=(), job_number="0143")


def test_a_shift_that_differs_between_planes_can_only_be_a_slip(stand: Stand) -> None:
    stand.mount(marks=at(0.0, 0.0))
    with pytest.raises(NeedsAnswer, match="can only have been mistyped") as asked:
        stand.mount(marks=at(37.5, 10.0))
    assert asked.value.options == ("--mark-mistyped",)
    with pytest.raises(NeedsAnswer, match=r"plane 2's rotor mark was 0 deg from hole 1, now 0: one mark"):
        stand.mount(marks=at(37.5, 0.0), mark_change="moved")
    stand.mount(marks=at(37.5, 10.0), mark_change="mistyped")
    assert [m.marks for m in stand.history.mounts("0142")] == [at(37.5, 10.0)] * 2


def test_planes_numbered_in_opposite_senses_move_as_one(stand: Stand) -> None:
    """Seen from one end, +30 deg in a plane numbered clockwise is -30 deg in one numbered the other way."""
    planes = (MACHINE.planes[0], WeightPlane(2, 120.0, 24, Sense("counterclockwise", "drive")))
    stand.ledger.add_machine(replace(MACHINE, model_code="KR-23", planes=planes), "ana")
    stand.mount(marks=at(10.0, 350.0))
    with pytest.raises(NeedsAnswer) as asked:
        stand.mount(marks=at(40.0, 320.0))
    assert asked.value.options == ("--mark-moved", "--mark-mistyped")
    with pytest.raises(NeedsAnswer, match="can only have been mistyped"):
        stand.mount(marks=at(40.0, 20.0))


def _trial(stand: Stand) -> None:
    stand.run(Label.O, 10 + 0j)
    stand.fit(3.0, 16)
    stand.run(Label.O_T, 10 + phasor(4.2, 100.0))
    stand.ledger.remove(1, "ana", hole=16)


def test_a_mistyped_mark_is_put_right_in_the_mounts_before(stand: Stand) -> None:
    """Hole 16 of 24 is 225 deg from hole 1; the holes are numbered against rotation, so the piece is at 225
    deg less the mark's place (METHODS 6.1). alpha = 4.2 um at 100 deg over 3 g x 140 mm: hand calculation.
    """
    stand.mount(marks=at(30.0))
    _trial(stand)
    assert alpha(stand) == pytest.approx(phasor(0.01, 100.0 - 195.0), rel=1e-9)
    stand.mount(marks=at(67.5), mark_change="mistyped")
    assert alpha(stand) == pytest.approx(phasor(0.01, 100.0 - 157.5), rel=1e-9)
    first, second = stand.history.job_story("0142").mounts
    assert first.marks == second.marks == at(67.5)
    assert stand.history.mount(first.id).marks == at(67.5)
    counts = stand.history.counts()
    assert (counts["mount_mark"], counts["mount_mark_revision"]) == (2, 1)  # both stay


def test_a_moved_mark_changes_no_coefficient_and_the_correction_says_the_turn(stand: Stand) -> None:
    """HOUSE: moving the rotor mark changes no coefficient, only the holes."""
    stand.mount(marks=at(30.0))
    _trial(stand)
    stand.mount(marks=at(67.5), mark_change="moved")
    first, second = stand.history.job_story("0142").mounts
    assert (first.marks, second.marks) == (at(30.0), at(67.5))
    stand.ledger.rebuild_coefficients("0142")
    assert alpha(stand) == pytest.approx(phasor(0.01, 100.0 - 195.0), rel=1e-9)
    stand.run(None)
    told = correction_for(stand.history.job_story("0142"), planes=(1,))
    # against rotation the mark is 37.5 deg further, so every angle from it is 37.5 deg less
    (note,) = (n for n in told.notes if "turned by" in n)
    assert note.startswith(
        "Run 0142/1 is of an earlier mount: its vectors and weights were turned by -37.5 deg"
    )
    # O is 10 um at 0 deg: -10/alpha = 1000 g.mm at 275 deg from the old mark, 237.5 deg from the new
    assert told.planes[0].add == pytest.approx(phasor(1000.0, 180.0 - 37.5 + 95.0), rel=1e-6)


def test_a_slip_after_a_move_leaves_the_mounts_before_the_move(stand: Stand) -> None:
    stand.mount(marks=at(0.0))
    stand.mount(marks=at(30.0), mark_change="moved")
    stand.mount(marks=at(30.0))
    stand.mount(marks=at(37.5), mark_change="mistyped")
    assert [m.marks for m in stand.history.mounts("0142")] == [at(0.0), at(37.5), at(37.5), at(37.5)]


def test_pieces_at_angles_are_carried_from_the_mark_put_right(stand: Stand) -> None:
    """Both mounts have the mark at one place then, so the angle from it stays."""
    stand.mount(marks=at(0.0), fitted=(PieceDraft(1, 2.0, angle_deg=100.0),))
    again = stand.mount(marks=at(37.5), mark_change="mistyped", carry_over=True)
    assert [p.angle_deg for p in stand.history.weights(again.id)] == [100.0]


# --- wrong weight entries ----------------------------------------------------------------------------


def _masses(stand: Stand) -> list[list[tuple[float, int | None]]]:
    story = stand.history.job_story("0142")
    return [[(p.mass_g, p.hole) for p in pieces_at(story, run)] for run in story.runs]


def test_a_trial_weight_in_the_wrong_hole_is_put_right_when_it_is_off(stand: Stand) -> None:
    """Hole 16 was typed, hole 17 is right: 15 deg further against rotation, so alpha turns back by 15."""
    mount = stand.mount(marks=at(30.0))
    _trial(stand)
    stand.run(None)
    before = alpha(stand)
    fitted, removed = stand.history.weight_events(mount.id)
    gone = stand.ledger.void_weight(fitted.seq, "it was hole 17", "rui")
    assert [(g.id, g.void) for g in gone] == [(fitted.id, "it was hole 17"), (removed.id, "it was hole 17")]
    assert stand.history.coefficients(plane=1) == ()
    assert _masses(stand) == [[], [], []]
    assert stand.history.weights(mount.id) == stand.history.weight_events(mount.id) == ()
    stand.fit(3.0, 17, after_run="0142/1")
    stand.ledger.remove(1, "rui", hole=17, after_run="0142/2")
    assert _masses(stand) == [[], [(3.0, 17)], []]
    assert alpha(stand) == pytest.approx(before * phasor(1.0, -15.0), rel=1e-9)
    entries = stand.history.weight_events(mount.id, with_void=True)
    assert [(e.act, e.hole, e.void is None) for e in entries] == [
        ("fitted", 16, False),
        ("fitted", 17, True),
        ("removed", 16, False),
        ("removed", 17, True),
    ]


def test_a_void_removal_leaves_the_piece_on_and_it_can_come_off_again(stand: Stand) -> None:
    mount = stand.mount()
    stand.fit(3.0, 16)
    (removed,) = stand.ledger.remove(1, "ana", hole=16)
    stand.ledger.void_weight(removed.seq, "it is still on", "ana")
    assert [p.hole for p in stand.history.weights(mount.id)] == [16]
    stand.ledger.remove(1, "ana", hole=16)
    assert stand.history.weights(mount.id) == ()


def test_what_was_listed_at_the_mount_can_be_void(stand: Stand) -> None:
    mount = stand.mount(fitted=(PieceDraft(1, 2.0, 3),))
    (listed,) = stand.history.weights(mount.id)
    stand.ledger.void_weight(listed.seq, "there was none", "ana")
    stand.ask(Label.O)  # and O is not questioned: the rotor is as listed


@pytest.mark.parametrize(
    ("number", "why", "says"),
    [(999, "x", "no weight entry 999"), (1, "", "needs a reason"), (1, "a\nb", "cannot be stored")],
)
def test_voids_that_cannot_be(stand: Stand, number: int, why: str, says: str) -> None:
    stand.mount()
    stand.fit()
    with pytest.raises(Refusal, match=says):
        stand.ledger.void_weight(number, why, "ana")
    assert stand.history.counts()["weight_void"] == 0


def test_void_once_and_not_while_a_mark_is_pending(stand: Stand) -> None:
    stand.mount()
    stand.fit()
    stand.ask(Label.O_T)
    with pytest.raises(Refusal, match="Nothing is voided while the mark"):
        stand.ledger.void_weight(1, "wrong", "ana")
    stand.ledger.cancel_mark("key-1")
    stand.ledger.void_weight(1, "wrong", "ana")
    with pytest.raises(Refusal, match=r"void already \(wrong\)"):
        stand.ledger.void_weight(1, "again", "ana")


# --- labels ------------------------------------------------------------------------------------------


def _label(stand: Stand, run: str, label: Label, number: int | None = None, **how: Any) -> Any:
    return stand.ledger.label_run(stand.key(), run, number, label, "rui", slow_roll_limit_hz=5.0, **how)


def test_a_run_of_any_job_is_labelled_by_name(stand: Stand) -> None:
    stand.mount()
    stand.run(None)
    stand.mount(job_number="0143")
    stand.run(None)
    mark = _label(stand, "0142/1", Label.O)
    assert (mark.job_number, mark.run_name, mark.reading_number) == ("0142", "0142/1", 1)
    assert [r.label for r in stand.history.run("0142/1").readings] == ["O"]
    assert [r.label for r in stand.history.run("0143/1").readings] == [None]


def test_the_reading_is_named_or_the_newest_that_fits(stand: Stand) -> None:
    from store_kit import reading

    stand.mount()
    run = stand.begin()
    for speed in (25.0, 25.0, 24.0):
        stand.ledger.add_reading(run.id, reading(speed_hz=speed))
    stand.end(run.id)
    assert _label(stand, "0142/1", Label.O).reading_number == 2
    assert _label(stand, "0142/1", Label.CHECK, 1).reading_number == 1
    with pytest.raises(Refusal, match=r"Reading 3 of run 0142/1 was taken at 1440\.0 r/min"):
        _label(stand, "0142/1", Label.CHECK, 3)
    with pytest.raises(Refusal, match="no reading 4") as refused:
        _label(stand, "0142/1", Label.CHECK, 4)
    assert refused.value.remedy == "Its readings: 1, 2, 3."


def test_another_label_is_asked(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O)
    with pytest.raises(NeedsAnswer) as asked:
        _label(stand, "0142/1", Label.CHECK)
    assert asked.value.cause == "Reading 1 of run 0142/1 is labelled O; it would become check."
    assert asked.value.options == ("--yes",)
    with pytest.raises(NeedsAnswer, match="is labelled O"):
        stand.ask(Label.TRIM, choose="last")
    assert _label(stand, "0142/1", Label.O).run_name == "0142/1"  # the same again is no change
    _label(stand, "0142/1", Label.CHECK, confirmed=True)
    assert [r.label for r in stand.history.run("0142/1").readings] == ["check"]


def test_one_yes_answers_what_was_shown_together(stand: Stand) -> None:
    stand.mount()
    stand.fit()
    stand.run(Label.CHECK)
    with pytest.raises(NeedsAnswer, match=r"is labelled check.*differ from those listed"):
        _label(stand, "0142/1", Label.O)


def test_unassigned_runs_are_labelled_after_they_are_assigned(stand: Stand) -> None:
    """``last`` is the highest number of the job: a run assigned later has it, whenever it was recorded."""
    stand.end(stand.begin().id)
    run = stand.begin()
    from store_kit import reading

    stand.ledger.add_reading(run.id, reading())
    stand.end(run.id)
    stand.mount()
    stand.run(Label.O)
    with pytest.raises(Refusal, match="Run U/2 has no job"):
        _label(stand, "U/2", Label.CHECK)
    stand.ledger.assign_run("U/2", "0142", "ana")
    assert stand.ask(Label.CHECK, choose="last").run_name == "0142/2"
    assert [r.label for r in stand.history.run("U/2").readings] == ["check"]


# --- machines ----------------------------------------------------------------------------------------


def test_what_is_not_typed_of_a_known_machine_is_kept(stand: Stand) -> None:
    stand.ledger.add_machine(replace(MACHINE, vibration_limit_um_pk=20.0), "ana")
    kept = stand.ledger.add_machine(MachineDraft("F-204", rotor_mass_kg=41.0), "ana")
    assert (kept.revision, kept.rotor_mass_kg, kept.service_hz, kept.model.code) == (3, 41.0, 25.0, "KR-22")
    assert (kept.grade_mm_s, kept.bearing_loads_kg, kept.vibration_limit_um_pk) == (2.5, (20.0, 20.0), 20.0)
    assert stand.ledger.add_machine(MachineDraft("F-204"), "ana") == kept


def test_a_plane_typed_alone_keeps_the_other(stand: Stand) -> None:
    wider = WeightPlane(1, 141.0, 24, MACHINE.planes[0].numbering)
    kept = stand.ledger.add_machine(MachineDraft("F-204", planes=(wider,)), "ana")
    assert kept.model.planes == (replace(MACHINE.planes[0], radius_mm=141.0), MACHINE.planes[1])


def test_a_grade_typed_alone_replaces_the_figure_that_would_override_it(stand: Stand) -> None:
    stand.ledger.add_machine(MachineDraft("F-204", permissible_gmm=300.0), "ana")
    assert stand.ledger.add_machine(MachineDraft("F-204"), "ana").permissible_gmm == 300.0
    graded = stand.ledger.add_machine(MachineDraft("F-204", grade_mm_s=1.0), "ana")
    assert (graded.grade_mm_s, graded.permissible_gmm) == (1.0, None)


@pytest.mark.parametrize("lacks", ["model_code", "rotor_mass_kg", "service_hz"])
def test_a_new_machine_needs_all_three(refusing: Stand, lacks: str) -> None:
    with pytest.raises(Refusal, match="'F-300' is not known yet"):
        refusing.ledger.add_machine(replace(MACHINE, serial="F-300", **{lacks: None}), "ana")


def test_more_than_two_planes_are_refused_for_now(refusing: Stand) -> None:
    third = (WeightPlane(3, 100.0, 12, MACHINE.planes[0].numbering),)
    for draft in (MachineDraft("F-204", planes=third), replace(MACHINE, planes=(*MACHINE.planes, *third))):
        with pytest.raises(Refusal, match="3 weight planes; for now revmark balances in one or two"):
            refusing.ledger.add_machine(draft, "ana")


# --- a revised plane under pieces --------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"radius_mm": 150.0}, "its radius changed from 140 to 150 mm"),
        ({"holes": 20}, "its holes changed from 24 to 20"),
        ({"numbering": Sense("counterclockwise", "drive")}, "its numbering changed from clockwise seen from"),
    ],
)
def test_pieces_are_not_carried_onto_a_revised_plane(stand: Stand, change: dict[str, Any], says: str) -> None:
    stand.mount(fitted=(PieceDraft(1, 2.0, 3),))
    revised = replace(MACHINE.planes[0], **change)
    stand.ledger.add_machine(MachineDraft("F-204", planes=(revised,)), "ana")
    with pytest.raises(Refusal, match=says) as refused:
        stand.mount(carry_over=True)
    assert "--fitted" in refused.value.remedy
    stand.mount(fitted=(PieceDraft(1, 2.0, 3),))  # listed anew, as it is counted now


def test_a_revised_plane_without_pieces_is_no_obstacle(stand: Stand) -> None:
    stand.mount(fitted=(PieceDraft(1, 2.0, 3),))
    planes = (MACHINE.planes[0], replace(MACHINE.planes[1], radius_mm=125.0))
    stand.ledger.add_machine(MachineDraft("F-204", planes=planes), "ana")
    assert len(stand.history.weights(stand.mount(carry_over=True).id)) == 1


def test_the_same_numbering_seen_from_the_other_end_is_no_change(stand: Stand) -> None:
    stand.mount(fitted=(PieceDraft(1, 2.0, 3),))
    seen = replace(MACHINE.planes[0], numbering=Sense("counterclockwise", "free"))
    stand.ledger.add_machine(MachineDraft("F-204", planes=(seen,)), "ana")
    stand.mount(carry_over=True)


# --- the newest revision's tolerance -----------------------------------------------------------------


def test_the_story_holds_the_machine_as_it_is_known_now(stand: Stand) -> None:
    """40 kg at 1500 r/min and G 6.3: 9549 G m/n = 1604.2 g.mm (ISO 21940-11's own form, from memory)."""
    stand.mount(marks=at(30.0))
    _trial(stand)
    stand.ledger.add_machine(MachineDraft("F-204", grade_mm_s=6.3), "ana")
    told = correction_for(stand.history.job_story("0142"), planes=(1,))
    assert told.permissible_gmm == pytest.approx(1604.2, rel=1e-4)
