"""Flags that the job's records add to a reading's own: each raised from records, and where it must not come.

The numbers are made by hand: |V - V_sr| against a third of |V|, and METHODS 6.3's backward circle.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import replace
from typing import Any
from uuid import UUID

import pytest

from daq.signal import health
from store import standing_flags
from store.records import (
    ChannelSetUp,
    Job,
    JobStory,
    Label,
    Machine,
    Model,
    Mount,
    Origin,
    PulseSetUp,
    Reading,
    Run,
    RunState,
    Sense,
    SetUp,
    Vector,
)
from store.standing_flags import all_flags, derived_flags, flags_by_reading, orbits_of


def at(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


def set_up(**changes: Any) -> SetUp:
    channels = (
        ChannelSetUp("probe 1", "displacement", "um", "1", 7.874e-3, 1, 0.0),
        ChannelSetUp("probe 2", "displacement", "um", "2", 7.874e-3, 1, 90.0),
    )
    pulse = PulseSetUp("once-per-rev", "0", "falling", None, 0.0)
    made = SetUp(
        UUID(int=3), 1, "bay-1", ("drive", "free"), "drive", "top", channels, pulse, 12800.0, "replay"
    )
    return replace(made, **changes)


def paired() -> SetUp:
    made = set_up()
    return replace(made, channels=tuple(replace(c, pair="bearing 1") for c in made.channels))


def mount(turn: str = "clockwise") -> Mount:
    model = Model(UUID(int=1), "KR-22", 1, (), None)
    machine = Machine(UUID(int=2), "F-204", 1, model, 40.0, 25.0, 6.3)
    rotation = Sense(turn, "drive")  # type: ignore[arg-type]
    return Mount(
        UUID(int=4), UUID(int=5), machine, rotation, (), "measured", 3.0, "pedestals", "solo", 1_000_000
    )


def run(
    n: int, label: Label | None, *values: complex, sd: float = 0.0, floor: float = 0.0, **changes: Any
) -> Run:
    vectors = tuple(
        Vector(f"probe {i + 1}", 1, v, sd**2, sd**2, 0.0, floor, "um") for i, v in enumerate(values)
    )
    speed_hz = 4.0 if label is Label.SLOW_ROLL else 25.0
    reading = Reading(
        UUID(int=100 + n), UUID(int=50 + n), 1, n * 10**6, 8.0, speed_hz, 200, {}, (), vectors, label
    )
    made = Run(
        UUID(int=50 + n), "0142", n, None, UUID(int=4), UUID(int=3), Origin.LIVE, "ana", {}, "1",
        n * 10**6, None, RunState.COMPLETE, "", None, (reading,),
    )  # fmt: skip
    return replace(made, **changes)


def story(*runs: Run, of: SetUp | None = None, at_mount: Mount | None = None) -> JobStory:
    job = Job(UUID(int=5), "0142", "F-204", (25.0,), 0)
    return JobStory(job, (at_mount or mount(),), runs, (), {UUID(int=3): of or set_up()})


def flags(told: JobStory, index: int = -1) -> tuple[str, ...]:
    one = told.runs[index]
    return derived_flags(told, one, one.readings[0])


def test_the_codes_are_those_that_have_a_sentence() -> None:
    assert standing_flags.RUNOUT == health.RUNOUT
    assert standing_flags.PRECESSION == health.PRECESSION
    assert standing_flags.BELOW_FLOOR == health.BELOW_FLOOR


SLOW = run(1, Label.SLOW_ROLL, at(2.0, 30), at(1.0, 200))


@pytest.mark.parametrize(
    ("vector", "flagged"),
    [
        (at(2.0, 30), True),  # the very same
        (at(2.5, 30), True),  # 0.5 apart, a third of it is 0.833
        (at(3.01, 30), False),  # 1.01 apart, a third of it is 1.003
        (at(2.99, 30), True),  # 0.99 apart, a third of it is 0.997
        (at(2.0, 50), False),  # 2 x 2 x sin(10 deg) = 0.695 apart, a third of it is 0.667
        (at(2.0, 49), True),  # 0.660 apart
        (at(2.0, 210), False),
        (at(20.0, 30), False),
    ],
)
def test_a_vector_like_the_slow_roll_is_mostly_runout(vector: complex, flagged: bool) -> None:
    told = story(SLOW, run(2, Label.O, vector, at(9, 0)))
    assert flags(told) == (("mostly_runout:probe 1",) if flagged else ())


def test_near_the_slow_rolls_own_speed_it_ought_to_be_runout() -> None:
    def at_speed(speed_hz: float) -> tuple[str, ...]:
        fast = run(2, None, at(2.0, 30), at(9, 0))
        one = replace(fast.readings[0], speed_hz=speed_hz)
        return flags(story(SLOW, replace(fast, readings=(one,))))

    assert at_speed(5.9) == ()  # 1.5 times the 4 Hz of the slow roll is 6 Hz
    assert at_speed(6.1) == ("mostly_runout:probe 1",)


def test_what_may_be_runout_within_the_errors_is_flagged() -> None:
    # 1 um apart, a third of 1.2 is 0.4; both vectors have 0.3 um a component: 2.448 x 0.424 = 1.04
    slow = run(1, Label.SLOW_ROLL, at(2.0, 30), at(1.0, 200), sd=0.3, floor=0.734)
    near = run(2, Label.O, at(1.2, 30) + at(0.6, 120), at(9, 0), sd=0.3, floor=0.734)
    assert abs(near.readings[0].vectors[0].value - at(2.0, 30)) == pytest.approx(1.0)
    assert flags(story(slow, near)) == ("mostly_runout:probe 1",)
    sure = run(2, Label.O, at(1.2, 30) + at(0.6, 120), at(9, 0), sd=0.1, floor=0.245)
    assert flags(story(SLOW, sure)) == ()


def test_a_slow_roll_that_is_only_noise_tells_nothing() -> None:
    slow = run(1, Label.SLOW_ROLL, at(0.2, 30), at(0.2, 200), sd=0.3, floor=0.734)
    near = run(2, Label.O, at(0.8, 30), at(9, 0), sd=0.3, floor=0.734)
    assert flags(story(slow, near)) == ()


def test_runout_is_known_from_a_slow_roll_taken_later_too() -> None:
    told = story(run(2, Label.O, at(2.1, 30), at(9, 0)), replace(SLOW, number=3, started_us=3_000_000))
    assert flags(told, 0) == ("mostly_runout:probe 1",)


def test_neither_the_slow_roll_itself_nor_a_casing_sensor_nor_another_origin() -> None:
    assert flags(story(SLOW)) == ()
    same = run(2, Label.O, at(2.0, 30), at(1.0, 200))
    casing = set_up()
    casing = replace(
        casing, channels=tuple(replace(c, kind="velocity", unit="mm/s") for c in casing.channels)
    )
    assert flags(story(SLOW, same, of=casing)) == ()
    assert flags(story(SLOW, replace(same, origin=Origin.SIMULATED))) == ()
    assert flags(story(replace(SLOW, void="wrong rotor"), same)) == ()


def test_a_backward_whirl_is_against_the_declared_rotation() -> None:
    backward = run(1, Label.O, at(3, 20), at(3, 290))  # METHODS 6.3: backward circle for rotation X to Y
    assert flags(story(backward, of=paired())) == (
        "backward_precession:probe 1",
        "backward_precession:probe 2",
    )
    turned = mount("counterclockwise")
    assert flags(story(backward, of=paired(), at_mount=turned)) == ()
    assert flags(story(run(1, Label.O, at(3, 20), at(3, 110)), of=paired())) == ()
    assert flags(story(backward)) == ()  # no pair


def test_backward_is_said_only_when_it_is_certain() -> None:
    # |F|^2 - |B|^2 = |Vx||Vy| sin(lag y - lag x) = 9 sin(-2 deg) = -0.314; its sd 3 x 0.1 x sqrt2 = 0.424
    doubtful = run(1, Label.O, at(3, 20), at(3, 18), sd=0.1, floor=0.245)
    assert flags(story(doubtful, of=paired())) == ()
    sure = run(1, Label.O, at(3, 20), at(3, 18), sd=0.02, floor=0.049)
    assert len(flags(story(sure, of=paired()))) == 2


def test_an_older_reading_below_its_floor_is_flagged_all_the_same() -> None:
    told = story(run(1, Label.O, at(0.5, 20), at(3, 18), floor=0.6))
    assert flags(told) == ("below_floor:probe 1",)
    one = told.runs[0]
    reading = replace(one.readings[0], flags=("clipped:probe 2", "below_floor:probe 1"))
    assert all_flags(told, one, reading) == ("clipped:probe 2", "below_floor:probe 1")


def test_all_readings_of_a_job_at_once() -> None:
    told = story(SLOW, run(2, Label.O, at(2.5, 30), at(9, 0)))
    assert flags_by_reading(told) == {UUID(int=101): (), UUID(int=102): ("mostly_runout:probe 1",)}


def test_orbits_of_a_run_of_no_job_know_no_rotation() -> None:
    backward = run(1, None, at(3, 20), at(3, 290))
    (found,) = orbits_of(None, backward, backward.readings[0], paired())
    assert (found.whirl, found.precession) == ("counterclockwise", None)
    (found,) = orbits_of(story(backward, of=paired()), backward, backward.readings[0], paired())
    assert found.precession == "backward"
