"""How the daemon's memory grows over thousands of short runs: run as a script, prints, asserts nothing.

    python tests/bench/bench_memory.py [RUNS]

The real daemon (driver, ring, analysis, ledger, control channel) in this process, with a source that rests
only a little between runs: over and over two seconds at 1500 r/min and a standstill, 4 kS/s, three probes.
Each run gives a reading with its raw samples in a store on disk. Printed: resident memory every so many
runs, and the slope of a straight line through the last three quarters of them in MiB per 1000 runs, with the
scatter about it.
"""

from __future__ import annotations

import logging
import os
import signal
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from numpy.typing import NDArray

from config.stand import Stand, load_stand
from daq.clock import SystemClock
from daq.daemon import Daemon
from daq.drivers.base import Chunk, Driver, DriverOptions, SourceInfo
from daq.runtime import access_of
from daq.setup import channel_plan
from store.database import create_store
from store.history import History
from store.ledger import Ledger

RATE_HZ, PROBES, BLOCK, TURNS_HZ = 4000, 3, 400, 25
TURNING_S, STILL_S = 2.0, 1.6
VOLTS_PER_COUNT = 30.0 / 32768
STEPS = 40
REST_S = 0.15
"""Between runs, so that the writer keeps up: each run is four commits."""


def resident_mib() -> float:
    """Memory of this process that is in use now."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20


def one_run() -> list[NDArray[np.int16]]:
    """Blocks of a run and the standstill after it."""
    rng = np.random.default_rng(7)
    t = np.arange(round((TURNING_S + STILL_S) * RATE_HZ)) / RATE_HZ
    turn = np.minimum(t, TURNING_S) * TURNS_HZ + 0.3
    volts = np.empty((len(t), 1 + PROBES))
    volts[:, 0] = -8.0 - 7.0 * np.clip(np.minimum(turn % 1, 0.1 - turn % 1) * 30, 0, 1)
    moves = np.where(t < TURNING_S, 1.0, 0.0)
    for k in range(PROBES):
        um = (20 + k) * np.cos(2 * np.pi * turn - k) * moves + rng.normal(0, 0.1, len(t))
        volts[:, 1 + k] = -10 + 0.007874 * um
    counts = np.rint(volts / VOLTS_PER_COUNT).astype(np.int16)
    return np.split(counts, len(counts) // BLOCK)


class Runs(Driver[DriverOptions]):
    """Delivers run after run as fast as it is read, and notes the memory."""

    name = "runs"
    Options = DriverOptions
    paces_itself = False
    wanted = 0
    memory: list[tuple[int, float]]

    def _open(self) -> SourceInfo:
        self._blocks, self._sent = one_run(), 0
        self.memory = []
        scale = (VOLTS_PER_COUNT,) * (1 + PROBES)
        return SourceInfo(float(RATE_HZ), "int16", scale, (-32768, 32767), "simulated", "prepared runs")

    def _read(self, timeout_s: float) -> Chunk | None:
        run, at = divmod(self._sent, len(self._blocks))
        if run >= self.wanted:
            if not self._pause(timeout_s) and self._sent % len(self._blocks) == 0:
                self.memory.append((run, resident_mib()))
                os.kill(os.getpid(), signal.SIGTERM)
                self._sent += 1
            return None
        if at == 0:
            self._pause(REST_S)
            if run % max(1, self.wanted // STEPS) == 0:
                self.memory.append((run, resident_mib()))
        self._sent += 1
        return Chunk(self._blocks[at].copy())

    def _close(self) -> None: ...


def stand_in(folder: Path) -> Stand:
    probes = "".join(
        f'[[channel]]\nname = "p{k}"\ninput = "{k}"\nkind = "displacement"\nsensitivity = "7.874 mV/um"\n'
        f'positive = "rising"\nangle = "0 deg"\n'
        for k in range(1, 1 + PROBES)
    )
    text = (
        '[stand]\nname = "bench"\ntime_zone = "UTC"\nends = ["a", "b"]\nangles_seen_from = "a"\nzero = "up"\n'
        '[source]\ndriver = "simulated"\n[once_per_rev]\ninput = "0"\nedge = "falling"\nangle = "0 deg"\n'
        + probes
        + '[steadiness]\npreset = "small"\nwindow = "0.6 s"\nmin_revolutions = 12\nblocks = 6\n'
        + 'lookback = "0 s"\nhold = "0 s"\nthermal_time_constant = "0 s"\n'
        + '[run]\nminimum_speed = "60 rpm"\nminimum_duration = "0.5 s"\n[store]\npath = "bench.sqlite"\n'
    )
    file = folder / "bench.toml"
    file.write_text(text)
    return load_stand(file)


def counted(store: Path) -> dict[str, Any]:
    """How many runs and readings the store holds."""
    with History.open(store) as history:
        runs = history.runs(limit=100_000)
        return {"runs": len(runs), "readings": sum(r.readings for r in runs)}


def main(wanted: int) -> None:
    logging.basicConfig(level=logging.ERROR)
    clock = SystemClock()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        os.environ["REVMARK_RUNTIME"] = str(folder / "run")
        stand = stand_in(folder)
        create_store(stand.store_path, clock=clock, software="bench")
        ledger = Ledger.open(stand.store_path, clock=clock, software="bench")
        driver = Runs(DriverOptions(), channel_plan(stand), clock=clock)
        driver.wanted = wanted
        began_s, cpu_s = time.monotonic(), time.process_time()
        code = Daemon(stand, ledger, driver, access_of(None), clock).run(lambda _: None)
        took_s, cpu_s = time.monotonic() - began_s, time.process_time() - cpu_s
        ledger.close()
        held, size_mib = counted(stand.store_path), stand.store_path.stat().st_size / 2**20
    print(
        f"exit {code}; {held['runs']} runs and {held['readings']} readings of {wanted} in {took_s:.0f} s "
        f"({1e3 * cpu_s / wanted:.0f} ms of a core each), store {size_mib:.0f} MiB"
    )
    runs, mib = np.array(driver.memory).T
    for at in range(0, len(runs), max(1, len(runs) // 10)):
        print(f"{runs[at]:6.0f} runs {mib[at]:7.1f} MiB")
    late = runs >= wanted / 4
    slope, level = np.polyfit(runs[late], mib[late], 1)
    scatter = np.std(mib[late] - slope * runs[late] - level)
    print(
        f"slope over the last three quarters {1000 * slope:+.2f} MiB per 1000 runs, "
        f"scatter {scatter:.2f} MiB; peak to peak {np.ptp(mib[late]):.1f} MiB"
    )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 2000)
