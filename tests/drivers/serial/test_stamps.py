"""Edges stamped by hardware: drawn as a pulse, found again exactly, and good for vectors.

Truth is the rotor's own angle; no expected edge comes from the code that draws or finds them."""

import cmath
import math

import numpy as np
import pytest
from digitizer_kit import GAP_V, VOLTS_PER_UM, Digitizer, Rotor

from config.stand import check_stand
from config.templates import FOLDER
from daq.drivers.base import SourceInfo
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.columns import Columns, PulseColumn
from daq.drivers.frames.records import Tally
from daq.drivers.frames.stream import Run, Stream
from daq.livecheck import report
from daq.signal.edges import EdgeFinder, Trigger, find_edges
from daq.signal.measure import measure
from daq.signal.shapes import ChannelParams, PulseParams

FULL = (-32768, 32767)


def columns(digitizer, *, falling=True, tally=None):
    told = Stream(BinaryCodec(Tally()), Tally())
    told.feed(b"\0" + digitizer.description())
    pulse = PulseColumn(
        1 << (digitizer.bits - 1), digitizer.rotor.rate_hz, falling=falling, tally=tally or Tally()
    )
    return Columns([0, 1], told.description, pulse), pulse


def drawn(digitizer, frames, *, falling=True):
    """The counts of ``frames`` frames as the driver would deliver them, and the volts of column 0's count."""
    stream = Stream(BinaryCodec(Tally()), Tally())
    made, pulse = columns(digitizer, falling=falling)
    chunks = []
    for frame in [b"\0", *digitizer.frames(frames)]:
        for run in stream.feed(frame):
            chunks += made.chunks(run)
    return np.concatenate([c.counts for c in chunks]), pulse.volts_per_count


def full_of(bits):
    return -(1 << (bits - 1)), (1 << (bits - 1)) - 1


@pytest.mark.parametrize("edge", ["falling", "rising"])
@pytest.mark.parametrize("level_v", [None, 0.0])
@pytest.mark.parametrize(("bits", "width", "worst"), [(12, 2, 5e-4), (16, 2, 1e-4), (24, 3, 3e-4)])
def test_the_edge_is_found_where_it_was_stamped(edge, level_v, bits, width, worst):
    """``worst`` in samples: half a count of the drawn line, and half a bin where the level is automatic."""
    digitizer = Digitizer(Rotor(speed_hz=31.7), stamped=True, bits=bits, width=width)
    counts, volts = drawn(digitizer, 200, falling=edge == "falling")
    found = find_edges(counts[:, 0], PulseParams(volts, full_of(bits), edge, level_v))
    wanted = np.array(digitizer.rotor.edges(0, len(counts) - 8))
    assert len(wanted) > 25
    assert found[: len(wanted)] == pytest.approx(wanted, abs=worst)


def test_an_edge_may_lie_anywhere_between_two_scans():
    """Also exactly on one, and next to it; and at the seam of two frames, where the first is out already."""
    tally = Tally()
    pulse = PulseColumn(1 << 15, 1000.0, falling=True, tally=tally)
    parts = [0.0, 1 / 65536, 0.25, 0.5, 0.75, 65535 / 65536]
    edges = [100 * (k + 1) + part for k, part in enumerate(parts)]
    pulse.add([round(edge * 65536) for edge in edges])
    out = np.empty(800, np.int16)
    pulse.draw(0, out)
    trigger = Trigger(0.0, 6553.4, 65534.0)
    found = EdgeFinder(PulseParams(pulse.volts_per_count, FULL), 1000.0, trigger).feed(out, 0)
    assert found == pytest.approx(edges, abs=2e-5)
    assert tally.bad_edges == 0


