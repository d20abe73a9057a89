"""The whole daemon on the device server: a job marked through it, faults in the middle of runs.

Nothing stored is lost, the run says what happened, and the next run works.
"""

from __future__ import annotations

import math
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import pytest
from ni_kit import DIVIDER, PROBES, DeviceServer, world
from served import LIMIT_S, REVMARK, ServedStand

from store.history import History

pytestmark = [pytest.mark.slow, pytest.mark.timeout(180)]

STEP_S = 14e-6
STAND = """
[stand]
name = "bay-1"
time_zone = "Europe/Lisbon"
ends = ["drive", "free"]
angles_seen_from = "drive"
zero = "top dead centre"

[source]
driver = "daqmx"

[source.options]
server = "{server}"
rate_hz = 12800
range_v = 10.0
terminal = "differential"
{inputs}

[once_per_rev]
input = "Dev1/ai0"
edge = "falling"
angle = "0 deg"

[[channel]]
name = "probe 1"
input = "Dev1/ai1"
kind = "displacement"
sensitivity = "7.874 mV/um"
positive = "rising"
angle = "0 deg"
gap_limits = ["-16 V", "-4 V"]

[[channel]]
name = "probe 2"
input = "Dev1/ai2"
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
        "machine", "add", "F-204", "--model", "KR-22", "--mass", "60kg", "--speed", "1500rpm",
        "--grade", "2.5",
        "--plane", "1: radius 140mm, holes 24, numbered counterclockwise from drive",
    ),
    (
        "mount", "F-204", "--job", "0142", "--rotation", "clockwise from drive", "--mark-at", "0deg",
        "--mark-how", "by eye", "--support", "rigid", "--coupling", "belt", "--clean",
    ),
)  # fmt: skip


RESTART_S = 2.0


class Bay(ServedStand):
    """A stand on the device server, and its daemon."""

    def __init__(self, folder: Path, server: DeviceServer) -> None:
        self.server = server
        inputs = "".join(
            f'[source.options.inputs."{name}"]\ndivider = {DIVIDER}\n'
            for name in ("Dev1/ai0", "Dev1/ai1", "Dev1/ai2")
        )
        super().__init__(folder, STAND.format(server=server.address, inputs=inputs))


@pytest.fixture
def bay(tmp_path: Path, serve: Callable[..., DeviceServer]) -> Iterator[Bay]:
    made = Bay(tmp_path, serve(about=world(simultaneous=False, step_s=STEP_S) | {"turning": 0}))
    yield made
    made.end()


def events(history: History, kind: str) -> list[Any]:
    """Oldest first."""
    return [e for e in reversed(history.events()) if e.kind == kind]


def test_a_job_through_the_driver_with_an_unplug_in_the_middle(bay: Bay) -> None:
    server = bay.server
    bay.serve()
    for words in COMMANDS:
        bay.type(*words)
    server.verb("put", "turning", 1)
    marked = bay.type("mark", "O")
    assert "0142/1" in marked

    server.verb("remove")
    with History.open(bay.folder / "bay.sqlite") as history:
        bay.until(lambda: history.run("0142/1").state == "interrupted", "the run to be closed")
        run = history.run("0142/1")
        assert "Dev1" in run.reason
        assert "was removed or has no power" in run.reason
        assert bay.state() == "source lost"
        time.sleep(2.0)  # it is looked for twice a second meanwhile, and said once
        assert len(events(history, "source_lost")) == 2  # removed, then not connected

        server.verb("replug")
        replugged_s = time.time()
        bay.until(lambda: len(history.runs()) == 2, "the next run")
        (back,) = events(history, "source_back")
        assert back.at_us / 1e6 - replugged_s < 2.0
        assert "back after" in back.text
        bay.until(lambda: history.run("0142/2").readings, "its reading")

        server.verb("fail", "ReadAnalogF64", -200279)
        bay.until(lambda: len(history.runs()) == 3, "the run after the overrun")
        assert "the PC did not collect data" in history.run("0142/2").reason
        bay.until(lambda: history.run("0142/3").readings, "its reading")
        server.verb("put", "turning", 0)
        bay.until(lambda: history.run("0142/3").state == "complete", "the end of the run")
        bay.stop()

        for name in ("0142/1", "0142/2", "0142/3"):
            for reading in history.run(name).readings:
                values = {v.channel: v.value for v in reading.vectors if v.order == 1}
                for channel, (um, lag_deg, _) in zip(("probe 1", "probe 2"), PROBES.values(), strict=True):
                    assert abs(values[channel]) == pytest.approx(um, rel=0.002)
                    turned = math.degrees(math.atan2(values[channel].imag, values[channel].real)) - lag_deg
                    assert (turned + 180) % 360 - 180 == pytest.approx(0.0, abs=0.2)
        set_up = history.newest_set_up()
        assert set_up is not None
        assert [c.skew_s for c in set_up.channels] == pytest.approx([STEP_S, 2 * STEP_S], abs=1e-9)
        assert set_up.rate_hz == 12_800


def test_a_typing_mistake_ends_the_daemon_as_such(bay: Bay) -> None:
    """Exit code 78: a service manager does not start it over and over."""
    bay.stand.write_text(bay.stand.read_text().replace("12800", "10000"))
    with (bay.folder / "serve.log").open("wb") as out:
        bay.daemon = subprocess.Popen([REVMARK, "serve"], cwd=bay.folder, env=bay.env, stderr=out)
    assert bay.daemon.wait(LIMIT_S) == 78, bay.log
    assert "Asked for 10000 samples a second, Dev1 runs at 10240" in bay.log


def test_a_device_that_needs_a_new_process_ends_the_daemon_to_get_one(tmp_path: Path, bay: Bay) -> None:
    """Exit code 75: the service manager starts it again. The driver believes the device is on this PC."""
    bay.stand.write_text(bay.stand.read_text().replace(f'server = "{bay.server.address}"', ""))
    code = (
        "from daq.drivers.ni import session\n"
        "real = session.Session\n"
        f"session.Session = lambda _, name: real({bay.server.address!r}, name)\n"
        "from cli.main import main\nmain()\n"
    )
    with (bay.folder / "serve.log").open("wb") as out:
        bay.daemon = subprocess.Popen(
            [sys.executable, "-c", code, "serve"], cwd=bay.folder, env=bay.env, stderr=out
        )
    bay.until(lambda: "\nready " in "\n" + bay.log, "the daemon to be ready")
    bay.server.verb("remove")
    bay.until(lambda: "is not connected" in bay.log, "the device to be missed")
    bay.server.verb("remove", "half")
    replugged_s = time.monotonic()
    assert bay.daemon.wait(LIMIT_S) == 75, bay.log
    assert "does not answer this process" in bay.log
    bay.server.verb("replug")  # a new process sees the device whole
    time.sleep(RESTART_S)  # as the service manager waits (config/service/revmark.service)
    (bay.folder / "serve.log").write_bytes(b"")
    with (bay.folder / "serve.log").open("ab") as out:
        bay.daemon = subprocess.Popen(
            [sys.executable, "-c", code, "serve"], cwd=bay.folder, env=bay.env, stderr=out
        )
    bay.until(lambda: "\nready " in "\n" + bay.log, "the daemon to be ready again")
    bay.until(lambda: bay.state() == "no pulses", "samples to flow again")
    assert time.monotonic() - replugged_s < 10.0
