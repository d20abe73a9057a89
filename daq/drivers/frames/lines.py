"""Lines of text, ``CSV*check``: for boards that print, and to be read in a terminal. Layout: FORMAT.md.

The check is two hex digits (all bytes before the star, exclusive-or) or eight (their CRC-32). A stream uses
one of them, that of its description; the short one lets about one damaged line in 256 pass.
"""

from __future__ import annotations

import functools
import operator
import re
import struct
import zlib

from daq.drivers.frames.binary import COUNTER_END
from daq.drivers.frames.records import EDGE_UNITS, EDGES, VERSION, Description, Frame, Pieces, Samples, Tally

LONGEST = 1024
"""Characters of a line, star and check included, its end not."""
CHECKED = re.compile(rb"([ -)+-~]+)\*([0-9A-Fa-f]{8}|[0-9A-Fa-f]{2})")
SCAN = re.compile(rb"S,(\d{1,20})((?:,-?\d{1,10})+)")
EDGE = re.compile(rb"E,(\d{1,20})(?:\.(\d{1,20}))?")
NUMBER = re.compile(r"[+-]?[0-9]{1,20}(\.[0-9]{1,20})?([eE][+-]?[0-9]{1,2})?")
FORMATS = {2: "h", 4: "i"}
FEWEST_FIELDS = 6
OTHER_CHECK = "where the description's has"
MOST_EDGES = 64
"""Edges kept until the next scan line."""


class LineCodec:
    """Bytes to frames of one scan each; holds at most one unfinished line."""

    def __init__(self, tally: Tally) -> None:
        self._tally = tally
        self._pieces = Pieces(b"\n", LONGEST, tally)
        self._digits = 0
        self._told: Description | None = None
        self._edges: list[int] = []

    def feed(self, data: bytes) -> list[Frame]:
        frames = (self._frame(piece) for piece in self._pieces.feed(data.replace(b"\r", b"\n")))
        return [frame for frame in frames if frame is not None]

    def _frame(self, line: bytes) -> Frame | None:
        text = self._checked(line)
        if text is None:
            self._tally.bad_check += 1
            self._tally.refused(self._why(line))
            return None
        if text.startswith(b"S,"):
            return self._scan(text)
        if text.startswith(b"E,"):
            return self._edge(text)
        if text.startswith(b"D,"):
            return self._description(text, line)
        self._tally.other_kind += 1
        return Frame(None, None)

    def _checked(self, line: bytes) -> bytes | None:
        """What stands before the star when the check is right and of the stream's own length."""
        found = CHECKED.fullmatch(line)
        if found is None or self._digits not in (0, len(found[2])):
            return None
        check = zlib.crc32(found[1]) if len(found[2]) == 8 else functools.reduce(operator.xor, found[1])
        return found[1] if check == int(found[2], 16) else None

    def _why(self, line: bytes) -> str:
        """What is wrong with a line whose check does not pass."""
        found = CHECKED.fullmatch(line)
        if found is None:
            return "no check of two or eight hex digits at the end, or other than printable ASCII"
        if self._digits not in (0, len(found[2])):
            return f"a check of {len(found[2])} digits {OTHER_CHECK} {self._digits}"
        return "a wrong check"

    def _malformed(self, text: bytes, reason: str) -> Frame | None:
        self._tally.malformed += 1
        self._tally.refused(reason + (", and blanks in it" if b" " in text else ""), text.decode("ascii"))
        return None

    def _scan(self, text: bytes) -> Frame | None:
        found = SCAN.fullmatch(text)
        if found is None:
            return self._malformed(text, "an S line that is not whole counts between commas")
        if self._told is None:
            self._tally.undescribed += 1
            self._edges.clear()
            return None
        first, values = int(found[1]), [int(value) for value in found[2][1:].split(b",")]
        try:
            data = struct.pack(f"<{len(values)}{FORMATS[self._told.width]}", *values)
        except struct.error:
            return self._malformed(text, "an S line with counts beyond the bits described")
        if first >= COUNTER_END:
            return self._malformed(text, "an S line with a counter beyond 64 bits")
        edges, self._edges = tuple(self._edges), []
        return Frame(None, Samples(first, 1, len(values), self._told.width, 0.0, data, edges))

    def _edge(self, text: bytes) -> Frame | None:
        found = EDGE.fullmatch(text)
        if found is None:
            return self._malformed(text, "an E line that is not a position with a decimal point")
        if len(self._edges) >= MOST_EDGES:
            return self._malformed(text, f"more than {MOST_EDGES} E lines without an S line")
        self._edges.append(EDGE_UNITS * int(found[1]) + _part(found[2] or b"0"))
        return Frame(None, None)

    def _description(self, text: bytes, line: bytes) -> Frame | None:
        version, _, rest = text[2:].partition(b",")
        if version.isdigit() and version != b"%d" % VERSION:
            self._tally.other_version += 1
            self._tally.refused(f"version {version[:8].decode()} of the format")
            return None
        told = description(rest.decode("ascii"))
        if told is None:
            return self._malformed(text, "a D line with other fields or impossible figures")
        self._told = told
        self._digits = len(line) - len(text) - 1
        return Frame(None, told)


def _part(digits: bytes) -> int:
    """Decimals of a sample in ``EDGE_UNITS``, rounded."""
    return round(int(digits) * EDGE_UNITS / 10.0 ** len(digits))


def description(text: str) -> Description | None:
    """``rate,channels,bits,edge,device,scale,scale,...``; None when it is not that or impossible."""
    fields = text.split(",")
    if len(fields) < FEWEST_FIELDS or fields[3] not in EDGES:
        return None
    rate, scales = fields[0], fields[5:]
    whole = all(re.fullmatch(r"[0-9]{1,3}", field) for field in fields[1:3])
    if not whole or not all(NUMBER.fullmatch(number) for number in (rate, *scales)):
        return None
    bits = int(fields[2])
    width = 2 if bits <= 16 else 4
    scale = tuple(float(number) for number in scales)
    found = Description(
        float(rate), int(fields[1]), width, bits, EDGES[EDGES.index(fields[3])], scale, fields[4]
    )
    return found if found.sound else None
