"""Several speeds in one run: a reading of each, and a mark for each balancing speed."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from daemon_kit import MACHINE, MOUNT, Bay, until

pytestmark = pytest.mark.slow


@pytest.fixture
def two_speeds(make_bay: Callable[..., Bay]) -> Bay:
    """A machine mounted for balancing at 1200 and 1500 r/min."""
    made = make_bay()
    made.start()
    made.must(*MACHINE)
    made.must(*MOUNT, "--rpm", "1200rpm", "--rpm", "1500rpm")
    return made


def test_one_run_at_two_speeds_gives_an_o_of_each(two_speeds: Bay) -> None:
    two_speeds.mark("O")
    two_speeds.turn(1350)  # no balancing speed: stored, and no mark takes it
    two_speeds.until_readings(1)
    two_speeds.turn(1200)
    first = two_speeds.must("mark", "--wait", "--json").json
    two_speeds.turn(1500)
    until(lambda: (two_speeds.live()["speed_rpm"] or 0) > 1490, "the higher speed")
    second = two_speeds.must("mark", "O", "--json").json
    two_speeds.coast()
    two_speeds.until_idle()
    assert [m["mark"]["run"] for m in (first, second)] == ["0142/1", "0142/1"]
    with two_speeds.history() as history:
        (line,) = history.runs()
        readings = history.run(line.name).readings
    labelled = [(str(r.label), round(r.speed_hz * 60)) for r in readings if r.label]
    assert labelled == [("O", 1200), ("O", 1500)]
    assert 1350 in {round(r.speed_hz * 60) for r in readings if r.label is None}
    for reading in readings:  # each of one speed, with the targets that it reached
        assert reading.steadiness["steady"]
        limits, figures = reading.steadiness["limits"], reading.steadiness["figures"]
        assert (limits["amplitude_target_pct"], limits["phase_target_deg"]) == (0.5, 0.3)
        assert all(f["ok"] for f in figures)
        assert {"averaged", "beat", "told", "drift", "speed_sd"} <= {f["name"] for f in figures}


def test_a_coefficient_and_a_correction_at_each_speed(two_speeds: Bay) -> None:
    for label, weight in (("O", None), ("O+T", "1"), ("O+T", "2")):
        if weight is not None:
            if weight == "2":
                two_speeds.must("weight", "remove", "--plane", "1", "--all", "--locked-out")
            two_speeds.must("weight", "fit", "20g", "--plane", weight, "--hole", "2", "--locked-out")
        for rpm in (1200, 1500):
            two_speeds.turn(rpm)
            until(lambda rpm=rpm: abs((two_speeds.live()["speed_rpm"] or 0) - rpm) < 0.004 * rpm, f"{rpm}")
            two_speeds.must("mark", label)
        two_speeds.coast()
        two_speeds.until_idle()
    for rpm in ("1200rpm", "1500rpm"):
        told = two_speeds.must("correction", "--rpm", rpm).out
        assert f"(KR-22), {rpm[:4]} r/min from O, run 0142/1" in " ".join(told.split())
