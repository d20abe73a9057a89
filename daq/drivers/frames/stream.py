"""Whole frames put in order: runs of samples without a gap, losses counted by the digitizer's counters."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from config.errors import DriverTrouble
from daq.drivers.base import Samples as Counts
from daq.drivers.frames.records import Codec, Description, Frame, Samples, Tally

LONGEST_GAP_S = 3600.0
"""A counter that jumps further has not counted on: the digitizer has been started anew."""
SEQUENCES = 65536


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """Scans that follow each other without a gap, and follow the run before after ``lost_before`` scans."""

    counts: Counts
    """Shape (scans, channels)."""
    first: int
    """The digitizer's counter at the first scan."""
    lost_before: int
    edges: tuple[int, ...]
    """Stamped once-per-rev edges on the digitizer's counter, in ``EDGE_UNITS``, that came with these scans:
    in any order, and of scans before or after them too."""


@dataclass(frozen=True, slots=True)
class Trouble:
    """The stream cannot be followed any further; the source must be opened again."""

    cause: str
    remedy: str
    kind: DriverTrouble = "protocol"


CHANGED = Trouble(
    "The digitizer describes itself otherwise than when it was opened.",
    "Leave its settings alone while revmark runs.",
)
MISFIT = Trouble(
    "The digitizer's frames have other channels, bytes per sample or scale than its description says.",
    "This is a fault in the digitizer's program; see the page of the frame format.",
)
BEYOND = Trouble(
    "The digitizer sends counts beyond the bits that its description says.",
    "This is a fault in the digitizer's program; see the page of the frame format.",
)
RESTARTED = Trouble(
    "The digitizer's sample counter does not count on: it was started anew, or frames came out of order.",
    "Check its power and its connection; it is opened again by itself.",
    "gone",
)


class Stream:
    """Bytes to runs, from the first description on. Nothing is raised for whatever a stream may hold."""

    def __init__(self, codec: Codec, tally: Tally) -> None:
        self.description: Description | None = None
        self._codec = codec
        self._tally = tally
        self._sequence: int | None = None
        self._first, self._next = -1, -1
        self._group: list[Samples] = []
        self._lost = 0
        self._whole = True
        """No frame is known to be lost since the last samples."""

    def feed(self, data: bytes) -> list[Run | Trouble]:
        """What ``data`` completes; what follows a Trouble means nothing."""
        self._tally.bytes += len(data)
        out: list[Run | Trouble] = []
        for frame in self._codec.feed(data):
            self._tally.frames += 1
            trouble = self._take(frame, out)
            if trouble is not None:
                self._flush(out)
                out.append(trouble)
                return out
        self._flush(out)
        return out

    def _take(self, frame: Frame, out: list[Run | Trouble]) -> Trouble | None:
        step = self._step(frame.sequence)
        body = frame.body
        if body is None:
            return None
        if isinstance(body, Description):
            self.description = self.description or body
            return None if body == self.description else CHANGED
        if self.description is None:
            self._tally.undescribed += 1
            return None
        if not _fits(body, self.description):
            return MISFIT
        return self._place(body, step, self.description, out)

    def _step(self, sequence: int | None) -> int:
        """By how much the sequence number grew; frames lost on the way are counted. 0 = has none."""
        before, self._sequence = self._sequence, sequence
        if sequence is None or before is None:
            return 0
        step = (sequence - before) % SEQUENCES
        self._tally.lost_frames += max(step - 1, 0)
        self._whole = self._whole and step == 1
        return step

    def _place(
        self, samples: Samples, step: int, told: Description, out: list[Run | Trouble]
    ) -> Trouble | None:
        if samples.first == self._first and step == 0:
            self._tally.repeated += 1
            return None
        lost = samples.first - self._next if self._next >= 0 else 0
        if not 0 <= lost <= LONGEST_GAP_S * told.rate_hz:
            return RESTARTED
        if lost:
            self._flush(out)
            self._lost = lost
            self._tally.gaps += 1
            self._tally.lost_samples += lost
            self._tally.lost_frames += lost if self._sequence is None else 0
            self._tally.left_out += lost if self._whole and step == 1 else 0
        self._whole = True
        self._group.append(samples)
        self._first, self._next = samples.first, samples.first + samples.scans
        return None

    def _flush(self, out: list[Run | Trouble]) -> None:
        """Make one run of the frames gathered."""
        if not self._group or self.description is None:
            return
        group, lost = self._group, self._lost
        self._group, self._lost = [], 0
        data = b"".join(samples.data for samples in group)
        counts = counts_of(data, self.description.width, self.description.channels)
        if _beyond(counts, self.description):
            out.append(BEYOND)
            return
        edges = tuple(edge for samples in group for edge in samples.edges)
        out.append(Run(counts, group[0].first, lost, edges))


def _fits(samples: Samples, told: Description) -> bool:
    scales = set(told.volts_per_count) if samples.volts_per_count else {0.0}
    shape = (samples.channels, samples.width) == (told.channels, told.width)
    return shape and scales == {samples.volts_per_count}


def _beyond(counts: Counts, told: Description) -> bool:
    full = 1 << (told.bits - 1)
    return told.bits < 8 * told.width and bool(counts.min() < -full or counts.max() >= full)


def counts_of(data: bytes, width: int, channels: int) -> Counts:
    """Little-endian integers of 2, 3 or 4 bytes as int16 or int32 of shape (scans, channels)."""
    if width == 2:
        return np.frombuffer(data, "<i2").astype(np.int16, copy=False).reshape(-1, channels)
    if width == 4:
        return np.frombuffer(data, "<i4").astype(np.int32, copy=False).reshape(-1, channels)
    thirds = np.frombuffer(data, np.uint8).reshape(-1, 3)
    padded = np.zeros((len(thirds), 4), np.uint8)
    padded[:, 1:] = thirds
    whole = padded.view("<i4").astype(np.int32, copy=False)
    whole >>= 8
    return whole.reshape(-1, channels)
