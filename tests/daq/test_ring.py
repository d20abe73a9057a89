"""The ring: what goes in comes out, in order, or is reported lost to the sample."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from daq.ring import Ring


@dataclass
class Block:
    counts: NDArray[Any]
    segment: int = 0
    first_sample: int = 0
    rate_hz: float = 1000.0
    mono_s: float = 0.0


class StillClock:
    """Time passes only while somebody waits."""

    def __init__(self) -> None:
        self.now = 100.0

    def monotonic(self) -> float:
        return self.now

    def now_us(self) -> int:
        return 0

    def sleep(self, seconds: float) -> None:
        self.now += seconds

    def wait(self, event: threading.Event, seconds: float) -> bool:
        if not event.is_set():
            self.now += seconds
        return event.is_set()


def rows(start: int, frames: int, channels: int = 2) -> NDArray[np.int32]:
    """Every value of a row is the row's own number."""
    return np.repeat(np.arange(start, start + frames, dtype=np.int32)[:, None], channels, axis=1)


def block(start: int, frames: int, segment: int = 0, mono_s: float = 0.0) -> Block:
    return Block(rows(start, frames), segment, start, 1000.0, mono_s)


def a_ring(capacity: int = 100) -> Ring:
    return Ring(capacity, 2, np.int32, clock=StillClock())


def test_a_reader_gets_what_was_written_with_its_stamps() -> None:
    ring = a_ring()
    reader = ring.reader("analysis")
    ring.write(block(5000, 10, segment=3, mono_s=7.0))
    ring.write(block(5010, 10, segment=3, mono_s=7.02))
    assert reader.backlog == 20
    chunk = reader.read(15, 0.0)
    assert chunk is not None
    assert chunk.counts[:, 0].tolist() == list(range(5000, 5015))
    assert (chunk.segment, chunk.first_sample, chunk.rate_hz, chunk.lost) == (3, 5000, 1000.0, 0)
    assert chunk.next_sample == 5015
    # its last frame is the fifth of the second block: five frames before that block's stamp
    assert chunk.mono_s == pytest.approx(7.02 - 0.005)
    assert reader.backlog == 5


def test_a_chunk_is_a_copy() -> None:
    ring = a_ring(10)
    reader = ring.reader("a")
    ring.write(block(0, 10))
    chunk = reader.read(10, 0.0)
    ring.write(block(10, 10))
    assert chunk is not None
    assert chunk.counts[:, 1].tolist() == list(range(10))


def test_a_chunk_ends_where_its_segment_does() -> None:
    ring = a_ring()
    reader = ring.reader("a")
    ring.write(block(0, 10, segment=1))
    ring.write(block(40, 10, segment=2))  # 30 lost at the source
    ring.write(block(50, 10, segment=2))
    first, second = reader.read(100, 0.0), reader.read(100, 0.0)
    assert first is not None
    assert second is not None
    assert (first.segment, first.first_sample, len(first.counts)) == (1, 0, 10)
    assert (second.segment, second.first_sample, len(second.counts)) == (2, 40, 20)
    assert second.lost == 0  # lost by the source, not by this reader


def test_samples_that_do_not_follow_end_a_chunk_whatever_the_segment_says() -> None:
    ring = a_ring()
    reader = ring.reader("a")
    ring.write(block(0, 10))
    ring.write(block(11, 10))
    first, second = reader.read(100, 0.0), reader.read(100, 0.0)
    assert first is not None
    assert second is not None
    assert (len(first.counts), second.first_sample) == (10, 11)


def test_an_overrun_is_counted_to_the_sample_for_each_reader_alone() -> None:
    ring = a_ring(100)
    slow, quick = ring.reader("slow"), ring.reader("quick")
    for start in range(0, 250, 10):
        ring.write(block(start, 10))
        chunk = quick.read(100, 0.0)
        assert chunk is not None
        assert chunk.lost == 0
    chunk = slow.read(1000, 0.0)
    assert chunk is not None
    assert chunk.lost == 150
    assert chunk.first_sample == 150
    assert chunk.counts[:, 0].tolist() == list(range(150, 250))
    assert (slow.lost_total, quick.lost_total) == (150, 0)


