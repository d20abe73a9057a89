"""A ring of samples between one writer (the pump) and several readers: exact loss counts, no torn read.

Frames are numbered by an absolute counter that never wraps. The writer moves ``begin`` before it copies and
``written`` after; a reader copies first and then looks at ``begin`` again: what the writer may have touched
meanwhile is dropped from the copy and counted as lost. Samples are copied outside the lock, which guards
counters and metadata only, so the writer never waits for a reader.
"""

from __future__ import annotations

import threading
from bisect import bisect_right
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import DTypeLike, NDArray

from daq.clock import Clock, SystemClock

Counts = NDArray[np.int16] | NDArray[np.int32]


class BlockLike(Protocol):
    """What the writer hands in; a driver's block has this shape."""

    @property
    def counts(self) -> NDArray[Any]: ...
    @property
    def segment(self) -> int: ...
    @property
    def first_sample(self) -> int: ...
    @property
    def rate_hz(self) -> float: ...
    @property
    def mono_s(self) -> float: ...


@dataclass(frozen=True, slots=True)
class Chunk:
    """Frames of one segment, a copy: the reader may keep it."""

    counts: Counts
    """Shape (frames, channels), at least one frame."""
    segment: int
    first_sample: int
    """The source's index of the first frame."""
    rate_hz: float
    mono_s: float
    """Monotonic clock at the last frame, derived from the stamp of the block that held it."""
    lost: int
    """Frames that the ring overwrote before this reader could take them, just before this chunk."""

    @property
    def next_sample(self) -> int:
        """The source's index of the frame after the last one."""
        return self.first_sample + len(self.counts)


@dataclass(frozen=True, slots=True)
class _Span:
    """Frames from ``start`` (ring counter) that follow each other in the source without a gap."""

    start: int
    segment: int
    first_sample: int
    rate_hz: float

    def follows(self, block: BlockLike, position: int) -> bool:
        return (
            self.segment == block.segment
            and self.rate_hz == block.rate_hz
            and self.first_sample + position - self.start == block.first_sample
        )


@dataclass(frozen=True, slots=True)
class _Stamp:
    """End (ring counter) of a written block and the monotonic clock at its last frame."""

    end: int
    mono_s: float


class Ring:
    """Preallocated frames x channels of int16 or int32; one writer thread, any number of readers."""

    def __init__(
        self, capacity_frames: int, channels: int, dtype: DTypeLike, *, clock: Clock | None = None
    ) -> None:
        kind = np.dtype(dtype)
        if kind not in (np.dtype(np.int16), np.dtype(np.int32)):
            raise ValueError(f"a ring holds int16 or int32 counts, not {kind}")
        if capacity_frames < 1 or channels < 1:
            raise ValueError(f"a ring needs frames and channels, not {capacity_frames} x {channels}")
        self.capacity_frames = capacity_frames
        self.channels = channels
        self.dtype: np.dtype[Any] = kind
        self._data: NDArray[Any] = np.zeros((capacity_frames, channels), kind)
        self._clock: Clock = clock or SystemClock()
        self._lock = threading.Lock()
        self._begin = 0
        self._written = 0
        self._spans: list[_Span] = []
        self._stamps: list[_Stamp] = []
        self._readers: list[RingReader] = []
        self._room = threading.Event()
        self._closed = False

    @property
    def written(self) -> int:
        """Frames written since the start."""
        return self._written

    @property
    def closed(self) -> bool:
        return self._closed

    def write(self, block: BlockLike) -> None:
        """Append a block (writer thread only). Never waits; raises ValueError when the block does not fit."""
        frames = self._fitting(block)
        if not frames:
            return
        position = self._written
        with self._lock:
            self._begin = position + frames
            self._note(block, position, frames)
        self._copy_in(block.counts, position)
        with self._lock:
            self._written = position + frames
            readers = tuple(self._readers)
        for reader in readers:
            if reader.backlog >= reader.fewest:
                reader.wake()

    def reader(self, name: str, *, from_oldest: bool = False) -> RingReader:
        """A new reader that starts with the next frame written, or with the oldest one held."""
        with self._lock:
            start = max(0, self._begin - self.capacity_frames) if from_oldest else self._written
            reader = RingReader(self, name, start)
            self._readers.append(reader)
        return reader

    def wait_room(self, frames: int, reader: RingReader, timeout_s: float) -> bool:
        """Wait until ``frames`` can be written without overrunning ``reader``: for sources that do not pace
        themselves (writer thread only). False when the time is over or the ring is closed."""
        if frames > self.capacity_frames:
            raise ValueError(f"{frames} frames never fit in a ring of {self.capacity_frames}")
        deadline = self._clock.monotonic() + timeout_s
        while not self._closed:
            self._room.clear()
            if self.capacity_frames - reader.backlog >= frames:
                return True
            if not self._clock.wait(self._room, max(0.0, deadline - self._clock.monotonic())):
                return self.capacity_frames - reader.backlog >= frames
        return False

    def close(self) -> None:
        """Wake everybody who waits. Readers still get what is written, then None."""
        with self._lock:
            self._closed = True
            readers = tuple(self._readers)
        for reader in readers:
            reader.wake()
        self._room.set()

    def ends_before(self, position: int, frames: int) -> bool:
        """Whether a border between segments lies within the ``frames`` after ``position``, or the ring is
        closed: then no more will come to make them whole."""
        with self._lock:
            begun = any(position < span.start < position + frames for span in self._spans)
            return begun or self._closed or position < self._begin - self.capacity_frames

    # --- for the readers ---------------------------------------------------------------------------------

    def _take(self, position: int, max_frames: int) -> tuple[Chunk | None, int]:
        """The chunk at or after ``position`` and the position after it; None when nothing is there."""
        while True:
            with self._lock:
                start = max(position, self._begin - self.capacity_frames)
                if start >= self._written:
                    return None, position
                span, end = self._span_at(start)
                stop = min(self._written, end, start + max_frames)
                mono_s = self._mono_at(stop - 1, span.rate_hz)
            counts = self._copy_out(start, stop)
            with self._lock:
                intact = max(start, self._begin - self.capacity_frames)
            if intact < stop:
                break
        chunk = Chunk(
            counts=counts[intact - start :],
            segment=span.segment,
            first_sample=span.first_sample + intact - span.start,
            rate_hz=span.rate_hz,
            mono_s=mono_s,
            lost=intact - position,
        )
        return chunk, stop

    def _forget(self, reader: RingReader) -> None:
        with self._lock:
            if reader in self._readers:
                self._readers.remove(reader)

    # --- inside ------------------------------------------------------------------------------------------

    def _fitting(self, block: BlockLike) -> int:
        counts = block.counts
        if self._closed:
            raise ValueError("the ring is closed")
        if counts.ndim != 2 or counts.shape[1] != self.channels or counts.dtype != self.dtype:
            raise ValueError(
                f"a block of {counts.dtype} {counts.shape} does not fit a ring of {self.dtype} "
                f"with {self.channels} channels"
            )
        if len(counts) > self.capacity_frames:
            raise ValueError(f"a block of {len(counts)} frames exceeds the ring's {self.capacity_frames}")
        return len(counts)

    def _note(self, block: BlockLike, position: int, frames: int) -> None:
        """Book span and stamp of a block; drop those whose frames are gone."""
        if not self._spans or not self._spans[-1].follows(block, position):
            self._spans.append(_Span(position, block.segment, block.first_sample, block.rate_hz))
        self._stamps.append(_Stamp(position + frames, block.mono_s))
        oldest = self._begin - self.capacity_frames
        while len(self._spans) > 1 and self._spans[1].start <= oldest:
            del self._spans[0]
        gone = bisect_right(self._stamps, oldest, key=lambda s: s.end)
        if gone > 64:  # in batches: deleting at the front of a list moves the rest
            del self._stamps[:gone]

    def _span_at(self, position: int) -> tuple[_Span, int]:
        """The span that holds ``position`` and the ring counter where it ends."""
        i = bisect_right(self._spans, position, key=lambda s: s.start) - 1
        end = self._spans[i + 1].start if i + 1 < len(self._spans) else self._begin
        return self._spans[i], end

    def _mono_at(self, position: int, rate_hz: float) -> float:
        stamp = self._stamps[bisect_right(self._stamps, position, key=lambda s: s.end)]
        return stamp.mono_s - (stamp.end - 1 - position) / rate_hz

    def _copy_in(self, counts: NDArray[Any], position: int) -> None:
        at = position % self.capacity_frames
        head = min(len(counts), self.capacity_frames - at)
        self._data[at : at + head] = counts[:head]
        if head < len(counts):
            self._data[: len(counts) - head] = counts[head:]

    def _copy_out(self, start: int, stop: int) -> NDArray[Any]:
        out = np.empty((stop - start, self.channels), self.dtype)
        at = start % self.capacity_frames
        head = min(stop - start, self.capacity_frames - at)
        out[:head] = self._data[at : at + head]
        if head < len(out):
            out[head:] = self._data[: stop - start - head]
        return out


