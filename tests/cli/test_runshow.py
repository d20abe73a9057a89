"""What run show prints of a reading, in lines that fit 80 columns, with two channels and with eight.

Figures by hand: 0-peak times 2 is pp, 1.96 standard deviations hold 95 %; the orbit is METHODS 6.3's.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import replace
from datetime import UTC
from uuid import UUID

import pytest

from cli.marked import words
from cli.output import wrapped
from cli.runshow import reading_lines
from cli.status import status_lines
from store import asjson
from store.balance.orbit import orbits
from store.records import ChannelSetUp, Label, Level, PulseSetUp, Reading, Sense, SetUp, Vector

UNITS = {"displacement": "um", "velocity": "mm/s", "acceleration": "m/s2"}


def at(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


def set_up(*channels: ChannelSetUp) -> SetUp:
    pulse = PulseSetUp("once-per-rev", "0", "falling", None, 0.0)
    return SetUp(
        UUID(int=1), 1, "bay-1", ("drive", "free"), "drive", "top", channels, pulse, 12800.0, "replay"
    )


def channel(name: str, angle_deg: float, kind: str = "displacement", pair: str | None = None) -> ChannelSetUp:
    return ChannelSetUp(name, kind, UNITS[kind], name, 7.874e-3, 1, angle_deg, pair=pair)  # type: ignore[arg-type]


def vector(channel: ChannelSetUp, order: int, value: complex, sd: float = 0.01) -> Vector:
    return Vector(channel.name, order, value, sd**2, sd**2, 0.0, 2.448 * sd, channel.unit)


def reading(
    vectors: list[Vector], levels: list[Level], flags: tuple[str, ...] = (), **more: object
) -> Reading:
    made = Reading(
        UUID(int=2), UUID(int=3), 1, 0, 3.0, 25.0, 75, {}, flags, tuple(vectors), Label.O, "ana",
        tuple(levels), {"missed": 0, "doubles": 0},
    )  # fmt: skip
    return replace(made, **more)


def printed(one: Reading, derived: tuple[str, ...] = (), of: SetUp | None = None,
            rotation: Sense | None = None, show: dict[str, str] | None = None) -> list[str]:  # fmt: skip
    seen = orbits(one.vectors, of, rotation) if of else ()
    told = asjson.reading_json(one, derived, seen)
    lines = [t for line in reading_lines(told, show or {}, "top") for t in wrapped(line).splitlines()]
    assert [t for t in lines if len(t) > 80] == []
    return lines


def rows(lines: list[str], begins: str) -> list[list[str]]:
    return [t.split() for t in lines if t.startswith(begins)]


ONE, TWO = channel("probe 1", 0, pair="bearing 1"), channel("probe 2", 90, pair="bearing 1")
LEVELS = [Level("probe 1", -9.8, 0.5, 10.0, 3.0, "um"), Level("probe 2", -10.25, 0.25, 8.0, 2.0, "um")]
PAIR = [
    vector(ONE, 1, at(4, 30)), vector(ONE, 2, at(0.5, 90)), vector(ONE, 3, at(0.02, 90)),
    vector(TWO, 1, at(2.5, 150)), vector(TWO, 2, at(0.25, 10)),
]  # fmt: skip


def test_two_channels_that_are_a_pair() -> None:
    lines = printed(reading(PAIR, LEVELS), of=set_up(ONE, TWO), rotation=Sense("clockwise", "drive"))
    assert lines[0] == "reading 1 O: 1500.0 r/min, 75 revolutions in 3.0 s"
    first, second, levels = rows(lines, "probe 1")
    # 1.96 x 0.01 x 2 = 0.0392 um pp; 1.96 x 0.01 / 4 rad = 0.281 deg
    assert first == ["probe", "1", "8.000", "0.0392", "um", "pp", "30.0", "0.3"]
    # 2X: 1.96 x 0.01 / 0.5 rad = 2.246 deg; 3X of 0.02 is below its floor of 0.0245: no lag
    assert second == ["probe", "1", "1.000", "0.0392", "90.0", "2.2", "0.040", "0.0392", "-", "-"]
    assert levels == ["probe", "1", "10.000", "um", "pp", "0.500", "um", "rms", "-9.80"]
    assert rows(lines, "probe 2")[1][-4:] == ["-", "-", "-", "-"]  # no 3X of it
    # METHODS 6.3: |F| 3.145254682680, |B| 1.110122957639, major 4.255377640320, minor 2.035131725041
    (orbit,) = [r for r in rows(lines, "bearing 1") if r[-1] == "pp"]
    assert orbit[2] == "8.511"
    assert orbit[4:] == ["157.1", "4.070", "6.291", "2.220", "um", "pp"]
    assert "bearing 1: whirls forward, clockwise seen from drive" in lines
    assert "tilt: deg clockwise from top, seen from drive" in lines


def test_a_backward_whirl_and_one_of_no_job() -> None:
    of = set_up(ONE, TWO)
    against = printed(reading(PAIR, []), of=of, rotation=Sense("counterclockwise", "drive"))
    assert "bearing 1: whirls BACKWARD, clockwise seen from drive" in against
    lines = printed(reading(PAIR, []), of=of)
    assert "bearing 1: whirls clockwise seen from drive; the rotation is not known" in lines
    assert "forward: clockwise seen from drive, for nothing was mounted" in lines
    line = [vector(ONE, 1, at(4, 30)), vector(TWO, 1, at(2.5, 30))]
    told = printed(reading(line, []), of=of, rotation=Sense("clockwise", "drive"))
    assert "bearing 1: which way it whirls is not certain" in told


def test_eight_channels_of_every_kind_with_long_names_fit_80_columns() -> None:
    names = ["probe 1", "probe 2", "gearbox pinion, coupling side, vertical, renewed", *"DEFGH"]
    kinds = ["displacement"] * 4 + ["velocity"] * 2 + ["acceleration"] * 2
    eight = [
        channel(n, 90.0 * (i % 2), k, f"a pair with a long name {i // 2}" if i < 4 else None)
        for i, (n, k) in enumerate(zip(names, kinds, strict=True))
    ]
    vectors = [
        vector(c, order, at(1234.5678 / order, 30 * order + 80 * (i % 2)), 20.0 * order**3)
        for i, c in enumerate(eight)
        for order in (1, 2, 3, 4, 5)
    ]
    levels = [Level(c.name, -10.123, 12.3456, 2500.0, 900.0, c.unit) for c in eight]
    many = ("clipped", "weak_1x", "near_mains", "near_neighbour", "mostly_runout", "backward_precession")
    flags = tuple(f"{code}:{c.name}" for code in many for c in eight)
    lines = printed(
        reading(vectors, levels, ("missed_pulses", *flags)),
        of=set_up(*eight),
        rotation=Sense("clockwise", "drive"),
        show={"probe 1": "mil pp", "F": "ips pk", "G": "g rms"},
    )
    assert len(rows(lines, "gearbox pini..")) == 4  # 1X, 2X and 3X, 4X and 5X, levels
    assert "+" in rows(lines, "gearbox pini..")[0][-1]  # more flags than fit are counted
    said = " ".join(" ".join(lines).split())
    assert said.count("flag: each of probe 1, probe 2, gearbox pinion") == len(many)


def test_flags_stand_in_the_row_of_their_channel_and_below_in_a_sentence() -> None:
    one = reading(PAIR, LEVELS, ("clipped:probe 2", "missed_pulses"))
    lines = printed(one, ("mostly_runout:probe 1",))
    assert rows(lines, "probe 1")[0][-2:] == ["runout,", "missed"]
    assert rows(lines, "probe 2")[0][-2:] == ["clipped,", "missed"]
    said = " ".join(" ".join(lines).split())
    assert "flag: probe 1: its 1X is mostly runout" in said
    assert "flag: probe 2 is clipped" in said


def test_what_was_repaired_and_found_on_the_way() -> None:
    figures = {
        "missed": 2, "doubles": 1, "edge_deg": 0.125, "speed_sd_hz": 0.0125,
        "lines": [{"channel": "probe 1", "order": 0.43, "amplitude": 3.1}],
    }  # fmt: skip
    lines = printed(reading(PAIR, LEVELS, figures=figures))
    assert "once-per-rev: 2 pulses missed, 1 came twice; repaired" in lines
    assert "once-per-rev edge: 0.1 deg of each lag's +- stays however long it averages" in lines
    assert "speed: standard deviation 0.050 %" in lines  # 0.0125 of 25 Hz
    assert "probe 1: vibration at 0.43X, 6.200 um pp, which is no order" in lines


def test_a_reading_of_an_older_store_tells_what_it_has() -> None:
    lines = printed(reading(PAIR[:1], [], figures={}))
    assert lines[1].split() == ["channel", "1X", "+-", "unit", "lag", "deg", "+-", "flags"]
    assert len(lines) == 5


@pytest.mark.parametrize(
    ("flags", "room", "told"),
    [
        ([], 20, ""),
        (["missed_pulses", "clipped:a"], 20, "clipped, missed"),
        (["missed_pulses", "clipped:a", "weak_1x:a"], 20, "clipped, weak +1"),
        (["clipped:a", "weak_1x:a"], 5, "clipped +1"),
        (["a_newer_one:a"], 20, "a_newer_one"),
    ],
)
def test_as_many_words_as_fit(flags: list[str], room: int, told: str) -> None:
    assert words(flags, room) == told


def test_json_has_it_all_in_base_units() -> None:
    of = set_up(ONE, TWO)
    told = asjson.reading_json(
        reading(PAIR, LEVELS, ("clipped:probe 2",)),
        ("mostly_runout:probe 1",),
        orbits(PAIR, of, Sense("clockwise", "drive")),
    )
    assert (told["flags"], told["derived_flags"]) == (["clipped:probe 2"], ["mostly_runout:probe 1"])
    first, _, third = told["vectors"][:3]
    assert first["flags"] == ["mostly_runout:probe 1"]
    assert first["plus_minus_95_pk"] == pytest.approx(1.96 * 0.01, rel=1e-4)
    assert first["lag_plus_minus_95_deg"] == pytest.approx(math.degrees(1.96 * 0.01 / 4), rel=1e-4)
    assert (third["lag_deg"], third["lag_plus_minus_95_deg"]) == (None, None)
    assert told["levels"][1] == {
        "channel": "probe 2", "unit": "um", "overall_pp": 8.0, "residual_rms": 0.25, "ac_rms": 2.0,
        "gap_v": -10.25,
    }  # fmt: skip
    orbit = told["orbits"][0]
    assert (orbit["x"], orbit["y"], orbit["precession"]) == ("probe 1", "probe 2", "forward")
    assert orbit["major_axis_pk"] == pytest.approx(4.255377640320)
    assert [o["order"] for o in told["orbits"]] == [1, 2]


def test_an_amplitudes_spread_is_along_the_vector_and_a_lags_across_it() -> None:
    """Variances 0.04 and 0.01 um^2, no covariance: a vector along the first has 1.96 x 0.2 um of amplitude
    and asin(1.96 x 0.1 / 5) of lag; turned by 90 deg it is the other way round."""
    along, across = asjson.plus_minus(Vector("a", 1, 5 + 0j, 0.04, 0.01, 0.0, 0.4, "um"))
    assert (along, across) == (pytest.approx(0.392, rel=1e-4), pytest.approx(2.2465, rel=1e-4))
    along, across = asjson.plus_minus(Vector("a", 1, 5j, 0.04, 0.01, 0.0, 0.4, "um"))
    assert (along, across) == (pytest.approx(0.196, rel=1e-4), pytest.approx(4.4963, rel=1e-4))


# --- status --------------------------------------------------------------------------------------------


def test_status_marks_its_vectors_and_says_why() -> None:
    vectors = [
        {"channel": "probe 1", "unit": "um", "amplitude_pk": 5.0, "lag_deg": 30.0},
        {"channel": "probe 2", "unit": "um", "amplitude_pk": 0.01, "lag_deg": None},
    ]
    live = {
        "state": "turning", "speed_rpm": 1500.0, "vectors": vectors, "flags": ["clipped:probe 1"],
        "derived_flags": ["below_floor:probe 2", "mostly_runout:probe 1"],
    }  # fmt: skip
    *_, table, first, second, third = status_lines({"live": live}, {}, UTC)
    assert table.splitlines()[2].split() == ["probe", "1", "10.000", "um", "pp", "30.0", "clipped,", "runout"]
    assert table.splitlines()[3].split() == ["probe", "2", "0.020", "um", "pp", "below", "noise", "floor"]
    assert first.startswith("flag: probe 1 is clipped")
    assert second.startswith("flag: probe 2: its 1X is below its own 95 % noise floor")
    assert third.startswith("flag: probe 1: its 1X is mostly runout")


def test_status_says_that_the_pulses_are_lost_while_it_vibrates() -> None:
    live = {"state": "once-per-rev lost", "vectors": [], "flags": ["once_per_rev_lost"]}
    lines = status_lines({"live": live}, {}, UTC)
    assert lines[-1] == "flag: The once-per-rev signal is lost while the probes still vibrate."
