"""Serial and Ethernet-serial digitizers that send frames: see daq/drivers/frames/FORMAT.md.

Nothing is ever timed by when bytes arrive: every frame carries the digitizer's own sample counter, and the
once-per-rev signal is one of its channels or comes stamped in samples. Losses are counted between whole
frames and start a new segment. A port that goes away is waited for when it is opened again.
"""

from __future__ import annotations

import re
from collections import deque
from collections.abc import Iterator
from dataclasses import replace
from typing import Annotated, ClassVar, Literal

from pydantic import Field, ValidationInfo, field_validator

from config.errors import DriverError
from daq.drivers.base import ChannelPlan, Chunk, Driver, DriverOptions, EndOfSource, SourceInfo
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.columns import LATE_S, STAMPS, Columns, PulseColumn
from daq.drivers.frames.lines import OTHER_CHECK, LineCodec
from daq.drivers.frames.records import MOST_CHANNELS, VERSION, Codec, Description, Tally
from daq.drivers.frames.stream import Run, Stream, Trouble
from daq.drivers.serial_link import Link, ports_here

RATE_TOLERANCE = 0.01
"""Relative; a digitizer that runs further off the rate in the stand file is refused."""
DESCRIPTION_S = 4.0
"""Waited for the description after opening: it comes twice a second, but a board may start anew first."""
PATIENCE_S, RETRY_S = 3.0, 0.1
"""Opening again waits so long for a port that is gone, and looks so often."""
WAIT_S = 0.1
SLOW_BYTES_PER_S, SMALL_BYTES, GATHER_S = 400_000, 1024, 0.01
"""On a line this slow the next bytes get time to gather after so few: a turn of the loop each is waste."""
PACE_S = 0.25
"""How long the line's pace is looked at."""
REPORT_S = 60.0
"""Damage is logged at most so often."""
PASSES_WITHIN_S = 1.8
"""Bytes for so long without samples among them are told with the reason: sooner than mere silence is."""
CODECS: dict[str, type[BinaryCodec] | type[LineCodec]] = {"binary": BinaryCodec, "lines": LineCodec}


class InputOptions(DriverOptions):
    """``[source.options.inputs."2"]``: one input."""

    divider: Annotated[float, Field(ge=0.001, le=1000)] = 1.0
    """Volts at the probe per volt at the digitizer: 3 behind a divider of 1:3."""


class SerialOptions(DriverOptions):
    """``[source.options]`` in a stand file with ``driver = "serial"``."""

    port: Annotated[str, Field(min_length=1, max_length=512)]
    """Device, COM port, or URL of pyserial: socket://HOST:PORT, rfc2217://HOST:PORT, hwgrep://REGEX."""
    baud: Annotated[int, Field(ge=300, le=20_000_000)] = 115_200
    """Ignored by socket:// and by USB devices of the ACM class."""
    codec: Literal["binary", "lines"] = "binary"
    channels: Annotated[int, Field(ge=1, le=MOST_CHANNELS)]
    """How many the digitizer sends; another number is refused."""
    rate_hz: Annotated[float, Field(gt=0)] | None = None
    """Expected, within 1 %; None = whatever the digitizer says. Its own figure is used in any case."""
    device: str | None = None
    """Text that the digitizer's name and serial number must hold; None = any digitizer."""
    inputs: dict[str, InputOptions] = Field(default_factory=dict)
    """By the channel's ``input``."""
    greeting: Annotated[str, Field(max_length=256)] = ""
    """Sent after opening, for a digitizer that starts on demand."""
    trace: str | None = None
    """File for every byte received, in hex with times, one for each opening (".1", ".2", ...), from the stand
    file's folder. It grows without limit: for a hunt only."""

    @field_validator("port")
    @classmethod
    def _pattern(cls, port: str) -> str:
        if port.lower().startswith("hwgrep://"):
            try:
                re.compile(port[len("hwgrep://") :].partition("&")[0])
            except re.error as error:
                raise ValueError(f"holds a pattern that cannot be read: {error}") from error
        return port

    @field_validator("trace")
    @classmethod
    def _traceable(cls, trace: str | None, info: ValidationInfo) -> str | None:
        if trace is not None and "://" in info.data.get("port", ""):
            raise ValueError("works with ports of this computer only, where port is no URL")
        return trace


