"""Runs measured again for good: the arithmetic here, outside the writer's thread, then one transaction.

One request at a time and one reading at a time; a retry with the same key gets the answer that was kept.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

from config.errors import Refusal
from daq.board import Board
from daq.recompute import Again, again
from daq.requests import RecomputeAsked, Request, ReviseAsked
from daq.revise import ChannelChange, Correction, changes, corrected, question_far_off, revised
from daq.writer import Writer
from store.again import Remeasured, RunAgain
from store.history import History
from store.ledger import Ledger
from store.records import Reading, Run, RunState, SetUpDraft

Json = dict[str, Any]
Prepared = tuple[list[RunAgain], list[Json]]
"""What the ledger shall keep, and what is said of each run."""

MOST_READINGS = 3000
"""In one request: storing them (700 a second, with 3 vectors each) holds up the writer for some seconds."""


class AgainDesk:
    """Recompute and revise, as operators ask for them."""

    def __init__(self, writer: Writer, history: History, board: Board) -> None:
        self._writer = writer
        self._history = history
        self._board = board
        self._busy = threading.Lock()

    def recompute(self, asked: RecomputeAsked, peer: str) -> Json:
        """Keep, as another version, what this build's arithmetic gives otherwise than what is stored."""
        return self._kept(asked, peer, "recompute", "recompute", lambda: self._recomputed(asked.runs))

    def revise(self, asked: ReviseAsked, peer: str) -> Json:
        """Give runs a corrected set-up and measure them again with it."""
        told = self._kept(asked, peer, "revise", asked.why.strip(), lambda: self._revised(asked))
        return {**told, "left": self._left_behind(told)}

    def _kept(self, asked: Request, peer: str, verb: str, why: str, prepare: Callable[[], Prepared]) -> Json:
        who, body = asked.who or peer, asked.model_dump(mode="json", exclude={"key"})
        known = self._writer.ask(lambda ledger: ledger.answered(asked.key, verb, body))
        if known is not None:
            return known
        with self._alone():
            runs, told = prepare()
        answer = {"why": why, "runs": told}

        def act(ledger: Ledger) -> Json:
            if runs:
                ledger.keep_again(runs, why, who)
            return answer

        return self._writer.ask(lambda ledger: ledger.once(asked.key, verb, body, lambda: act(ledger)))

    @contextmanager
    def _alone(self) -> Iterator[None]:
        """Two at once would take twice the memory, and might say different things of one run."""
        if not self._busy.acquire(blocking=False):
            raise Refusal("Other runs are being measured again just now.", "Ask again in a moment.")
        try:
            yield
        finally:
            self._busy.release()

    # --- the arithmetic

    def _recomputed(self, names: tuple[str, ...]) -> Prepared:
        runs, told = [], []
        for run in self._closed(names):
            found = [again(self._history, run.name, r) for r in self._going_on(run)]
            news = [a for a in found if a.same in ("within", "apart")]
            if news:
                runs.append(_run_again(run, news, None))
            told.append({"run": run.name, "readings": [_reading_told(a, kept=a in news) for a in found]})
        return runs, told

    def _revised(self, asked: ReviseAsked) -> Prepared:
        correction, why = _correction(asked), asked.why.strip()
        runs, told = [], []
        for run in self._closed(asked.runs):
            then = self._history.set_up(run.set_up_id)
            now = corrected(then, correction, run.name)
            if not asked.confirmed:
                question_far_off(then, now, run.name)
            found = [revised(self._history, run.name, r, then, now, why) for r in self._going_on(run)]
            runs.append(_run_again(run, found, now))
            readings = [_reading_told(a, kept=True) for a in found]
            told.append({"run": run.name, "changes": changes(then, now), "readings": readings})
        return runs, told

    def _going_on(self, run: Run) -> Iterator[Reading]:
        """The run's readings, as long as the daemon does not stop. Raises Refusal when it does."""
        for reading in run.readings:
            if self._board.closed:
                raise Refusal("The daemon is stopping; nothing was kept.", "Ask again when it runs again.")
            yield reading

    def _closed(self, names: tuple[str, ...]) -> list[Run]:
        """The runs, each once. Raises Refusal: there is none of that name, it is open, or named twice."""
        runs = [self._history.run(name) for name in names]
        for run in runs:
            if run.state is RunState.OPEN:
                raise Refusal(f"Run {run.name} is still open.", "Wait until it has ended.")
        if len({run.id for run in runs}) < len(runs):
            raise Refusal("A run is named twice.", "Name each run once.")
        readings = sum(len(run.readings) for run in runs)
        if readings > MOST_READINGS:
            raise Refusal(
                f"The runs hold {readings} readings, and {MOST_READINGS} may be measured again at once.",
                "Name fewer runs at a time.",
            )
        return runs

    def _left_behind(self, told: Json) -> list[str]:
        """Runs of the same jobs that keep another set-up than these: they are not computed with them."""
        runs = [self._history.run(r["run"]) for r in told["runs"]]
        now = {r.set_up_id for r in runs}
        jobs = dict.fromkeys(r.job_number for r in runs if r.job_number is not None)
        stories = [self._history.job_story(j) for j in jobs]
        return [r.name for s in stories for r in s.runs if r.set_up_id not in now and r.readings]


def _run_again(run: Run, found: list[Again], set_up: SetUpDraft | None) -> RunAgain:
    readings = tuple(Remeasured(a.reading.id, a.beside, a.measured) for a in found if a.measured is not None)
    return RunAgain(run.id, run.set_up_id, set_up, readings)


def _reading_told(found: Again, *, kept: bool) -> Json:
    return {
        "reading": found.reading.number,
        "version": max(found.beside, 1) + 1 if kept else max(found.beside, 1),
        "kept": kept,
        "result": found.same,
        "why_not": found.why_not or None,
    }


def _correction(asked: ReviseAsked) -> Correction:
    """Raises Refusal when it says nothing, or one thing twice."""
    channels = tuple(
        ChannelChange(c.channel, c.volts_per_unit, c.unit, c.positive, c.angle_deg) for c in asked.channels
    )
    names = [c.channel for c in channels]
    twice = next((n for n in names if names.count(n) > 1), None)
    if twice is not None:
        raise Refusal(f"{twice} is corrected twice.", "Say each thing of a channel once.")
    if asked.sensor_angle_deg is None and not any(c.told for c in channels):
        raise Refusal(
            "Nothing is said to be corrected.",
            "Say what: --sensitivity, --positive, --angle or --sensor-angle.",
        )
    return Correction(channels, asked.sensor_angle_deg)
