"""Angles: holes, pieces, stand angles and moved marks, each seen from either end.

Expected values are hand counts on a sketch; the conventions are METHODS sections 0 and 6.1 [D].
"""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from config.errors import Refusal
from store.balance.angles import (
    difference_deg,
    frame_turn_deg,
    hole_angle_deg,
    nearest_hole,
    piece_unbalance,
    polar,
    stationary_with_rotation_deg,
)
from store.records import MarkPosition, PieceDraft, Sense, WeightPlane

ENDS = ("drive", "free")
TURNS = ("clockwise", "counterclockwise")


def other_view(sense: Sense) -> Sense:
    """The same turning seen from the other end."""
    turn = TURNS[1 - TURNS.index(sense.turn)]
    return Sense(turn, ENDS[1 - ENDS.index(sense.seen_from)])


senses = st.builds(Sense, st.sampled_from(TURNS), st.sampled_from(ENDS))


@pytest.mark.parametrize(
    ("turn", "mark", "hole", "expected"),
    [
        # rotation clockwise from drive; 24 holes, 15 deg apart
        ("counterclockwise", 0.0, 1, 0.0),
        ("counterclockwise", 0.0, 16, 225.0),  # truth.json: T1 at 225 deg is hole 16
        ("counterclockwise", 0.0, 7, 90.0),
        ("counterclockwise", 30.0, 7, 60.0),  # mark 30 deg on, so the hole is 60 further
        ("clockwise", 0.0, 7, 270.0),  # numbered with rotation: 90 with is 270 against
        ("clockwise", 30.0, 7, 300.0),
        ("clockwise", 30.0, 1, 30.0),
    ],
)
def test_hole_angles_by_hand(kit, book, turn, mark, hole, expected):
    mount = book.mount(mark_deg=mark)
    plane = replace(mount.machine.model.planes[0], numbering=Sense(turn, "drive"))
    assert hole_angle_deg(plane, mount, hole, ENDS) == pytest.approx(expected)


def test_a_hole_that_does_not_exist_is_refused(book):
    mount = book.mount()
    with pytest.raises(Refusal, match="holes 1 to 24; there is no hole 25"):
        hole_angle_deg(mount.machine.model.planes[0], mount, 25, ENDS)


def test_an_unknown_end_is_refused(book):
    mount = book.mount(rotation=Sense("clockwise", "left"))
    with pytest.raises(Refusal, match="'left' is not an end"):
        hole_angle_deg(mount.machine.model.planes[0], mount, 1, ENDS)


def test_a_mark_that_was_not_typed_is_refused(book):
    mount = book.mount(marks=())
    with pytest.raises(Refusal, match="rotor mark of F-204"):
        hole_angle_deg(mount.machine.model.planes[0], mount, 1, ENDS)


@pytest.mark.parametrize(
    ("angle", "seen", "rotation", "expected"),
    [
        # METHODS 6.1 needs stationary angles with rotation; stand angles are clockwise seen from `seen`
        (90.0, "drive", Sense("clockwise", "drive"), 90.0),
        (90.0, "drive", Sense("counterclockwise", "drive"), 270.0),
        (90.0, "drive", Sense("counterclockwise", "free"), 90.0),
        (90.0, "free", Sense("clockwise", "drive"), 270.0),
    ],
)
def test_stationary_angles(angle, seen, rotation, expected):
    assert stationary_with_rotation_deg(angle, seen, rotation, ENDS) == pytest.approx(expected)


def mount_with(kit, rotation: Sense, mark: float, plane: WeightPlane):
    book = kit.Book(machine=kit.machine(model=replace(kit.model(), planes=(plane,))))
    return book.mount(mark_deg=mark, rotation=rotation)


@given(senses, senses, st.floats(0, 360), st.integers(1, 24))
def test_the_end_from_which_things_are_seen_changes_nothing(kit, rotation, numbering, mark, hole):
    plane = WeightPlane(1, 140.0, 24, numbering)
    a = hole_angle_deg(plane, mount_with(kit, rotation, mark, plane), hole, ENDS)
    turned = replace(plane, numbering=other_view(numbering))
    b = hole_angle_deg(turned, mount_with(kit, other_view(rotation), mark, turned), hole, ENDS)
    c = hole_angle_deg(plane, mount_with(kit, rotation, mark, plane), hole, ENDS[::-1])
    assert difference_deg(a, b) == pytest.approx(0.0, abs=1e-9)
    assert difference_deg(a, c) == pytest.approx(0.0, abs=1e-9)


@given(senses, senses, st.floats(0, 360), st.integers(1, 24))
def test_the_nearest_hole_to_a_hole_is_itself(kit, rotation, numbering, mark, hole):
    plane = WeightPlane(1, 140.0, 24, numbering)
    mount = mount_with(kit, rotation, mark, plane)
    assert nearest_hole(plane, mount, hole_angle_deg(plane, mount, hole, ENDS), ENDS) == hole


def test_a_moved_mark_turns_every_angle_by_the_same(kit):
    book = kit.Book()
    then, now = book.mount(mark_deg=0.0), book.mount(mark_deg=40.0)
    # hole 7 (90 deg against rotation from hole 1) is at 90 from the old mark and at 50 from the new one
    assert frame_turn_deg(then, now, ENDS) == pytest.approx(-40.0)
    assert hole_angle_deg(now.machine.model.planes[0], now, 7, ENDS) == pytest.approx(50.0)


def test_untyped_marks_count_as_one_only_where_they_are_equal(kit):
    book = kit.Book()
    typed, same, moved = book.mount(10.0), book.mount(10.0, how=None), book.mount(11.0, how=None)
    unknown = book.mount(marks=(), how=None)
    assert frame_turn_deg(typed, same, ENDS) == 0.0
    assert frame_turn_deg(typed, moved, ENDS) is None
    assert frame_turn_deg(unknown, same, ENDS) is None
    assert frame_turn_deg(unknown, unknown, ENDS) == 0.0


def test_planes_that_disagree_about_the_mark_are_not_believed(kit):
    book = kit.Book()
    then, now = book.mount(0.0), book.mount(marks=(MarkPosition(1, 40.0), MarkPosition(2, 45.0)))
    assert frame_turn_deg(then, now, ENDS) is None


def test_a_piece_is_mass_times_radius_and_a_drilled_one_counts_as_minus(book):
    mount = book.mount()
    event = book.fit(1, 1.5, hole=16)  # 1.5 g at 140 mm: truth.json, 210 g.mm at 225 deg
    assert piece_unbalance(event, mount, ENDS) == pytest.approx(polar(210.0, 225.0))
    assert piece_unbalance(replace(event, act="drilled"), mount, ENDS) == pytest.approx(polar(210.0, 45.0))
    assert piece_unbalance(PieceDraft(1, 1.5, angle_deg=225.0), mount, ENDS) == pytest.approx(
        polar(210.0, 225.0)
    )
    with pytest.raises(Refusal, match="neither a hole nor an angle"):
        piece_unbalance(PieceDraft(1, 1.5), mount, ENDS)
    with pytest.raises(Refusal, match="no plane 3"):
        piece_unbalance(PieceDraft(3, 1.5, hole=1), mount, ENDS)
