"""XY pairs: the table of METHODS 6.3 (its Y stands 90 deg from X in the direction of rotation), and orbits
drawn point by point from the two probes' own signals."""

from __future__ import annotations

import math
from dataclasses import replace
from uuid import UUID

import numpy as np
import pytest

from store.balance.orbit import Orbit, orbits, pairs_of
from store.records import ChannelSetUp, PulseSetUp, Sense, SetUp, Vector

ENDS = ("drive", "free")
CLOCKWISE, AGAINST = Sense("clockwise", "drive"), Sense("counterclockwise", "drive")


def at(amplitude: float, degrees: float) -> complex:
    return complex(amplitude * np.exp(1j * np.radians(degrees)))


def stand(first_deg: float, second_deg: float, *, pair: str | None = "bearing 1") -> SetUp:
    channels = tuple(
        ChannelSetUp(f"probe {i}", "displacement", "um", str(i), 7.874e-3, 1, deg % 360, pair=pair)
        for i, deg in ((1, first_deg), (2, second_deg))
    )
    pulse = PulseSetUp("once-per-rev", "0", "falling", None, 0.0)
    return SetUp(UUID(int=1), 1, "bay-1", ENDS, "drive", "top", channels, pulse, 12800.0, "replay")


def vectors(first: complex, second: complex, sd: float = 0.0) -> list[Vector]:
    return [
        Vector(f"probe {i}", 1, v, sd**2, sd**2, 0.0, 2.448 * sd, "um") for i, v in ((1, first), (2, second))
    ]


def one(
    first: complex,
    second: complex,
    set_up: SetUp | None = None,
    rotation: Sense | None = CLOCKWISE,
    sd: float = 0.0,
) -> Orbit:
    (found,) = orbits(vectors(first, second, sd), set_up or stand(0, 90), rotation)
    return found


TABLE = [
    # Vx, Vy, |F|, |B|, major, minor, tilt: METHODS 6.3
    ((3, 20), (3, 110), 3, 0, 3, 3, None),
    ((3, 20), (3, 290), 0, 3, 3, 3, None),
    ((4, 30), (2.5, 150), 3.145254682680, 1.110122957639, 4.255377640320, 2.035131725041, 157.1373878505),
    ((3, 0), (0, 0), 1.5, 1.5, 3, 0, 0),
    ((2, 50), (1, 50), 1.118033988750, 1.118033988750, 2.236067977500, 0, 26.5650511771),
]


@pytest.mark.parametrize(("x", "y", "forward", "backward", "major", "minor", "tilt"), TABLE)
def test_the_table_of_methods(
    x: tuple[float, float],
    y: tuple[float, float],
    forward: float,
    backward: float,
    major: float,
    minor: float,
    tilt: float | None,
) -> None:
    found = one(at(*x), at(*y))
    sizes = (found.forward_pk, found.backward_pk, found.major_pk, found.minor_pk)
    assert sizes == pytest.approx((forward, backward, major, minor), abs=2e-12)
    if tilt is None:
        assert found.tilt_deg is None
    else:
        assert found.tilt_deg is not None
        assert abs((found.tilt_deg - tilt + 90) % 180 - 90) < 1e-9
    assert found.channels == ("probe 1", "probe 2")
    sense = {0: None, 1: "forward", -1: "backward"}[int(np.sign(round(forward - backward, 9)))]
    assert found.precession == sense


@pytest.mark.parametrize(("x", "y", "forward", "backward", "major", "minor", "tilt"), TABLE)
def test_rotation_from_y_to_x_swaps_forward_and_backward(
    x: tuple[float, float],
    y: tuple[float, float],
    forward: float,
    backward: float,
    major: float,
    minor: float,
    tilt: float | None,
) -> None:
    found = one(at(*x), at(*y), rotation=AGAINST)
    sizes = (found.forward_pk, found.backward_pk, found.major_pk, found.minor_pk)
    assert sizes == pytest.approx((backward, forward, major, minor), abs=2e-12)
    assert found.channels == ("probe 2", "probe 1")  # the angles decide which is X
    if tilt is not None and found.tilt_deg is not None:  # the ellipse itself stays where it is
        assert abs((found.tilt_deg - tilt + 90) % 180 - 90) < 1e-9


def test_which_probe_is_x_does_not_hang_on_their_order() -> None:
    first = one(at(4, 30), at(2.5, 150))
    swapped = one(at(2.5, 150), at(4, 30), stand(90, 0))
    assert swapped.channels == ("probe 2", "probe 1")
    assert replace(swapped, channels=first.channels) == first


def test_seen_from_the_other_end_a_rotation_is_the_other_one() -> None:
    same = one(at(4, 30), at(2.5, 150), rotation=Sense("counterclockwise", "free"))
    assert same.precession == "forward"
    assert same.whirl == "clockwise"
    assert one(at(4, 30), at(2.5, 150), rotation=Sense("clockwise", "free")).precession == "backward"


