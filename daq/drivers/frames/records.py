"""What a digitizer's stream says once it is decoded, and what is counted on the way."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Literal, Protocol

VERSION = 1
MOST_CHANNELS = 64
MOST_SCANS = 4065
"""Of one channel with 2 bytes, which just fit into the longest frame."""
MOST_RATE_HZ = 10e6
WIDTHS = (2, 3, 4)
"""Bytes per sample."""
EDGE_UNITS = 65536
"""Positions of edges count in this part of a sample."""
MOST_EXAMPLE = 60
MOST_DEVICE = 64
"""Characters of a device's name."""

Edge = Literal["none", "falling", "rising"]
EDGES: tuple[Edge, ...] = ("none", "falling", "rising")


@dataclass(frozen=True, slots=True)
class Description:
    """What the digitizer says of itself; it stays the same for as long as the digitizer is on."""

    rate_hz: float
    channels: int
    width: int
    """Bytes per sample on the wire."""
    bits: int
    """Of the converter: counts lie within -2**(bits-1) to 2**(bits-1) - 1."""
    edge: Edge
    """Which edge of the once-per-rev pulse is stamped; "none" = no stamps come."""
    volts_per_count: tuple[float, ...]
    """By channel."""
    device: str
    """Its name and serial number, as it says them."""

    @property
    def sound(self) -> bool:
        """True when every figure is possible."""
        return (
            math.isfinite(self.rate_hz)
            and 0 < self.rate_hz <= MOST_RATE_HZ
            and 1 <= self.channels <= MOST_CHANNELS
            and self.width in WIDTHS
            and 8 <= self.bits <= 8 * self.width
            and len(self.volts_per_count) == self.channels
            and all(math.isfinite(v) and v != 0 for v in self.volts_per_count)
            and len(self.device) <= MOST_DEVICE
            and self.device.isascii()
            and (self.device.isprintable() or not self.device)
        )


@dataclass(frozen=True, slots=True)
class Samples:
    """Scans that follow each other: ``scans`` times one sample of each channel."""

    first: int
    """The digitizer's counter at the first scan."""
    scans: int
    channels: int
    width: int
    volts_per_count: float
    """Of all channels; 0 = by channel, as the description says."""
    data: bytes
    """Little-endian, scan by scan."""
    edges: tuple[int, ...]
    """Positions of once-per-rev edges on the digitizer's counter, in ``EDGE_UNITS``, as they were sent."""


@dataclass(frozen=True, slots=True)
class Frame:
    """One whole frame: its check has been right."""

    sequence: int | None
    """Counts frames of all kinds, modulo 65536; None where the codec has none (lines)."""
    body: Description | Samples | None
    """None = a kind that this version does not read."""


@dataclass(slots=True)
class Tally:
    """What came and what did not, since the driver was made."""

    bytes: int = 0
    frames: int = 0
    """Whole frames of any kind."""
    bad_cobs: int = 0
    bad_check: int = 0
    """CRC or line checksum wrong."""
    malformed: int = 0
    """The check was right and the content is not: the sender's fault."""
    overlong: int = 0
    """Pieces without a delimiter for longer than a frame may be."""
    other_version: int = 0
    other_kind: int = 0
    """Whole frames of kinds that are not read yet."""
    undescribed: int = 0
    """Samples that came before the first description."""
    repeated: int = 0
    late_stamps: int = 0
    """Edge stamps of scans that were handed on already; left out, as all of the following are."""
    early_stamps: int = 0
    """Further ahead of the scans than is waited for."""
    close_stamps: int = 0
    """Too close to the one before: a bounce, or the same edge twice."""
    gap_stamps: int = 0
    """Of scans that did not come, or before the first one: no fault."""
    gaps: int = 0
    lost_frames: int = 0
    """Between whole frames, by the sequence number; exact below 65536 in a row."""
    lost_samples: int = 0
    """Scans between whole frames, by the sample counter; exact."""
    left_out: int = 0
    """Of these: between frames whose sequence numbers follow on, so the digitizer itself left them out."""
    reasons: dict[str, int] = field(default_factory=dict, compare=False)
    """Why pieces were refused, and how often."""
    example: str = field(default="", compare=False)
    """The first piece whose check was right and whose content was refused, where it is text."""

    def refused(self, reason: str, example: str = "") -> None:
        """Note why a piece was dropped; the counters by kind are the caller's."""
        self.reasons[reason] = self.reasons.get(reason, 0) + 1
        if not self.example:
            self.example = example[:MOST_EXAMPLE]

    @property
    def bad_stamps(self) -> int:
        """Stamps that the page forbids, late ones apart."""
        return self.early_stamps + self.close_stamps

    @property
    def damaged(self) -> int:
        """Pieces that were no whole frame."""
        return self.bad_cobs + self.bad_check + self.malformed + self.overlong


class Codec(Protocol):
    """From bytes to whole frames; damage is counted in the tally, never raised."""

    def feed(self, data: bytes) -> Sequence[Frame]: ...


class Pieces:
    """Cuts a stream at its delimiter. The first piece is dropped: it may have begun before we listened."""

    def __init__(self, delimiter: bytes, longest: int, tally: Tally) -> None:
        self._delimiter = delimiter
        self._longest = longest
        self._tally = tally
        self._tail = b""
        self._skipping = True

    def feed(self, data: bytes) -> list[bytes]:
        """The pieces completed by ``data``, empty ones left out."""
        parts = (self._tail + data).split(self._delimiter)
        self._tail = parts.pop()
        if parts and self._skipping:
            del parts[0]
            self._skipping = False
        whole = [part for part in parts if 0 < len(part) <= self._longest]
        for _ in range(sum(len(part) > self._longest for part in parts)):
            self._overlong()
        if len(self._tail) > self._longest:
            if not self._skipping:
                self._overlong()
            self._tail, self._skipping = b"", True
        return whole

    def _overlong(self) -> None:
        self._tally.overlong += 1
        self._tally.refused("longer than the format allows")
