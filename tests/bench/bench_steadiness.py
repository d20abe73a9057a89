"""How well steady is told from unsteady, and what judging costs. Prints; asserts nothing.

    python tests/bench/bench_steadiness.py [RECORDS [FIRST]]

RECORDS (200) steady and as many unsteady records of tests/signal/records.py through blocks and watch, as the
analysis does it: how many are tagged, and when; the smallest beat that is caught; the time of a judgement
beside the fit of its block at 16 probes of 51.2 kS/s.
"""

from __future__ import annotations

import sys
import time
from dataclasses import replace
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "signal"))

from records import UNSTEADY, Record, steady, unsteady, verdicts

from config.steadiness import PRESETS
from daq.signal.blocks import BlockFitter
from daq.signal.shapes import BlockFit, ChannelParams, PulseParams
from daq.signal.steadiness import Probe, block_seconds
from daq.signal.watcher import SteadyWatch

SMALL = PRESETS["small"]
PROBES, RATE_HZ, SECONDS = 16, 51_200, 9


def steady_ones(count: int, first: int) -> None:
    excess, late = [], 0
    for k in range(first, first + count):
        record = steady(k)
        record = replace(record, seconds=record.needs_s + 4.0)
        at = next((at for at, v in verdicts(record, SMALL, hop_s=0.1) if v.steady), np.inf)
        excess.append(at - record.needs_s)
        late += excess[-1] > 2.0 + 1 / record.speed_hz
    median, p95 = np.percentile(excess, [50, 95])
    print(f"steady, signal-to-noise 4 to 1000: {count - late} of {count} tagged within need + 2 s")
    print(f"    beyond need: median {median:.2f} s, 95 % {p95:.2f} s, most {max(excess):.2f} s")


def unsteady_ones(count: int, first: int) -> None:
    tagged = dict.fromkeys(UNSTEADY, 0)
    for k in range(first, first + count):
        record = unsteady(k)
        if any(v.steady for _, v in verdicts(record, SMALL)):
            tagged[record.kind] += 1
            print(f"    tagged: {record}")
    print(f"unsteady: {sum(tagged.values())} of {count} tagged {tagged}")


def smallest_beat() -> None:
    """Share of the limit from which a to-and-fro beat is never tagged, at the phase that hides it best."""
    for ratio in (4, 20, 100):
        for windows in (0.5, 1.0, 2.0):
            quiet = Record("beat", 41.7, (20 + 0j, 30j), 20 / ratio, 12.0, 1, beat_s=3.0 * windows)
            caught = next(
                (
                    share
                    for share in np.arange(0.3, 1.5, 0.1)
                    if not any(
                        v.steady
                        for phase in np.arange(0, 6, 1.0)
                        for _, v in verdicts(
                            replace(quiet, beat=0.05 * 20 * share, phase=float(phase)), SMALL
                        )
                    )
                ),
                np.inf,
            )
            print(f"    signal-to-noise {ratio}, period {windows} windows: from {caught:.1f} of the limit")


def cost() -> None:
    channels = tuple(ChannelParams(f"probe {i}", 2e-6, (-(2**23), 2**23), 0.007874) for i in range(PROBES))
    pulse = PulseParams(2e-6, (-(2**23), 2**23))
    fitter = BlockFitter(pulse, channels, RATE_HZ, block_s=block_seconds(SMALL))
    rng = np.random.default_rng(1)
    turns = np.arange(SECONDS * RATE_HZ) * 41.7 / RATE_HZ
    counts = np.empty((len(turns), 1 + PROBES), np.int32)
    counts[:, 0] = -4e6 - 3.5e6 * np.clip((0.1 - abs(turns % 1 - 0.5)) / 0.02, 0, 1)
    um = 10 * np.cos(2 * np.pi * turns)[:, None] + rng.normal(0, 0.5, (len(turns), PROBES))
    counts[:, 1:] = np.rint((-10 + um * 0.007874) * 5e5)
    fits: list[BlockFit] = []
    began = time.process_time()
    for first in range(0, len(counts), RATE_HZ // 10):
        fits += fitter.feed(counts[first : first + RATE_HZ // 10], first)
    fitting = (time.process_time() - began) / len(fits)
    watch = SteadyWatch(SMALL, [Probe(c.name, "displacement") for c in channels])
    began = time.process_time()
    for fit in fits:
        watch.take(fit)
    judging = (time.process_time() - began) / len(fits)
    share = 100 * judging / block_seconds(SMALL)
    print(
        f"cost, {PROBES} probes: a block's fit {1e3 * fitting:.2f} ms, its judgement {1e3 * judging:.2f} ms"
    )
    print(f"    {judging / fitting:.2f} of the fit; {share:.2f} % of a core")


def main() -> None:
    given = [int(a) for a in sys.argv[1:3]]
    count, first = given + [200, 0][len(given) :]
    cost()
    steady_ones(count, first)
    unsteady_ones(count, first)
    print("smallest depth (from the mean) of a to-and-fro beat that is never tagged")
    smallest_beat()


if __name__ == "__main__":
    main()
