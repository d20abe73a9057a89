"""The page of the frame format says what the code does: its vectors are read from the page and decoded."""

import math
import re
import struct
import zlib
from pathlib import Path

import numpy as np
import pytest
from cobs import cobs
from digitizer_kit import checked_line, description_body, samples_body, sealed, stuffed

from daq.drivers import frames
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.lines import LineCodec
from daq.drivers.frames.records import Description, Samples, Tally
from daq.drivers.frames.stream import Stream, counts_of

PAGE = (Path(frames.__file__).parent / "FORMAT.md").read_text(encoding="utf-8")
SCALE = 30 / 32768


def block(number):
    """The indented lines below vector ``number``."""
    found = re.search(rf"^{number}: [^\n]*\n(?:[^\n ][^\n]*\n)*\n((?:    [^\n]*\n)+)", PAGE, re.M)
    return [line[4:] for line in found[1].splitlines()]


def decoded(number):
    """The one frame of a binary vector, and what was counted."""
    tally = Tally()
    wire = bytes.fromhex(" ".join(block(number)))
    got = BinaryCodec(tally).feed(b"\0" + wire)
    return (got[0] if got else None), tally, wire


def test_vector_1_a_description():
    frame, _, wire = decoded(1)
    assert frame.sequence == 7
    assert frame.body == Description(12800.0, 3, 2, 16, "none", (SCALE,) * 3, "unit 0042")
    assert wire == sealed(description_body(7, 12800.0, 2, 16, 0, [SCALE] * 3, "unit 0042"))


def test_vector_2_samples():
    frame, _, wire = decoded(2)
    body = frame.body
    counts = counts_of(body.data, body.width, body.channels)
    assert (frame.sequence, body.first, body.scans, body.edges) == (8, 1000, 2, ())
    assert counts.tolist() == [[-8738, 0, 11378], [-16384, 32767, -32768]]
    assert body.volts_per_count == SCALE
    assert wire == sealed(samples_body(8, 1000, counts, 2, SCALE))


def test_vector_3_one_wrong_bit_is_dropped():
    frame, tally, wire = decoded(3)
    assert frame is None
    assert tally == Tally(bad_check=1)
    other = bytes.fromhex(" ".join(block(2)))
    assert sum((a ^ b).bit_count() for a, b in zip(wire, other, strict=True)) == 1


def test_vectors_4_and_5_three_bytes_and_stamps():
    told, _, _ = decoded(4)
    assert told.body.volts_per_count == pytest.approx((5 / 8388608, 30 / 8388608), rel=1e-7)
    assert (told.sequence, told.body.rate_hz, told.body.edge, told.body.device) == (
        65535,
        51200.0,
        "falling",
        "",
    )
    frame, _, _ = decoded(5)
    body = frame.body
    assert frame.sequence == 0
    assert (body.first, body.volts_per_count) == (4294967301, 0.0)
    assert counts_of(body.data, 3, 2).tolist() == [[-8388608, -1], [0, 8388607]]
    assert [edge / 65536 for edge in body.edges] == [4294967300.75, 4294967301.5]


def test_vectors_4_and_5_make_a_run():
    wire = b"".join(bytes.fromhex(" ".join(block(n))) for n in (4, 5))
    tally = Tally()
    (run,) = Stream(BinaryCodec(tally), tally).feed(b"\0" + wire)
    assert run.counts.dtype == np.int32
    assert (run.first, len(run.counts), len(run.edges)) == (4294967301, 2, 2)
    assert tally.lost_frames == tally.damaged == 0


@pytest.mark.parametrize(("number", "digits"), [(6, 8), (7, 2)])
def test_vectors_6_and_7_lines(number, digits):
    lines = block(number)
    for line in lines:
        assert checked_line(line.partition("*")[0], digits) == line.encode() + b"\r\n"
    tally = Tally()
    stream = Stream(LineCodec(tally), tally)
    (run,) = stream.feed(b"\n" + "\n".join(lines).encode() + b"\n")
    assert stream.description.rate_hz == 2000.0
    assert tally.damaged == 0
    assert run.first == 41
    if number == 6:
        assert run.counts.tolist() == [[-10922, -11005], [-10915, -11002]]
        assert run.edges == (41 * 65536 + 16384,)
    else:
        assert run.counts.tolist() == [[-9730, -10922, -11005], [-9729, -10915, -11002]]


