"""The writer thread: the one place where the ledger is called.

Two queues. What operators ask is done at once and its failure goes back to who asked. What the analysis
records (runs, readings) is done in order and never lost to a full disk: it waits in memory and is tried
again with back-off, and the board says that the store is blocked. What waits goes first: a weight fitted
after a run is never stored before it. The record queue is bounded; beyond its bound readings are counted
as dropped, never silently.
"""

from __future__ import annotations

import logging
import queue
import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from typing import Any, TypeVar

from config.errors import RevmarkError, StoreError, StoreTrouble
from daq.board import Board
from daq.clock import Clock
from store.ledger import Ledger

T = TypeVar("T")
Record = Callable[[Ledger], None]

RECORDS_HELD = 64
"""Finished readings and run borders that may wait for a blocked store."""
FIRST_RETRY_S, LONGEST_RETRY_S = 0.2, 10.0
LASTING: tuple[StoreTrouble, ...] = ("full", "io", "read_only", "corrupt", "missing")
"""Trouble of the store itself, which the next act would meet too."""
ANSWER_WITHIN_S = 30.0
IDLE_S = 0.2

log = logging.getLogger("revmark.writer")


class Writer:
    """Runs ledger calls on its own thread; see the module's text for the two queues."""

    def __init__(self, ledger: Ledger, board: Board, clock: Clock) -> None:
        self._ledger = ledger
        self._board = board
        self._clock = clock
        self._asked: queue.SimpleQueue[tuple[Callable[[Ledger], Any], Future[Any]] | None] = (
            queue.SimpleQueue()
        )
        self._records: deque[Record] = deque()
        self._lock = threading.Lock()
        self._retry_at = 0.0
        self._retry_s = FIRST_RETRY_S
        self._ended = False
        self._trouble: StoreError | None = None
        """Why the store is blocked, until everything held is written."""
        self.dropped = 0

    def ask(self, act: Callable[[Ledger], T]) -> T:
        """Do ``act`` on the writer thread and return its answer after its commit.

        Raises what ``act`` raises, or StoreError (kind ``locked``) when the writer does not answer in time.
        """
        future: Future[T] = Future()
        self._asked.put((act, future))
        if self._ended:
            self._refuse_rest()
        try:
            return future.result(ANSWER_WITHIN_S)
        except TimeoutError as error:
            raise StoreError(
                "The store did not answer in time.",
                "See revmark status; nothing was acknowledged.",
                kind="locked",
            ) from error

    def record(self, act: Record, *, droppable: bool) -> None:
        """Queue a record of the analysis. A droppable one (a reading) is counted and left out when full."""
        with self._lock:
            full = droppable and len(self._records) >= RECORDS_HELD
            if not full:
                self._records.append(act)
        if full:
            self._drop(f"{RECORDS_HELD} records wait already: the store is blocked or too slow")
        if self._trouble is not None:
            self._post_held()
        self._asked.put(None)

    def _drop(self, why: str) -> None:
        self.dropped += 1
        self._board.post(dropped_readings=self.dropped)
        log.error("dropped: %s", why)

    def run(self, stop: threading.Event, beat: Callable[[], None]) -> None:
        """The thread's body: until ``stop`` is set and the records are written (or blocked)."""
        try:
            while not (stop.is_set() and self._drained()):
                beat()
                self._serve_one(IDLE_S)
                self._write_records(beat)
            self._try_once_more()
            self._fold()
        finally:
            self._ended = True
            self._refuse_rest()

    def _try_once_more(self) -> None:
        """At the end, whatever the back-off says: what is still held then is lost, and that is said."""
        self._retry_at = 0.0
        self._write_records()
        if self._records:
            log.error("%d records could not be stored and are lost", len(self._records))

    def _refuse_rest(self) -> None:
        """Nobody shall wait for a writer that has ended."""
        with suppress(queue.Empty):
            while True:
                item = self._asked.get_nowait()
                if item is not None and item[1].set_running_or_notify_cancel():
                    item[1].set_exception(_stopping())

    def _drained(self) -> bool:
        with self._lock:
            return self._asked.empty() and (not self._records or self._blocked())

    def _blocked(self) -> bool:
        return self._clock.monotonic() < self._retry_at

    def _serve_one(self, wait_s: float) -> None:
        try:
            item = self._asked.get(timeout=wait_s)
        except queue.Empty:
            return
        if item is None:
            return
        act, future = item
        if not future.set_running_or_notify_cancel():
            return
        try:
            self._records_first()
            answer = act(self._ledger)
        except BaseException as error:
            self._note_trouble(error)
            future.set_exception(error)
        else:
            future.set_result(answer)
            self._fold()

    def _records_first(self) -> None:
        """Try what is held, whatever the back-off says. Raises StoreError while the store is blocked."""
        if self._trouble is not None:
            self._retry_at = 0.0
        self._write_records()
        if self._trouble is not None:
            raise StoreError(self._trouble.cause, self._trouble.remedy, kind=self._trouble.kind)

    def _note_trouble(self, error: BaseException) -> None:
        """When an act finds the store in lasting trouble, an event is held: it says so and tries again."""
        if self._trouble is None and isinstance(error, StoreError) and error.kind in LASTING:
            cause = error.cause
            with self._lock:
                self._records.append(lambda ledger: ledger.note_event("store_blocked", cause))
            self._hold(error)

    def _write_records(self, beat: Callable[[], None] = lambda: None) -> None:
        """Write what is held; ``beat`` after each, for more may come as fast as it is written."""
        while not self._blocked():
            beat()
            with self._lock:
                head = self._records[0] if self._records else None
            if head is None:
                return
            try:
                head(self._ledger)
            except RevmarkError as error:
                if isinstance(error, StoreError) and error.kind != "refused":
                    self._hold(error)
                    return
                self._drop(f"a record was refused: {error}")
            with self._lock:
                self._records.popleft()
                left = len(self._records)
            self._freed(left)
            self._fold()

    def _fold(self) -> None:
        """Fold the write-ahead log into the store, after the acknowledgement; if not now, later."""
        try:
            self._ledger.checkpoint()
        except StoreError as error:
            log.warning("the write-ahead log was not folded in: %s", error)

    def _hold(self, error: StoreError) -> None:
        self._trouble = error
        self._retry_at = self._clock.monotonic() + self._retry_s
        self._retry_s = min(2 * self._retry_s, LONGEST_RETRY_S)
        held = self._post_held()
        log.error("store blocked, %d records held: %s", held, error)

    def _post_held(self) -> int:
        with self._lock:
            held, trouble = len(self._records), self._trouble
        if trouble is not None:
            self._board.post(store=f"blocked: {trouble.cause}", held_records=held)
        return held

    def _freed(self, left: int) -> None:
        """A record was written; the store is ok again once none is held."""
        self._retry_s, self._retry_at = FIRST_RETRY_S, 0.0
        if self._trouble is not None and not left:
            log.warning("store writes again")
            self._trouble = None
            self._board.post(store="ok", held_records=0)


def _stopping() -> StoreError:
    return StoreError(
        "The daemon is stopping; nothing was done.", "Ask again when it runs again.", kind="locked"
    )