class SerialDriver(Driver[SerialOptions]):
    """Reads one digitizer."""

    name = "serial"
    Options: ClassVar[type[DriverOptions]] = SerialOptions
    silence_limit_s = 2.0

    def _prepare(self) -> None:
        self.tally = Tally()
        """What came and what was damaged, over all openings."""
        self._link: Link | None = None
        self._ready: deque[Chunk] = deque()
        self._failed: DriverError | None = None
        """Raised once all that came before it is delivered."""
        self._before = self._tallied()
        """What had been counted when the source was opened."""
        self._reported = (0.0, 0, 0)

    @classmethod
    def _connected(cls) -> list[tuple[str, str]]:
        return ports_here()

    # --- source --------------------------------------------------------------------------------------

    def _open(self) -> SourceInfo:
        self._ready.clear()
        self._failed = None
        self._before = self._tallied()
        self._link = self._opened()
        codec: Codec = CODECS[self.options.codec](self.tally)
        self._stream = Stream(codec, self.tally)
        if self.options.greeting:
            self._link.send(self.options.greeting.encode("utf-8"))
        told, early = self._described(self._link)
        info = self._accepted(told)
        self._take(early)
        self._heard = self.clock.monotonic(), self._tallied()
        self._pace, self._slow = (self.clock.monotonic(), self.tally.bytes), True
        self._reported = self.clock.monotonic(), self.tally.frames, self.tally.damaged
        return info

    def _read(self, timeout_s: float) -> Chunk | EndOfSource | None:
        if not self._ready and self._failed is None and self._link is not None:
            try:
                self._receive(self._link, timeout_s)
            except DriverError as error:
                self._fail(error)
        if self._ready:
            chunk = self._ready.popleft()
            if chunk.mono_s is not None and chunk.mono_s < self._mono_s:
                return replace(chunk, mono_s=self._mono_s)
            return chunk
        if self._failed is not None:
            raise self._failed
        return None

    def _receive(self, link: Link, timeout_s: float) -> None:
        data = link.receive(timeout_s)
        self._take(self._stream.feed(data))
        self._gather(len(data))
        self._watch_frames()
        self._report()

    def _remarks(self) -> Iterator[str]:
        return remarks(self.tally, self._before)

    def _close(self) -> None:
        if self._link is not None:
            self._link.close()
        self._link = None

    def _take(self, came: list[Run | Trouble]) -> None:
        """Keep what came until it is read; what follows a Trouble is dropped."""
        for item in came:
            if isinstance(item, Trouble):
                self._fail(DriverError(item.cause, item.remedy, kind=item.kind))
                return
            self._keep(self._columns.chunks(item))
            self._heard = self.clock.monotonic(), self._tallied()
        self._count.left_out = self.tally.left_out

    def _keep(self, chunks: list[Chunk]) -> None:
        """Chunks wait to be read; those held back for stamps are that much older than now."""
        if not (held := self._columns.held):
            self._ready.extend(chunks)
            return
        at_s = self.clock.monotonic() - held / self._rate_hz
        self._ready.extend(replace(chunk, mono_s=at_s) for chunk in chunks)

    def _fail(self, error: DriverError) -> None:
        """Deliver what was held back, then raise."""
        self._failed = error
        self._keep(self._columns.rest())

    def _tallied(self) -> Tally:
        """A copy of the counts."""
        return replace(self.tally, reasons=dict(self.tally.reasons))

    # --- opening -------------------------------------------------------------------------------------

    def _opened(self) -> Link:
        """The open port; when opened again, a port that is gone is waited for a while."""
        options, until_s = self.options, self.clock.monotonic()
        trace = options.trace and self.folder / f"{options.trace}.{self._count.opens + 1}"
        if self._count.opens:
            until_s += PATIENCE_S
        while True:
            try:
                return Link(options.port, options.baud, self.log, trace or None)
            except DriverError as error:
                if error.kind != "gone" or self.clock.monotonic() >= until_s or self._pause(RETRY_S):
                    raise

    def _described(self, link: Link) -> tuple[Description, list[Run | Trouble]]:
        """The digitizer's description, and what came after it. Raises DriverError when none comes."""
        before, until_s = self._before, self.clock.monotonic() + DESCRIPTION_S
        while not self._stop.is_set() and self.clock.monotonic() < until_s:
            came = self._stream.feed(link.receive(WAIT_S))
            if self._stream.description is not None:
                return self._stream.description, came
        raise self._undescribed(before)

    def _undescribed(self, before: Tally) -> DriverError:
        tally, port = self.tally, self.options.port
        came = tally.bytes - before.bytes
        if self._stop.is_set():
            return DriverError(f"Opening {port} was broken off.", "Open it again.", kind="gone")
        if not came:
            return DriverError(
                f"{port} is open, but nothing came from it within {DESCRIPTION_S:g} s.",
                "Check that the digitizer is on and sends by itself; one that must be told to begin needs "
                "source.options.greeting.",
                kind="timeout",
            )
        if tally.other_version > before.other_version:
            return DriverError(
                f"The digitizer on {port} speaks another version of the frame format; this one reads version "
                f"{VERSION}.",
                "Update revmark or the digitizer's program.",
                kind="config",
                retryable=self._count.opens > 0,
            )
        if tally.frames == before.frames and tally.undescribed == before.undescribed:
            return self._garbage(before, DESCRIPTION_S)
        return DriverError(
            f"The digitizer on {port} sends {self._pieces}, but no description within {DESCRIPTION_S:g} s"
            f"{refusals(tally, before)}.",
            "Its program must send one twice a second; see the page of the frame format.",
            kind="protocol",
        )

    @property
    def _pieces(self) -> str:
        return "lines" if self.options.codec == "lines" else "frames"

    def _garbage(self, before: Tally, seconds: float) -> DriverError:
        """Bytes came since ``before``, and no samples passed."""
        options, tally = self.options, self.tally
        came, damaged = tally.bytes - before.bytes, tally.damaged - before.damaged
        what = "no whole frame" if tally.frames == before.frames else "no samples that pass"
        remedy = (
            f"Check source.options.baud (now {options.baud}) and codec (now {options.codec!r}), and whether "
            "another program reads the port or probes it (ModemManager, brltty)."
        )
        if content_refused(tally, before) or OTHER_CHECK in refusals(tally, before):
            remedy = "This is a fault in the digitizer's program; see the page of the frame format."
        return DriverError(
            f"{options.port} brought {came} bytes in {seconds:.1f} s, but {what} among them "
            f"({damaged} {self._pieces} refused){refusals(tally, before)}.",
            remedy,
            kind="protocol",
        )

    def _accepted(self, told: Description) -> SourceInfo:
        """What the base is told; sets up the columns. Raises DriverError with all that does not fit."""
        wanted = Wanted(self.options, self.channels)
        problems = list(wanted.problems(told))
        if problems:
            raise DriverError(
                f"The digitizer on {self.options.port} does not fit the stand file: {'; '.join(problems)}.",
                "Connect the right digitizer, or correct the stand file.",
                kind="config",
                retryable=self._count.opens > 0,
            )
        self._columns, scales = wanted.columns(told, self.tally)
        self._rate_hz = told.rate_hz
        full = 1 << (told.bits - 1)
        return SourceInfo(
            rate_hz=told.rate_hz,
            dtype="int16" if told.width == 2 else "int32",
            volts_per_count=scales,
            full_scale_counts=(-full, full - 1),
            origin="live",
            description=f"digitizer {told.device or 'without a name'} on {self.options.port}",
            stamped=wanted.stamped,
        )

    # --- watching ------------------------------------------------------------------------------------

    def _gather(self, size: int) -> None:
        """Let bytes gather on a slow line; never on a fast one, whose buffers hold some milliseconds only."""
        now_s, (begin_s, came) = self.clock.monotonic(), self._pace
        if now_s - begin_s > PACE_S:
            self._slow = self.tally.bytes - came < SLOW_BYTES_PER_S * (now_s - begin_s)
            self._pace = now_s, self.tally.bytes
        if self._slow and 0 < size < SMALL_BYTES:
            self._pause(GATHER_S)

    def _watch_frames(self) -> None:
        """Raises DriverError when bytes have come for too long without samples among them."""
        heard_s, before = self._heard
        silent_s = self.clock.monotonic() - heard_s
        if silent_s > PASSES_WITHIN_S and self.tally.bytes > before.bytes:
            raise self._garbage(before, silent_s)

    def _report(self) -> None:
        """Once a minute: how much was damaged in it."""
        tally, now_s = self.tally, self.clock.monotonic()
        begin_s, frames, damaged = self._reported
        if now_s - begin_s < REPORT_S:
            return
        bad, good = tally.damaged - damaged, tally.frames - frames
        if bad:
            self.log.warning(
                "%.2g %% of the frames from %s were damaged in the last %.0f s",
                100 * bad / (bad + good),
                self.options.port,
                now_s - begin_s,
            )
        self._reported = now_s, tally.frames, tally.damaged


