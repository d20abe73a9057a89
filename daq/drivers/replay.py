"""Recordings as a source: WAV and CSV files, at real pace, a multiple of it, or as fast as they are read.

Holds at first and after each file until ``next``; each file is a new segment. A file that cannot be used
is refused in words, and the driver holds on.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, ClassVar, Literal, Protocol, cast

import numpy as np
from pydantic import BeforeValidator, Field, model_validator

from config.errors import BadQuantity, DriverError, Refusal
from config.units import parse_quantity
from daq.drivers.base import Chunk, Driver, DriverOptions, EndOfSource, Samples, SourceInfo
from daq.drivers.csvfile import CsvRecording
from daq.drivers.pace import FAST, PaceOrFast
from daq.drivers.wav import WavRecording

RATE_TOLERANCE = 1e-6
"""Relative; a file at another rate than the source's is refused."""


class Recording(Protocol):
    """An open file."""

    path: Path
    rate_hz: float
    bits: int
    columns: int
    names: tuple[str, ...]
    """Of the columns; empty when the file has none."""
    frames: int | None

    def read(self, frames: int) -> Samples: ...

    def close(self) -> None: ...


def _volts(value: object) -> float:
    if not isinstance(value, str):
        raise ValueError('write it with its unit, for example "30 V"')
    try:
        return parse_quantity(value, "voltage", minimum=1e-3)
    except BadQuantity as error:
        raise ValueError(str(error)) from error


class ReplayOptions(DriverOptions):
    """``[source.options]`` in a stand file with ``driver = "replay"``."""

    files: tuple[str, ...] = ()
    """Played in this order, one per ``next``; relative to the stand file's folder."""
    full_scale: Annotated[float, BeforeValidator(_volts)]
    """Volts, written "30 V": what the highest count means; for CSV the ends of the range."""
    pace: PaceOrFast = 1.0
    """"real", "fast" or recorded seconds per second."""
    rate_hz: Annotated[float, Field(gt=0)] | None = None
    """Expected; None = as the first file that can be read says."""
    bits: Literal[16, 24, 32] | None = None
    """Expected; None = as the first file that can be read says. CSV counts as 24."""
    columns: dict[str, Annotated[int, Field(ge=1)]] = Field(default_factory=dict)
    """Column of a file (1 = the first) by the channel's ``input``; then files may have more columns.

    Empty = an input is a column's number, or its name in a CSV header, and every column is used.
    """
    block_s: Annotated[float, Field(ge=0.01, le=1.0)] = 0.1

    @model_validator(mode="after")
    def _known_format(self) -> ReplayOptions:
        if not self.files and (self.rate_hz is None or self.bits is None):
            raise ValueError("without files, rate_hz and bits must be given")
        return self


class NextArgs(DriverOptions):
    file: str | None = None


