"""What the analysis is fed from and hands over to: the daemon's threads, or a recording read in place."""

from __future__ import annotations

from collections import deque
from typing import Protocol
from uuid import UUID

from daq.drivers.base import SourceInfo
from daq.pump import Notice
from daq.ring import Chunk
from daq.runs import Ended
from store.records import ReadingDraft, RunDraft, Trace


class Opened(Protocol):
    """An event: the source is open, or never will be."""

    def wait(self, timeout: float) -> bool: ...


class Reader(Protocol):
    """Frames in order; see ``daq.ring.RingReader``."""

    @property
    def position(self) -> int: ...

    def read(
        self, max_frames: int, timeout_s: float, *, fewest: int = 1, whole: bool = False
    ) -> Chunk | None: ...


class Incoming(Protocol):
    """A source: ``daq.pump.Pump``, or ``daq.recording.Recording``."""

    @property
    def opened(self) -> Opened: ...
    @property
    def info(self) -> SourceInfo | None: ...
    @property
    def reader(self) -> Reader | None: ...
    @property
    def notices(self) -> deque[Notice]:
        """What happened to the source, each due at a position of the reader; the analysis takes them out."""
        ...


class Keeper(Protocol):
    """What becomes of runs and readings: ``daq.recorder.Recorder`` stores them."""

    @property
    def set_up_id(self) -> UUID: ...

    def set_up(self, info: SourceInfo) -> None: ...

    def began(self, draft: RunDraft) -> None: ...

    def reading(self, draft: ReadingDraft) -> None: ...

    def trace(self, draft: Trace) -> None: ...

    def ended(self, ended: Ended, ended_us: int, still_out: str, *, uses_up_mark: bool = True) -> None: ...

    def event(self, kind: str, text: str) -> None: ...