@pytest.mark.parametrize("scans", [1, 2, 7, 64, 1000])
def test_the_cut_into_frames_changes_nothing(scans):
    whole, _ = drawn(Digitizer(stamped=True, scans=1000), 4)
    cut, _ = drawn(Digitizer(stamped=True, scans=scans), 4000 // scans)
    n = min(len(whole), len(cut))
    assert n > 3900
    assert np.array_equal(whole[:n], cut[:n])


def test_the_probes_stay_beside_their_pulse():
    digitizer = Digitizer(stamped=True)
    counts, _ = drawn(digitizer, 20)
    assert counts[:, 1:].tolist() == digitizer.counts(0, 20 * 64 - 1).tolist()


def run_of(first, scans, lost=0, edges=()):
    counts = np.arange(first, first + scans, dtype=np.int16)
    return Run(np.stack((counts, counts), axis=1), first, lost, tuple(round(e * 65536) for e in edges))


def test_the_scan_held_back_comes_out_before_a_gap():
    made, _ = columns(Digitizer(stamped=True))
    first = made.chunks(run_of(0, 4))
    after = made.chunks(run_of(10, 4, lost=6))
    assert [(c.counts[:, 1].tolist(), c.lost_before) for c in first] == [([0, 1, 2], 0)]
    assert [(c.counts[:, 1].tolist(), c.lost_before) for c in after] == [([3], 0), ([10, 11, 12], 6)]


def test_a_gap_before_a_single_scan_is_told_with_the_next_one():
    made, _ = columns(Digitizer(stamped=True))
    made.chunks(run_of(0, 4))
    assert [c.counts[:, 1].tolist() for c in made.chunks(run_of(10, 1, lost=6))] == [[3]]
    (chunk,) = made.chunks(run_of(11, 1))
    assert (chunk.counts[:, 1].tolist(), chunk.lost_before) == ([10], 6)


def test_edges_before_a_gap_leave_no_pulse_after_it():
    made, _ = columns(Digitizer(stamped=True))
    made.chunks(run_of(0, 4, edges=(2.5,)))
    chunks = made.chunks(run_of(6, 40, lost=2))
    assert (chunks[-1].counts[:, 0] == 32767).all()


def test_stamps_that_bounce_are_counted_and_left_out():
    tally = Tally()
    made, _ = columns(Digitizer(stamped=True), tally=tally)
    (chunk,) = made.chunks(run_of(0, 300, edges=(100.5, 101.5, 105.0, 200.5)))
    params = PulseParams(5 / 32767, FULL, level_v=0.0)
    found = find_edges(chunk.counts[:, 0], params, Trigger(0.0, 6553.4, 65534.0))
    assert found == pytest.approx([100.5, 200.5], abs=1e-4)
    assert tally.bad_edges == 2


@pytest.mark.parametrize("speed_hz", [0.5, 5.0, 25.0, 400.0])
def test_vectors_with_stamps_agree_with_the_rotor(speed_hz):
    """From 30 r/min to 24,000, within a quarter of what is asked for (0.2 % and 0.2 degrees)."""
    digitizer = Digitizer(Rotor(speed_hz=speed_hz, noise_v=0.001), stamped=True, scans=640, bits=24, width=3)
    turns = max(8, round(speed_hz))
    counts, volts = drawn(digitizer, math.ceil(turns * 12_800 / speed_hz / 640) + 1)
    channels = [ChannelParams(f"probe {i}", digitizer.scale, full_of(24), VOLTS_PER_UM) for i in (1, 2)]
    found = measure(counts, PulseParams(volts, full_of(24)), channels, 12_800.0)
    assert (found.missed, found.doubles, found.flags) == (0, 0, ())
    assert found.speed_hz == pytest.approx(speed_hz, rel=1e-6)
    for i in range(2):
        vector = found.vector(f"probe {i + 1}")
        ratio = vector.value / digitizer.rotor.truth(i)
        assert abs(ratio) == pytest.approx(1, abs=5e-4)
        assert math.degrees(cmath.phase(ratio)) == pytest.approx(0, abs=0.05)
        assert found.level(f"probe {i + 1}").gap_v == pytest.approx(GAP_V[i], abs=0.01)


def test_a_run_up_from_standstill_shows_every_pulse():
    """Turns shorten from 10 s to 1/50 s; each stamped edge is found, none twice."""
    rate = 2000.0
    at = np.arange(0, 40 * 2000)
    turns = 0.05 + 0.625 * (at / rate) ** 2  # 1.25 Hz a second
    k = np.arange(1, int(turns[-1]))
    stamps = np.sqrt((k - 0.05) / 0.625) * rate
    made, _ = columns(Digitizer(Rotor(rate_hz=rate), stamped=True))
    out = []
    for first in range(0, len(at), 50):
        inside = stamps[(stamps > first - 1) & (stamps <= first + 49)]
        counts = np.zeros((50, 2), np.int16)
        out += made.chunks(Run(counts, first, 0, tuple(np.rint(inside * 65536).astype(int).tolist())))
    column = np.concatenate([c.counts for c in out])[:, 0]
    finder = EdgeFinder(PulseParams(5 / 32767, FULL), rate, Trigger(0.0, 6553.4, 65534.0))
    assert finder.feed(column, 0) == pytest.approx(stamps[stamps < len(column) - 8], abs=1e-3)


def test_the_live_check_is_content_with_stamps():
    stand = check_stand(FOLDER / "simulated.toml", lambda *_: ())
    digitizer = Digitizer(stamped=True)
    counts, volts = drawn(digitizer, 600)
    info = SourceInfo(12_800.0, "int16", (volts, digitizer.scale, digitizer.scale), FULL, "live", "stamps")
    said = report(counts, stand, info, 0)
    assert said.trouble == ()
    assert said.pulse.pulses_per_minute == pytest.approx(60 * 24.7, rel=0.01)
