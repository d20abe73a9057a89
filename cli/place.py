"""Where a reading command reads: the store of the running daemon, or of the stand file named."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, tzinfo
from pathlib import Path
from typing import TYPE_CHECKING

from cli.client import Address, find
from config.errors import DaemonError, RevmarkError

if TYPE_CHECKING:
    from store.history import History


def store_path(stand: str | None) -> Path:
    """The store meant. Raises DaemonError when no daemon runs and no stand file is named."""
    if stand is not None:
        from config.stand import load_stand

        return load_stand(Path(stand)).store_path
    try:
        return Path(find(None).store)
    except DaemonError as error:
        raise DaemonError(
            error.cause, f"Name the stand whose store to read: --stand FILE. {error.remedy}"
        ) from error


@dataclass(frozen=True, slots=True)
class Manner:
    """How a stand has its figures printed. JSON heeds none of it."""

    show: Mapping[str, str] = field(default_factory=dict)
    """By channel; one that is not there is shown by its unit alone."""
    zone: tzinfo = UTC
    """In which times are printed."""


def manner(stand: str | None) -> Manner:
    """The manner of the stand file named, else of the daemon that runs; the plain one when neither tells."""
    try:
        if stand is None:
            return manner_of(find(None))
        from config.stand import load_stand

        told = load_stand(Path(stand))
    except RevmarkError:
        return Manner()
    return Manner({c.name: c.display.name for c in told.channels}, told.zone)


def manner_of(address: Address) -> Manner:
    """As the daemon published it when it started."""
    return Manner(address.show, _zone(address.time_zone))


def _zone(name: str | None) -> tzinfo:
    from zoneinfo import ZoneInfo

    try:
        return ZoneInfo(name) if name else UTC
    except (KeyError, ValueError):
        return UTC


@contextmanager
def reading(stand: str | None) -> Iterator[History]:
    """The history of the stand meant, opened for reading."""
    from store.history import History

    with History.open(store_path(stand)) as history:
        yield history


def newest_job(history: History) -> str:
    """The job of what is mounted now, else the newest. Raises Refusal when there is none."""
    from config.errors import Refusal

    mount = history.current_mount()
    jobs = history.jobs()
    if mount is not None:
        return next(j.number for j in jobs if j.id == mount.job_id)
    if not jobs:
        raise Refusal("The store holds no job yet.", "Begin one with revmark mount MACHINE --job NUMBER.")
    return max(jobs, key=lambda j: j.opened_us).number
