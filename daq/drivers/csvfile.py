"""CSV files of volts: optional ``# rate_hz = 12800`` and ``# full_scale = 30 V`` lines, a header, rows.

::

    # rate_hz = 12800, full_scale = 30 V
    tacho,probe 1,probe 2
    -8.001,-10.02,-9.41

Volts become int32 counts of 24 bits over the full scale; what lies beyond it sits at its end (clipped).
"""

from __future__ import annotations

import csv
import itertools
from pathlib import Path
from typing import TextIO

import numpy as np
from numpy.typing import NDArray

from config.errors import BadQuantity, DriverError
from config.units import parse_quantity
from daq.drivers.base import Samples

BITS = 24
FULL_COUNTS = 1 << (BITS - 1)


class CsvRecording:
    """An open CSV file; what is given here and what the file says of itself must agree."""

    bits = BITS
    frames: int | None = None

    def __init__(self, path: Path, rate_hz: float | None, full_scale_v: float) -> None:
        self.path = path
        self._full_scale_v = full_scale_v
        self._file = path.open(encoding="utf-8-sig", newline="")
        try:
            self._read_header(self._file, rate_hz)
        except BaseException:
            self._file.close()
            raise

    def read(self, frames: int) -> Samples:
        """Up to ``frames`` rows of all columns; none at the end. Raises DriverError naming a bad row."""
        lines = list(itertools.islice(self._file, frames))
        rows = [line for line in lines if line.strip()]
        if not rows:
            return np.empty((0, self.columns), np.int32)
        try:
            volts = _parse(rows, self.columns)
        except ValueError as error:
            raise self._bad_row(lines) from error
        self._line += len(lines)
        counts = np.rint(volts * (FULL_COUNTS / self._full_scale_v))
        return np.clip(counts, -FULL_COUNTS, FULL_COUNTS - 1).astype(np.int32)

    def close(self) -> None:
        self._file.close()

    def _read_header(self, file: TextIO, rate_hz: float | None) -> None:
        said: dict[str, str] = {}
        line = file.readline()
        self._line = 2
        while line.startswith("#"):
            said |= _pairs(line[1:])
            line = file.readline()
            self._line += 1
        self.names = tuple(name.strip() for name in next(csv.reader([line]), []))
        self.columns = len(self.names)
        if not line.strip() or any(_is_number(name) for name in self.names):
            raise self._bad("has no header with the channels' names", "Write one above the rows of volts.")
        self.rate_hz = self._rate(said, rate_hz)
        self._check_scale(said)

    def _rate(self, said: dict[str, str], expected_hz: float | None) -> float:
        text = said.get("rate_hz")
        if text is None:
            if expected_hz is None:
                raise self._bad("does not say its sample rate", 'Put "# rate_hz = 12800" in its first line.')
            return expected_hz
        if not _is_number(text) or not float(text) > 0:
            raise self._bad(f"has the rate {text!r}", 'Write it as "# rate_hz = 12800".')
        return float(text)

    def _check_scale(self, said: dict[str, str]) -> None:
        text = said.get("full_scale")
        if text is None:
            return
        try:
            own_v = parse_quantity(text, "voltage")
        except BadQuantity as error:
            raise self._bad(f"has a full scale that cannot be read: {error.cause}", error.remedy) from error
        if abs(own_v - self._full_scale_v) > 1e-9 * self._full_scale_v:
            raise self._bad(
                f"has a full scale of {own_v:g} V where the stand file has {self._full_scale_v:g} V",
                "Correct the one that is wrong.",
            )

    def _bad(self, what: str, remedy: str) -> DriverError:
        return DriverError(f"The file {self.path} {what}.", remedy, kind="config")

    def _bad_row(self, lines: list[str]) -> DriverError:
        number, line = next(
            ((i, t) for i, t in enumerate(lines, self._line) if t.strip() and not _is_row(t, self.columns)),
            (self._line, lines[0]),
        )
        return DriverError(
            f"Line {number} of the file {self.path} is not {self.columns} voltages: {line.strip()[:60]!r}.",
            "Mend the line or export the file again; it was played up to there.",
            kind="lost_data",
        )


def _parse(lines: list[str], columns: int) -> NDArray[np.float64]:
    volts = np.loadtxt(lines, delimiter=",", ndmin=2, comments=None)
    if volts.shape != (len(lines), columns) or not np.isfinite(volts).all():
        raise ValueError("wrong shape or not finite")
    return volts


def _is_row(line: str, columns: int) -> bool:
    try:
        return bool(_parse([line], columns).size)
    except ValueError:
        return False


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _pairs(text: str) -> dict[str, str]:
    parts = (part.partition("=") for part in text.split(","))
    return {key.strip(): value.strip() for key, sign, value in parts if sign}
