"""The driver thread: opens the source, moves its blocks into the ring, and opens it again when it fails.

It only reads and copies. What is asked of a driver (turn the rotor, play the next file) is done here
between two reads, so that a driver is only ever touched by one thread.
"""

from __future__ import annotations

import logging
import queue
import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Any

from config.errors import DriverError
from daq.board import Board, StandState
from daq.clock import Clock
from daq.drivers.base import Block, EndOfSource, SourceInfo
from daq.drivers.registry import AnyDriver
from daq.ring import Ring, RingReader

READ_S = 0.2
RING_S = 20.0
FIRST_BACK_OFF_S, LONGEST_BACK_OFF_S = 0.5, 5.0
ACT_WITHIN_S = 10.0
ROOM_S = 0.2
REMARK_S, LOOK_S = 60.0, 0.5
"""A source that says what is wrong with what it delivers is heard so often, and asked so often."""

log = logging.getLogger("revmark.driver")


@dataclass(frozen=True, slots=True)
class Notice:
    """Something that happened to the source after ``position`` frames had gone into the ring."""

    position: int
    kind: str
    """``ended``, ``broken`` (ended early by a fault), ``lost``, ``back`` or ``remark``."""
    text: str


class Pump:
    """Owns the driver and the ring's writing end."""

    def __init__(self, driver: AnyDriver, board: Board, clock: Clock) -> None:
        self._driver = driver
        self._board = board
        self._clock = clock
        self._acts: queue.SimpleQueue[tuple[str, dict[str, Any], Future[Any]]] = queue.SimpleQueue()
        self._back_off_s = FIRST_BACK_OFF_S
        self._trouble = ""
        """Why the source is lost; empty = it is not."""
        self._lost_s = 0.0
        self._remarks: tuple[str, ...] = ()
        self._remark_due_s = 0.0
        self.notices: deque[Notice] = deque()
        self.opened = threading.Event()
        self.info: SourceInfo | None = None
        self.ring: Ring | None = None
        self.reader: RingReader | None = None
        self.fatal: DriverError | None = None
        """Set when the source can never be opened as it is configured."""

    def act(self, verb: str, **arguments: Any) -> Any:
        """Ask the driver to do something, on its own thread. Raises DriverError."""
        future: Future[Any] = Future()
        self._acts.put((verb, arguments, future))
        try:
            return future.result(ACT_WITHIN_S)
        except TimeoutError as error:
            raise DriverError(
                "The source did not answer in time.", "See revmark status.", kind="timeout"
            ) from error

    def run(self, stop: threading.Event, beat: Callable[[], None]) -> None:
        """The thread's body."""
        try:
            while not stop.is_set() and self.fatal is None:
                beat()
                try:
                    self._open()
                    self._stream(stop, beat)
                except DriverError as error:
                    self._lost(error)
                    self._pause(stop, beat)
        finally:
            self._driver.close()
            if self.ring is not None:
                self.ring.close()
            self.opened.set()

    def _open(self) -> None:
        info = self._driver.open()
        if self.ring is None:
            frames = int(RING_S * info.rate_hz)
            self.ring = Ring(frames, len(info.volts_per_count), info.dtype)
            self.reader = self.ring.reader("analysis")
        elif self.info is not None and _stream(info) != _stream(self.info):
            self.fatal = DriverError(
                "The source came back with another rate, scale, skew or number of channels.",
                "Restart revmark serve so that the set-up is recorded anew.",
                kind="config",
                retryable=False,
            )
            raise self.fatal
        else:
            away_s = self._clock.monotonic() - self._lost_s
            self._note("back", f"{info.description}, back after {away_s:.0f} s")
        self._trouble = ""
        self.info = info
        self._remarks, self._remark_due_s = (), 0.0
        self._board.post(source=info.description, notes=())
        log.info("source open: %s, %.10g samples/s", info.description, info.rate_hz)
        self.opened.set()

    def _stream(self, stop: threading.Event, beat: Callable[[], None]) -> None:
        while not stop.is_set():
            beat()
            self._do_acts()
            came = self._driver.read(READ_S)
            if isinstance(came, EndOfSource):
                self._note("ended" if came.error is None else "broken", came.reason)
            elif came is not None:
                self._back_off_s = FIRST_BACK_OFF_S
                self._write(came, stop, beat)
            self._heed_remarks()

    def _heed_remarks(self) -> None:
        """What the driver finds wrong with what comes: an event and a note, at most once in ``REMARK_S``."""
        now_s = self._clock.monotonic()
        if now_s < self._remark_due_s:
            return
        self._remark_due_s = now_s + LOOK_S
        found = self._driver.remarks()
        if found and found != self._remarks:
            self._remarks, self._remark_due_s = found, now_s + REMARK_S
            self._note("remark", " ".join(found))
            self._board.post(notes=found)

    def _write(self, block: Block, stop: threading.Event, beat: Callable[[], None]) -> None:
        assert self.ring is not None, "the ring is made when the source opens"
        assert self.reader is not None, "the reader is made with the ring"
        frames = len(block.counts)
        while not self._driver.paces_itself and not stop.is_set():
            if self.ring.wait_room(frames, self.reader, ROOM_S):
                break
            beat()
        self.ring.write(block)

    def _do_acts(self) -> None:
        while not self._acts.empty():
            try:
                verb, arguments, future = self._acts.get_nowait()
            except queue.Empty:
                return
            if not future.set_running_or_notify_cancel():
                continue
            try:
                future.set_result(self._driver.act(verb, **arguments))
            except Exception as error:
                future.set_exception(error)

    def _lost(self, error: DriverError) -> None:
        self._driver.close()
        if not self._trouble:
            self._lost_s = self._clock.monotonic()
        if str(error) != self._trouble:  # said once, however often it is tried
            log.error("source lost: %s", error)
            self._note("lost", error.cause)
        self._trouble = str(error)
        if error.kind == "gone":  # it may be plugged in any moment, and looking for it is cheap
            self._back_off_s = FIRST_BACK_OFF_S
        self._board.post(
            state=StandState.SOURCE_LOST, detail=error.cause, source=f"lost: {error}", speed_hz=None
        )
        if not error.retryable:
            self.fatal = error

    def _pause(self, stop: threading.Event, beat: Callable[[], None]) -> None:
        until = self._clock.monotonic() + self._back_off_s
        self._back_off_s = min(2 * self._back_off_s, LONGEST_BACK_OFF_S)
        while self.fatal is None and (left_s := until - self._clock.monotonic()) > 0:
            beat()
            self._refuse_acts()
            if self._clock.wait(stop, min(READ_S, left_s)):
                return

    def _refuse_acts(self) -> None:
        while True:
            try:
                _, _, future = self._acts.get_nowait()
            except queue.Empty:
                return
            if future.set_running_or_notify_cancel():
                future.set_exception(
                    DriverError(
                        "The source is lost.",
                        "It is opened again by itself; see revmark status.",
                        kind="gone",
                    )
                )

    def _note(self, kind: str, text: str) -> None:
        position = self.ring.written if self.ring is not None else 0
        self.notices.append(Notice(position, kind, text))


def _stream(info: SourceInfo) -> tuple[float, str, tuple[float, ...], tuple[float, ...]]:
    """What must stay the same when a source comes back, or its counts would mean something else."""
    return info.rate_hz, info.dtype, info.volts_per_count, info.skew_s
