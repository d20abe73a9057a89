"""Angles carried from the nodes of tiles against numpy's cosines and scipy's lstsq at every sample."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from daq.signal.basis import TILES, basis, cos_sin, rows_at_turns, tile_frames
from daq.signal.revolutions import Turns, angles_at, turns_of
from daq.signal.shapes import Floats
from daq.signal.vectors import Accumulator, stretch_pieces

ROOT = Path(__file__).resolve().parents[2]


def shaft(per_turn: float, turns: int, jitter: float, ramp: float, seed: int) -> Turns:
    """Turns whose lengths change by ``ramp`` over all of them and scatter by ``jitter``."""
    rng = np.random.default_rng(seed)
    lengths = per_turn * (1 + ramp * np.arange(turns) / turns) * (1 + jitter * rng.normal(size=turns))
    found = turns_of(317.31 + np.concatenate(([0.0], np.cumsum(lengths))))
    assert found.good.all()
    return found


def design(turns: Turns, start: int, stop: int, orders: tuple[int, ...]) -> Floats:
    """(n, 1 + 2 orders) by numpy's own cosine and sine at the angle of every sample."""
    angle = angles_at(turns.edges, np.arange(start, stop, dtype=np.float64))
    rows = [np.ones(stop - start)]
    for k in orders:
        rows += [np.cos(k * angle), np.sin(k * angle)]
    return np.stack(rows, axis=1)


def span(turns: Turns) -> tuple[int, int]:
    return int(turns.first_samples[0]), int(turns.first_samples[-1])


