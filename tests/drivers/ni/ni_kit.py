"""A device server in a process of its own, and a stand of two probes wired to it."""

from __future__ import annotations

import json
import subprocess
import sys
import threading
from pathlib import Path
from typing import Any

from daq.clock import SystemClock
from daq.drivers.base import Block, ChannelPlan, EndOfSource, ProbePlan, PulsePlan
from daq.drivers.registry import AnyDriver, make_driver

SERVER = Path(__file__).parent / "device_server.py"
RATE_HZ = 12_800.0
MV_PER_UM = 7.874
PROBES = {"Dev1/ai1": (12.0, 63.0, -10.0), "Dev1/ai2": (5.0, 211.0, -9.4)}
"""Input -> 0-peak in um, phase lag in degrees, gap in volts at the probe."""
DIVIDER = 3.0

PLAN = ChannelPlan(
    PulsePlan("once-per-rev", "Dev1/ai0"),
    (
        ProbePlan("probe 1", "Dev1/ai1", volts_per_unit=MV_PER_UM / 1e3, gap_low_v=-16.0, gap_high_v=-4.0),
        ProbePlan("probe 2", "Dev1/ai2", volts_per_unit=MV_PER_UM / 1e3, gap_low_v=-16.0, gap_high_v=-4.0),
    ),
)


def world(**changes: Any) -> dict[str, Any]:
    """Dev1 with both probes and the pulse behind dividers of 1:3; ``changes`` go to the device."""
    signals: dict[str, Any] = {"Dev1/ai0": {"pulse": {}, "divider": DIVIDER}}
    for name, (um, lag_deg, gap_v) in PROBES.items():
        orders = [[1, um * MV_PER_UM / 1e3, lag_deg], [2, 0.2 * um * MV_PER_UM / 1e3, 20.0]]
        signals[name] = {"gap_v": gap_v, "orders": orders, "divider": DIVIDER}
    return {"devices": {"Dev1": changes}, "signals": signals}


def options(server: str | None = None, **more: Any) -> dict[str, Any]:
    """Driver options that fit ``world`` and ``PLAN``."""
    inputs = {name: {"divider": DIVIDER} for name in PLAN.inputs}
    made: dict[str, Any] = {"rate_hz": RATE_HZ, "range_v": 10.0, "terminal": "differential", "inputs": inputs}
    if server is not None:
        made["server"] = server
    return {**made, **more}


class DeviceServer:
    """The process; ``close`` it."""

    def __init__(self, about: dict[str, Any]) -> None:
        self.about = about
        self._start(0)

    def _start(self, port: int) -> None:
        self._process = subprocess.Popen(
            [sys.executable, str(SERVER), json.dumps({**self.about, "port": port})],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
        )
        said = self._line()
        assert said.startswith("port "), said
        self.port = int(said.split()[1])

    @property
    def address(self) -> str:
        return f"127.0.0.1:{self.port}"

    @property
    def pid(self) -> int:
        return self._process.pid

    def verb(self, *words: object) -> str:
        assert self._process.stdin is not None
        self._process.stdin.write(" ".join(map(str, words)) + "\n")
        self._process.stdin.flush()
        return self._line()

    def told(self) -> dict[str, Any]:
        """What the client asked the server for."""
        found: dict[str, Any] = json.loads(self.verb("told"))
        return found

    def kill(self) -> None:
        self._process.kill()
        self._process.communicate()

    def start_again(self) -> None:
        """On the port it had."""
        self._start(self.port)

    def renew(self) -> None:
        """Without faults and tasks, whatever was done to it."""
        if self._process.poll() is not None:
            self.start_again()
        self.verb("reset")

    def close(self) -> None:
        if self._process.poll() is None:
            self.kill()

    def _line(self) -> str:
        assert self._process.stdout is not None
        watchdog = threading.Timer(20.0, self._process.kill)
        watchdog.daemon = True
        watchdog.start()
        try:
            return self._process.stdout.readline().strip()
        finally:
            watchdog.cancel()


def driver(server: DeviceServer | None, plan: ChannelPlan = PLAN, **more: Any) -> AnyDriver:
    """A closed driver on the real clock."""
    address = None if server is None else server.address
    return make_driver("daqmx", options(address, **more), plan, clock=SystemClock())


def blocks(source: AnyDriver, count: int, timeout_s: float = 0.2) -> list[Block]:
    """The next ``count`` blocks of an open driver."""
    found: list[Block] = []
    for _ in range(20 * count + 20):
        got = source.read(timeout_s)
        assert not isinstance(got, EndOfSource)
        if got is not None:
            found.append(got)
        if len(found) == count:
            return found
    raise AssertionError(f"only {len(found)} of {count} blocks came")