@pytest.mark.parametrize(("number", "sequence", "first", "scans"), [(8, 9, 2000, 130), (9, 10, 2130, 125)])
def test_vectors_8_and_9_hold_full_blocks(number, sequence, first, scans):
    """As the ``cobs`` library makes them; there is a block of code FF, and `01` after it is read."""
    frame, tally, wire = decoded(number)
    body = frame.body
    assert (frame.sequence, body.first, body.scans, tally.damaged) == (sequence, first, scans, 0)
    assert counts_of(body.data, 2, 1)[:, 0].tolist() == list(range(257, 257 + scans))
    assert cobs.encode(cobs.decode(wire[:-1])) + b"\0" == wire
    at = wire.index(b"\xff")
    assert (len(wire) == at + 255 + 1) is (number == 9)
    if number == 9:
        assert BinaryCodec(tally).feed(b"\0" + wire[:-1] + b"\1\0") == [frame]


def test_the_longest_frame_is_as_the_page_says():
    """28 + s n b + 4 m = 8159 passes, two bytes more do not."""
    assert "28 + s n b + 4 m <= 8159" in PAGE
    for m, scans, good in ((0, 4065, 1), (0, 4066, 0), (1, 4063, 1), (1, 4064, 0)):
        body = samples_body(1, 5, np.full((scans, 1), 257), 2, 1.0, [5.5] * m)
        assert (len(body) + 4 <= 8159) is bool(good)
        assert len(BinaryCodec(Tally()).feed(b"\0" + sealed(body))) == good


def test_the_check_values_that_the_page_names():
    """CRC-32 of "123456789" is in every catalogue of CRCs; COBS against the kept library."""
    assert "CBF43926" in PAGE
    assert zlib.crc32(b"123456789") == 0xCBF43926
    for data, sent in ((b"\0", "01 01 00"), (bytes.fromhex("11220033"), "03 11 22 02 33 00")):
        assert f"`{sent}`" in PAGE
        assert stuffed(data).hex(" ") == sent
        assert cobs.encode(data) + b"\0" == bytes.fromhex(sent)


def test_sizes_in_the_tables_are_those_of_the_layout():
    """The offsets as typed on the page, added up by hand here."""
    assert struct.calcsize("<BBH") == 4
    for offset in (
        "| 16 + 4n | u8 |",
        "| 17 + 4n | text |",
        "| 24 | s x n x b |",
        "| 24 + s n b | m x i32 |",
    ):
        assert offset in PAGE
    assert len(description_body(0, 1.0, 2, 16, 0, [1.0] * 5, "ab")) == 17 + 4 * 5 + 2
    assert len(samples_body(0, 0, np.zeros((7, 3), int), 3, 1.0, [0.0, 1.0])) == 24 + 7 * 3 * 3 + 2 * 4


@pytest.mark.parametrize("baud", [115_200, 921_600, 3_000_000])
def test_what_fits_is_reckoned_right(baud):
    """8N1 = ten bits a byte, 90 % used; frame = 28 bytes and the samples, COBS 1 in 254, delimiter."""
    row = next(line for line in PAGE.splitlines() if line.startswith(f"| {baud:,} ".replace(",", " ")))
    fields = [[int(n) for n in cell.split(" / ")] for cell in row.strip("| ").split(" | ")[1:]]
    for channels, two, three, lines in zip(*fields, strict=True):
        for width, said in ((2, two), (3, three)):
            plain = 28 + 64 * channels * width
            assert said == int(baud / 10 * 0.9 / (plain + math.ceil(plain / 254) + 1) * 64)
        assert lines == int(baud / 10 * 0.9 / len(f"S,{10**9}" + channels * ",-12345" + "*12345678\r\n"))


def test_the_page_fits_the_limits_of_the_code():
    from daq.drivers.frames import binary, columns, lines, records

    assert f"at most {binary.LONGEST} bytes" in PAGE
    assert f"at most {lines.LONGEST} characters" in PAGE
    assert f"scans s in this frame, 1 to {records.MOST_SCANS}" in PAGE
    assert columns.LATE_S == 0.25
    assert "until the scan a quarter of a second after it has come" in " ".join(PAGE.split())
    assert f"channels n, 1 to {records.MOST_CHANNELS}" in PAGE
    assert f"1/{records.EDGE_UNITS} of a sample" in PAGE
    assert list(binary.VECTOR_KINDS) == list(range(16, 32))
    assert isinstance(decoded(2)[0].body, Samples)
