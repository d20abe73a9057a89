"""The whole daemon at 16 channels and 51.2 kS/s for 60 s, beside the bare estimator in the same process.

Run it:  python tests/bench/bench_daemon.py [SECONDS]

A prepared second of samples (15 probes and the once-per-rev channel, 50 turns a second) is delivered over
and over at real pace, in blocks of 10 ms and then of 0.1 s (drivers are asked for 0.05 to 0.2 s); beside the
analysis, which keeps the raw samples of its window, three readers take every sample out of the ring in hops
of 0.1 s. Printed: samples lost, the daemon's share of a core in all and by thread, the time from a block's
end to the vectors made from it, and the share that the bare estimator (edges, angles, least squares of offset
and 1X to 3X on the same blocks, nothing else) takes of the same core. No thresholds: a benchmark is read, not
passed.
"""

from __future__ import annotations

import logging
import os
import resource
import signal
import sys
import tempfile
import threading
import time
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from config.stand import Stand, load_stand
from daq.analysis import Analysis
from daq.clock import SystemClock
from daq.daemon import Daemon
from daq.drivers.base import Chunk, Driver, DriverOptions, SourceInfo
from daq.runtime import access_of
from daq.setup import channel_plan, signal_params
from daq.signal.blocks import BlockFitter
from daq.signal.steadiness import block_seconds
from store.database import create_store
from store.ledger import Ledger

RATE_HZ, PROBES, TURNS_HZ = 51_200, 15, 50
BLOCKS = (512, 5120)
VOLTS_PER_COUNT = 30.0 / 32768


def prepared_second() -> np.ndarray:
    """Counts of one second, (51200, 16): 50 whole turns, so that it may follow itself."""
    rng = np.random.default_rng(7)
    turn = np.arange(RATE_HZ) * TURNS_HZ / RATE_HZ % 1.0
    volts = np.empty((RATE_HZ, 1 + PROBES))
    volts[:, 0] = -8.0 - 7.0 * np.clip(np.minimum(turn, 0.03 - turn) * 400, 0, 1)
    for k in range(PROBES):
        um = (5 + k) * np.cos(2 * np.pi * turn - 0.4 * k) + 0.5 * np.cos(4 * np.pi * turn)
        volts[:, 1 + k] = -10 + 0.007874 * (um + rng.normal(0, 0.25, RATE_HZ))
    return np.round(volts / VOLTS_PER_COUNT).astype(np.int16)


class Prepared(Driver[DriverOptions]):
    """Delivers the prepared second at real pace."""

    name = "prepared"
    Options = DriverOptions
    block = BLOCKS[0]

    def _open(self) -> SourceInfo:
        self._blocks = np.split(prepared_second(), RATE_HZ // self.block)
        self._sent, self._start_s = 0, self.clock.monotonic()
        scale = (VOLTS_PER_COUNT,) * (1 + PROBES)
        return SourceInfo(RATE_HZ, "int16", scale, (-32768, 32767), "simulated", "prepared blocks")

    def _read(self, timeout_s: float) -> Chunk | None:
        due_s = self._start_s + (self._sent + 1) * self.block / RATE_HZ
        if self._pause(min(timeout_s, due_s - self.clock.monotonic())):
            return None
        if self.clock.monotonic() < due_s:
            return None
        self._sent += 1
        return Chunk(self._blocks[(self._sent - 1) % len(self._blocks)], mono_s=due_s)

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
        + '[steadiness]\npreset = "small"\n[store]\npath = "bench.sqlite"\n'
    )
    file = folder / "bench.toml"
    file.write_text(text)
    return load_stand(file)


def bare_share(stand: Stand, seconds: float) -> float:
    """Processor seconds per stream second of the estimator alone, fed in the same hops of 0.1 s."""
    info = SourceInfo(
        RATE_HZ, "int16", (VOLTS_PER_COUNT,) * (1 + PROBES), (-32768, 32767), "simulated", "prepared"
    )
    pulse, channels = signal_params(stand, info)
    fitter = BlockFitter(pulse, channels, RATE_HZ, block_s=block_seconds(stand.steadiness))
    hops = np.split(prepared_second(), 10)
    begin = time.process_time()
    for hop in range(round(10 * seconds)):
        fitter.feed(hops[hop % 10], hop * len(hops[0]))
    return (time.process_time() - begin) / seconds


