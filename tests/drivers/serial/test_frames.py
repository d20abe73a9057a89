"""Each way a stream can be wrong, as bytes: what is dropped, counted or refused."""

import struct

import numpy as np
import pytest
from digitizer_kit import Digitizer, checked_line, description_body, little, samples_body, sealed, stuffed

from daq.drivers.frames.binary import LONGEST, BinaryCodec
from daq.drivers.frames.lines import LineCodec
from daq.drivers.frames.records import Pieces, Tally
from daq.drivers.frames.stream import BEYOND, CHANGED, MISFIT, RESTARTED, Run, Stream, counts_of

SCALE = 0.5
TOLD = sealed(description_body(0, 1000.0, 2, 16, 0, [SCALE] * 2, "unit"))


def two(first, n=2):
    """Counts that say which scan they are."""
    at = np.arange(first, first + n)
    return np.stack((at % 32768, -(at % 32768)), axis=1)


def samples(sequence, first, n=2, scale=SCALE, edges=None):
    return sealed(samples_body(sequence, first, two(first, n), 2, scale, edges))


def read(*parts, codec=BinaryCodec, lead=b"\0"):
    """The stream fed in one piece: what came of it, and the tally."""
    tally = Tally()
    stream = Stream(codec(tally), tally)
    return stream.feed(lead + b"".join(parts)), tally


def seen(runs):
    """(first, scans, lost before) of each run, whose counts are checked."""
    for run in runs:
        assert run.counts.tolist() == two(run.first, len(run.counts)).tolist()
    return [(run.first, len(run.counts), run.lost_before) for run in runs]


def test_frames_that_follow_each_other_make_one_run():
    runs, tally = read(TOLD, samples(1, 10), samples(2, 12), samples(3, 14))
    assert seen(runs) == [(10, 6, 0)]
    assert tally == Tally(bytes=tally.bytes, frames=4)


# --- damage: dropped and counted -------------------------------------------------------------------------


