"""What every source of samples is: one base class that owns the rules, drivers that only fetch.

The base owns states, time-outs, counting, logging and the border (a foreign exception leaves as
DriverError with its cause kept). A driver overrides what is listed at ``Driver`` and nothing else.
"""

from __future__ import annotations

import logging
import threading
from abc import ABC, abstractmethod
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from enum import StrEnum
from pathlib import Path
from typing import Any, ClassVar, Generic, Literal, TypeVar

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, ValidationError

from config.errors import DriverError, Refusal, RevmarkError
from daq.clock import Clock
from daq.drivers.plan import ChannelPlan, FittedRotor, Piece, ProbePlan, PulsePlan
from daq.drivers.problems import sentences

__all__ = [
    "Block", "ChannelPlan", "Chunk", "Counters", "Driver", "DriverOptions", "DriverState", "EndOfSource",
    "FittedRotor", "Piece", "ProbePlan", "PulsePlan", "SourceInfo", "sentences",
]  # fmt: skip

CLOSE_DEADLINE_S = 5.0
"""How long ``close`` waits for a read in progress."""
LATE_READ_S = 1.0
"""A read that comes back this much after its time-out is logged."""

Samples = NDArray[np.int16] | NDArray[np.int32]


class DriverState(StrEnum):
    CLOSED = "closed"
    OPEN = "open"
    LOST = "lost"
    """A read failed; ``close`` and ``open`` may bring the source back."""


@dataclass(frozen=True, slots=True)
class Block:
    """Samples that follow each other without a gap inside and, within a segment, between blocks."""

    counts: Samples
    """Shape (frames, channels); column 0 is the once-per-rev channel, then probes in stand-file order."""
    segment: int
    """Grows by one at each gap, re-open or new file; nothing is computed across it."""
    first_sample: int
    """Samples of the source since ``open``, lost ones included."""
    rate_hz: float
    mono_s: float
    """Monotonic clock at the block's last sample; never falls."""


@dataclass(frozen=True, slots=True)
class Chunk:
    """What a driver's ``_read`` hands to the base, which numbers and stamps it."""

    counts: Samples
    lost_before: int = 0
    """Samples lost, exactly, between the previous chunk and this one; above 0 starts a segment."""
    fresh: bool = False
    """True starts a segment although no sample is known to be lost (a new file)."""
    mono_s: float | None = None
    """Monotonic clock at the last sample when the driver knows it; None = on arrival."""


@dataclass(frozen=True, slots=True)
class EndOfSource:
    """A file or stream ended, perhaps while turning; the driver stays open and holds (``None``)."""

    reason: str = "end of source"
    error: DriverError | None = None
    """Why it ended early, when it did (a damaged file)."""


@dataclass(frozen=True, slots=True)
class SourceInfo:
    """What a source turned out to be once open."""

    rate_hz: float
    """True rate, not the one asked for."""
    dtype: Literal["int16", "int32"]
    volts_per_count: tuple[float, ...]
    """By column of ``Block.counts``."""
    full_scale_counts: tuple[int, int]
    """Lowest and highest count; a sample there counts as clipped."""
    origin: Literal["live", "replayed", "simulated"]
    description: str
    skew_s: tuple[float, ...] = ()
    """Delay of each column's sampling after column 0; empty = all sampled together."""
    stamped: bool = False
    """Column 0 is drawn from edges that hardware stamped: only where they lie means anything."""


@dataclass(slots=True)
class Counters:
    """Since the driver was made, over all its opens."""

    opens: int = 0
    blocks: int = 0
    samples: int = 0
    gaps: int = 0
    """Segments that started inside an open source, new files not counted."""
    lost_samples: int = 0
    """Known exactly; what passed while the source was lost is not in it."""
    left_out: int = 0
    """Of these: what the source says it left out itself, before anything was sent."""
    errors: int = 0