def content_refused(tally: Tally, before: Tally) -> bool:
    """True when pieces came whole and were refused for what they say."""
    whole = tally.malformed + tally.other_version - before.malformed - before.other_version
    return 2 * whole > tally.damaged + tally.other_version - before.damaged - before.other_version


def refusals(tally: Tally, before: Tally) -> str:
    """The commonest reason why pieces were refused since ``before``, with its count, to end a sentence."""
    counts = {why: n - before.reasons.get(why, 0) for why, n in tally.reasons.items()}
    if not any(counts.values()):
        return ""
    why = max(counts, key=lambda reason: counts[reason])
    first = f"; the first was {tally.example!r}" if tally.example and content_refused(tally, before) else ""
    return f"; most often: {why} ({counts[why]} times){first}"


def remarks(tally: Tally, before: Tally) -> Iterator[str]:
    """What has been wrong since ``before`` with a stream that can be followed, in sentences."""
    page = "This is a fault in the digitizer's program; see the page of the frame format."
    if (late := tally.late_stamps - before.late_stamps) > 0:
        yield (
            f"{late} once-per-rev stamps came more than {LATE_S:g} s of samples too late and "
            f"were left out: pulses are missing and the speed may be wrong. {page}"
        )
    if (early := tally.early_stamps - before.early_stamps) > 0:
        yield (
            f"{early} once-per-rev stamps came more than {LATE_S:g} s of samples too early "
            f"and were left out: pulses are missing and the speed may be wrong. {page}"
        )
    if (close := tally.close_stamps - before.close_stamps) > 0:
        yield (
            f"{close} once-per-rev stamps came within a few scans of the one before and were left out. Look "
            "for scratches, a loose sensor or a trigger level near the noise."
        )
    if (refused := tally.malformed - before.malformed) > 0:
        yield f"{refused} pieces of the stream came whole and were refused{refusals(tally, before)}. {page}"