def live_reader(daemon: Daemon, taken: list[int]) -> None:
    """Takes every sample out of the ring, as a live view would, until the ring is closed."""
    ring = daemon._pump.ring
    assert ring is not None
    reader, hop = ring.reader(threading.current_thread().name), RATE_HZ // 10
    while not ring.closed:
        chunk = reader.read(hop, 0.5, fewest=hop)
        if chunk is not None:
            taken.append(len(chunk.counts))


def by_thread() -> dict[str, float]:
    """Processor seconds that each thread of this process has used; empty where the system does not tell."""
    if not hasattr(time, "pthread_getcpuclockid"):
        return {}
    return {
        thread.name: time.clock_gettime(time.pthread_getcpuclockid(thread.ident))
        for thread in threading.enumerate()
        if thread.ident is not None
    }


class Late:
    """Wraps ``Analysis._feed`` and keeps how long after a chunk's last sample its vectors were there."""

    def __init__(self) -> None:
        self.ms: list[float] = []
        self.frames = 0
        inner = Analysis._feed

        def feed(analysis: Analysis, chunk) -> None:  # type: ignore[no-untyped-def]
            inner(analysis, chunk)
            self.ms.append(1e3 * (time.monotonic() - chunk.mono_s))
            self.frames += len(chunk.counts)

        Analysis._feed = feed  # type: ignore[method-assign]
        self.undo = lambda: setattr(Analysis, "_feed", inner)


def main(seconds: float, block: int = BLOCKS[0]) -> None:
    print(f"blocks of {1e3 * block / RATE_HZ:g} ms")
    logging.basicConfig(level=logging.WARNING)
    clock, late = SystemClock(), Late()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        os.environ["REVMARK_RUNTIME"] = str(folder / "run")
        stand = stand_in(folder)
        create_store(stand.store_path, clock=clock, software="bench")
        ledger = Ledger.open(stand.store_path, clock=clock, software="bench")
        driver = Prepared(DriverOptions(), channel_plan(stand), clock=clock)
        driver.block = block
        daemon = Daemon(stand, ledger, driver, access_of(None), clock)
        marks: dict[str, float] = {}
        shares: dict[str, float] = {}
        taken: list[int] = []
        readers = [
            threading.Thread(target=live_reader, args=(daemon, taken), name=f"live reader {k}")
            for k in (1, 2, 3)
        ]

        def watch() -> None:
            time.sleep(1.0)
            for reader in readers:
                reader.start()
            time.sleep(1.0)  # start-up is not counted
            begin, wall, threads = time.process_time(), time.monotonic(), by_thread()
            time.sleep(seconds)
            took_s = time.monotonic() - wall
            marks["cpu"] = (time.process_time() - begin) / took_s
            marks["lost"] = daemon._board.read().lost_samples
            shares.update({k: (v - threads.get(k, 0.0)) / took_s for k, v in by_thread().items()})
            os.kill(os.getpid(), signal.SIGTERM)

        thread = threading.Thread(target=watch)
        thread.start()
        code = daemon.run(lambda _: None)
        for ended in (thread, *readers):
            ended.join()
        ledger.close()
        bare = bare_share(stand, 20.0)
    late.undo()
    ms = np.sort(late.ms)
    print(
        f"exit {code}; {late.frames} frames analysed of {driver.counters.samples}; lost {marks['lost']:.0f}"
    )
    print(f"three live readers took {sum(taken)} frames")
    share = 100 * marks["cpu"]
    print(
        f"daemon {share:.1f} % of a core, bare estimator {100 * bare:.1f} %, ratio {share / bare / 100:.2f}"
    )
    names = sorted((k for k in shares if shares[k] >= 5e-4), key=lambda k: -shares[k])
    print("by thread: " + ", ".join(f"{k} {100 * shares[k]:.2f} %" for k in names))
    print(
        f"block end to vectors: p50 {np.quantile(ms, 0.5):.1f} ms, p99 {np.quantile(ms, 0.99):.1f} ms, "
        f"max {ms[-1]:.1f} ms"
    )
    print(f"peak memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MiB")


if __name__ == "__main__":
    for size in BLOCKS:
        main(float(sys.argv[1]) if len(sys.argv) > 1 else 60.0, size)