class RingReader:
    """One reader of a ring, used by one thread. Made by :meth:`Ring.reader`."""

    def __init__(self, ring: Ring, name: str, position: int) -> None:
        self.name = name
        self.lost_total = 0
        """Frames lost to this reader so far, reported in chunks."""
        self.fewest = 1
        """Frames that must wait before the writer wakes this reader; set by each read."""
        self._ring = ring
        self._position = position
        self._news = threading.Event()

    @property
    def position(self) -> int:
        """Ring counter of the next frame this reader takes."""
        return self._position

    @property
    def backlog(self) -> int:
        """Frames written and not yet taken by this reader (those already overwritten included)."""
        return self._ring.written - self._position

    def read(
        self, max_frames: int, timeout_s: float, *, fewest: int = 1, whole: bool = False
    ) -> Chunk | None:
        """Up to ``max_frames`` frames of one segment, as soon as ``fewest`` wait or the time is over.

        Fewer come at a border between segments, when the ring is closed, and at the end of the time unless
        they must be ``whole``. None when nothing came within ``timeout_s`` seconds, or when the ring is
        closed and empty."""
        if max_frames < 1:
            raise ValueError(f"max_frames must be at least 1, not {max_frames}")
        clock, self.fewest = self._ring._clock, fewest
        deadline = clock.monotonic() + timeout_s
        while True:
            self._news.clear()
            if self.backlog >= fewest or self._ring.closed:
                chunk = self._take(max_frames)
                if chunk is not None or self._ring.closed:
                    return chunk
            if not clock.wait(self._news, max(0.0, deadline - clock.monotonic())):
                held = whole and self.backlog < fewest and not self._ring.ends_before(self._position, fewest)
                return None if held else self._take(max_frames)

    def skip(self) -> int:
        """Give up all that waits; the number of frames given up. They are not counted as lost."""
        waiting = self.backlog
        self._position += waiting
        self._ring._room.set()
        return waiting

    def wake(self) -> None:
        """End a wait early (called by the ring)."""
        self._news.set()

    def close(self) -> None:
        """Leave the ring; the writer no longer wakes this reader."""
        self._ring._forget(self)

    def _take(self, max_frames: int) -> Chunk | None:
        chunk, self._position = self._ring._take(self._position, max_frames)
        if chunk is not None:
            self.lost_total += chunk.lost
            self._ring._room.set()
        return chunk
