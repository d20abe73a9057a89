"""How much of a core the bare estimator takes: run as a script, prints, asserts nothing.

    python tests/bench/bench_vectors.py [seconds of signal]

16 channels (once-per-rev and 15 probes) of int16 at 51.2 kS/s in prepared blocks of 10 ms, fed one at a time
and ten at a time. Estimator: edges, angle of every sample, least squares of offset and 1X to 3X with
residual, covariance, extremes and flags. Beside it, in the same process on the same samples as float64:
numpy's rfft down each channel, and a plain copy.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from numpy.typing import NDArray

from daq.signal.blocks import BlockFitter
from daq.signal.shapes import ChannelParams, PulseParams

RATE_HZ = 51_200.0
CHANNELS = 16
TURN_SAMPLES = 1024  # 50 Hz
BLOCK = 512
LOOP_BLOCKS = 100  # a second that closes on itself: 50 whole turns
SCALE = (-32768, 32767)
VOLTS_PER_COUNT = 30 / 32768


def prepared() -> NDArray[np.int16]:
    """One second of counts that follows itself without a seam."""
    rng = np.random.default_rng(1)
    t = np.arange(LOOP_BLOCKS * BLOCK)
    angle = 2 * np.pi * (t + 0.37) / TURN_SAMPLES
    volts = np.empty((len(t), CHANNELS))
    volts[:, 0] = np.where((angle / (2 * np.pi)) % 1 < 0.04, -15.0, -8.0)
    for i in range(1, CHANNELS):
        volts[:, i] = -10 + 0.2 * np.cos(angle - i) + 0.05 * np.cos(2 * angle + i)
    volts += rng.normal(0, 0.004, volts.shape)
    return np.rint(volts / VOLTS_PER_COUNT).astype(np.int16)


def a_fitter() -> BlockFitter:
    probes = [
        ChannelParams(f"probe {i}", VOLTS_PER_COUNT, SCALE, 0.007874, 1, -20.0, -2.0)
        for i in range(1, CHANNELS)
    ]
    return BlockFitter(PulseParams(VOLTS_PER_COUNT, SCALE), probes, RATE_HZ, block_s=0.5)


def one_size(second: NDArray[np.int16], size: int, seconds: int) -> None:
    """Estimator, rfft and copy take turns second by second, so that all see the same machine."""
    blocks = [second[i : i + size].copy() for i in range(0, len(second), size)]
    floats = [b.astype(np.float64) for b in blocks]
    out = np.empty_like(floats[0])
    fitter, at, fits = a_fitter(), 0, 0
    used, spent = np.zeros(3), []
    for _ in range(seconds):
        began = time.process_time()
        for block in blocks:
            start = time.perf_counter()
            fits += len(fitter.feed(block, at))
            spent.append(time.perf_counter() - start)
            at += size
        used[0] += time.process_time() - began
        began = time.process_time()
        for block in floats:
            np.fft.rfft(block, axis=0)
        used[1] += time.process_time() - began
        began = time.process_time()
        for block in floats:
            np.copyto(out, block)
        used[2] += time.process_time() - began
    share = [f"{100 * x / seconds:.2f} %" for x in used]
    print(
        f"{1000 * size / RATE_HZ:5.0f} ms {share[0]:>10} {share[1]:>8} {share[2]:>8} "
        f"{used[1] / used[0]:15.2f} {1000 * np.percentile(spent, 99):6.2f} ms {fits}"
    )


def main() -> None:
    seconds = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    second = prepared()
    print(
        f"{CHANNELS} channels, {RATE_HZ / 1000:g} kS/s, int16, {seconds} s of signal; numpy {np.__version__}"
    )
    print(f"{'fed':>8} {'estimator':>10} {'rfft':>8} {'copy':>8} {'rfft/estimator':>15} {'feed p99':>9} fits")
    for size in (BLOCK, 10 * BLOCK):
        one_size(second, size, seconds)


if __name__ == "__main__":
    main()