class DriverOptions(BaseModel):
    """Base of every driver's ``Options``: unknown keys are refused, values never change."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False)


OptionsT = TypeVar("OptionsT", bound=DriverOptions)


class Driver(ABC, Generic[OptionsT]):
    """A source of samples, live or not.

    Who calls: the daemon's reading thread calls ``open``, ``read`` (over and over) and ``close``; any
    thread may call ``act``, ``counters``, ``state`` and ``close``.

    A driver MUST set ``name`` and ``Options`` and override:

    - ``_open() -> SourceInfo``: called by ``open`` only; finds and starts the source.
    - ``_read(timeout_s) -> Chunk | EndOfSource | None``: called by ``read`` only, with the source open.
      Waits at most ``timeout_s`` seconds, with ``_pause`` where it must wait itself; ``None`` = nothing
      came. On a loss it cannot count it raises DriverError; on one it can, it goes on with
      ``Chunk.lost_before``.
    - ``_close()``: called once after each ``_open``, also after one that failed half-way.

    It MAY set ``verbs`` and override ``_act(verb, args)`` (called by ``act`` under ``_lock``, which
    ``_read`` must take around what both touch, never while it waits); MAY override ``_prepare()``
    (called once, at the end of ``__init__``; no I/O) and the class method ``_connected()`` (called by
    ``connected``; opens nothing) and ``_remarks()`` (called by ``remarks``, after each read); MAY set
    ``paces_itself`` (False = it delivers as fast as it is read) and ``silence_limit_s``. It overrides no
    public method.
    """

    name: ClassVar[str]
    Options: ClassVar[type[DriverOptions]]
    verbs: ClassVar[tuple[str, ...]] = ()
    silence_limit_s: ClassVar[float | None] = None
    """Longer without a chunk is DriverError ``timeout``; None = the source may be silent."""
    paces_itself: bool = True

    def __init__(
        self,
        options: OptionsT,
        channels: ChannelPlan,
        *,
        clock: Clock,
        log: logging.Logger | None = None,
        folder: Path | None = None,
    ) -> None:
        """``folder``: the stand file's, for relative paths in the options; None = the current one."""
        self.options = options
        self.channels = channels
        self.clock = clock
        self.log = log or logging.getLogger(f"revmark.drivers.{self.name}")
        self.folder = folder or Path()
        self._lock = threading.RLock()
        self._calls = threading.Lock()
        self._stop = threading.Event()
        self._state = DriverState.CLOSED
        self._count = Counters()
        self._segment = -1
        self._prepare()

    # --- what callers use ----------------------------------------------------------------------------

    @property
    def state(self) -> DriverState:
        return self._state

    @property
    def counters(self) -> Counters:
        """A copy of the counts so far."""
        return replace(self._count)

    def open(self) -> SourceInfo:
        """Start the source. Raises DriverError; open twice is refused (``protocol``)."""
        with self._calls:
            if self._state is not DriverState.CLOSED:
                raise self._misuse("is open already", "Close it before opening it again.")
            self._stop.clear()
            try:
                with self._border("opened"):
                    info = self._open()
                    self._check_info(info)
            except DriverError:
                self._close_quietly()
                raise
            self._started(info)
            return info

    def read(self, timeout_s: float = 0.2) -> Block | EndOfSource | None:
        """The next block; None when nothing came within ``timeout_s``.

        Raises DriverError: then the source is lost until it is closed and opened again.
        """
        with self._calls:
            self._must_be_open()
            begin_s = self.clock.monotonic()
            try:
                with self._border("read"):
                    got = self._read(timeout_s)
                    self._watch(begin_s, timeout_s, silent=got is None)
                    return self._handed_on(got)
            except DriverError as error:
                self._state = DriverState.LOST
                self.log.warning("source %s lost: %s", self.name, error)
                raise

    def remarks(self) -> tuple[str, ...]:
        """What is wrong with what comes since ``open``, although it comes: sentences with what to do."""
        with self._border("asked what is wrong"):
            return tuple(self._remarks())

    def close(self) -> None:
        """Stop and release the source; again is harmless. Wakes a read in progress, from any thread."""
        self._stop.set()
        if not self._calls.acquire(timeout=CLOSE_DEADLINE_S):
            raise DriverError(
                f"Source {self.name} did not stop within {CLOSE_DEADLINE_S:g} s: a read still hangs.",
                "Restart the daemon.",
                kind="timeout",
                retryable=False,
            )
        try:
            if self._state is not DriverState.CLOSED:
                self._close_quietly()
                self._state = DriverState.CLOSED
                self.log.info("source %s closed", self.name)
        finally:
            self._calls.release()

    def act(self, verb: str, **args: Any) -> Mapping[str, Any]:
        """Do one of ``verbs`` (``start``, ``stop``, ``next``); the answer's ``said`` is a sentence.

        Raises Refusal (unknown verb, wrong argument, not now) or DriverError (a bad file); the source
        stays open.
        """
        if verb not in self.verbs:
            known = f"It knows {', '.join(self.verbs)}." if self.verbs else "It only delivers samples."
            raise Refusal(f"Source {self.name} cannot {verb!r}.", known)
        with self._lock:
            if self._state is not DriverState.OPEN:
                raise Refusal(f"Source {self.name} is {self._state}.", "Try again when it is open.")
            with self._border(f"told to {verb}", RevmarkError):
                try:
                    return self._act(verb, args)
                except ValidationError as error:
                    listed = "; ".join(f"{key}: {text}" for key, text in sentences(error))
                    raise Refusal(f"Source {self.name} cannot {verb} like that. {listed}") from error

    @classmethod
    def connected(cls) -> list[tuple[str, str]]:
        """Sources of this kind found here: (what to write in the stand file, what it says of itself).

        Raises DriverError when nothing can be found out (a library or a driver is missing).
        """
        try:
            return cls._connected()
        except DriverError:
            raise
        except Exception as error:
            raise DriverError(
                f"What is connected for the driver {cls.name} cannot be found out: "
                f"{type(error).__name__}: {error}.",
                "Look into the stand file's template for how a source is named.",
                kind="no_driver",
            ) from error

    # --- what a driver overrides ---------------------------------------------------------------------

    @abstractmethod
    def _open(self) -> SourceInfo: ...

    @abstractmethod
    def _read(self, timeout_s: float) -> Chunk | EndOfSource | None: ...

    @abstractmethod
    def _close(self) -> None: ...

    def _act(self, verb: str, args: Mapping[str, Any]) -> Mapping[str, Any]:
        raise NotImplementedError(f"{verb} is in verbs but _act is not overridden: {args}")

    def _prepare(self) -> None:
        """Set up own attributes."""

    def _remarks(self) -> Iterator[str]:
        yield from ()

    @classmethod
    def _connected(cls) -> list[tuple[str, str]]:
        return []

    # --- what a driver uses --------------------------------------------------------------------------

    def _pause(self, seconds: float) -> bool:
        """Wait; True when ``close`` asks to come back at once."""
        return self.clock.wait(self._stop, max(seconds, 0.0))

    # --- the base's own ------------------------------------------------------------------------------

    def _misuse(self, what: str, remedy: str) -> DriverError:
        return DriverError(f"Source {self.name} {what}.", remedy, kind="protocol", retryable=False)

    def _must_be_open(self) -> None:
        if self._state is DriverState.LOST:
            raise DriverError(f"Source {self.name} is lost.", "Close it and open it again.", kind="gone")
        if self._state is DriverState.CLOSED:
            raise self._misuse("is closed", "Open it before reading.")

    def _started(self, info: SourceInfo) -> None:
        self._info = info
        self._next_sample = 0
        self._fresh = True
        self._mono_s = self._heard_s = self.clock.monotonic()
        self._count.opens += 1
        self._state = DriverState.OPEN
        self.log.info("source %s open: %s", self.name, info.description)

    def _check_info(self, info: SourceInfo) -> None:
        columns = 1 + len(self.channels.probes)
        if len(info.volts_per_count) != columns or len(info.skew_s) not in (0, columns) or info.rate_hz <= 0:
            raise self._misuse(
                f"describes {len(info.volts_per_count)} channels at {info.rate_hz:g} Hz where the stand file "
                f"has {columns}",
                "Mend the driver.",
            )

    def _watch(self, begin_s: float, timeout_s: float, *, silent: bool) -> None:
        now_s = self.clock.monotonic()
        if now_s - begin_s > timeout_s + LATE_READ_S:
            self.log.warning("source %s: a read of %.2f s took %.2f s", self.name, timeout_s, now_s - begin_s)
        if not silent:
            self._heard_s = now_s
        elif self.silence_limit_s is not None and now_s - self._heard_s > self.silence_limit_s:
            raise DriverError(
                f"Source {self.name} sent no data for {now_s - self._heard_s:.1f} s.",
                "Check its power, its cable and its clock; it is opened again by itself.",
                kind="timeout",
            )

    def _handed_on(self, got: Chunk | EndOfSource | None) -> Block | EndOfSource | None:
        if isinstance(got, Chunk):
            return self._block(got)
        if got is not None:
            self._fresh = True
            self.log.info("source %s: %s", self.name, got.reason)
        return got

    def _block(self, chunk: Chunk) -> Block:
        self._check_chunk(chunk)
        gap = chunk.lost_before > 0 or chunk.fresh
        if gap or self._fresh:
            self._segment += 1
        if chunk.lost_before > 0:
            self._count.gaps += 1
            self._count.lost_samples += chunk.lost_before
            self.log.warning("source %s lost %d samples", self.name, chunk.lost_before)
        self._fresh = False
        first = self._next_sample + chunk.lost_before
        self._next_sample = first + len(chunk.counts)
        self._mono_s = self.clock.monotonic() if chunk.mono_s is None else chunk.mono_s
        self._count.blocks += 1
        self._count.samples += len(chunk.counts)
        return Block(chunk.counts, self._segment, first, self._info.rate_hz, self._mono_s)

    def _check_chunk(self, chunk: Chunk) -> None:
        counts, columns = chunk.counts, len(self._info.volts_per_count)
        sound = counts.ndim == 2 and counts.shape[1] == columns and len(counts) > 0
        if not sound or counts.dtype != self._info.dtype or chunk.lost_before < 0:
            raise self._misuse(
                f"delivered {counts.dtype} of shape {counts.shape} where {columns} columns of "
                f"{self._info.dtype} were announced",
                "Mend the driver.",
            )
        if chunk.mono_s is not None and chunk.mono_s < self._mono_s:
            raise self._misuse("stamped a block earlier than the one before", "Mend the driver.")

    def _close_quietly(self) -> None:
        try:
            self._close()
        except Exception:
            self._count.errors += 1
            self.log.warning("source %s did not close cleanly", self.name, exc_info=True)

    def _border(self, doing: str, passes: type[RevmarkError] = DriverError) -> _Border:
        return _Border(self, doing, passes)


class _Border:
    """What a driver raises becomes ours here and is counted; a generator would cost more, block by block."""

    __slots__ = ("_doing", "_driver", "_passes")

    def __init__(self, driver: Driver[Any], doing: str, passes: type[RevmarkError]) -> None:
        self._driver, self._doing, self._passes = driver, doing, passes

    def __enter__(self) -> None: ...

    def __exit__(self, _: object, error: BaseException | None, __: object) -> None:
        if not isinstance(error, Exception):
            return
        count = self._driver._count
        if isinstance(error, self._passes):
            count.errors += isinstance(error, DriverError)
            return
        count.errors += 1
        raise DriverError(
            f"Source {self._driver.name} failed while it was {self._doing}: {type(error).__name__}: {error}.",
            "The log holds the details.",
            kind="protocol",
        ) from error
