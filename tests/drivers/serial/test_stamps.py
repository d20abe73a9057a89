"""Edges stamped by hardware: drawn as a pulse, found again exactly, and good for vectors.

Truth is the rotor's own angle; no expected edge comes from the code that draws or finds them."""

import cmath
import math

import numpy as np
import pytest
from digitizer_kit import GAP_V, VOLTS_PER_UM, Digitizer, Rotor, checked_line, samples_body, sealed

from config.stand import check_stand
from config.templates import FOLDER
from daq.drivers.base import SourceInfo
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.columns import Columns, PulseColumn
from daq.drivers.frames.lines import LineCodec
from daq.drivers.frames.records import Tally
from daq.drivers.frames.stream import Run, Stream
from daq.drivers.serial_driver import remarks
from daq.livecheck import report
from daq.signal.edges import EdgeFinder, Trigger, find_edges
from daq.signal.measure import measure
from daq.signal.shapes import ChannelParams, PulseParams

FULL = (-32768, 32767)


def columns(digitizer, *, falling=True, tally=None):
    tally = tally or Tally()
    told = Stream(BinaryCodec(Tally()), Tally())
    told.feed(b"\0" + digitizer.description())
    pulse = PulseColumn(1 << (digitizer.bits - 1), digitizer.rotor.rate_hz, falling=falling, tally=tally)
    return Columns([0, 1], told.description, pulse, tally), pulse


def drawn(digitizer, frames, *, falling=True):
    """The counts of ``frames`` frames as the driver would deliver them, and the volts of column 0's count."""
    stream = Stream(BinaryCodec(Tally()), Tally())
    made, pulse = columns(digitizer, falling=falling)
    chunks = []
    for frame in [b"\0", *digitizer.frames(frames)]:
        for run in stream.feed(frame):
            chunks += made.chunks(run)
    chunks += made.rest()
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
    assert tally.bad_stamps == 0


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
    assert counts[:, 1:].tolist() == digitizer.counts(0, 20 * 64).tolist()


def run_of(first, scans, lost=0, edges=()):
    counts = (np.arange(first, first + scans) % 32768).astype(np.int16)
    return Run(np.stack((counts, counts), axis=1), first, lost, tuple(round(e * 65536) for e in edges))


def test_what_is_held_back_comes_out_before_a_gap():
    made, _ = columns(Digitizer(stamped=True))
    assert made.chunks(run_of(0, 4)) == []
    after = made.chunks(run_of(10, 4, lost=6)) + made.rest()
    assert [(c.counts[:, 1].tolist(), c.lost_before) for c in after] == [
        ([0, 1, 2, 3], 0),
        ([10, 11, 12, 13], 6),
    ]


def test_edges_before_a_gap_leave_no_pulse_after_it():
    made, _ = columns(Digitizer(stamped=True))
    made.chunks(run_of(0, 4, edges=(2.5,)))
    chunks = made.chunks(run_of(6, 40, lost=2)) + made.rest()
    assert (chunks[-1].counts[:, 0] == 32767).all()


def test_stamps_that_bounce_are_counted_and_left_out():
    tally = Tally()
    made, _ = columns(Digitizer(stamped=True), tally=tally)
    assert made.chunks(run_of(0, 300, edges=(100.5, 101.5, 105.0, 200.5))) == []
    (chunk,) = made.rest()
    params = PulseParams(5 / 32767, FULL, level_v=0.0)
    found = find_edges(chunk.counts[:, 0], params, Trigger(0.0, 6553.4, 65534.0))
    assert found == pytest.approx([100.5, 200.5], abs=1e-4)
    assert tally.close_stamps == tally.bad_stamps == 2


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
    out += made.rest()
    column = np.concatenate([c.counts for c in out])[:, 0]
    finder = EdgeFinder(PulseParams(5 / 32767, FULL), rate, Trigger(0.0, 6553.4, 65534.0))
    assert finder.feed(column, 0) == pytest.approx(stamps[stamps < len(column) - 8], abs=1e-3)


def test_the_live_check_is_content_with_stamps():
    stand = check_stand(FOLDER / "simulated.toml", lambda *_: ())
    digitizer = Digitizer(stamped=True)
    counts, volts = drawn(digitizer, 600)
    info = SourceInfo(
        12_800.0, "int16", (volts, digitizer.scale, digitizer.scale), FULL, "live", "stamps", stamped=True
    )
    said = report(counts, stand, info, 0)
    assert said.trouble == ()
    look = said.pulse
    assert look.stamped
    assert {look.lowest_v, look.level_v, look.height_v, look.width_deg, look.samples_on_edge} == {None}
    assert said.pulse.pulses_per_minute == pytest.approx(60 * 24.7, rel=0.01)


# --- stamps out of place ---------------------------------------------------------------------------------

SENDERS = {
    "descending": lambda frames: [(first, n, sorted(edges, reverse=True)) for first, n, edges in frames],
    "a frame late": lambda frames: moved(frames, 1),
    "a frame early": lambda frames: moved(frames, -1),
}


def moved(frames, by):
    """Each frame's stamps sent with the frame ``by`` places later."""
    edges = [e for _, _, e in frames]
    return [(f, n, edges[k - by] if 0 <= k - by < len(edges) else []) for k, (f, n, _) in enumerate(frames)]