def test_with_nothing_mounted_only_the_sense_on_the_stand_is_told() -> None:
    found = one(at(4, 30), at(2.5, 150), rotation=None)
    assert (found.whirl, found.precession) == ("clockwise", None)
    assert one(at(4, 30), at(2.5, 270), rotation=None).whirl == "counterclockwise"


def path(
    set_up: SetUp, first: complex, second: complex
) -> tuple[np.ndarray[tuple[int], np.dtype[np.float64]], ...]:
    """Stand angle and radius of the shaft's centre through one turn, from what the probes read:
    d_i = x cos(a_i) + y sin(a_i) with stand angles a_i, solved for x and y at each moment."""
    t = np.linspace(0, 2 * np.pi, 3601)
    read = np.array([abs(v) * np.cos(t - np.angle(v)) for v in (first, second)])
    angles = np.radians([c.angle_deg for c in set_up.channels])
    x, y = np.linalg.solve(np.stack([np.cos(angles), np.sin(angles)], axis=1), read)
    return np.degrees(np.arctan2(y, x)), np.hypot(x, y)


@pytest.mark.parametrize("rotation", [CLOCKWISE, AGAINST])
@pytest.mark.parametrize(("first_deg", "second_deg"), [(45, -45), (-45, 45), (10, 105), (200, 115)])
@pytest.mark.parametrize(("first", "second"), [((4, 30), (2.5, 150)), ((1, 200), (5, 350))])
def test_the_axes_are_those_of_the_path_itself(
    rotation: Sense,
    first_deg: float,
    second_deg: float,
    first: tuple[float, float],
    second: tuple[float, float],
) -> None:
    set_up = stand(first_deg, second_deg)
    degrees, radius = path(set_up, at(*first), at(*second))
    found = one(at(*first), at(*second), set_up, rotation)
    assert found.major_pk == pytest.approx(radius.max(), rel=1e-5)
    assert found.minor_pk == pytest.approx(radius.min(), abs=2e-3)
    assert found.tilt_deg is not None
    assert abs((found.tilt_deg - degrees[radius.argmax()] + 90) % 180 - 90) < 0.2
    goes = float(np.unwrap(np.radians(degrees))[-1])  # stand angles grow clockwise
    start = float(np.unwrap(np.radians(degrees))[0])
    assert found.whirl == ("clockwise" if goes > start else "counterclockwise")


def test_the_circles_point_where_the_shaft_is_at_the_edge() -> None:
    set_up = stand(45, 315)
    found = one(at(4, 30), at(2.5, 150), set_up, AGAINST)
    circles = at(found.forward_pk, found.forward_deg) + at(found.backward_pk, found.backward_deg)
    degrees, radius = path(set_up, at(4, 30), at(2.5, 150))
    assert circles == pytest.approx(at(float(radius[0]), float(degrees[0])), abs=1e-9)


def test_the_stated_spread_is_that_of_many_draws() -> None:
    rng = np.random.default_rng(63)
    first, second, sd = at(4, 30), at(2.5, 150), 0.05
    noise = rng.normal(0, sd, (4, 20_000))
    x = first + noise[0] + 1j * noise[1]
    y = second + noise[2] + 1j * noise[3]
    f, b = (np.conj(x) + 1j * np.conj(y)) / 2, (x + 1j * y) / 2
    found = one(first, second, sd=sd)
    assert found.major_sd == pytest.approx(float((abs(f) + abs(b)).std()), rel=0.03)
    assert found.forward_sd == pytest.approx(float(f.real.std()), rel=0.03)
    tilt = np.degrees(np.angle(f * b / (f * b).mean()) / 2)
    assert found.tilt_sd_deg == pytest.approx(float(tilt.std()), rel=0.03)


def test_a_sense_is_said_of_a_straight_line_in_one_of_twenty_at_most() -> None:
    rng = np.random.default_rng(64)
    said = 0
    for _ in range(1000):
        n = rng.normal(0, 0.05, 4)
        said += one(at(3, 40) + complex(*n[:2]), at(2, 40) + complex(*n[2:]), sd=0.05).whirl is not None
    assert said <= 70  # 50 expected, sd 7


def test_noise_alone_has_no_sense_and_no_tilt() -> None:
    found = one(at(0.05, 10), at(0.04, 100), sd=0.05)
    assert (found.whirl, found.tilt_deg, found.tilt_sd_deg) == (None, None, None)


def test_what_is_no_pair_has_no_orbit() -> None:
    assert orbits(vectors(1, 1j), stand(0, 90, pair=None), CLOCKWISE) == ()
    alone = stand(0, 90)
    alone = replace(alone, channels=(alone.channels[0], replace(alone.channels[1], pair="other")))
    assert pairs_of(alone) == {}
    assert orbits(vectors(1, 1j)[:1], stand(0, 90), CLOCKWISE) == ()


def test_orders_are_told_apart() -> None:
    both = [*vectors(1, 1j), *(replace(v, order=2) for v in vectors(1, -1j))]
    first, second = orbits(both, stand(0, 90), CLOCKWISE)
    assert (first.order, first.precession) == (1, "forward")
    assert (second.order, second.precession) == (2, "backward")
    assert math.isclose(second.major_pk, 1.0)
