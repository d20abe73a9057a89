"""An XY pair through the whole daemon: the simulated rotor really turns the way its option says, so its orbit
goes with the declared rotation or against it (simple rotor on isotropic bearings: a circle)."""

from __future__ import annotations

from collections.abc import Callable

import pytest
from daemon_kit import MOUNT, Bay, until

pytestmark = pytest.mark.slow


def paired(make_bay: Callable[..., Bay], rotation: str) -> Bay:
    """Probes at 45 and 315 deg at one place, no scatter between them; F-204 mounted clockwise from drive."""
    bay = make_bay()
    text = bay.stand.read_text()
    first = text.index('angle = "0 deg"', text.index('name = "probe 1"'))
    second = text.index('angle = "0 deg"', text.index('name = "probe 2"'))
    pair = '\npair = "bearing 1"'
    text = (
        text[:first] + 'angle = "45 deg"' + pair + text[first + 15 : second] + 'angle = "315 deg"' + pair
        + text[second + 15 :]
    )  # fmt: skip
    source = (
        f'seed = 3\nrotation = "{rotation}"\nprobe_z_mm = [0.0, 0.0]\nrun_scatter = 0.0\nrunout_um = [0.0]'
    )
    bay.stand.write_text(text.replace("seed = 3", source, 1))
    bay.start()
    bay.set_up()
    return bay


def test_an_orbit_with_the_rotation_and_one_against_it(make_bay: Callable[..., Bay]) -> None:
    assert "clockwise from drive" in MOUNT
    bay = paired(make_bay, "clockwise")
    bay.turn()
    bay.until_run()
    done = bay.must("mark", "O")
    assert "whirls" not in done.err
    told = bay.must("run", "show", "0142/1", "--json").json["readings"][-1]
    (orbit,) = [o for o in told["orbits"] if o["order"] == 1]
    assert (orbit["x"], orbit["y"]) == ("probe 2", "probe 1")  # 315 deg, then 45 deg clockwise of it
    assert orbit["precession"] == "forward"
    assert orbit["minor_axis_pk"] == pytest.approx(orbit["major_axis_pk"], rel=0.01)
    assert told["derived_flags"] == []
    assert "bearing 1: whirls forward, clockwise seen from drive" in bay.must("run", "show", "0142/1").out


def test_a_rotor_that_turns_the_other_way_than_declared(make_bay: Callable[..., Bay]) -> None:
    bay = paired(make_bay, "counterclockwise")
    bay.turn()
    bay.until_run()
    until(lambda: "backward_precession:probe 1" in bay.live()["derived_flags"], "the flag in status")
    assert "backward" in bay.must("status").out
    done = bay.must("mark", "O")
    said = " ".join(done.err.split())
    assert "each of probe 1 and probe 2: the shaft whirls against the declared rotation" in said
    assert "backward" in done.out
    told = bay.must("job", "show", "0142", "--json").json["runs"][-1]["readings"][-1]
    assert told["derived_flags"] == ["backward_precession:probe 1", "backward_precession:probe 2"]
    assert "bearing 1: whirls BACKWARD, counterclockwise seen from drive" in bay.must(
        "run", "show", "0142/1"
    ).out  # fmt: skip
