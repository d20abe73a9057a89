"""The driver on this PC: the package's own way through ctypes into a C library (``driver.c``), in a process
of its own that finds it under the driver's name. Same driver code as with a server, no ``server`` key."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).parent
COMPILER = shutil.which("gcc")

pytestmark = [
    pytest.mark.skipif(COMPILER is None, reason="allowed: no compiler"),
    pytest.mark.skipif(not sys.platform.startswith("linux"), reason="allowed: built for Linux only"),
]


def build(folder: Path, *flags: str) -> Path:
    assert COMPILER is not None
    target = folder / "libnidaqmx.so"
    common = ["-shared", "-fPIC", "-O2", "-Wall", "-Wextra", "-Wl,-soname,libnidaqmx.so.1"]
    command = [COMPILER, *common, *flags, "-o", str(target), str(HERE / "driver.c"), "-lm"]
    subprocess.run(command, check=True)
    (folder / "libnidaqmx.so.1").symlink_to(target.name)
    return folder


@pytest.fixture(scope="module")
def library(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return build(tmp_path_factory.mktemp("driver"))


PRELUDE = """
import ctypes, json, sys, time
sys.path.insert(0, {here!r})
from ni_kit import PLAN, blocks, driver
from config.errors import DriverError
fake = ctypes.CDLL("libnidaqmx.so.1")
said = {{}}

def fails(call):
    try:
        call()
    except DriverError as error:
        return {{"kind": error.kind, "retryable": error.retryable, "text": str(error)}}
    return None

def lost():
    while (found := fails(lambda: source.read(0.2))) is None:
        pass
    return found

source = driver(None, inputs={{}})
"""


def play(library: Path, scene: str) -> dict[str, Any]:
    """Run a scene in a process that sees the library; warnings (a leaked task, say) are errors there."""
    code = PRELUDE.format(here=str(HERE)) + scene + "\nsource.close()\nprint(json.dumps(said))\n"
    env = {**os.environ, "LD_LIBRARY_PATH": str(library), "LANG": "C"}
    env["PYTHONPATH"] = os.pathsep.join([str(HERE.parents[2]), env.get("PYTHONPATH", "")])
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], env=env, capture_output=True, text=True, timeout=60
    )
    assert done.returncode == 0, done.stderr
    assert "Warning" not in done.stderr, done.stderr
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1])
    return found


def test_a_vector_through_the_library_is_the_emulated_one(library: Path) -> None:
    """Lags of 30 and 60 degrees, 0.1 and 0.2 V; the skew is 14 us and 28 us."""
    said = play(
        library,
        """
import cmath, math
import numpy as np
from daq.signal.measure import measure
from daq.signal.shapes import ChannelParams, PulseParams
info = source.open()
counts = np.concatenate([b.counts for b in blocks(source, 20)])
scale = info.volts_per_count
pulse = PulseParams(scale[0], info.full_scale_counts)
channels = tuple(
    ChannelParams(p.name, v, info.full_scale_counts, 1e-3, skew_s=s)
    for p, v, s in zip(PLAN.probes, scale[1:], info.skew_s[1:])
)
made = measure(counts, pulse, channels, info.rate_hz)
values = [made.vector(p.name).value for p in PLAN.probes]
said["millivolt"] = [abs(v) for v in values]
said["lag_deg"] = [math.degrees(cmath.phase(v)) for v in values]
said["gap_v"] = [made.level(p.name).gap_v for p in PLAN.probes]
said["hz"], said["skew"], said["is"] = made.speed_hz, info.skew_s, info.description
source.close()
said["tasks"] = fake.fake_tasks()
""",
    )
    assert said["is"] == "daqmx, Dev1 (SIM-C, serial 0000C0DE), 3 inputs"
    assert said["hz"] == pytest.approx(25.0, rel=1e-5)
    assert said["skew"] == pytest.approx([0.0, 14e-6, 28e-6])
    assert said["millivolt"] == pytest.approx([100.0, 200.0], rel=0.002)
    assert said["lag_deg"] == pytest.approx([30.0, 60.0], abs=0.2)
    assert said["gap_v"] == pytest.approx([-3.0, -3.0], abs=1e-3)
    assert said["tasks"] == 0


def test_what_is_connected_is_listed_without_opening_it(library: Path) -> None:
    said = play(library, 'said["found"] = type(source)._connected()\nsaid["tasks"] = fake.fake_tasks()')
    assert said == {"found": [["Dev1/ai0", "SIM-C, serial 0000C0DE"]], "tasks": 0}


def test_faults_through_the_library(library: Path) -> None:
    said = play(
        library,
        """
