"""Lines that are no order: whirl below the speed, hum, a neighbour machine. Limits of issue 4, item 1."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.signal
from window_kit import Window, covariances, first_orders, inside

from daq.signal.folding import Fold
from daq.signal.revolutions import turns_between
from daq.signal.rhythm import Mended
from daq.signal.shapes import Surroundings


def line(w: Window, order: float, size: float, phases: np.ndarray) -> np.ndarray:
    """``size`` at ``order`` times the speed with another phase in each probe, (frames, probes), um."""
    return size * np.cos(2 * np.pi * order * w.angle()[:, None] + phases)


@pytest.mark.parametrize(
    ("order", "per_turn"), [(0.3, 61.3), (0.37, 256.0), (0.43, 130.7), (0.47, 40.1), (0.5, 300.3)]
)
def test_a_subsynchronous_line_as_large_as_1x(order: float, per_turn: float) -> None:
    """64 revolutions, signal-to-noise 100: within 0.3 % and 0.2 degrees, found, named; left in the model it
    would cost up to 1/(64 sin(pi (1 - order))) = 1.6 to 1.9 % (METHODS 8.6)."""
    rng = np.random.default_rng(round(1000 * order))
    w = Window(per_turn=per_turn, turns=64, harmonics={2: 3 + 0j, 3: 2j})
    counts = w.counts(line(w, order, 6.0, rng.uniform(0, 6.28, 40)) + rng.normal(0, 0.06, (w.frames, 40)))
    m = w.measured(counts)
    ratio = first_orders(m) / w.vector
    assert np.abs(np.abs(ratio) - 1).max() < 0.003
    assert np.degrees(np.abs(np.angle(ratio))).max() < 0.2
    assert len(m.lines) == 40
    for found in m.lines:
        assert found.order == pytest.approx(order, abs=2e-4)
        assert found.amplitude == pytest.approx(6.0, rel=0.005)
    assert set(m.flags) == {f"subsynchronous:p{i}" for i in range(40)}
    assert np.mean(inside(m, w.vector)) > 0.8  # of 40, expected 0.95
    # the residual is about the noise again, and the region not larger than noise alone would make it
    assert 0.055 < m.levels[0].residual_sd < 0.1
    alone = np.sqrt(4 * 0.06**2 / (per_turn * 64))
    assert np.sqrt(np.mean(np.trace(covariances(m), axis1=1, axis2=2))) < 1.5 * alone


def test_two_lines_and_pulses_that_did_not_come() -> None:
    """Lines keep their phase over turns that are left out."""
    rng = np.random.default_rng(2)
    w = Window(per_turn=100.3, turns=80)
    both = line(w, 0.42, 4.0, np.array([1.0, 2.0])) + line(w, 1.37, 3.0, np.array([0.0, 2.0]))
    counts = w.counts(both + rng.normal(0, 0.05, (w.frames, 2)))
    for turn in (20, 41):  # a scratch: a second pulse half a turn after the first
        middle = round((turn + 0.5 - w.start) * 100.3)
        counts[middle - 3 : middle + 3, 0] = counts[:, 0].min()
    m = w.measured(counts)
    assert m.doubles == 2
    assert sorted({round(found.order, 2) for found in m.lines}) == [0.42, 1.37]
    assert np.abs(first_orders(m) / w.vector - 1).max() < 0.003


def test_a_line_in_one_probe_is_told_of_that_one() -> None:
    rng = np.random.default_rng(3)
    w = Window(per_turn=100.3, turns=64)
    noise = rng.normal(0, 0.2, (w.frames, 3))
    noise[:, 1:2] += line(w, 0.44, 1.0, np.zeros(1))
    m = w.measured(w.counts(noise))
    assert [(found.channel, round(found.order, 2)) for found in m.lines] == [("p1", 0.44)]
    assert m.flags == ()  # 1 um under 6 um of 1X is not strong


@pytest.mark.parametrize("turns", [12, 16, 64, 300])
def test_noise_has_no_lines(turns: int) -> None:
    """White, with a memory of a turn, and falling as 1/f: nothing is found in 3 x 40 probes."""
    rng = np.random.default_rng(turns)
    w = Window(per_turn=33.7, turns=turns, stamped=True)
    white = rng.normal(size=(w.frames + 300, 40))
    keep = np.exp(-1 / 33.7)
    red = scipy.signal.lfilter([1], [1, -keep], white, axis=0)[300:]
    spectrum = np.fft.rfft(white[300:], axis=0)
    spectrum[1:] /= np.sqrt(np.arange(1, len(spectrum)))[:, None]
    spectrum[0] = 0
    pink = np.fft.irfft(spectrum, n=w.frames, axis=0)
    for noise in (white[300:], red, pink / pink.std()):
        m = w.measured(w.counts(noise))
        assert m.lines == ()
        assert not [f for f in m.flags if f.startswith(("near", "sub"))]


def test_a_line_nearer_than_two_over_t_is_flagged_and_widens() -> None:
    """64 turns at 50 Hz last 1.28 s: 2/T is 1.56 Hz. 1 um at 51.0 Hz cannot be told from 1X, at 52.5 Hz it
    can."""
    rng = np.random.default_rng(5)
    w = Window(per_turn=128.3, turns=64)
    noise, phases = rng.normal(0, 0.1, (w.frames, 20)), rng.uniform(0, 6.28, 20)
    near = w.measured(w.counts(noise + line(w, 51 / 50, 1.0, phases)))
    assert set(near.flags) == {f"near_neighbour:p{i}" for i in range(20)}
    assert inside(near, w.vector).all()
    assert np.abs(first_orders(near) - w.vector).max() > 0.1
    apart = w.measured(w.counts(noise + line(w, 52.5 / 50, 1.0, phases)))
    assert apart.flags == ()
    assert len(apart.lines) == 20
    assert np.abs(first_orders(apart) - w.vector).max() < 0.02
    quiet = w.measured(w.counts(noise))
    assert (quiet.flags, quiet.lines) == ((), ())


def test_hum_near_an_order_is_taken_from_its_other_multiples() -> None:
    """Mains 50.5 Hz, 49.9 Hz of speed over 2.56 s: 1X is nearer than 2/T = 0.78 Hz. 3 x 50.5 lies 1.8 Hz from
    3X and shows what hum there is."""
    rng = np.random.default_rng(6)
    w = Window(per_turn=128.3, turns=128, rpm=49.9 * 60)
    mains = 50.5 / 49.9
    noise, phases = rng.normal(0, 0.05, (w.frames, 20)), rng.uniform(0, 6.28, 20)
    hum = line(w, mains, 0.5, phases) + line(w, 3 * mains, 0.5, phases)
    m = w.measured(w.counts(noise + hum), surroundings=Surroundings(mains_hz=50.5))
    assert set(m.flags) == {f"near_mains:p{i}" for i in range(20)}
    assert inside(m, w.vector).all()
    first = m.vector("p0", 1)
    third = m.vector("p0", 3)
    assert first is not None
    assert third is not None
    assert np.sqrt(first.var_re) == pytest.approx(0.5 / 2**0.5, rel=0.1)
    assert np.sqrt(third.var_re) < 0.01  # 3X is told apart
    unknown = w.measured(w.counts(noise + hum))
    assert not [f for f in unknown.flags if f.startswith("near_mains")]


def test_hum_that_shows_nowhere_still_widens_by_the_floor() -> None:
    rng = np.random.default_rng(7)
    w = Window(per_turn=128.3, turns=64)
    counts = w.counts(rng.normal(0, 0.05, (w.frames, 10)))
    told = w.measured(counts, surroundings=Surroundings(mains_hz=50.3))
    quiet = w.measured(counts)
    assert {f.partition(":")[0] for f in told.flags} == {"near_mains"}
    wider = np.trace(covariances(told), axis1=1, axis2=2) / np.trace(covariances(quiet), axis1=1, axis2=2)
    assert np.sqrt(wider.mean()) > 1.5
    assert np.sqrt(wider.mean()) < 4


def test_a_known_neighbour_near_1x_and_one_far_away() -> None:
    rng = np.random.default_rng(8)
    w = Window(per_turn=128.3, turns=64)
    counts = w.counts(rng.normal(0, 0.05, (w.frames, 2)))
    near = w.measured(counts, surroundings=Surroundings(neighbours_hz=(50.4, 33.0)))
    assert near.flags == ("near_neighbour:p0", "near_neighbour:p1")
    far = w.measured(counts, surroundings=Surroundings(mains_hz=60.0, neighbours_hz=(41.0,)))
    assert far.flags == ()
    assert far.vectors == w.measured(counts).vectors


def test_a_window_too_short_to_search_still_knows_its_surroundings() -> None:
    """8 turns at 50 Hz: 2/T is 12.5 Hz, so mains at 60 Hz cannot be told apart, whatever it is."""
    w = Window(per_turn=128.3, turns=8)
    m = w.measured(w.counts(np.zeros((w.frames, 1))), surroundings=Surroundings(60.0, (38.0,)))
    assert m.flags == ("near_mains:p0", "near_neighbour:p0")


def test_a_line_in_a_window_of_1500_turns_is_named_and_averages_out() -> None:
    """Only the first 1024 turns are searched; over 1500 the line costs at most 1/1500 of it (METHODS 8.6)."""
    rng = np.random.default_rng(10)
    w = Window(per_turn=24.3, turns=1500, stamped=True)
    m = w.measured(w.counts(line(w, 0.43, 6.0, np.arange(3.0)) + rng.normal(0, 0.3, (w.frames, 3))))
    assert [round(found.order, 3) for found in m.lines] == [0.43] * 3
    assert set(m.flags) >= {"subsynchronous:p0", "subsynchronous:p1", "subsynchronous:p2"}
    assert np.abs(first_orders(m) / w.vector - 1).max() < 0.003
    assert inside(m, w.vector).all()


def test_the_same_bits_again_with_lines() -> None:
    rng = np.random.default_rng(9)
    w = Window(per_turn=77.7, turns=64)
    counts = w.counts(line(w, 0.41, 5.0, np.arange(3.0)) + rng.normal(0, 0.1, (w.frames, 3)))
    assert w.measured(counts) == w.measured(counts.copy())


def test_a_turn_with_fewer_samples_than_bins_folds_to_those_it_has() -> None:
    """Twenty turns of 40 samples, one of 5, twenty of 40, and a probe that counts samples: every bin's mean
    is the middle of its samples, no bin is empty, and no sample is left out or taken twice."""
    mended = Mended()
    mended.add(np.cumsum([0.0, *[40.0] * 20, 5.0, *[40.0] * 20]))
    fold = Fold(turns_between(mended), 2)
    samples = np.arange(1605)
    fold.add(np.stack([samples, samples], axis=1), 0)
    rows = fold.rows()
    assert rows is not None
    assert rows.size.min() == 1
    assert rows.size.sum() == 1605
    assert len(rows.size) == 40 * 16 + 5
    first = np.cumsum(rows.size) - rows.size
    middle = first + (rows.size - 1) / 2
    assert rows.values[:, 0] == pytest.approx(middle - middle.mean(), abs=1e-9)
