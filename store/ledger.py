"""The only writer of a store. Every method is one transaction; acknowledged means committed."""

from __future__ import annotations

import hashlib
import json
import logging
import sqlite3
import threading
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from uuid import UUID

from sqlalchemy import Connection, Engine, select

from config.errors import Refusal, StoreError
from store import (
    database,
    ledger_again,
    ledger_coefficients,
    ledger_marks,
    ledger_rotor,
    ledger_runs,
    ledger_traces,
    ledger_weights,
)
from store.again import RunAgain
from store.copies import copy_store
from store.database import StoreClock
from store.identity import Identities
from store.ledger_marks import Choice, Question
from store.lock import StoreLock
from store.names import check_name, check_text
from store.records import (
    Label,
    Machine,
    MachineDraft,
    Mark,
    Mount,
    MountDraft,
    PieceDraft,
    Reading,
    ReadingDraft,
    Run,
    RunDraft,
    RunState,
    SetUp,
    SetUpDraft,
    Trace,
    WeightEvent,
)
from store.tables import request, session
from store.trouble import in_our_words
from store.writer import Writer

LedgerClock = StoreClock

log = logging.getLogger(__name__)


class Ledger:
    """Owns the store's lock and its one writing connection. Safe to call from several threads.

    All methods raise Refusal when what is asked cannot be (nothing is then changed) and StoreError when
    the store cannot take it (full, damaged, ...; what was stored stays whole, and a later call may work).
    """

    def __init__(self, path: Path, lock: StoreLock, engine: Engine, clock: StoreClock, software: str) -> None:
        """Called by ``open``."""
        self.path = path
        self._lock = lock
        self._engine = engine
        self._opened = self._identity()
        self._connection: Connection | None = engine.connect()
        ids = Identities(clock.now_us)
        self.session = ids.new()
        """Identity of this opening; stored with every run and mark."""
        self._writer = Writer(self._connection, clock, ids, software, self.session, path)
        self._mutex = threading.RLock()
        self._inside = False
        self._doomed: BaseException | None = None

    # --- opening and closing

    @classmethod
    def open(cls, path: Path, *, clock: StoreClock, software: str) -> Ledger:
        """Take the store's lock and open it for writing.

        Raises StoreError: missing, network, locked, corrupt, newer, older (naming the command), read_only...
        Nothing is migrated and nothing is made.
        """
        database.check_openable(path)
        lock = StoreLock.take(path)
        engine = database.writer_engine(path)
        ledger = None
        try:
            with in_our_words(path):
                ledger = cls(path, lock, engine, clock, software)
            ledger._begin_session()
        except BaseException:
            if ledger is not None and ledger._connection is not None:
                ledger._connection.close()
            engine.dispose()
            lock.release()
            raise
        return ledger

    def _begin_session(self) -> None:
        with self._write() as w:
            database.check_stamp(w.c, self.path)
            w.add(
                session,
                id=self.session,
                at_us=w.now_us(),
                mono_s=w.clock.monotonic(),
                software=check_text("The software's version", w.software),
            )

    def close(self) -> None:
        """Fold the log into the store and let the lock go. Closing twice is fine.

        A log that cannot be folded in (full disk) stays beside the store and loses nothing.
        """
        with self._mutex:
            if self._connection is None:
                return
            try:
                with in_our_words(self.path):
                    database.checkpoint(self._driver())
            except StoreError as e:
                log.warning("log not folded in at closing: %s", e)
            finally:
                self._connection.close()
                self._connection = None
                self._engine.dispose()
                self._lock.release()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def _write(self) -> Iterator[Writer]:
        """One transaction; a method called inside ``once`` joins its transaction.

        A failure inside dooms the whole: the outer transaction is rolled back even if somebody caught it.
        """
        with self._mutex, in_our_words(self.path):
            if self._inside:
                try:
                    yield self._writer
                except BaseException as e:
                    self._doomed = e
                    raise
                return
            if self._connection is None:
                raise StoreError(f"The store {self.path} is closed.", "Open it again.", kind="io")
            self._check_present()
            self._inside, self._doomed = True, None
            try:
                with self._connection.begin():
                    yield self._writer
                    if self._doomed is not None:
                        raise self._doomed
            finally:
                self._inside = False
                self._end_transaction()

    def _check_present(self) -> None:
        """A store deleted or replaced under us would take every commit and keep none."""
        try:
            found = self._identity()
        except OSError:
            found = None
        if found != self._opened:
            raise StoreError(
                f"The store {self.path} was deleted or replaced while it is served; nothing more is kept.",
                "Put it back (or restore a backup) and start revmark serve again.",
                kind="missing",
            )

    def _identity(self) -> tuple[int, int]:
        told = self.path.stat()
        return told.st_dev, told.st_ino

    def _end_transaction(self) -> None:
        """A COMMIT that failed leaves SQLite's transaction open, and SQLAlchemy does not end it."""
        driver = self._driver()
        if driver.in_transaction:
            driver.rollback()

    def _driver(self) -> sqlite3.Connection:
        assert self._connection is not None
        found = self._connection.connection.driver_connection
        assert isinstance(found, sqlite3.Connection)
        return found

    # --- the stand and the rotor

    def set_up(self, draft: SetUpDraft) -> SetUp:
        """The stand's set-up; the same content is the same revision."""
        with self._write() as w:
            return ledger_rotor.keep_set_up(w, draft)

    def add_machine(self, draft: MachineDraft, who: str) -> Machine:
        """A new machine, or a new revision of it and of its model where something differs."""
        with self._write() as w:
            return ledger_rotor.keep_machine(w, draft, _who(who))

    def mount(self, draft: MountDraft, who: str) -> Mount:
        """What stands on the stand from now on; ends the mount before and opens the job when it is new.

        A rotor mark's position not typed for a plane with holes is taken from the machine's mount before,
        and ``mark_how`` is then None. What was drilled in the job's mount before stays drilled. Another
        position than at the job's mount before: NeedsAnswer, until ``mark_change`` says why.
        """
        with self._write() as w:
            return ledger_rotor.begin_mount(w, draft, _who(who))

    def unmount(self, who: str) -> Mount | None:
        """End the current mount; returns it as ended, None when nothing was mounted."""
        with self._write() as w:
            return ledger_rotor.end_mount(w, _who(who))

    # --- weights (``after_run``: name of a run, or "mount" = before the current mount's first run)

    def fit(self, piece: PieceDraft, who: str, after_run: str | None = None) -> tuple[WeightEvent, ...]:
        """A piece put on, now or (a late entry) after a run of the past."""
        with self._write() as w:
            ledger_rotor.refuse_while_pending(w, "fitted")
            return ledger_weights.put(w, "fitted", piece, _who(who), after_run)

    def drill(self, piece: PieceDraft, who: str, after_run: str | None = None) -> tuple[WeightEvent, ...]:
        """Mass taken away for good; counts as minus at its place."""
        with self._write() as w:
            ledger_rotor.refuse_while_pending(w, "drilled")
            return ledger_weights.put(w, "drilled", piece, _who(who), after_run)

    def remove(
        self,
        plane: int,
        who: str,
        *,
        hole: int | None = None,
        angle_deg: float | None = None,
        every: bool = False,
        after_run: str | None = None,
    ) -> tuple[WeightEvent, ...]:
        """Pieces taken off: those in a hole, at an angle, every one of the plane, or the only one."""
        with self._write() as w:
            ledger_rotor.refuse_while_pending(w, "removed")
            return ledger_weights.remove(
                w, plane, _who(who), after_run, hole=hole, angle_deg=angle_deg, every=every
            )

    def void_weight(self, number: int, why: str, who: str) -> tuple[WeightEvent, ...]:
        """The entry of that number (``seq``) does not count, nor the removal of its piece; both stay."""
        with self._write() as w:
            ledger_rotor.refuse_while_pending(w, "voided")
            return ledger_weights.void(w, number, why, _who(who))

    # --- marks

    def ask_mark(
        self,
        key: str,
        label: Label,
        who: str,
        *,
        from_sample: int | None = None,
        from_session: UUID | None = None,
        choose: Choice | None = None,
        confirmed: bool = False,
        slow_roll_limit_hz: float | None = None,
    ) -> Mark:
        """Ask for a label; returns it pending, or labelled at once with ``choose="last"``.

        ``from_sample``: the source's sample now, when asked while turning; None = no pulses.
        ``confirmed``: the question about the weights was answered. The same key again: the same mark.
        """
        question = Question(
            key, label, _who(who), from_sample, from_session, choose, confirmed, slow_roll_limit_hz
        )
        with self._write() as w:
            return ledger_marks.ask(w, question)

    def cancel_mark(self, key: str) -> Mark:
        """Cancel a pending mark; one that ended before is returned as it ended."""
        with self._write() as w:
            return ledger_marks.cancel(w, key)

    def label_reading(
        self,
        key: str,
        reading_id: UUID,
        label: Label,
        who: str,
        *,
        confirmed: bool = False,
        slow_roll_limit_hz: float | None = None,
    ) -> Mark:
        """Label a stored reading at once; a label it had stays in the store behind the new one."""
        question = Question(key, label, _who(who), confirmed=confirmed, slow_roll_limit_hz=slow_roll_limit_hz)
        with self._write() as w:
            return ledger_marks.label_one(w, question, reading_id)

    def label_run(
        self,
        key: str,
        run: str,
        number: int | None,
        label: Label,
        who: str,
        *,
        confirmed: bool = False,
        slow_roll_limit_hz: float | None = None,
    ) -> Mark:
        """Label a reading of a run of any job; ``number`` None = the newest that can take the label."""
        question = Question(key, label, _who(who), confirmed=confirmed, slow_roll_limit_hz=slow_roll_limit_hz)
        with self._write() as w:
            return ledger_marks.label_named(w, question, run, number)

    # --- runs and readings

    def open_run(self, draft: RunDraft) -> Run:
        """A run begins; of the mounted job, else unassigned."""
        with self._write() as w:
            return ledger_runs.begin(w, draft)

    def add_reading(
        self, run_id: UUID, draft: ReadingDraft, *, slow_roll_limit_hz: float | None = None
    ) -> tuple[Reading, Mark | None]:
        """Reading, vectors, samples and label in one; the mark is the one this reading ended, else None."""
        with self._write() as w:
            return ledger_runs.add_reading(w, run_id, draft, slow_roll_limit_hz)

    def add_trace(self, run_id: UUID, draft: Trace) -> int:
        """A run-up or coast-down with all its steps; returns its number within the run."""
        with self._write() as w:
            return ledger_traces.add(w, run_id, draft)

    def close_run(
        self,
        run_id: UUID,
        state: RunState,
        reason: str,
        ended_us: int,
        detail: str = "",
        *,
        fast_enough: bool,
    ) -> tuple[Run, Mark | None]:
        """A run ends. ``fast_enough``: it exceeded the minimum speed, so a mark still pending is ``missed``
        with ``detail`` (the figure still out). Closing again changes nothing.
        """
        with self._write() as w:
            return ledger_runs.end(w, run_id, state, reason, ended_us, detail, fast_enough=fast_enough)

    def void_run(self, name: str, why: str, who: str) -> Run:
        """The run does not count; it stays in the store."""
        with self._write() as w:
            return ledger_runs.void(w, name, why, _who(who))

    def assign_run(self, name: str, job: str, who: str) -> Run:
        """The run belongs to that job; it goes on answering to its old name."""
        with self._write() as w:
            return ledger_runs.assign(w, name, job, _who(who))

    def revise_run(self, name: str, set_up_id: UUID, why: str, who: str) -> Run:
        """The run was measured with another revision of the set-up."""
        with self._write() as w:
            return ledger_runs.revise(w, name, set_up_id, why, _who(who))

    def keep_again(self, again: Sequence[RunAgain], why: str, who: str) -> tuple[Run, ...]:
        """Runs measured again: new versions of their readings, and their corrected set-up where one is given.
        All of them or none; what was there stays."""
        with self._write() as w:
            return ledger_again.keep(w, again, why, _who(who))

    def recover(self) -> tuple[Run, ...]:
        """Close runs a daemon left open, as interrupted; marks stay pending. For the start of a daemon."""
        with self._write() as w:
            return ledger_runs.recover(w)

    # --- the store itself

    def once(
        self, key: str, verb: str, body: Mapping[str, Any], fn: Callable[[], Mapping[str, Any]]
    ) -> dict[str, Any]:
        """Do ``fn`` and keep its JSON answer under the client's key, in one transaction.

        The same key and body again: the stored answer, ``fn`` is not called. Another verb or body under
        the key: Refusal. Ledger calls inside ``fn`` join the transaction; when ``fn`` fails all is undone
        and nothing is kept, so that a retry is a new try.
        """
        digest = _digest(verb, body)
        with self._write() as w:
            known = _known(w, key, digest)
            if known is not None:
                return known
            answer = dict(fn())
            w.add(request, key=key, verb=verb, body_sha256=digest, answer=answer, at_us=w.now_us())
            return dict(json.loads(json.dumps(answer)))

    def answered(self, key: str, verb: str, body: Mapping[str, Any]) -> dict[str, Any] | None:
        """The answer ``once`` kept under the key, so that a retry need not prepare anything; else None.

        Another verb or body under the key: Refusal."""
        with self._write() as w:
            return _known(w, key, _digest(verb, body))

    def rebuild_coefficients(self, job: str | None = None) -> int:
        """Derive the coefficients anew, of one job or of all; returns how many there are."""
        with self._write() as w:
            return ledger_coefficients.rebuild_all(w, job)

    def age_raw(self, total_mib: float, *, at_most: int = 50) -> int:
        """Let raw samples go, oldest unlabelled first, until they fit ``total_mib`` or ``at_most`` went.

        Returns how many went; each leaves a row in ``raw_aged``. Vectors and readings never go.
        """
        with self._write() as w:
            return ledger_runs.age_raw(w, total_mib, at_most)

    def checkpoint(self) -> bool:
        """Fold the write-ahead log into the store; call it after the acknowledgement.

        False = a reader was in the way, or a transaction is open: try later.
        """
        with self._mutex, in_our_words(self.path):
            if self._inside or self._connection is None:
                return False
            return database.checkpoint(self._driver())

    def backup(self, path: Path) -> Path:
        """A checked copy at ``path``, which must not exist; the store goes on being used."""
        return copy_store(self.path, path)

    def note_event(self, kind: str, text: str) -> None:
        """Keep what is no measurement: ``clock_step``, a drop-out, a failed part."""
        with self._write() as w:
            w.event(kind, text[:2000])


def _who(who: str) -> str:
    return check_text("Who does this:", who)


def _known(w: Writer, key: str, digest: str) -> dict[str, Any] | None:
    found = w.c.execute(select(request).where(request.c.key == check_name("The request's key", key))).first()
    if found is not None and found.body_sha256 != digest:
        raise Refusal("This request's key was used for another request.", "Ask again with a new key.")
    return None if found is None else dict(found.answer)


def _digest(verb: str, body: Mapping[str, Any]) -> str:
    return hashlib.sha256(json.dumps([verb, body], sort_keys=True).encode()).hexdigest()