source.open()
segments = [blocks(source, 1)[-1].segment]
for name, code in (("overrun", -200279), ("usb", -50405), ("busy", -50103), ("unknown", -299999)):
    fake.fake_read_fails(code)
    said[name] = lost()
    source.close()
    source.open()
    segments.append(blocks(source, 1)[-1].segment)
source.close()
fake.fake_start_fails(-50103)
said["start"] = fails(source.open)
said["segments"], said["tasks"] = segments, fake.fake_tasks()
""",
    )
    kinds = {name: said[name]["kind"] for name in ("overrun", "usb", "busy", "unknown", "start")}
    assert kinds == {
        "overrun": "lost_data",
        "usb": "gone",
        "busy": "busy",
        "unknown": "protocol",
        "start": "busy",
    }
    assert "USB link to Dev1 failed" in said["usb"]["text"]
    assert said["segments"] == [0, 1, 2, 3, 4]
    assert said["tasks"] == 0


def test_a_short_read_through_the_library(library: Path) -> None:
    said = play(
        library,
        """
source.open()
before = blocks(source, 1)[0]
fake.fake_short(77)
after = blocks(source, 1)[0]
said["jump"] = after.first_sample - before.first_sample - len(before.counts)
said["segments"] = after.segment - before.segment
""",
    )
    assert said == {"jump": 77, "segments": 1}


def test_a_warning_of_the_library_is_told_once_and_costs_no_samples(library: Path) -> None:
    said = play(
        library,
        """
import warnings
heard = []
warnings.showwarning = lambda message, *_: heard.append(str(message).split()[1])
source.open()
said["firsts"] = []
for _ in range(3):
    fake.fake_read_fails(200011)
    said["firsts"].append(blocks(source, 1)[0].first_sample)
said["heard"] = heard
""",
    )
    assert said == {"heard": ["200011"], "firsts": [0, 1280, 2560]}  # told once


def test_unplugged_and_dead_after_the_replug(library: Path) -> None:
    """Where the library needs a new process, the driver says so and does not try for ever."""
    said = play(
        library,
        """
source.open()
blocks(source, 1)
fake.fake_absent(1)
said["lost"] = lost()
source.close()
said["away"] = fails(source.open)
fake.fake_absent(0)
fake.fake_mute(1)
until = time.monotonic() + 10
while (found := fails(source.open))["retryable"] and time.monotonic() < until:
    time.sleep(0.5)
said["dead"] = found
said["tasks"] = fake.fake_tasks()
""",
    )
    assert said["lost"]["text"].startswith("Dev1 was removed or has no power (code -201003).")
    assert said["away"]["text"].startswith("Dev1 is not connected.")
    assert (said["dead"]["kind"], said["dead"]["retryable"]) == ("gone", False)
    assert said["tasks"] == 0


def test_an_old_driver_is_named(tmp_path: Path) -> None:
    said = play(
        build(tmp_path, "-DOLD"), 'said["open"] = fails(source.open)\nsaid["tasks"] = fake.fake_tasks()'
    )
    assert said["open"]["kind"] == "no_driver"
    assert "too old" in said["open"]["text"]
    assert said["tasks"] == 0
