"""No damage passes for samples, and what is lost is counted exactly. Seeded: the same damage each time."""

import itertools
import random

import numpy as np
import pytest
from digitizer_kit import Damage, Digitizer, Rotor, checked_line, samples_body, sealed

from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.lines import LineCodec
from daq.drivers.frames.records import Tally
from daq.drivers.frames.stream import Run, Stream

SCANS = 64


def stream_of(lines=False):
    tally = Tally()
    return Stream(LineCodec(tally) if lines else BinaryCodec(tally), tally), tally


def fed(stream, data, rng):
    """``data`` in pieces of any size, up to the first trouble."""
    runs = []
    at = 0
    while at < len(data):
        size = rng.choice((1, 7, 50, 500, 4096))
        for got in stream.feed(data[at : at + size]):
            if not isinstance(got, Run):
                return runs
            runs.append(got)
        at += size
    return runs


def check(runs, truth, edges=None):
    """Every sample and stamp is a true one, and what lies between runs is what was called lost."""
    stop = None
    for run in runs:
        end = run.first + len(run.counts)
        assert np.array_equal(run.counts, truth[run.first : end])
        assert stop is None or run.first == stop + run.lost_before
        assert run.lost_before >= 0
        assert edges is None or all(edge in edges for edge in run.edges)
        stop = end


def lost_frames(damaged, n):
    """(gaps, frames) between the first and the last whole one, from the numbers of the damaged ones."""
    whole = sorted(set(range(n)) - damaged)
    steps = [b - a for a, b in itertools.pairwise(whole)]
    return sum(step > 1 for step in steps), sum(step - 1 for step in steps)


@pytest.mark.parametrize("lines", [0, 8])
def test_2000_frames_of_which_3_percent_are_damaged(lines):
    digitizer = Digitizer(scans=1 if lines else SCANS, lines=lines)
    told, first = digitizer.frames(1)
    frames = [first, *(digitizer.frame() for _ in range(1999))]
    damage = Damage(seed=3)
    damaged = set(damage.random.sample(range(2000), 60))
    end = b"\n" if lines else b"\0"
    sent = [damage.frame(f) if i in damaged else f for i, f in enumerate(frames)]
    stream, tally = stream_of(bool(lines))
    runs = fed(stream, end + told + b"".join(sent), random.Random(1))
    check(runs, digitizer.counts(0, 2000 * digitizer.scans))
    gaps, frames_lost = lost_frames(damaged, 2000)
    assert (tally.gaps, tally.lost_frames) == (gaps, frames_lost)
    assert tally.lost_samples == frames_lost * digitizer.scans
    assert tally.frames == 1 + 2000 - 60
    assert sum(len(run.counts) for run in runs) == (2000 - 60) * digitizer.scans
    assert tally.damaged >= 60  # a piece cut in two by damage counts twice


def test_a_noisy_line_that_hits_delimiters_too():
    """One bit in 20,000 wrong, anywhere: some frames are lost in pairs, the sum is still exact."""
    digitizer = Digitizer(scans=SCANS)
    clean = b"\0" + b"".join(digitizer.frames(2000))
    bits = np.unpackbits(np.frombuffer(clean, np.uint8))
    rng = np.random.default_rng(5)
    bits ^= rng.random(len(bits)) < 1 / 20_000
    stream, tally = stream_of()
    runs = fed(stream, np.packbits(bits).tobytes(), random.Random(2))
    check(runs, digitizer.counts(0, 2000 * SCANS))
    assert 100 < tally.gaps < 400
    passed = sum(len(run.counts) for run in runs)
    assert passed + tally.lost_samples == runs[-1].first + len(runs[-1].counts) - runs[0].first


def test_the_short_check_of_lines_finds_every_wrong_byte():
    """Exclusive-or cannot miss a single wrong byte; that it misses others is on the page."""
    line = checked_line("S,41,-9730,-10922,-11005", 2)[:-2]
    told = checked_line("D,1,1000,3,16,none,unit,1,1,1", 2)
    for at in range(line.index(b"*")):
        for wrong in range(256):
            if wrong in (line[at], 10, 13):
                continue
            stream, tally = stream_of(lines=True)
            spoilt = line[:at] + bytes([wrong]) + line[at + 1 :]
            assert stream.feed(b"\n" + told + spoilt + b"\n") == []
            assert tally.bad_check == 1


