"""Marks as operators ask for them: acknowledged after their commit, waited for, answered."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Protocol

from config.errors import Refusal
from daq.board import Board, Live
from daq.clock import Clock
from daq.requests import CancelAsked, MarkAsked
from daq.signal.health import describe
from daq.writer import Writer
from store import asjson, consult
from store.history import History
from store.records import Label, Mark, MarkState, Reading

Json = dict[str, Any]

LONGEST_WAIT_S = 30.0
JUDGED = (Label.CHECK, Label.TRIM)


class FreshReadings(Protocol):
    """The analysis, as far as a mark needs it."""

    def want_fresh(self, from_sample: int) -> None:
        """Take a reading whose samples all lie at or after ``from_sample``, as soon as it is steady."""
        ...


class MarkDesk:
    """One pending mark at a time; the ledger keeps the rules of labels."""

    def __init__(
        self,
        writer: Writer,
        history: History,
        board: Board,
        clock: Clock,
        analysis: FreshReadings,
        slow_roll_limit_hz: float,
        show: Mapping[str, str],
    ) -> None:
        self._writer = writer
        self._history = history
        self._board = board
        self._clock = clock
        self._analysis = analysis
        self._slow_roll_limit_hz = slow_roll_limit_hz
        self._show = dict(show)

    def ask(self, asked: MarkAsked, peer: str) -> Json:
        if asked.run is not None:
            return self.answer(self._label_run(asked, asked.run, asked.who or peer))
        if asked.reading is not None:
            raise Refusal("A reading is named, but no run.", "Name its run too: --run.")
        live = self._board.read()
        from_sample = live.sample if live.may_be_turning else None
        mark = self._writer.ask(
            lambda ledger: ledger.ask_mark(
                asked.key,
                Label(asked.label),
                asked.who or peer,
                from_sample=from_sample,
                from_session=ledger.session if from_sample is not None else None,
                choose=asked.choose,
                confirmed=asked.confirmed,
                slow_roll_limit_hz=self._slow_roll_limit_hz,
            )
        )
        if mark.state is MarkState.PENDING and from_sample is not None:
            self._analysis.want_fresh(from_sample)
        self._board.stir()
        return self.answer(mark)

    def _label_run(self, asked: MarkAsked, run: str, who: str) -> Mark:
        if asked.choose is not None:
            raise Refusal("A run is named, and the last or next is chosen too.", "Say one of the two.")
        mark = self._writer.ask(
            lambda ledger: ledger.label_run(
                asked.key,
                run,
                asked.reading,
                Label(asked.label),
                who,
                confirmed=asked.confirmed,
                slow_roll_limit_hz=self._slow_roll_limit_hz,
            )
        )
        self._board.stir()
        return mark

    def cancel(self, asked: CancelAsked, _peer: str) -> Json:
        key = asked.mark or self._pending().key
        mark = self._writer.ask(lambda ledger: ledger.cancel_mark(key))
        self._board.stir()
        return self.answer(mark)

    def newest(self, _given: Mapping[str, str]) -> Json:
        """The mark that is pending, else the one that ended last: what ``mark --wait`` waits for."""
        mark = self._history.pending_mark() or self._history.last_mark()
        if mark is None:
            raise Refusal("No mark was ever asked.", "Mark a run with: revmark mark LABEL")
        return asjson.mark_json(mark)

    def state(self, given: Mapping[str, str]) -> Json:
        """How a mark stands, after at most ``wait_s`` seconds or as soon as it, or the daemon, has ended."""
        until = self._clock.monotonic() + _seconds(given.get("wait_s", "0"))
        while True:
            mark = self._history.mark(given["key"])
            if mark is None:
                raise Refusal("There is no such mark.", "Mark again.")
            left = until - self._clock.monotonic()
            if mark.state is not MarkState.PENDING or left <= 0 or self._board.closed:
                return self.answer(mark)
            self._board.wait(min(left, 1.0))

    def answer(self, mark: Mark) -> Json:
        """The mark as JSON, with the reading it took and, for a check, the verdict."""
        told: Json = {"mark": asjson.mark_json(mark), "waits_for": "", "show": self._show}
        if mark.state is MarkState.PENDING:
            told["waits_for"] = waits_for(self._board.read(), mark, self._history, self._slow_roll_limit_hz)
        if mark.state is MarkState.LABELLED and mark.reading_id is not None and mark.run_name is not None:
            reading = self._history.reading(mark.reading_id)
            told["reading"] = consult.reading_json(self._history, reading, mark.job_number)
            flags = (*told["reading"]["flags"], *told["reading"]["derived_flags"])
            told["flag_texts"] = list(describe(flags))
            told.update(self._judged(mark, reading))
        return told

    def _judged(self, mark: Mark, reading: Reading) -> Json:
        if mark.label not in JUDGED:
            return {}
        try:
            return {"verdict": consult.verdict(self._history, mark.job_number, reading.id).to_dict()}
        except Refusal as refusal:
            return {"warnings": [f"No verdict: {refusal}"]}

    def _pending(self) -> Mark:
        mark = self._history.pending_mark()
        if mark is None:
            raise Refusal("No mark is pending.", "Mark a run with: revmark mark LABEL")
        return mark


def _seconds(text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = -1.0
    if not 0 <= value <= LONGEST_WAIT_S:
        raise Refusal(f"wait_s={text!r} is not from 0 to {LONGEST_WAIT_S:g} s.", "Use the revmark command.")
    return value


def waits_for(live: Live, mark: Mark, history: History, slow_roll_limit_hz: float) -> str:
    """What a pending mark waits for, in a phrase."""
    if not live.may_be_turning:
        return f"a run to begin ({live.state})"
    if live.run is None:
        return "the rotor to pass the minimum speed"
    if live.still_out or not live.speed_hz:
        return live.still_out or "a fresh reading"
    why = consult.why_passed_by(history, mark, live.speed_hz, slow_roll_limit_hz)
    at = f"{live.speed_hz * 60:.0f} r/min"
    return f"a fresh reading at {at}" if why is None else f"another speed: {at} is {why}"
