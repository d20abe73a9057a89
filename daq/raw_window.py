"""The samples of the newest window, held by the analysis so that the ring's size bounds no reading."""

from __future__ import annotations

from collections import deque
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.ring import Chunk


class RawWindow:
    """Chunks of one segment, in order; old ones are let go as the window moves on."""

    def __init__(self) -> None:
        self._chunks: deque[Chunk] = deque()

    def add(self, chunk: Chunk) -> None:
        self._chunks.append(chunk)

    def clear(self) -> None:
        self._chunks.clear()

    def trim(self, before_sample: int) -> None:
        """Let go of chunks that lie wholly before ``before_sample``."""
        while self._chunks and self._chunks[0].next_sample <= before_sample:
            self._chunks.popleft()

    def cut(self, start: int, stop: int) -> tuple[NDArray[Any], int]:
        """Counts of the samples ``start`` to ``stop`` (as far as they are held) and the first one's index.

        Raises ValueError when none of them is held.
        """
        parts = []
        first = None
        for chunk in self._chunks:
            low, high = max(start, chunk.first_sample), min(stop, chunk.next_sample)
            if low < high:
                first = low if first is None else first
                parts.append(chunk.counts[low - chunk.first_sample : high - chunk.first_sample])
        if first is None:
            raise ValueError(f"no samples from {start} to {stop} are held")
        return np.concatenate(parts), first

    def mono_of(self, sample: int) -> float:
        """Monotonic time of a sample of the window, from the stamp of the chunk that holds it."""
        chunk = next((c for c in self._chunks if sample < c.next_sample), self._chunks[-1])
        return chunk.mono_s - (chunk.next_sample - 1 - sample) / chunk.rate_hz