def sent(order, scans=1280, frames=60):
    """What becomes of a rotor at 1482 r/min whose stamps are sent where ``order`` puts them."""
    digitizer = Digitizer(Rotor(speed_hz=24.7), stamped=True, scans=scans)
    rotor = digitizer.rotor
    plain = [(k * scans, scans, rotor.edges(k * scans - 1, (k + 1) * scans - 1)) for k in range(frames)]
    tally = Tally()
    stream, (made, pulse) = Stream(BinaryCodec(tally), tally), columns(digitizer, tally=tally)
    stream.feed(b"\0" + digitizer.description())
    chunks = []
    for k, (first, n, edges) in enumerate(order(plain)):
        counts = digitizer.counts(first, n)
        for run in stream.feed(sealed(samples_body(k + 1, first, counts, 2, digitizer.scale, edges))):
            chunks += made.chunks(run)
    counts = np.concatenate([c.counts for c in chunks + made.rest()])
    found = find_edges(counts[:, 0], PulseParams(pulse.volts_per_count, FULL))
    return found, np.array(rotor.edges(0, len(counts) - 8)), tally


@pytest.mark.parametrize("how", SENDERS)
def test_stamps_in_any_order_and_a_frame_late_or_early_are_all_found(how):
    """Read as a third or half of the speed before scans were held back; truth is the rotor's own edges."""
    found, wanted, tally = sent(SENDERS[how])
    wanted = wanted[wanted > 1280]  # of the first frame, stamps sent with the one before never came
    wanted = wanted[wanted < 59 * 1280 - 8]  # nor those of the last, sent with the one after
    found = found[(found > 1280) & (found < 59 * 1280 - 8)]
    assert found == pytest.approx(wanted, abs=1e-3)
    assert (tally.late_stamps, tally.bad_stamps) == (0, 0)


@pytest.mark.parametrize(("by", "late", "early"), [(6, True, False), (-6, False, True)])
def test_stamps_beyond_the_promise_are_counted_by_kind(by, late, early):
    """Six frames of 0.1 s are more than a quarter of a second: nearly all are refused and counted."""
    found, wanted, tally = sent(lambda frames: moved(frames, by))
    came = len(wanted)
    assert len(found) < 5
    assert (tally.late_stamps > came - 30, tally.early_stamps > came - 30) == (late, early)
    said = list(remarks(tally, Tally()))
    assert len(said) == 1
    assert f"{tally.late_stamps or tally.early_stamps} once-per-rev stamps came more than" in said[0]
    assert "too late" in said[0] if late else "too early" in said[0]


def test_every_stamp_is_drawn_or_counted():
    """100 stamps at random within and far beyond the promise: no one vanishes."""
    tally = Tally()
    made, _ = columns(Digitizer(stamped=True), tally=tally)
    rng = np.random.default_rng(3)
    chunks = []
    for k in range(100):
        at = float(k * 640 + rng.integers(-12_000, 12_000)) + 0.5
        chunks += made.chunks(run_of(k * 640, 640, edges=(at,)))
    chunks += made.rest()
    column = np.concatenate([c.counts for c in chunks])[:, 0]
    drawn_pulses = int(((column[:-1] >= 0) & (column[1:] < 0)).sum())
    left = tally.late_stamps + tally.bad_stamps + tally.gap_stamps + len(made._waiting)
    assert min(tally.late_stamps, tally.early_stamps) > 5
    assert drawn_pulses + left == 100


def test_stamps_between_scans_left_out_are_no_fault():
    tally = Tally()
    made, _ = columns(Digitizer(stamped=True), tally=tally)
    made.chunks(run_of(0, 100))
    made.chunks(run_of(20_000, 100, lost=19_900, edges=(5000.5, 19_000.5, 50.5)))
    assert (tally.gap_stamps, tally.late_stamps, tally.bad_stamps) == (2, 0, 0)


def test_stamps_of_scans_before_the_first_are_no_fault():
    """Late ones, before the counter's 0 too: the digitizer has just started."""
    tally = Tally()
    made, _ = columns(Digitizer(stamped=True), tally=tally)
    made.chunks(run_of(64, 64, edges=(-2000.5, 10.5)))
    assert (tally.gap_stamps, tally.late_stamps, tally.bad_stamps) == (2, 0, 0)


def test_lines_whose_stamps_come_after_their_scans_are_read():
    """The firmware that prints E when the capture interrupt has run."""
    tally = Tally()
    rotor = Rotor(rate_hz=2000.0, speed_hz=24.7)
    digitizer = Digitizer(rotor, stamped=True, lines=8)
    stream, (made, _) = Stream(LineCodec(tally), tally), columns(digitizer_binary(rotor), tally=tally)
    data = [b"\n", digitizer.description()]
    for at, scan in enumerate(digitizer.counts(0, 4000).tolist()):
        data.append(checked_line(f"S,{at},{scan[0]},{scan[1]}"))
        data += [
            checked_line(f"E,{e:.9f}") for e in rotor.edges(at - 9, at - 8)
        ]  # nine decimals, eight scans on
    chunks = [c for line in data for run in stream.feed(line) for c in made.chunks(run)] + made.rest()
    column = np.concatenate([c.counts for c in chunks])[:, 0]
    found = find_edges(column, PulseParams(5 / 32767, FULL))
    wanted = rotor.edges(0, 3980)
    assert found[: len(wanted)] == pytest.approx(wanted, abs=1e-3)
    assert (tally.damaged, tally.late_stamps, tally.bad_stamps) == (0, 0, 0)


def digitizer_binary(rotor):
    return Digitizer(rotor, stamped=True)
