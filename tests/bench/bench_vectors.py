"""How much of a core vectors take beside numpy's rfft: run as a script, prints, asserts nothing.

    python tests/bench/bench_vectors.py [seconds of signal] [channels ...]

Once-per-rev and probes of int16 at 51.2 kS/s and 50 turns a second, 16 and 32 channels unless told. All runs
in this process with one thread, in turns, on the same samples; figures are processor time.

Stored vectors: one block of so many seconds -> offset, 1X to 3X, residual and covariance of all channels by
``Accumulator`` in float64, as ``measure`` makes them, with the extremes of each channel. "edges" takes in
finding the once-per-rev edges and the turns; "measure" is the whole of it, scatter between parts, lines
and flags too. Beside them: rfft of the same block as float64, the faster of along axis 0 as it lies and along
the rows of a channel-major copy (not counted), and a plain copy of the float64 block. Ratios are of
throughput: above 1 the vectors are faster than rfft.

Live: ``BlockFitter`` fed with prepared blocks of 10 ms and of 0.1 s, edges and flags included.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import sys
import time
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2]))

import numpy as np
from numpy.typing import NDArray

from daq.signal.blocks import BlockFitter
from daq.signal.edges import edges_in
from daq.signal.health import RangeScan, full_scales
from daq.signal.measure import measure
from daq.signal.revolutions import Turns, turns_of
from daq.signal.shapes import ChannelParams, PulseParams
from daq.signal.vectors import Accumulator, stretch_pieces

RATE_HZ = 51_200.0
TURN_SAMPLES = 1024  # 50 Hz
BLOCK = 512
LOOP_BLOCKS = 100  # a second that closes on itself: 50 whole turns
BLOCKS_S = (0.1, 0.5, 8.0)
SCALE = (-32768, 32767)
VOLTS_PER_COUNT = 30 / 32768
PULSE = PulseParams(VOLTS_PER_COUNT, SCALE)


def prepared(channels: int, frames: int = LOOP_BLOCKS * BLOCK) -> NDArray[np.int16]:
    """Counts of so many samples; a second of them follows itself without a seam."""
    rng = np.random.default_rng(1)
    t = np.arange(frames)
    angle = 2 * np.pi * (t + 0.37) / TURN_SAMPLES
    volts = np.empty((len(t), channels))
    turn = (angle / (2 * np.pi)) % 1
    volts[:, 0] = -8.0 - 7.0 * np.clip(np.minimum(turn, 0.04 - turn) * 250, 0, 1)
    for i in range(1, channels):
        volts[:, i] = -10 + 0.2 * np.cos(angle - i) + 0.05 * np.cos(2 * angle + i)
    volts += rng.normal(0, 0.004, volts.shape)
    return np.rint(volts / VOLTS_PER_COUNT).astype(np.int16)


def probes(channels: int) -> list[ChannelParams]:
    return [
        ChannelParams(f"probe {i}", VOLTS_PER_COUNT, SCALE, 0.007874, 1, -20.0, -2.0)
        for i in range(1, channels)
    ]


def spent(seconds: float, **works: Callable[[], object]) -> dict[str, float]:
    """Processor time of each of ``works`` once; they take turns for so many seconds in all, so that all see
    the same machine."""
    used, rounds, began = dict.fromkeys(works, 0.0), 0, time.perf_counter()
    while rounds < 3 or time.perf_counter() - began < seconds:
        for name, work in works.items():
            start = time.process_time()
            work()
            used[name] += time.process_time() - start
        rounds += 1
    return {name: total / rounds for name, total in used.items()}


def vectors(counts: NDArray[np.int16], turns: Turns, scales: list[tuple[int, int]]) -> object:
    """Offset, orders, residual and covariance of all channels over the good turns."""
    sums, scan = Accumulator(), RangeScan(scales)
    for stretch, a, b in stretch_pieces(turns):
        sums.add_turns(stretch, a, [counts[a:b]])
        scan.add(counts[a:b])
    return sums.solve()


def stored(channels: int, seconds: float) -> None:
    print(f"\nstored vectors, {channels} channels; ms a block")
    print(
        f"{'block':>6} {'vectors':>8} {'+ edges':>8} {'measure':>8} {'rfft':>8} {'copy':>7}"
        f"  rfft/vectors  / + edges  copy/vectors"
    )
    wired = probes(channels)
    scales = full_scales(wired)
    for block_s in BLOCKS_S:
        counts = prepared(channels, round(block_s * RATE_HZ) + TURN_SAMPLES // 2)
        turns = turns_of(edges_in(counts[:, 0], PULSE, RATE_HZ)[1])
        assert vectors(counts, turns, scales) is not None
        good = int(turns.first_samples[-1] - turns.first_samples[0])
        assert good == round(block_s * RATE_HZ), "rfft must not be given a length that does not suit it"
        block = counts[:good].astype(np.float64)
        rows, out = np.ascontiguousarray(block.T), np.empty_like(block)
        used = spent(
            seconds,
            vectors=lambda c=counts, t=turns: vectors(c, t, scales),
            edges=lambda c=counts: vectors(c, turns_of(edges_in(c[:, 0], PULSE, RATE_HZ)[1]), scales),
            measure=lambda c=counts: measure(c, PULSE, wired, RATE_HZ),
            axis0=lambda b=block: np.fft.rfft(b, axis=0),
            rows=lambda r=rows: np.fft.rfft(r, axis=1),
            copy=lambda b=block, o=out: np.copyto(o, b),
        )
        rfft = min(used["axis0"], used["rows"])
        print(
            f"{good / RATE_HZ:4.1f} s {1e3 * used['vectors']:8.2f} {1e3 * used['edges']:8.2f} "
            f"{1e3 * used['measure']:8.2f} {1e3 * rfft:8.2f} {1e3 * used['copy']:7.2f} "
            f"{rfft / used['vectors']:13.2f} {rfft / used['edges']:10.2f} "
            f"{used['copy'] / used['vectors']:12.2f}"
        )


def live(channels: int, seconds: float) -> None:
    print(f"\nlive, {channels} channels; share of a core")
    print(f"{'fed':>7} {'estimator':>10} {'rfft':>8} {'copy':>8} {'rfft/estimator':>15} {'feed p99':>9} fits")
    second = prepared(channels)
    for size in (BLOCK, 10 * BLOCK):
        blocks = [second[i : i + size].copy() for i in range(0, len(second), size)]
        floats = [b.astype(np.float64) for b in blocks]
        rows, out = [np.ascontiguousarray(b.T) for b in floats], np.empty_like(floats[0])
        fitter = BlockFitter(PULSE, probes(channels), RATE_HZ, block_s=0.5)
        fed, took, fits = [0], [], [0]

        def feed(
            blocks: list[NDArray[np.int16]] = blocks,
            fitter: BlockFitter = fitter,
            fed: list[int] = fed,
            took: list[float] = took,
            fits: list[int] = fits,
        ) -> None:
            for block in blocks:
                start = time.process_time()
                fits[0] += len(fitter.feed(block, fed[0]))
                took.append(time.process_time() - start)
                fed[0] += len(block)

        used = spent(
            seconds,
            feed=feed,
            axis0=lambda f=floats: [np.fft.rfft(b, axis=0) for b in f],
            rows=lambda r=rows: [np.fft.rfft(b, axis=1) for b in r],
            copy=lambda f=floats, o=out: [np.copyto(o, b) for b in f],
        )
        rfft = min(used["axis0"], used["rows"])
        print(
            f"{1000 * size / RATE_HZ:4.0f} ms {100 * used['feed']:8.2f} % {100 * rfft:6.2f} % "
            f"{100 * used['copy']:6.2f} % {rfft / used['feed']:15.2f} "
            f"{1000 * np.percentile(took, 99):6.2f} ms {fits[0]}"
        )


def main() -> None:
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 3.0
    sizes = [int(size) for size in sys.argv[2:]] or [16, 32]
    print(
        f"{RATE_HZ / 1000:g} kS/s, int16, {TURN_SAMPLES} samples a turn; numpy {np.__version__}, one thread"
    )
    for channels in sizes:
        stored(channels, seconds)
        live(channels, seconds)


if __name__ == "__main__":
    main()