@settings(max_examples=40, deadline=None)
@given(
    per_turn=st.floats(40.0, 3000.0),
    jitter=st.floats(0.0, 0.003),
    ramp=st.floats(-0.2, 0.2),
    orders=st.sampled_from([(1,), (1, 2, 3), (1, 2, 3, 5)]),
    step=st.sampled_from([64, 192, 1024]),
    cut=st.integers(0, 500),
    seed=st.integers(0, 99),
)
def test_products_are_those_of_every_sample(
    per_turn: float, jitter: float, ramp: float, orders: tuple[int, ...], step: int, cut: int, seed: int
) -> None:
    """Whatever the turns, also where a tile holds the end of one: off by less than 1e-10 of the counts."""
    turns = shaft(per_turn, 8, jitter, ramp, seed)
    start, stop = span(turns)
    start, stop = start + cut % 37, stop - cut % 53
    a = design(turns, start, stop, orders)
    y = np.random.default_rng(seed).normal(0, 1, (stop - start, 2))
    rows = rows_at_turns(turns, start, stop, orders, step)
    got = np.zeros((a.shape[1], 2))
    for at in range(0, stop - start, step):
        held = min(step, stop - start - at)
        frames = -(-held // TILES[0]) * TILES[0]
        memory = np.full((step + rows.room, 2), np.nan)
        memory[:frames] = 0.0
        memory[:held] = y[at : at + held]
        got += rows.times(at, frames, memory)
    n = stop - start
    assert np.abs(got - a.T @ y).max() < 1e-10 * n
    assert np.abs(rows.gram - a.T @ a).max() < 1e-9 * n


@settings(max_examples=20, deadline=None)
@given(per_turn=st.floats(60.0, 2500.0), jitter=st.floats(0.0, 0.002), seed=st.integers(0, 99))
def test_vectors_are_scipys_to_a_billionth(per_turn: float, jitter: float, seed: int) -> None:
    turns = shaft(per_turn, 12, jitter, 0.05, seed)
    start, stop = span(turns)
    rng = np.random.default_rng(seed)
    a = design(turns, start, stop, (1, 2, 3))
    true = np.vstack((np.full(3, -9000.0), rng.normal(0, 800, (6, 3))))
    counts = np.rint(a @ true + rng.normal(0, 20, (stop - start, 3))).astype(np.int16)
    sums = Accumulator()
    half = (stop - start) // 2
    sums.add_turns(turns, start, [counts[:half], counts[half:]])
    fit = sums.solve()
    assert fit is not None
    want, rss, *_ = scipy.linalg.lstsq(a, counts.astype(np.float64))
    found = np.vstack((fit.offset, *(r for v in fit.values for r in (v.real, v.imag))))
    size = np.abs(fit.values).max()
    assert np.abs(found - want).max() < 1e-9 * size
    assert fit.residual_sd == pytest.approx(np.sqrt(rss / (len(a) - 7)), rel=1e-8)
    white = np.linalg.inv(a.T @ a)[1:3, 1:3]
    assert fit.cov[0, 0] == pytest.approx(white * fit.residual_sd[0] ** 2, rel=1e-7, abs=1e-9 * white[0, 0])


@pytest.mark.parametrize(("kind", "gap"), [(np.int16, -10_923), (np.int32, -2_796_203)])
def test_ten_volts_of_gap_cost_a_small_vector_no_digits(kind: type, gap: int) -> None:
    """16 and 24 bits, -10 V of 30 V over a 1X of three counts: what lstsq says of the deviation alone."""
    turns = shaft(1031.7, 20, 1e-4, 0.01, 5)
    start, stop = span(turns)
    a = design(turns, start, stop, (1, 2, 3))
    rng = np.random.default_rng(6)
    deviation = np.rint(a[:, 1:3] @ [[2.0], [-2.2]] + rng.normal(0, 1.5, (stop - start, 1)))
    sums = Accumulator()
    sums.add_turns(turns, start, [(deviation + gap).astype(kind)])
    fit = sums.solve()
    assert fit is not None
    want, rss, *_ = scipy.linalg.lstsq(a, deviation)
    assert abs(fit.value(1)[0] - complex(want[1, 0], want[2, 0])) < 3e-10
    assert fit.offset[0] - gap == pytest.approx(want[0, 0], abs=1e-8)
    assert fit.residual_sd[0] == pytest.approx(np.sqrt(rss[0] / (len(a) - 7)), rel=1e-9)


def test_full_scale_squares_are_summed_exactly() -> None:
    """Every sample at the end of 16 bits: 2^30 each, no rounding; Python's integers are the reference."""
    turns = shaft(1000.0, 40, 0.0, 0.0, 1)
    start, stop = span(turns)
    counts = np.where(np.arange(stop - start) % 3, -32768, 32767).astype(np.int16)[:, None]
    sums = Accumulator()
    sums.add_turns(turns, start, [counts])
    fit = sums.solve()
    values = [int(v) for v in counts[:, 0]]
    n, total, square = len(values), sum(values), sum(v * v for v in values)
    assert fit is not None
    assert fit.ac_rms[0] ** 2 == pytest.approx((n * square - total**2) / n**2, rel=1e-14)


def test_tiles_are_as_long_as_their_bound_allows() -> None:
    # a = pi * frames * highest / samples per turn; 2 (a/2)^8 / 8! must stay below 3e-11 (module's text)
    assert [tile_frames(n, 3) for n in (1024.0, 2048.0, 512.0, 256.0)] == [32, 64, 16, None]
    for per_turn, highest in ((1024.0, 3), (5000.0, 1), (470.0, 3)):
        frames = tile_frames(per_turn, highest)
        assert frames is not None
        assert 2 * (np.pi * frames * highest / per_turn / 2) ** 8 / 40320 < 3.1e-11


def test_cosine_and_sine_are_those_of_the_library() -> None:
    u = np.concatenate((np.random.default_rng(9).uniform(0, 1, 100_000), np.arange(2049) / 2048))
    cos, sin = cos_sin(u)
    assert np.abs(cos - np.cos(2 * np.pi * u)).max() < 1e-15
    assert np.abs(sin - np.sin(2 * np.pi * u)).max() < 1e-15


def test_multiples_by_recurrence_are_cosines_and_sines() -> None:
    u = np.random.default_rng(3).uniform(0, 1, 500)
    rows = basis(u, (1, 3, 8))
    for i, k in enumerate((1, 3, 8)):
        assert rows[1 + 2 * i] == pytest.approx(np.cos(2 * np.pi * k * u), abs=1e-14)
        assert rows[2 + 2 * i] == pytest.approx(np.sin(2 * np.pi * k * u), abs=1e-14)


# --- the same bits ---------------------------------------------------------------------------------------


def bits() -> str:
    """Digest of all bits of what ``measure`` says of 20 channels, 24 and 16 bits, tiles and single angles."""
    from daq.signal.measure import measure
    from daq.signal.shapes import ChannelParams, PulseParams

    digest = hashlib.sha256()
    for kind, per_turn, top in (
        (np.int16, 1024.7, 2**15),
        (np.int32, 1900.3, 2**23),
        (np.int16, 90.1, 2**15),
    ):
        rng = np.random.default_rng(8)
        turn = np.arange(40_000) / per_turn
        volts = (
            -10 + 0.3 * np.cos(2 * np.pi * turn[:, None] - np.arange(20)) + rng.normal(0, 0.02, (40_000, 20))
        )
        volts[:, 0] = np.where(turn % 1 < 0.06, -15.0, -8.0)
        counts = np.rint(volts / 30 * top).astype(kind)
        scale = (-top, top - 1)
        probes = [ChannelParams(f"p{i}", 30 / top, scale, 0.007874) for i in range(1, 20)]
        m = measure(counts, PulseParams(30 / top, scale), probes, 51_200.0)
        assert len(m.vectors) == 57
        for v in m.vectors:
            digest.update(np.array([v.value, v.var_re, v.var_im, v.cov, v.noise_floor]).tobytes())
        for level in m.levels:
            figures = (level.gap_v, level.residual_sd, level.peak_to_peak, level.ac_rms)
            digest.update(np.array(figures).tobytes())
    return digest.hexdigest()


def elsewhere(threads: str) -> str:
    """``bits`` of another process whose linear algebra may use so many threads."""
    code = "from tests.signal.test_basis import bits; print(bits())"
    names = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS")
    env = {**os.environ, **dict.fromkeys(names, threads), "PYTHONPATH": str(ROOT)}
    done = subprocess.run(
        [sys.executable, "-c", code],
        cwd=ROOT,
        env=env,
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    return done.stdout.strip()


def test_another_process_with_other_threads_measures_the_same_bits() -> None:
    assert elsewhere("1") == elsewhere("2") == elsewhere("8") == bits()


def test_memory_that_was_used_before_changes_no_bit() -> None:
    """The sums of one window do not hang on what the accumulator's memory held, or where it lies."""
    turns = shaft(1024.0, 30, 1e-3, 0.0, 2)
    counts = np.random.default_rng(1).integers(-9000, 9000, (turns.first_samples[-1], 7)).astype(np.int16)

    def sums(odd: int) -> NDArray[np.complex128]:
        room = np.empty(counts.nbytes + 64, np.int8)
        moved = room[2 * odd : 2 * odd + counts.nbytes].view(np.int16).reshape(counts.shape)
        moved[:] = counts
        made = Accumulator()
        for stretch, a, b in stretch_pieces(turns):
            made.add_turns(stretch, a, [moved[a:b]])
        fit = made.solve()
        assert fit is not None
        return fit.values

    assert all((sums(odd) == sums(0)).all() for odd in (1, 5, 16))