@pytest.mark.timeout(60)
def test_100_000_random_byte_strings():
    rng = random.Random(7)
    told = Digitizer().description()
    lines_told = Digitizer(lines=8).description()
    binary, lines = stream_of(), stream_of(lines=True)
    binary[0].feed(b"\0" + told)
    lines[0].feed(b"\n" + lines_told)
    for i in range(100_000):
        data = rng.randbytes(rng.randrange(200))
        if i % 2:  # more of what the codecs look for
            data = data.replace(b"\1", b"\0").replace(b"\2", b"\n").replace(b"\3", b"S,").replace(b"\4", b"*")
        assert binary[0].feed(data) == []
        assert lines[0].feed(data) == []
    assert binary[1].frames == lines[1].frames == 1
    assert binary[1].damaged > 10_000
    assert lines[1].damaged > 10_000


@pytest.mark.timeout(60)
def test_20_000_random_contents_under_a_right_check():
    """Behind the CRC too: any content at all, and near misses of real frames."""
    rng = random.Random(8)
    digitizer = Digitizer(stamped=True)
    real = samples_body(1, 0, digitizer.counts(0, 4), 2, digitizer.scale, [0.5, 1.5])
    told = digitizer.description()
    for _ in range(20_000):
        body = bytearray(real if rng.random() < 0.7 else rng.randbytes(rng.randrange(80)))
        for _ in range(rng.randrange(4)):
            if body:
                body[rng.randrange(min(len(body), 24))] = rng.choice((0, 1, 2, 3, 255, rng.randrange(256)))
        stream, _ = stream_of()
        for run in stream.feed(b"\0" + told + sealed(bytes(body)) + sealed(bytes(real))):
            if isinstance(run, Run):
                assert run.counts.shape[1] == 2
                assert run.counts.dtype == np.int16
                assert all(isinstance(e, int) for e in run.edges)


def mutated(pieces, rng):
    """A valid stream after one to four accidents, inside frames and among them."""
    pieces = list(pieces)
    for _ in range(rng.randint(1, 4)):
        kind = rng.randrange(7)
        at = rng.randrange(len(pieces))
        if kind == 0:
            del pieces[at]
        elif kind == 1:
            pieces.insert(at, pieces[rng.randrange(len(pieces))])
        elif kind == 2:
            other = rng.randrange(len(pieces))
            pieces[at], pieces[other] = pieces[other], pieces[at]
        elif kind == 3:
            pieces[at] = pieces[at][: rng.randrange(len(pieces[at]) + 1)]
        elif kind == 4:
            pieces[at] = pieces[at][:-1]  # the delimiter
        elif kind == 5:
            pieces.insert(at, rng.randbytes(rng.randrange(1, 30)))
        elif pieces[at]:
            data = bytearray(pieces[at])
            data[rng.randrange(len(data))] ^= 1 << rng.randrange(8)
            pieces[at] = bytes(data)
        if not pieces:
            break
    return pieces


@pytest.mark.timeout(60)
@pytest.mark.parametrize("lines", [0, 8])
def test_10_000_mutated_streams(lines):
    rng = random.Random(9 + lines)
    rotor = Rotor(rate_hz=1000.0, speed_hz=60.0)
    digitizer = Digitizer(rotor, scans=1 if lines else 8, stamped=True, lines=lines, every_s=0.05)
    pieces = digitizer.frames(24)
    if lines:
        pieces = [line + b"\n" for piece in pieces for line in piece.split(b"\r\n") if line]
    truth = digitizer.counts(0, digitizer.first)
    edges = {round(edge * 65536) for edge in rotor.edges(-1, digitizer.first)}
    if lines:
        edges = {round(float(f"{edge / 65536:.6f}") * 65536) for edge in edges}
    lead = b"\n" if lines else b"\0"
    troubled = passed = 0
    for _ in range(5000):
        stream, tally = stream_of(bool(lines))
        runs = fed(stream, lead + b"".join(mutated(pieces, rng)), rng)
        check(runs, truth, edges)
        passed += sum(len(run.counts) for run in runs)
        troubled += tally.damaged > 0 or tally.gaps > 0
    assert troubled > 3000  # the accidents did happen
    assert passed > 5000 * len(truth) / 4  # and most of the rest came through
