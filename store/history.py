"""The only reader of a store: read-only connections, short transactions, records out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from uuid import UUID

from sqlalchemy import Connection, Engine, func, select

from config.errors import Refusal
from store import database, recall, recall_lists, recall_measured, recall_runs, recall_traces
from store.listings import RunLine, StoreEvent, StoreInfo
from store.records import (
    Coefficient,
    Job,
    JobStory,
    Machine,
    Mark,
    Measured,
    Model,
    Mount,
    RawSamples,
    Reading,
    Run,
    SetUp,
    Trace,
    WeightEvent,
)
from store.tables import event, metadata
from store.trouble import in_our_words


class History:
    """Reads a store that may be in use, or at rest. What is named and not there raises Refusal.

    Every method is one short read transaction, so the writer's log can always be folded in. Safe to use
    from several threads. All methods raise StoreError when the store cannot be read.
    """

    def __init__(self, path: Path, engine: Engine) -> None:
        """Called by ``open``."""
        self.path = path
        self._engine = engine

    @classmethod
    def open(cls, path: Path) -> History:
        """Raises StoreError (missing, network, corrupt, newer, older, ...). Makes and changes no store."""
        database.check_openable(path)
        history = cls(path, database.reader_engine(path))
        try:
            with history._read() as c:
                database.check_stamp(c, path)
        except BaseException:
            history.close()
            raise
        return history

    def close(self) -> None:
        """Closing twice is fine."""
        self._engine.dispose()

    def __enter__(self) -> History:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @contextmanager
    def _read(self) -> Iterator[Connection]:
        with in_our_words(self.path), self._engine.begin() as connection:
            yield connection

    # --- machines, jobs, mounts, set-ups

    def machines(self) -> tuple[Machine, ...]:
        """All as they are known now, by serial number."""
        with self._read() as c:
            return recall.machines(c)

    def machine(self, serial: str) -> Machine:
        with self._read() as c:
            return recall.newest_machine(c, serial)

    def model(self, code: str) -> Model:
        """The model as it is known now."""
        with self._read() as c:
            return recall.model_named(c, code)

    def jobs(self, machine: str | None = None) -> tuple[Job, ...]:
        """In the order in which they were opened."""
        with self._read() as c:
            return recall.jobs(c, machine)

    def job(self, number: str) -> Job:
        with self._read() as c:
            return recall.job_named(c, number)

    def job_of(self, mount_id: UUID) -> Job:
        """The job a mount belongs to."""
        with self._read() as c:
            return recall.job_by_id(c, recall.mount_by_id(c, mount_id).job_id)

    def current_mount(self) -> Mount | None:
        with self._read() as c:
            return recall.current_mount(c)

    def mount(self, mount_id: UUID) -> Mount:
        with self._read() as c:
            return recall.mount_by_id(c, mount_id)

    def mounts(self, job: str) -> tuple[Mount, ...]:
        """A job's mounts in order."""
        with self._read() as c:
            return recall.mounts_of_job(c, recall.job_named(c, job).id)

    def last_mount(self, serial: str) -> Mount | None:
        """The machine's newest mount in any job, ended or not."""
        with self._read() as c:
            return recall.last_mount_of(c, serial)

    def set_up(self, set_up_id: UUID) -> SetUp:
        with self._read() as c:
            return recall.set_up_by_id(c, set_up_id)

    def newest_set_up(self) -> SetUp | None:
        with self._read() as c:
            return recall.newest_set_up(c)

    # --- runs, readings, weights

    def job_story(self, number: str, before_run: str | None = None, *, with_void: bool = False) -> JobStory:
        """All of a job, or (``before_run``) as it stood when that run began."""
        with self._read() as c:
            return recall_runs.story(c, number, before_run, with_void=with_void)

    def runs(
        self, job: str | None = None, machine: str | None = None, limit: int | None = None
    ) -> tuple[RunLine, ...]:
        """A list of runs, newest first, by one query."""
        with self._read() as c:
            return recall_lists.run_lines(c, job, machine, limit)

    def run(self, name: str) -> Run:
        """The run that answers to ``0142/3`` or ``U/1``, with its readings."""
        with self._read() as c:
            return recall_runs.run_named(c, name)

    def run_as(self, name: str, version: int) -> Run:
        """The run with its readings as a version of the arithmetic has them (1 = live), those that have it.

        Refusal when none has."""
        with self._read() as c:
            run = recall_runs.run_named(c, name)
            found = [recall_measured.reading_as(c, r.id, version) for r in run.readings]
            set_up_id = recall_measured.set_up_then(c, run.id, version) or run.set_up_id
        readings = tuple(r for r in found if r is not None)
        if not readings:
            newest = max((r.version for r in run.readings), default=0)
            raise Refusal(f"Run {run.name} has no version {version} of any reading.", f"Newest: {newest}.")
        return replace(run, readings=readings, set_up_id=set_up_id)

    def versions(self, run_id: UUID) -> Mapping[UUID, tuple[Measured, ...]]:
        """By reading, how each version came about (without vectors and levels), oldest first."""
        with self._read() as c:
            return recall_measured.heads(c, run_id)

    def measured(self, reading_id: UUID) -> tuple[Measured, ...]:
        """How a reading was measured, oldest version first; empty when that was not recorded."""
        with self._read() as c:
            return recall_measured.versions(c, reading_id)

    def open_run(self) -> Run | None:
        """The run that has begun and not ended, with its readings so far."""
        with self._read() as c:
            found = recall_runs.open_run(c)
            return None if found is None else recall_runs.run_by_id(c, found.id)

    def reading(self, reading_id: UUID) -> Reading:
        with self._read() as c:
            return recall_runs.reading_by_id(c, reading_id)

    def reading_raw(self, reading_id: UUID) -> RawSamples:
        """The samples of a reading, proven by their checksum. Refusal when they were not kept or let go."""
        with self._read() as c:
            return recall_runs.reading_raw(c, reading_id)

    def traces(self, run_id: UUID, set_up_id: UUID | None = None) -> tuple[Trace, ...]:
        """The run's run-ups and coast-downs, each apart, in order; empty when it has none."""
        with self._read() as c:
            return recall_traces.traces_of_run(c, run_id, set_up_id)

    def weights(self, mount_id: UUID) -> tuple[WeightEvent, ...]:
        """What is on the rotor now: fitted and not removed, and drilled."""
        with self._read() as c:
            return recall.still_there(recall.weight_events(c, [mount_id]))

    def weight_events(self, mount_id: UUID, *, with_void: bool = False) -> tuple[WeightEvent, ...]:
        """Every act of the mount that counts (or every one), in the order in which it was done."""
        with self._read() as c:
            return recall.weight_events(c, [mount_id], with_void=with_void)

    # --- marks

    def pending_mark(self) -> Mark | None:
        with self._read() as c:
            return recall_runs.pending_mark(c)

    def mark(self, key: str) -> Mark | None:
        with self._read() as c:
            return recall_runs.find_mark(c, key)

    def last_mark(self) -> Mark | None:
        """The mark asked last, whatever became of it."""
        with self._read() as c:
            return recall_runs.last_mark(c)

    # --- coefficients

    def coefficients(
        self,
        model: str | None = None,
        plane: int | None = None,
        channel: str | None = None,
        speed_hz: float | None = None,
        within: float = 0.005,
        before_us: int | None = None,
    ) -> tuple[Coefficient, ...]:
        """Those of a model, plane, channel and speed (``within`` is a fraction of it), oldest job first."""
        wanted = recall_lists.coefficients_like(model, plane, channel, speed_hz, within, before_us)
        with self._read() as c:
            return recall_lists.coefficient_records(c, wanted)

    # --- the store itself

    def events(self, limit: int = 50) -> tuple[StoreEvent, ...]:
        """Newest first."""
        with self._read() as c:
            rows = c.execute(select(event).order_by(event.c.seq.desc()).limit(limit))
            return tuple(StoreEvent(r.at_us, r.kind, r.text) for r in rows)

    def counts(self) -> Mapping[str, int]:
        """Rows by table."""
        with self._read() as c:
            return {
                t.name: c.execute(select(func.count()).select_from(t)).scalar_one()
                for t in metadata.sorted_tables
            }

    def info(self) -> StoreInfo:
        """Identity, versions and sizes; cheap enough for ``status``."""
        with self._read() as c:
            return recall_lists.info(c, self.path)