GOOD = samples_body(1, 10, two(10), 2, SCALE)
DAMAGE = [
    ("a code byte that points beyond the end", b"\xf0\x01\x02\0", {"bad_cobs": 1}),
    ("too short to hold a check", stuffed(b"\1\2\3"), {"bad_check": 1}),
    ("a wrong CRC", stuffed(GOOD + b"\1\2\3\4"), {"bad_check": 1}),
    ("cut short", sealed(GOOD)[:20] + b"\0", {"bad_cobs": 1}),
    ("only a head", sealed(struct.pack("<BBH", 1, 2, 1)), {"malformed": 1}),
    ("samples cut inside the header", sealed(GOOD[:23]), {"malformed": 1}),
    ("a sample too few", sealed(GOOD[:-2]), {"malformed": 1}),
    ("a byte too many", sealed(GOOD + b"\0"), {"malformed": 1}),
    ("a stamp announced and not sent", sealed(GOOD[:20] + b"\1" + GOOD[21:]), {"malformed": 1}),
    ("one byte per sample", sealed(GOOD[:5] + b"\1" + GOOD[6:]), {"malformed": 1}),
    ("no scans", sealed(GOOD[:6] + b"\0\0" + GOOD[8:24]), {"malformed": 1}),
    ("no channels", sealed(GOOD[:4] + b"\0" + GOOD[5:24]), {"malformed": 1}),
    ("bytes kept free are used", sealed(GOOD[:22] + b"\1\0" + GOOD[24:]), {"malformed": 1}),
    ("a counter beyond its end", sealed(GOOD[:8] + b"\xff" * 8 + GOOD[16:]), {"malformed": 1}),
    ("another version", sealed(b"\2" + GOOD[1:]), {"other_version": 1}),
    ("a kind that is not read", sealed(GOOD[:1] + b"\x10" + GOOD[2:]), {"other_kind": 1, "frames": 1}),
    ("a piece without end", b"\1\1\1\1" * (LONGEST // 4 + 1), {"overlong": 1}),
    ("nothing between delimiters", b"\0\0\0", {}),
]


@pytest.mark.parametrize(("data", "counted"), [d[1:] for d in DAMAGE], ids=[d[0] for d in DAMAGE])
def test_damage_is_dropped_and_the_next_frame_is_read(data, counted):
    runs, tally = read(TOLD, samples(1, 8), data, b"\0", samples(2, 10))
    assert seen(runs) == [(8, 4, 0)]
    expected = Tally(bytes=tally.bytes, frames=3 + counted.pop("frames", 0), **counted)
    expected.lost_frames = tally.lost_frames  # the frame of another kind has a sequence number of its own
    assert tally == expected


TEXT = description_body(0, 1000.0, 2, 16, 0, [SCALE] * 2, "unit")
DESCRIPTIONS = [
    ("cut", TEXT[:10]),
    ("cut inside the scales", TEXT[:20]),
    ("name longer than the frame", TEXT[:24] + b"\x09" + TEXT[25:]),
    ("name shorter", TEXT[:24] + b"\x02" + TEXT[25:]),
    ("no channels", TEXT[:4] + b"\0" + TEXT[5:16] + b"\0"),
    ("too many channels", description_body(0, 1000.0, 2, 16, 0, [SCALE] * 65, "")),
    ("one byte", TEXT[:5] + b"\1" + TEXT[6:]),
    ("five bytes", TEXT[:5] + b"\5" + TEXT[6:]),
    ("17 bits in 2 bytes", TEXT[:6] + b"\x11" + TEXT[7:]),
    ("7 bits", TEXT[:6] + b"\7" + TEXT[7:]),
    ("an unknown edge", TEXT[:7] + b"\3" + TEXT[8:]),
    ("rate 0", description_body(0, 0.0, 2, 16, 0, [SCALE] * 2, "")),
    ("rate nan", description_body(0, float("nan"), 2, 16, 0, [SCALE] * 2, "")),
    ("rate inf", description_body(0, float("inf"), 2, 16, 0, [SCALE] * 2, "")),
    ("rate beyond belief", description_body(0, 1e9, 2, 16, 0, [SCALE] * 2, "")),
    ("scale 0", description_body(0, 1000.0, 2, 16, 0, [SCALE, 0.0], "")),
    ("scale nan", description_body(0, 1000.0, 2, 16, 0, [SCALE, float("nan")], "")),
    ("name with a bell", description_body(0, 1000.0, 2, 16, 0, [SCALE] * 2, "a\7")),
    ("name beyond ASCII", TEXT[:-1] + b"\xe9"),
]


@pytest.mark.parametrize("body", [d[1] for d in DESCRIPTIONS], ids=[d[0] for d in DESCRIPTIONS])
def test_an_impossible_description_is_no_description(body):
    runs, tally = read(sealed(body), samples(1, 10))
    assert runs == []
    assert (tally.malformed, tally.undescribed) == (1, 1)


def test_the_first_piece_is_dropped_uncounted():
    runs, tally = read(samples(0, 8)[7:], TOLD, samples(1, 10), lead=b"")
    assert seen(runs) == [(10, 2, 0)]
    assert tally.damaged == 0


def test_samples_before_the_first_description_are_left_out():
    runs, tally = read(samples(5, 0), samples(6, 2), TOLD, samples(1, 10))
    assert seen(runs) == [(10, 2, 0)]
    assert tally.undescribed == 2
    assert tally.gaps == 0


def test_a_stream_without_delimiters_takes_no_memory():
    tally = Tally()
    pieces = Pieces(b"\0", LONGEST, tally)
    for _ in range(100):
        assert pieces.feed(b"x" * 65536) == []
        assert len(pieces._tail) <= LONGEST
    assert pieces.feed(b"x\0good\0") == [b"good"]


# --- counters --------------------------------------------------------------------------------------------


def test_losses_are_counted_from_the_counters():
    runs, tally = read(TOLD, samples(1, 10), samples(4, 16), samples(5, 18), samples(7, 22))
    assert seen(runs) == [(10, 2, 0), (16, 4, 4), (22, 2, 2)]
    assert (tally.gaps, tally.lost_frames, tally.lost_samples) == (2, 3, 6)


def test_scans_that_the_digitizer_left_out_are_lost_too():
    runs, tally = read(TOLD, samples(1, 10), samples(2, 500))
    assert seen(runs) == [(10, 2, 0), (500, 2, 488)]
    assert (tally.gaps, tally.lost_frames, tally.lost_samples, tally.left_out) == (1, 0, 488, 488)


def test_scans_lost_with_a_frame_are_not_called_left_out():
    """The frame before a description is lost: its number is missing one step before the samples."""
    told = sealed(description_body(3, 1000.0, 2, 16, 0, [SCALE] * 2, "unit"))
    _, tally = read(TOLD, samples(1, 10), told, samples(4, 14))
    assert (tally.lost_samples, tally.left_out) == (2, 0)


def test_a_lost_description_is_a_lost_frame_but_no_gap():
    runs, tally = read(TOLD, samples(1, 10), samples(3, 12))
    assert seen(runs) == [(10, 4, 0)]
    assert (tally.gaps, tally.lost_frames, tally.lost_samples) == (0, 1, 0)


def test_the_sequence_number_wraps():
    told = sealed(description_body(65533, 1000.0, 2, 16, 0, [SCALE] * 2, "unit"))
    runs, tally = read(told, samples(65534, 10), samples(65535, 12), samples(0, 14), samples(2, 18))
    assert seen(runs) == [(10, 6, 0), (18, 2, 2)]
    assert (tally.lost_frames, tally.lost_samples) == (1, 2)


def test_the_sample_counter_may_be_large():
    first = (1 << 64) - 6
    body = [sealed(samples_body(i, first + 2 * i, two(0), 2, SCALE)) for i in (1, 2)]
    runs, tally = read(TOLD, *body)
    assert (runs[0].first, len(runs[0].counts)) == (first + 2, 4)
    assert tally.malformed == 0


def test_a_frame_that_comes_twice_counts_once():
    runs, tally = read(TOLD, samples(1, 10), samples(1, 10), samples(2, 12))
    assert seen(runs) == [(10, 4, 0)]
    assert tally.repeated == 1


CHANGES = [
    ("counter back at 0", [samples(2, 0)], RESTARTED),
    ("one frame late", [samples(3, 14), samples(2, 12)], RESTARTED),
    ("an overlap", [samples(2, 11)], RESTARTED),
    ("a jump of more than an hour", [samples(2, 12 + 3_600_001)], RESTARTED),
    ("another description", [sealed(description_body(2, 2000.0, 2, 16, 0, [SCALE] * 2, "unit"))], CHANGED),
    ("three channels", [sealed(samples_body(2, 12, np.zeros((2, 3), int), 2, SCALE))], MISFIT),
    ("three bytes", [sealed(samples_body(2, 12, np.zeros((2, 2), int), 3, SCALE))], MISFIT),
    ("another scale", [samples(2, 12, scale=0.25)], MISFIT),
    ("scale nan", [samples(2, 12, scale=float("nan"))], MISFIT),
]


@pytest.mark.parametrize(("more", "trouble"), [c[1:] for c in CHANGES], ids=[c[0] for c in CHANGES])
def test_what_cannot_be_followed_ends_the_stream_after_what_was_good(more, trouble):
    runs, _ = read(TOLD, samples(1, 10), *more, samples(9, 9999))
    assert runs[-1] is trouble
    assert seen(runs[:1])[0][:2] == (10, 2)
    assert all(isinstance(run, Run) for run in runs[:-1])


def test_a_jump_of_an_hour_is_a_gap():
    runs, _ = read(TOLD, samples(1, 10), samples(2, 12 + 3_600_000))
    assert seen(runs[:1]) == [(10, 2, 0)]
    assert runs[1].lost_before == 3_600_000


def test_a_scale_by_channel_is_zero_in_the_frames():
    told = sealed(description_body(0, 1000.0, 2, 16, 0, [0.5, 0.25], "unit"))
    assert len(read(told, samples(1, 10, scale=0.0))[0][0].counts) == 2
    assert read(told, samples(1, 10, scale=0.5))[0] == [MISFIT]


@pytest.mark.parametrize(("count", "fits"), [(2047, True), (-2048, True), (2048, False), (-2049, False)])
def test_counts_beyond_the_bits_of_the_converter_are_refused(count, fits):
    told = sealed(description_body(0, 1000.0, 2, 12, 0, [SCALE] * 2, "unit"))
    counts = np.array([[0, count]])
    runs, _ = read(told, sealed(samples_body(1, 10, counts, 2, SCALE)))
    assert (runs == [BEYOND]) is not fits
    assert fits is (not isinstance(runs[0], type(BEYOND)))


@pytest.mark.parametrize("width", [2, 3, 4])
def test_every_width_keeps_every_value(width):
    full = 1 << (8 * width - 1)
    values = np.array([[-full, full - 1], [-1, 0], [1, -full // 3]])
    got = counts_of(little(values, width), width, 2)
    assert got.tolist() == values.tolist()
    assert got.dtype == (np.int16 if width == 2 else np.int32)


def test_stamps_are_handed_on_as_they_came():
    """Wherever they lie and in any order: what becomes of them is decided where they are drawn."""
    edges = [-1.0, -0.99, 0.5, 0.5, 0.25, 1.0, 1.01]
    (run,), tally = read(TOLD, samples(1, 10, edges=[10 + e for e in edges]))
    assert [round(e / 65536 - 10, 2) for e in run.edges] == edges
    assert tally.damaged == 0


# --- lines -----------------------------------------------------------------------------------------------

LINE_TOLD = checked_line("D,1,1000,2,16,falling,unit,0.5,0.25")
LINES = [
    ("a wrong checksum", b"S,12,1,2*00000000\r\n", {"bad_check": 1}),
    ("no checksum", b"S,12,1,2\r\n", {"bad_check": 1}),
    ("a short check in a stream of long ones", checked_line("S,12,1,2", 2), {"bad_check": 1}),
    ("two stars", checked_line("S,12,1*2"), {"bad_check": 1}),
    ("a control character", checked_line("S,12,1,2\7"), {"bad_check": 1}),
    ("not a number", checked_line("S,12,nan,2"), {"malformed": 1}),
    ("NaN in capitals", checked_line("S,12,NaN,2"), {"malformed": 1}),
    ("nothing between commas", checked_line("S,12,,2"), {"malformed": 1}),
    ("a decimal point", checked_line("S,12,1.5,2"), {"malformed": 1}),
    ("a plus and blanks", checked_line("S,12, 1,+2"), {"malformed": 1}),
    ("digits grouped as Python has them", checked_line("S,12,1_000,2"), {"malformed": 1}),
    ("too large for the bits", checked_line("S,12,40000,2"), {"malformed": 1}),
    ("no values", checked_line("S,12"), {"malformed": 1}),
    ("a negative counter", checked_line("S,-12,1,2"), {"malformed": 1}),
    ("a counter beyond its end", checked_line(f"S,{1 << 64},1,2"), {"malformed": 1}),
    ("a stamp that is no number", checked_line("E,1e3"), {"malformed": 1}),
    ("another version", checked_line("D,2,1000,2,16,falling,unit,0.5,0.25"), {"other_version": 1}),
    ("a description cut short", checked_line("D,1,1000,2,16,falling"), {"malformed": 1}),
    (
        "a description with a comma as point",
        checked_line("D,1,1000,2,16,falling,unit,0,5,0,25"),
        {"malformed": 1},
    ),
    ("a rate of nan", checked_line("D,1,nan,2,16,falling,unit,0.5,0.25"), {"malformed": 1}),
    ("a rate of inf", checked_line("D,1,1e999,2,16,falling,unit,0.5,0.25"), {"malformed": 1}),
    ("another edge", checked_line("D,1,1000,2,16,both,unit,0.5,0.25"), {"malformed": 1}),
    ("a line of another kind", checked_line("#,temperature,41"), {"other_kind": 1, "frames": 1}),
    ("a line without end", b"S,12" * 300, {"overlong": 1}),
    ("empty lines", b"\r\n\n\r\r", {}),
]


def scan_line(at, digits=8):
    return checked_line(f"S,{at},{at},{-at}", digits)


@pytest.mark.parametrize(("data", "counted"), [d[1:] for d in LINES], ids=[d[0] for d in LINES])
def test_a_damaged_line_is_dropped_and_the_next_one_is_read(data, counted):
    runs, tally = read(
        LINE_TOLD, scan_line(10), scan_line(11), data, b"\n", scan_line(12), codec=LineCodec, lead=b"\n"
    )
    assert seen(runs) == [(10, 3, 0)]
    assert tally == Tally(bytes=tally.bytes, frames=4 + counted.pop("frames", 0), **counted)


def test_a_line_less_is_a_gap_of_one():
    runs, tally = read(LINE_TOLD, scan_line(10), scan_line(12), codec=LineCodec, lead=b"\n")
    assert seen(runs) == [(10, 1, 0), (12, 1, 1)]
    assert (tally.gaps, tally.lost_frames, tally.lost_samples) == (1, 1, 1)


def test_a_line_with_a_value_too_few_contradicts_its_description():
    runs, _ = read(LINE_TOLD, scan_line(10), checked_line("S,11,5"), codec=LineCodec, lead=b"\n")
    assert runs[-1] is MISFIT


@pytest.mark.parametrize("end", [b"\n", b"\r", b"\r\n"])
def test_any_line_end_will_do_and_a_partial_first_line(end):
    data = b"".join(line.replace(b"\r\n", end) for line in (LINE_TOLD, scan_line(10), scan_line(11)))
    runs, tally = read(b"12,3,4*77" + end, data, codec=LineCodec, lead=b"")
    assert seen(runs) == [(10, 2, 0)]
    assert tally.damaged == 0


def test_small_hex_digits_are_read_too():
    line = scan_line(10)
    star = line.index(b"*")
    runs, _ = read(LINE_TOLD, line[:star] + line[star:].lower(), codec=LineCodec, lead=b"\n")
    assert seen(runs) == [(10, 1, 0)]


def test_stamps_go_with_the_scan_that_follows():
    data = [
        LINE_TOLD,
        scan_line(10),
        checked_line("E,10.25"),
        scan_line(11),
        checked_line("E,12"),
        scan_line(12),
    ]
    (run,), tally = read(*data, codec=LineCodec, lead=b"\n")
    assert [edge / 65536 for edge in run.edges] == [10.25, 12.0]
    assert tally.damaged == 0


def test_a_stamp_has_as_many_decimals_as_it_likes():
    """1/3 of 65536 is 21845.33; the last one rounds up to the next scan."""
    data = [
        LINE_TOLD,
        *(checked_line(f"E,{at}") for at in ("10.333333333", "10.5", "10.9999999")),
        scan_line(10),
    ]
    (run,), tally = read(*data, codec=LineCodec, lead=b"\n")
    assert [edge - 10 * 65536 for edge in run.edges] == [21845, 32768, 65536]
    assert tally.malformed == 0


def test_stamps_without_scans_take_no_memory():
    tally = Tally()
    codec = LineCodec(tally)
    codec.feed(b"\n" + b"".join(checked_line(f"E,{i}.5") for i in range(500)))
    assert len(codec._edges) <= 64


@pytest.mark.parametrize("point", [".", ","])
def test_numbers_do_not_hang_on_the_locale(point, monkeypatch):
    """float() and the patterns take a point only, whatever the machine is set to."""
    told = checked_line(f"D,1,1000{point}5,2,16,none,unit,0.5,0.25")
    tally = Tally()
    stream = Stream(LineCodec(tally), tally)
    stream.feed(b"\n" + told)
    assert (stream.description is not None and stream.description.rate_hz == 1000.5) is (point == ".")


def test_a_digitizer_of_every_kind_is_read_bit_by_bit():
    for digitizer in (
        Digitizer(),
        Digitizer(width=3, bits=24),
        Digitizer(width=4, bits=20, stamped=True),
        Digitizer(lines=8),
        Digitizer(lines=2, bits=24, stamped=True),
    ):
        data = b"".join(digitizer.frames(30))
        codec, lead = (LineCodec, b"\n") if digitizer.lines else (BinaryCodec, b"\0")
        (run,), tally = read(data, codec=codec, lead=lead)
        assert run.counts.tolist() == digitizer.counts(0, 30 * 64).tolist()
        wanted = digitizer.rotor.edges(-1, 30 * 64 - 1) if digitizer.stamped else []
        assert [edge / 65536 for edge in run.edges] == pytest.approx(wanted, abs=1e-5)
        assert tally.damaged == tally.gaps == 0
