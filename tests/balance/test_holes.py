"""Splitting and combining against METHODS section 3 [D, textbook vector algebra]."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from store.balance.angles import angle_deg, polar
from store.balance.holes import combine, place, rounded, rounded_down, split

ENDS = ("drive", "free")


@pytest.mark.parametrize(
    ("amount", "at", "first", "second", "parts"),
    [
        (10, 40, 30, 60, (6.8404028665134, 3.4729635533386)),
        (13.7, 77, 60, 90, (6.1636588890219, 8.0109847094030)),
        (10, 350, 340, 10, (6.8404028665134, 3.4729635533386)),
        (10, 75, 30, 60, (-5.17638090205, 14.1421356237)),
    ],
)
def test_split(amount, at, first, second, parts):
    assert split(amount, at, first, second) == pytest.approx(parts, rel=1e-11)


def test_split_with_two_radii():  # METHODS 3: radii 50 and 62.5 mm, U 500 g.mm at 40
    u1, u2 = split(500, 40, 30, 60)
    assert u1 / 50 == pytest.approx(6.84040286651, rel=1e-11)
    assert u2 / 62.5 == pytest.approx(2.77837084267, rel=1e-11)


def test_combine():
    total = combine([polar(5, 10), polar(3, 100), polar(7, 200)])
    assert abs(total) == pytest.approx(2.6019672993976, rel=1e-12)
    assert angle_deg(total) == pytest.approx(146.70042877903, rel=1e-12)
    two = combine([polar(4, 0), polar(4, 30)])
    assert (abs(two), angle_deg(two)) == pytest.approx((7.7274066103125, 15.0))


def test_what_to_add_to_what_is_fitted():  # METHODS 3: wanted 12@40 with 5@10 fitted
    add = polar(12, 40) - polar(5, 10)
    assert abs(add) == pytest.approx(8.0670286689628, rel=1e-12)
    assert angle_deg(add) == pytest.approx(58.053411920084, rel=1e-12)


@given(st.floats(0.5, 50), st.floats(1, 59), st.floats(0, 360))
def test_split_and_combine_round_trip(amount, at, start):
    m1, m2 = split(amount, start + at, start, start + 60)
    assert combine([polar(m1, start), polar(m2, start + 60)]) == pytest.approx(polar(amount, start + at))
    assert m1 + m2 <= amount * 1.15470053838 * (1 + 1e-9)  # METHODS 3: sum over m at a 60 deg gap


def plane_and_mount(kit, holes=12, mark=0.0, numbering=None):
    model = kit.model(planes=1)
    plane = replace(model.planes[0], holes=holes, radius_mm=100.0, numbering=numbering or kit.AGAINST)
    book = kit.Book(machine=kit.machine(model=replace(model, planes=(plane,))))
    return plane, book.mount(mark_deg=mark)


def test_least_total_mass_is_the_two_neighbours(kit):  # METHODS 3: 13.7@77, 12 holes -> 14.174643598425 g
    plane, mount = plane_and_mount(kit)
    pieces = place(polar(1370.0, 77), plane, mount, ENDS, step_g=1e-6)
    assert sum(p.mass_g for p in pieces) == pytest.approx(14.174643598425, abs=2e-6)
    assert sorted(p.hole for p in pieces) == [3, 4]  # at 60 and 90 deg


def test_the_recordings_pieces(kit, truth):
    """truth.json fits, against 300 g.mm at 62 and 215 at 247, what stands under fitted_in_check."""
    plane, mount = plane_and_mount(kit, holes=24)
    plane = replace(plane, radius_mm=140.0)
    for unbalance in truth["unbalance_gmm"]:
        pieces = place(-polar(unbalance["gmm"], unbalance["deg"]), plane, mount, ENDS, 0.1)
        expected = {
            p["hole"]: p["mass_g"] for p in truth["fitted_in_check"] if p["plane"] == unbalance["plane"]
        }
        assert {p.hole: p.mass_g for p in pieces} == expected


def test_on_a_hole_one_piece_and_zero_pieces_are_dropped(kit):
    plane, mount = plane_and_mount(kit)
    assert [(p.hole, p.mass_g) for p in place(polar(500, 90), plane, mount, ENDS, 0.1)] == [(4, 5.0)]
    assert [(p.hole, p.mass_g) for p in place(polar(500, 90.1), plane, mount, ENDS, 0.1)] == [(4, 5.0)]
    assert place(polar(2, 45), plane, mount, ENDS, 0.1) == ()


def test_no_holes_any_angle(kit):
    plane, mount = plane_and_mount(kit, holes=0)
    (piece,) = place(polar(123.4, 77.7), plane, mount, ENDS, 0.1)
    assert (piece.hole, piece.mass_g, piece.angle_deg) == (None, 1.2, pytest.approx(77.7))


def test_two_holes_take_the_part_that_acts(
    kit,
):  # METHODS 3: nearest hole, free mass 13.7 cos 13 = 13.3488698876
    plane, mount = plane_and_mount(kit, holes=2)
    (piece,) = place(polar(1370, 13), plane, mount, ENDS, step_g=1e-6)
    assert (piece.hole, piece.mass_g) == (1, pytest.approx(13.3488698876, abs=1e-6))


@given(st.floats(10, 5000), st.floats(0, 360), st.integers(3, 36), st.floats(0, 360), st.booleans())
def test_pieces_add_up_wherever_the_mark_is(kit, gmm, deg, holes, mark, against):
    numbering = kit.AGAINST if against else kit.CLOCKWISE
    plane, mount = plane_and_mount(kit, holes, mark, numbering)
    pieces = place(polar(gmm, deg), plane, mount, ENDS, step_g=1e-6)
    assert sum(p.unbalance for p in pieces) == pytest.approx(polar(gmm, deg), rel=1e-6, abs=1e-3)
    assert len(pieces) <= 2


def test_rounding():
    assert rounded(1.84, 0.1) == 1.8
    assert rounded(0.26, 0.25) == 0.25
    assert rounded_down(1.89, 0.1) == 1.8
    assert rounded_down(0.3, 0.1) == 0.3  # not 0.2 by a binary hair
