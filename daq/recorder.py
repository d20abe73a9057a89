"""Between analysis and writer: turns what happened into ledger calls, in order, and tells the board.

The analysis never waits for the store: it hands over and goes on. Runs have no identity until their
opening is committed, so later records of a run look it up when they are written.
"""

from __future__ import annotations

import logging
from uuid import UUID

from config.errors import StoreError
from config.stand import Stand
from daq.board import Board
from daq.drivers.base import SourceInfo
from daq.runs import Ended
from daq.setup import set_up_draft
from daq.writer import Writer
from store.ledger import Ledger
from store.records import ReadingDraft, Run, RunDraft, RunState, SetUp, Trace

log = logging.getLogger("revmark.record")


class Recorder:
    """The analysis thread calls it; the writer thread does the work."""

    def __init__(self, writer: Writer, board: Board, stand: Stand) -> None:
        self._writer = writer
        self._board = board
        self._slow_roll_limit_hz = stand.run.slow_roll_limit_hz
        self._total_mib = stand.raw.total_mib
        self._stand = stand
        self._set_up: SetUp | None = None
        self._run: Run | None = None

    def set_up(self, info: SourceInfo) -> None:
        """Record the measurement set-up with the source's true rate and skew, before any run."""
        draft = set_up_draft(self._stand, info.rate_hz, info.skew_s)
        self._set_up = self._writer.ask(lambda ledger: ledger.set_up(draft))

    @property
    def set_up_id(self) -> UUID:
        assert self._set_up is not None, "the set-up is recorded before any run"
        return self._set_up.id

    def began(self, draft: RunDraft) -> None:
        def write(ledger: Ledger) -> None:
            self._run = ledger.open_run(draft)
            log.info("run %s began", self._run.name)
            self._board.post(run=self._run.name)

        self._writer.record(write, droppable=False)

    def reading(self, draft: ReadingDraft) -> None:
        def write(ledger: Ledger) -> None:
            if self._run is None:
                return
            reading, mark = ledger.add_reading(
                self._run.id, draft, slow_roll_limit_hz=self._slow_roll_limit_hz
            )
            taken = f", labelled {mark.label}" if mark else ""
            log.info("run %s reading %d stored%s", self._run.name, reading.number, taken)
            self._age_raw(ledger)
            self._board.stir()

        self._writer.record(write, droppable=True)

    def trace(self, draft: Trace) -> None:
        """A run-up or coast-down of the run that is open."""

        def write(ledger: Ledger) -> None:
            if self._run is None:
                return
            number = ledger.add_trace(self._run.id, draft)
            log.info(
                "run %s trace %d stored: %s, %d steps",
                self._run.name,
                number,
                draft.direction,
                len(draft.points),
            )
            self._board.stir()

        self._writer.record(write, droppable=True)

    def _age_raw(self, ledger: Ledger) -> None:
        """Keep to the raw budget. The reading is stored by now: a failure here must not store it again."""
        try:
            ledger.age_raw(self._total_mib)
        except StoreError as error:
            log.warning("raw samples were not aged out: %s", error)

    def ended(self, ended: Ended, ended_us: int, still_out: str, *, uses_up_mark: bool = True) -> None:
        """A run ended; a mark it gave no fitting reading is missed, unless we ended it by stopping."""

        def write(ledger: Ledger) -> None:
            if self._run is None:
                return
            run, mark = ledger.close_run(
                self._run.id,
                RunState(ended.state),
                ended.reason,
                ended_us,
                still_out,
                fast_enough=uses_up_mark,
            )
            log.info("run %s ended: %s (%s)", run.name, run.state, run.reason)
            if mark is not None:
                log.warning("mark %s was missed: %s", mark.label, mark.detail)
            self._run = None
            self._board.post(run=None, steady=False, still_out="", vectors=())

        self._writer.record(write, droppable=False)

    def event(self, kind: str, text: str) -> None:
        """Something worth keeping that is no measurement."""
        log.warning("%s: %s", kind, text)
        self._writer.record(lambda ledger: ledger.note_event(kind, text), droppable=False)