class Wanted:
    """What the stand file wants of a digitizer."""

    def __init__(self, options: SerialOptions, channels: ChannelPlan) -> None:
        self._options = options
        self._channels = channels
        self.stamped = channels.once_per_rev.input == STAMPS
        self._inputs = channels.inputs[1:] if self.stamped else channels.inputs

    def problems(self, told: Description) -> Iterator[str]:
        """What does not fit, in words."""
        options = self._options
        if told.channels != options.channels:
            yield f"it sends {told.channels} channels where source.options.channels says {options.channels}"
        rate_hz = options.rate_hz
        if rate_hz is not None and abs(told.rate_hz - rate_hz) > RATE_TOLERANCE * rate_hz:
            yield f"it takes {told.rate_hz:.10g} samples a second where rate_hz says {rate_hz:.10g}"
        if options.device is not None and options.device not in told.device:
            yield f"it calls itself {told.device!r} where device says {options.device!r}"
        for text in self._inputs:
            if not (text.isdecimal() and 1 <= int(text) <= told.channels):
                yield f"it has no input {text!r}; its inputs are 1 to {told.channels}"
        for key in sorted(set(options.inputs) - set(self._inputs)):
            yield f"inputs.{key} in source.options belongs to no channel"
        yield from self._stamp_problems(told)

    def _stamp_problems(self, told: Description) -> Iterator[str]:
        pulse = self._channels.once_per_rev
        if not self.stamped:
            return
        if told.edge == "none":
            yield f"the once-per-rev input is {STAMPS!r}, and it stamps no edges"
        elif told.edge != pulse.edge:
            yield f"it stamps {told.edge} edges where once_per_rev.edge says {pulse.edge}"
        if pulse.level_v not in (None, 0.0):
            yield "stamped edges have no voltage; once_per_rev.level must be auto"

    def columns(self, told: Description, tally: Tally) -> tuple[Columns, tuple[float, ...]]:
        """The columns of a block and the volts per count of each."""
        picked = [int(text) - 1 for text in self._inputs]
        wired = [self._options.inputs.get(text, InputOptions()) for text in self._inputs]
        scales = [told.volts_per_count[k] * w.divider for k, w in zip(picked, wired, strict=True)]
        pulse = None
        if self.stamped:
            falling = told.edge == "falling"
            pulse = PulseColumn(1 << (told.bits - 1), told.rate_hz, falling=falling, tally=tally)
            scales.insert(0, pulse.volts_per_count)
        return Columns(picked, told, pulse, tally), tuple(scales)
