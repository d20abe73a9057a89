"""The whole daemon on a digitizer: a job marked through it, faults in the middle of runs.

Nothing stored is lost, the run says what happened, and the next run works.
"""

from __future__ import annotations

import json
import math
import subprocess
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from digitizer_kit import LAG_DEG, UM_PK, Damage, Digitizer, Rotor, Sender
from served import LIMIT_S, REVMARK, ServedStand

from store.history import History

pytestmark = [pytest.mark.slow, pytest.mark.timeout(180)]

STAND = """
[stand]
name = "bay-4"
time_zone = "Europe/Lisbon"
ends = ["drive", "free"]
angles_seen_from = "drive"
zero = "top dead centre"

[source]
driver = "serial"

[source.options]
port = "{port}"
channels = {channels}
rate_hz = 12800

[once_per_rev]
input = "{pulse}"
edge = "falling"
angle = "0 deg"

[[channel]]
name = "probe 1"
input = "{inputs[0]}"
kind = "displacement"
sensitivity = "7.874 mV/um"
positive = "rising"
angle = "0 deg"
gap_limits = ["-16 V", "-4 V"]

[[channel]]
name = "probe 2"
input = "{inputs[1]}"
kind = "displacement"
sensitivity = "7.874 mV/um"
positive = "rising"
angle = "0 deg"
gap_limits = ["-16 V", "-4 V"]

[steadiness]
preset = "small"
window = "1 s"

[run]
minimum_speed = "60 rpm"
minimum_duration = "0.5 s"
"""
COMMANDS = (
    (
        "machine", "add", "F-204", "--model", "KR-22", "--mass", "60kg", "--speed", "1482rpm",
        "--grade", "2.5",
        "--plane", "1: radius 140mm, holes 24, numbered counterclockwise from drive",
    ),
    (
        "mount", "F-204", "--job", "0142", "--rotation", "clockwise from drive", "--mark-at", "0deg",
        "--mark-how", "by eye", "--support", "rigid", "--coupling", "belt", "--clean",
    ),
)  # fmt: skip


class Bay(ServedStand):
    """A stand on a digitizer, and its daemon."""

    def __init__(self, folder: Path, sender: Sender) -> None:
        self.sender = sender
        of = sender.digitizer
        super().__init__(
            folder,
            STAND.format(
                port=sender.wire.url,
                channels=of.channels,
                pulse="stamps" if of.stamped else "1",
                inputs=("1", "2") if of.stamped else ("2", "3"),
            ),
        )


@pytest.fixture
def bay(tmp_path: Path, send: Callable[..., Sender], request: pytest.FixtureRequest) -> Iterator[Bay]:
    wire, stamped = request.param
    digitizer = Digitizer(Rotor(turning=False, noise_v=0.002), stamped=stamped, every_s=0.4)
    made = Bay(tmp_path, send(digitizer, wire))
    yield made
    made.end()


def events(history: History, kind: str) -> list[Any]:
    """Oldest first."""
    return [e for e in reversed(history.events()) if e.kind == kind]


def check_vectors(history: History, name: str) -> None:
    """Every reading of a run is the rotor's truth: 0.2 % and 0.2 degrees."""
    for reading in history.run(name).readings:
        values = {v.channel: v.value for v in reading.vectors if v.order == 1}
        for channel, um, lag_deg in zip(("probe 1", "probe 2"), UM_PK, LAG_DEG, strict=True):
            assert abs(values[channel]) == pytest.approx(um, rel=0.002)
            turned = math.degrees(math.atan2(values[channel].imag, values[channel].real)) - lag_deg
            assert (turned + 180) % 360 - 180 == pytest.approx(0.0, abs=0.2)


@pytest.mark.parametrize("bay", [("pty", False), ("socket", True)], indirect=True, ids=["pty", "socket"])
def test_a_job_through_the_driver_with_faults_in_the_middle(bay: Bay) -> None:
    sender, rotor = bay.sender, bay.sender.digitizer.rotor
    bay.serve()
    for words in COMMANDS:
        bay.type(*words)
    rotor.turning = True
    assert "0142/1" in bay.type("mark", "O")

    sender.unplug()
    with History.open(bay.folder / "bay.sqlite") as history:
        bay.until(lambda: history.run("0142/1").state == "interrupted", "the run to be closed")
        assert sender.wire.url in history.run("0142/1").reason
        assert bay.state() == "source lost"
        time.sleep(5.0)  # longer than any back-off

        sender.replug()
        replugged_s = time.time()
        bay.until(lambda: len(history.runs()) == 2, "the next run")
        assert events(history, "source_back")[0].at_us / 1e6 - replugged_s < 2.0
        bay.until(lambda: history.run("0142/2").readings, "its reading")

        damage = Damage(seed=1)
        sender.spoil = lambda data: damage.frame(data) if damage.random.random() < 0.003 else data
        time.sleep(3.0)
        sender.spoil = lambda data: data
        bay.until(lambda: history.run("0142/2").state == "open", "the run to go on")
        rotor.turning = False
        bay.until(lambda: history.run("0142/2").state == "complete", "the end of the run")
        bay.stop()
        assert "lost 64 samples" in bay.log
        for name in ("0142/1", "0142/2"):
            check_vectors(history, name)
        set_up = history.newest_set_up()
        assert set_up is not None
        assert set_up.rate_hz == 12_800


@pytest.mark.parametrize("bay", [("pty", False)], indirect=True)
def test_the_wrong_digitizer_ends_the_daemon_as_a_mistake(bay: Bay) -> None:
    """Exit code 78: a service manager does not start it over and over."""
    bay.stand.write_text(bay.stand.read_text().replace("12800", "10000"))
    with (bay.folder / "serve.log").open("wb") as out:
        bay.daemon = subprocess.Popen([REVMARK, "serve"], cwd=bay.folder, env=bay.env, stderr=out)
    assert bay.daemon.wait(LIMIT_S) == 78, bay.log
    assert "takes 12800 samples a second where rate_hz says 10000" in bay.log


@pytest.mark.parametrize("bay", [("socket", True)], indirect=True)
def test_late_stamps_are_an_event_and_stand_in_the_status(bay: Bay) -> None:
    bay.sender.digitizer.late = 6400
    bay.sender.digitizer.rotor.turning = True
    bay.serve()
    notes = bay.until(lambda: json.loads(bay.type("status", "--json"))["live"]["notes"], "the note")
    assert "too late" in notes[0]
    assert "too late" in bay.type("status")
    with History.open(bay.folder / "bay.sqlite") as history:
        said = bay.until(lambda: events(history, "source_remark"), "the event")
        assert len(said) == 1  # once a minute at most
        assert "once-per-rev stamps came more than 0.25 s of samples too late" in said[0].text
    bay.stop()
