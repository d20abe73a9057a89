"""WAV files of whole-number samples, read in pieces and kept as the counts they are.

Takes RIFF/WAVE with PCM of 16, 24 or 32 bits, plain or extensible; 24 bits become int32. The standard
library's ``wave`` refuses extensible files before Python 3.12 and says nothing of a short file, so the
header is read here; a test compares the samples with ``wave``.
"""

from __future__ import annotations

import struct
from pathlib import Path
from typing import BinaryIO

import numpy as np

from config.errors import DriverError
from daq.drivers.base import Samples

PCM, IEEE_FLOAT, EXTENSIBLE = 0x0001, 0x0003, 0xFFFE
_PCM_GUID_TAIL = bytes.fromhex("000000001000800000aa00389b71")
"""Last 14 bytes of the sub-format of an extensible file whose first two say PCM."""


class WavRecording:
    """An open WAV file. Raises DriverError when made, and when the file turns out short while read."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self.names: tuple[str, ...] = ()
        self._file = path.open("rb")
        try:
            self._read_header(self._file)
        except BaseException:
            self._file.close()
            raise

    def read(self, frames: int) -> Samples:
        """Up to ``frames`` rows of all columns; none at the end."""
        wanted = min(frames, self._left)
        raw = self._file.read(wanted * self._frame_bytes)
        if len(raw) < wanted * self._frame_bytes:
            raise self._short(f"{self._left - len(raw) // self._frame_bytes} samples are missing")
        self._left -= wanted
        return _counts(raw, self.bits, self.columns)

    def close(self) -> None:
        self._file.close()

    def _read_header(self, file: BinaryIO) -> None:
        magic = file.read(12)
        if magic[:4] != b"RIFF" or magic[8:12] != b"WAVE":
            raise self._bad("is no WAV file", "Give a RIFF WAV file, or a CSV file that ends in .csv.")
        fmt = b""
        while True:
            head = file.read(8)
            if len(head) < 8:
                raise self._short("it has no samples")
            name, size = struct.unpack("<4sI", head)
            if name == b"data":
                break
            body = file.read(size + size % 2)
            fmt = body if name == b"fmt " else fmt
        self._take_format(fmt)
        self._take_length(file, size)

    def _take_format(self, fmt: bytes) -> None:
        if len(fmt) < 16:
            raise self._bad("says nothing of its format before its samples", "Write it again.")
        code, columns, rate, _, frame_bytes, bits = struct.unpack("<HHIIHH", fmt[:16])
        if code == EXTENSIBLE and fmt[26:40] == _PCM_GUID_TAIL:
            code = struct.unpack("<H", fmt[24:26])[0]
        if code != PCM or bits not in (16, 24, 32):
            what = f"{bits}-bit float" if code == IEEE_FLOAT else f"format {code:#x} of {bits} bits"
            raise self._bad(f"holds {what}", "Save it as PCM of 16, 24 or 32 bits.")
        if columns < 1 or rate < 1 or frame_bytes != columns * bits // 8:
            raise self._bad("has a header that contradicts itself", "Write it again.")
        self.columns, self.bits, self.rate_hz = int(columns), int(bits), float(rate)
        self._frame_bytes = int(frame_bytes)

    def _take_length(self, file: BinaryIO, announced: int) -> None:
        held = self.path.stat().st_size - file.tell()
        if held < announced:
            raise self._short(f"it announces {announced} bytes of samples and holds {held}")
        if announced % self._frame_bytes:
            raise self._short("its last sample is not whole")
        self.frames: int | None = announced // self._frame_bytes
        self._left = announced // self._frame_bytes
        if not self._left:
            raise self._short("it has no samples")

    def _bad(self, what: str, remedy: str) -> DriverError:
        return DriverError(f"The file {self.path} {what}.", remedy, kind="config")

    def _short(self, what: str) -> DriverError:
        return DriverError(
            f"The file {self.path} is truncated: {what}.",
            "Copy it again from where it was recorded, or record again.",
            kind="lost_data",
        )


def _counts(raw: bytes, bits: int, columns: int) -> Samples:
    if bits == 24:
        wide = np.zeros((len(raw) // 3, 4), np.uint8)
        wide[:, 1:] = np.frombuffer(raw, np.uint8).reshape(-1, 3)
        return (wide.view("<i4") >> 8).astype(np.int32).reshape(-1, columns)
    if bits == 16:
        return np.frombuffer(raw, "<i2").astype(np.int16).reshape(-1, columns)
    return np.frombuffer(raw, "<i4").astype(np.int32).reshape(-1, columns)
