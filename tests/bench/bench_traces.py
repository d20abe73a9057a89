"""What tracing costs beside the live blocks: processor time of a ramp and of a dwell, as shares.

Run it: python tests/bench/bench_traces.py. Sixteen probes at 51.2 kS/s, int32, chunks of 0.1 s. A ramp of
300 r/min a second from 600 to 3600 r/min is traced all the time, a dwell at 3000 r/min never. Reference in
the same process: the same chunks through ``BlockFitter``, edges included.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Callable
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2]))

from daq.ring import Chunk
from daq.signal.blocks import BlockFitter
from daq.signal.edges import EdgeFinder
from daq.signal.shapes import ChannelParams, Floats, PulseParams
from daq.traces import Tracer

RATE, PROBES, STEP = 51_200.0, 16, 5120
VOLTS, SCALE = 30.0 / 2**23, (-(2**23), 2**23 - 1)
PULSE = PulseParams(VOLTS, SCALE)
CHANNELS = tuple(ChannelParams(f"probe {i}", VOLTS, SCALE, 7.874e-3) for i in range(PROBES))


def chunks(turns_at: Callable[[Floats], Floats], seconds: float) -> list[Chunk]:
    rng, found = np.random.default_rng(1), []
    for first in range(0, int(seconds * RATE), STEP):
        made = turns_at(np.arange(first, first + STEP) / RATE) + 0.3
        u = (made + 0.5) % 1 - 0.5
        volts = np.empty((STEP, 1 + PROBES))
        volts[:, 0] = -8 - 7 * (np.clip(u / 0.01 + 0.5, 0, 1) - np.clip((u - 0.06) / 0.01 + 0.5, 0, 1))
        volts[:, 1:] = (-10 + 0.15 * np.cos(2 * np.pi * made))[:, None]
        volts[:, 1:] += 0.002 * rng.standard_normal((STEP, PROBES))
        found.append(Chunk(np.rint(volts / VOLTS).astype(np.int32), 0, first, RATE, 0.0, 0))
    return found


def blocks_s(fed: list[Chunk]) -> float:
    fitter = BlockFitter(PULSE, CHANNELS, RATE, block_s=0.5)
    begun = time.process_time()
    for chunk in fed:
        fitter.feed(chunk.counts, chunk.first_sample)
    return time.process_time() - begun


def traces_s(fed: list[Chunk]) -> tuple[float, int]:
    finder, tracer = EdgeFinder(PULSE, RATE), Tracer(CHANNELS, ("um",) * PROBES, RATE)
    edges = [finder.feed(np.ascontiguousarray(c.counts[:, 0]), c.first_sample) for c in fed]
    begun = time.process_time()
    for chunk, found in zip(fed, edges, strict=True):
        tracer.feed(chunk, found)
    tracer.stop()
    spent = time.process_time() - begun
    return spent, sum(len(t.points) for t in tracer.take(0, int))


def main() -> None:
    for name, turns_at in (("ramp", lambda t: 10 * t + 2.5 * t**2), ("dwell", lambda t: 50 * t)):
        fed = chunks(turns_at, 10.0)
        blocks = min(blocks_s(fed) for _ in range(3))
        (traces, steps) = min(traces_s(fed) for _ in range(3))
        print(
            f"{name}: blocks {blocks:.3f} s, traces {traces:.3f} s of processor for 10 s of 16 x 51.2 kS/s: "
            f"ratio {traces / blocks:.3f}; {steps} steps; {100 * traces / 10:.2f} % of a core"
        )


if __name__ == "__main__":
    main()