def test_an_overrun_over_several_segments_counts_frames() -> None:
    ring = a_ring(20)
    reader = ring.reader("a")
    for segment in range(5):
        ring.write(block(1000 * segment, 10, segment=segment))
    chunk = reader.read(100, 0.0)
    assert chunk is not None
    assert (chunk.lost, chunk.segment, chunk.first_sample) == (30, 3, 3000)


def test_a_late_reader_starts_now_or_with_the_oldest() -> None:
    ring = a_ring(100)
    ring.write(block(0, 80))
    now, oldest = ring.reader("now"), ring.reader("oldest", from_oldest=True)
    ring.write(block(80, 10))
    first, second = now.read(100, 0.0), oldest.read(100, 0.0)
    assert first is not None
    assert second is not None
    assert (first.first_sample, second.first_sample) == (80, 0)
    assert (first.lost, second.lost) == (0, 0)


def test_a_wait_ends_at_its_deadline() -> None:
    clock = StillClock()
    ring = Ring(10, 2, np.int32, clock=clock)
    reader = ring.reader("a")
    assert reader.read(10, 0.25) is None
    assert clock.now == pytest.approx(100.25)


def test_closing_leaves_what_is_written_and_ends_waits() -> None:
    ring = a_ring()
    reader = ring.reader("a")
    ring.write(block(0, 10))
    ring.close()
    chunk = reader.read(100, 5.0)
    assert chunk is not None
    assert len(chunk.counts) == 10
    assert reader.read(100, 5.0) is None
    assert not ring.wait_room(1, reader, 5.0)
    with pytest.raises(ValueError, match="closed"):
        ring.write(block(10, 10))


def test_closing_wakes_a_reader_that_waits_in_another_thread() -> None:
    ring = Ring(10, 2, np.int32)
    reader = ring.reader("a")
    got: list[object] = []
    thread = threading.Thread(target=lambda: got.append(reader.read(1, 30.0)))
    thread.start()
    ring.close()
    thread.join(5.0)
    assert got == [None]


def test_a_writer_waits_for_room() -> None:
    clock = StillClock()
    ring = Ring(100, 2, np.int32, clock=clock)
    reader = ring.reader("a")
    ring.write(block(0, 80))
    assert ring.wait_room(20, reader, 0.0)
    assert not ring.wait_room(21, reader, 0.5)
    assert clock.now == pytest.approx(100.5)
    reader.read(1, 0.0)
    assert ring.wait_room(21, reader, 0.0)
    assert reader.skip() == 79
    assert ring.wait_room(100, reader, 0.0)
    with pytest.raises(ValueError, match="never fit"):
        ring.wait_room(101, reader, 0.0)


@pytest.mark.parametrize(
    ("counts", "match"),
    [
        (np.zeros((5, 3), np.int32), "does not fit"),
        (np.zeros((5, 2), np.int16), "does not fit"),
        (np.zeros(5, np.int32), "does not fit"),
        (np.zeros((101, 2), np.int32), "exceeds"),
    ],
)
def test_a_block_of_another_shape_is_refused(counts: NDArray[Any], match: str) -> None:
    with pytest.raises(ValueError, match=match):
        a_ring(100).write(Block(counts))


def test_a_ring_of_floats_is_refused() -> None:
    with pytest.raises(ValueError, match="int16 or int32"):
        Ring(10, 2, np.float64)