class ReplayDriver(Driver[ReplayOptions]):
    """Plays one file per ``next``."""

    name = "replay"
    Options: ClassVar[type[DriverOptions]] = ReplayOptions
    verbs = ("next",)

    def _prepare(self) -> None:
        self.paces_itself = self.options.pace != FAST
        self._next_file = 0
        self._playing: Recording | None = None

    # --- source --------------------------------------------------------------------------------------

    def _open(self) -> SourceInfo:
        self._rate_hz, self._bits = self._format()
        self._frames = max(1, round(self.options.block_s * self._rate_hz))
        columns = 1 + len(self.channels.probes)
        full = 1 << (self._bits - 1)
        return SourceInfo(
            rate_hz=self._rate_hz,
            dtype="int16" if self._bits == 16 else "int32",
            volts_per_count=(self.options.full_scale / full,) * columns,
            full_scale_counts=(-full, full - 1),
            origin="replayed",
            description=f"replay of {len(self.options.files)} files, {self._pace_words()}",
        )

    def _read(self, timeout_s: float) -> Chunk | EndOfSource | None:
        wait_s = self._wait_s()
        if wait_s is None or wait_s > timeout_s:
            self._pause(timeout_s)
            return None
        if wait_s > 0 and self._pause(wait_s):
            return None
        with self._lock:
            return self._next_chunk()

    def _close(self) -> None:
        with self._lock:
            self._hold()

    def _wait_s(self) -> float | None:
        """Until the next block is due; None = holding."""
        with self._lock:
            if self._playing is None:
                return None
            if not self.paces_itself:
                return 0.0
            return self._due_s(self._at + self._ahead()) - self.clock.monotonic()

    def _ahead(self) -> int:
        frames = self._playing.frames if self._playing else None
        return self._frames if frames is None else min(self._frames, frames - self._at)

    def _due_s(self, sample: int) -> float:
        return self._origin_s + sample / (self._rate_hz * self.options.pace)

    def _next_chunk(self) -> Chunk | EndOfSource | None:
        playing = self._playing
        if playing is None:
            return None
        try:
            counts = playing.read(self._frames)
        except DriverError as error:
            return self._ended(error)
        except (OSError, ValueError) as error:
            return self._ended(_unreadable(playing.path, error))
        if not len(counts):
            return self._ended(None)
        self._at += len(counts)
        mono_s = self._due_s(self._at) if self.paces_itself else None
        picked = cast("Samples", np.take(counts, self._picked, axis=1))
        return Chunk(picked, mono_s=mono_s)

    def _ended(self, error: DriverError | None) -> EndOfSource:
        self._hold()
        self._count.errors += error is not None
        return EndOfSource() if error is None else EndOfSource(error.cause, error)

    def _hold(self) -> None:
        if self._playing is not None:
            self._playing.close()
        self._playing = None

    def _pace_words(self) -> str:
        return f"{self.options.pace:g} times real pace" if self.paces_itself else "as fast as it is read"

    # --- files ---------------------------------------------------------------------------------------

    def _act(self, verb: str, args: Mapping[str, Any]) -> Mapping[str, Any]:
        del verb
        if self._playing is not None:
            raise Refusal(f"{self._playing.path.name} is still playing.", "Wait until it has ended.")
        name = NextArgs.model_validate(dict(args)).file or self._due_file()
        recording = self._load(name)
        try:
            self._picked = self._admit(recording)
        except BaseException:
            recording.close()
            raise
        self._playing, self._at, self._origin_s = recording, 0, self.clock.monotonic()
        if name in self.options.files:
            self._next_file = self.options.files.index(name) + 1
        left = len(self.options.files) - self._next_file
        seconds = None if recording.frames is None else recording.frames / recording.rate_hz
        length = "" if seconds is None else f" of {seconds:.1f} s"
        said = f"Playing {name}{length}; {left} listed files follow."
        return {"said": said, "file": name, "seconds": seconds, "files_left": left}

    def _due_file(self) -> str:
        files = self.options.files
        if self._next_file >= len(files):
            raise Refusal(f"All {len(files)} files have been played.", "Name a file to play.")
        return files[self._next_file]

    def _load(self, name: str) -> Recording:
        path = self.folder / name
        try:
            if path.suffix.lower() == ".csv":
                return CsvRecording(path, self.options.rate_hz, self.options.full_scale)
            return WavRecording(path)
        except FileNotFoundError as error:
            raise DriverError(
                f"There is no file {path}.",
                "Correct its name; names are relative to the stand file's folder.",
                kind="config",
            ) from error
        except (OSError, UnicodeDecodeError) as error:
            raise _unreadable(path, error) from error

    def _format(self) -> tuple[float, int]:
        """Rate and bits: the options', or those of the first listed file that can be read."""
        rate_hz, bits = self.options.rate_hz, self.options.bits
        if rate_hz is not None and bits is not None:
            return rate_hz, bits
        trouble: DriverError | None = None
        for name in self.options.files:
            try:
                found = self._load(name)
            except DriverError as error:
                trouble = trouble or error
                self.log.warning("%s", error)
                continue
            found.close()
            return rate_hz or found.rate_hz, bits or found.bits
        assert trouble is not None  # the options refuse to have no files and no format
        raise DriverError(
            f"None of the files can be played. {trouble.cause}", trouble.remedy, kind=trouble.kind
        )

    def _admit(self, recording: Recording) -> list[int]:
        """Columns to take, from 0. Raises DriverError when the file does not fit the source."""
        if abs(recording.rate_hz - self._rate_hz) > RATE_TOLERANCE * self._rate_hz:
            raise _misfit(
                recording,
                f"has {recording.rate_hz:g} samples a second where {self._rate_hz:g} are expected",
                "Play it in a stand file of its own, or record at the same rate.",
            )
        if recording.bits != self._bits:
            raise _misfit(
                recording,
                f"has samples of {recording.bits} bits where {self._bits} are expected",
                "Play it in a stand file of its own.",
            )
        wanted = len(self.channels.inputs)
        if not self.options.columns and recording.columns != wanted:
            raise _misfit(
                recording,
                f"has {recording.columns} channels, and the stand file has {wanted}",
                "Describe every channel in the stand file, or choose columns with source.options.columns.",
            )
        return [self._column(recording, text) - 1 for text in self.channels.inputs]

    def _column(self, recording: Recording, text: str) -> int:
        column = self.options.columns.get(text)
        if column is None and text in recording.names:
            column = recording.names.index(text) + 1
        if column is None and text.isdecimal():
            column = int(text)
        if column is None or not 1 <= column <= recording.columns:
            raise _misfit(
                recording,
                f"has no column for the input {text!r}; its columns are 1 to {recording.columns}",
                "Correct the channel's input, or name its column in source.options.columns.",
            )
        return column


def _misfit(recording: Recording, what: str, remedy: str) -> DriverError:
    return DriverError(f"The file {recording.path} {what}.", remedy, kind="config")


def _unreadable(path: Path, error: Exception) -> DriverError:
    found = DriverError(
        f"The file {path} cannot be read: {error}.", "Check the file and the right to read it.", kind="config"
    )
    found.__cause__ = error
    return found
