"""The only reader of a store: read-only connections, short transactions, records out."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from uuid import UUID

from store.records import (
    Coefficient,
    Job,
    JobStory,
    Machine,
    Mark,
    Model,
    Mount,
    RawSamples,
    Reading,
    Run,
    RunLine,
    SetUp,
    StoreEvent,
    StoreInfo,
    WeightEvent,
)


class History:
    """SKELETON: signatures stand, bodies follow. What is named and not there raises Refusal."""

    @classmethod
    def open(cls, path: Path) -> History:
        """Raises StoreError (missing, newer, older, corrupt, network, ...)."""
        raise NotImplementedError

    def close(self) -> None:
        raise NotImplementedError

    def __enter__(self) -> History:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def machines(self) -> tuple[Machine, ...]:
        raise NotImplementedError

    def machine(self, serial: str) -> Machine:
        raise NotImplementedError

    def model(self, code: str) -> Model:
        raise NotImplementedError

    def jobs(self, machine: str | None = None) -> tuple[Job, ...]:
        raise NotImplementedError

    def job(self, number: str) -> Job:
        raise NotImplementedError

    def job_story(self, number: str, before_run: str | None = None, *, with_void: bool = False) -> JobStory:
        raise NotImplementedError

    def runs(
        self, job: str | None = None, machine: str | None = None, limit: int | None = None
    ) -> tuple[RunLine, ...]:
        """Newest first."""
        raise NotImplementedError

    def run(self, name: str) -> Run:
        raise NotImplementedError

    def open_run(self) -> Run | None:
        raise NotImplementedError

    def reading(self, reading_id: UUID) -> Reading:
        raise NotImplementedError

    def reading_raw(self, reading_id: UUID) -> RawSamples:
        raise NotImplementedError

    def current_mount(self) -> Mount | None:
        raise NotImplementedError

    def mount(self, mount_id: UUID) -> Mount:
        raise NotImplementedError

    def set_up(self, set_up_id: UUID) -> SetUp:
        raise NotImplementedError

    def newest_set_up(self) -> SetUp | None:
        raise NotImplementedError

    def weights(self, mount_id: UUID) -> tuple[WeightEvent, ...]:
        """What is on the rotor now: fitted and not removed, and drilled."""
        raise NotImplementedError

    def weight_events(self, mount_id: UUID) -> tuple[WeightEvent, ...]:
        """Every act of the mount, in the order in which it was done."""
        raise NotImplementedError

    def pending_mark(self) -> Mark | None:
        raise NotImplementedError

    def mark(self, key: str) -> Mark | None:
        raise NotImplementedError

    def last_mark(self) -> Mark | None:
        raise NotImplementedError

    def coefficients(
        self,
        model: str | None = None,
        plane: int | None = None,
        channel: str | None = None,
        speed_hz: float | None = None,
        within: float = 0.005,
        before_us: int | None = None,
    ) -> tuple[Coefficient, ...]:
        raise NotImplementedError

    def events(self, limit: int = 50) -> tuple[StoreEvent, ...]:
        raise NotImplementedError

    def counts(self) -> Mapping[str, int]:
        raise NotImplementedError

    def info(self) -> StoreInfo:
        raise NotImplementedError