def test_metadata_does_not_grow() -> None:
    ring = a_ring(100)
    for start in range(0, 50_000, 5):
        ring.write(block(start, 5, segment=start // 50))
    assert len(ring._stamps) < 200
    assert len(ring._spans) < 20


STEPS = st.lists(
    st.one_of(
        st.tuples(st.just("write"), st.integers(0, 50)),
        st.tuples(st.just("gap"), st.integers(1, 99)),
        st.tuples(st.just("read"), st.integers(1, 70)),
    ),
    max_size=60,
)


@settings(max_examples=200, deadline=None)
@given(steps=STEPS)
def test_every_frame_is_read_once_or_reported_lost(steps: list[tuple[str, int]]) -> None:
    """Against a plain list of all that was ever written: (segment, source index) frame by frame."""
    ring, written, at = a_ring(50), [], 0
    reader = ring.reader("a")
    segment = sample = 0
    for what, n in [*steps, ("read", 1000), ("read", 1000)]:
        if what == "gap":
            segment, sample = segment + 1, sample + n
        elif what == "write":
            ring.write(block(sample, n, segment))
            written += [(segment, s) for s in range(sample, sample + n)]
            sample += n
        else:
            chunk = reader.read(n, 0.0)
            if chunk is None:
                assert at == len(written)
                continue
            at += chunk.lost
            got = [(chunk.segment, chunk.first_sample + i) for i in range(len(chunk.counts))]
            assert got == written[at : at + len(got)]
            assert chunk.counts[:, 0].tolist() == [s for _, s in got]
            assert len(got) <= n
            at += len(got)


@pytest.mark.slow
def test_no_torn_read_under_threads() -> None:
    """A writer as fast as it goes and three readers on a small ring: overruns all the time. Each row holds
    its own number in all 16 channels, so a row mixed of two, or one out of place, shows."""
    ring = Ring(4096, 16, np.int32)
    readers = [ring.reader(str(i)) for i in range(3)]
    total, size = 12_000_000, 512
    errors: list[str] = []
    seen = [[0, 0] for _ in readers]

    def write() -> None:
        for start in range(0, total - total % size, size):
            ring.write(Block(rows(start, size, 16), 0, start, 51_200.0, start / 51_200))
        ring.close()

    def read(which: int, frames: int) -> None:
        expected = 0
        while (chunk := readers[which].read(frames, 10.0)) is not None:
            expected += chunk.lost
            want = np.arange(expected, expected + len(chunk.counts), dtype=np.int32)
            if chunk.first_sample != expected or not (chunk.counts == want[:, None]).all():
                errors.append(f"reader {which} at {expected}")
                return
            expected += len(chunk.counts)
            seen[which][0] += len(chunk.counts)
            seen[which][1] += chunk.lost

    threads = [threading.Thread(target=read, args=(i, f)) for i, f in enumerate((64, 1000, 4096))]
    threads.append(threading.Thread(target=write))
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(60.0)
    assert errors == []
    for got, lost in seen:
        assert got + lost == total - total % size
        assert got > 0
    assert sum(lost for _, lost in seen) > 0


def test_a_whole_read_waits_for_the_rest() -> None:
    """4 of 6 frames are held back until the rest comes, and the 2 after them are held back again."""
    ring = a_ring()
    reader = ring.reader("analysis")
    ring.write(block(0, 4))
    assert reader.read(6, 0.1, fewest=6, whole=True) is None
    assert reader.backlog == 4
    ring.write(block(4, 4))
    chunk = reader.read(6, 0.1, fewest=6, whole=True)
    assert chunk is not None
    assert chunk.counts[:, 0].tolist() == [0, 1, 2, 3, 4, 5]
    assert reader.read(6, 0.1, fewest=6, whole=True) is None


@pytest.mark.parametrize("close", [True, False], ids=["closed", "new segment"])
def test_a_whole_read_does_not_wait_for_what_will_never_come(close: bool) -> None:
    ring = a_ring()
    reader = ring.reader("analysis")
    ring.write(block(0, 4))
    if close:
        ring.close()
    else:
        ring.write(block(4, 1, segment=1))
    chunk = reader.read(6, 0.1, fewest=6, whole=True)
    assert chunk is not None
    assert (len(chunk.counts), chunk.segment) == (4, 0)
