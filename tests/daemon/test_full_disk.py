"""A disk that is really full (a small tmpfs): readings wait in memory, operators are told, nothing is lost.

STORE.md section 1.5: SQLite rolls back by itself, then nothing at all can be written until there is space.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import errno
import os
import sqlite3
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import closing, suppress
from pathlib import Path

import pytest
from daemon_kit import Bay, Done, no_traceback, until

if sys.platform != "linux" or os.geteuid() != 0:
    pytest.skip("allowed: needs root, to mount a small tmpfs", allow_module_level=True)

pytestmark = pytest.mark.slow

SIZE = "4m"
MNT_DETACH = 2
NO_ROOM = "has no room left: nothing more can be written, what was stored is intact."
FULL_ONCE = """
from config.errors import StoreError
from store.ledger import Ledger

def full(self, total_mib, age=Ledger.age_raw):
    Ledger.age_raw = age
    raise StoreError("The store is full.", "Free space.", kind="full")

Ledger.age_raw = full
"""


class Disk:
    """A file system of its own, and a file that fills it."""

    def __init__(self, path: Path) -> None:
        self.path = path
        self._filler = path / "filler"

    def fill(self) -> None:
        """To the last byte."""
        with self._filler.open("ab", buffering=0) as out:
            for size in (65536, 4096, 1):
                with suppress(OSError):
                    while True:
                        out.write(bytes(size))
        assert os.statvfs(self.path).f_bavail == 0

    def free(self) -> None:
        self._filler.unlink()


@pytest.fixture
def disk() -> Iterator[Disk]:
    libc = ctypes.CDLL(ctypes.util.find_library("c"), use_errno=True)
    with tempfile.TemporaryDirectory(prefix="rm-") as folder:
        place = os.fsencode(folder)
        if libc.mount(b"tmpfs", place, b"tmpfs", 0, f"size={SIZE}".encode()):
            error = ctypes.get_errno()
            assert error in (errno.EPERM, errno.EACCES, errno.ENODEV), os.strerror(error)
            pytest.skip(f"allowed: root may not mount a tmpfs here ({os.strerror(error)})")
        try:
            yield Disk(Path(folder))
        finally:
            assert libc.umount2(place, MNT_DETACH) == 0


@pytest.fixture
def full(make_bay: Callable[..., Bay], disk: Disk) -> Bay:
    """A running bay with its store alone on the small disk, mounted, with an O run labelled."""
    bay = make_bay(store_name=f"{disk.path}/bay.sqlite")
    bay.start()
    bay.set_up()
    bay.mark("O", choose="next")
    bay.a_run()
    return bay


def rows(bay: Bay) -> dict[str, set[tuple[object, ...]]]:
    """Everything of the source tables, past our own code."""
    with closing(sqlite3.connect(f"file:{bay.store}?mode=ro", uri=True)) as raw:
        return {
            name: set(raw.execute(f"select * from {name}"))
            for name in ("run", "run_end", "reading", "vector", "raw", "label", "mark", "mount", "machine")
        }


def refused(done: Done, words: str) -> None:
    no_traceback(done)
    assert done.code == 1
    assert words in done.err
    assert done.err.count("\n") == 1


def test_a_full_disk_costs_nothing_and_mends_by_itself(full: Bay, disk: Disk) -> None:
    before = rows(full)
    assert len(before["label"]) == 1
    disk.fill()

    # Operators are refused in words, and the store says so from the first refusal on.
    refused(full.run("mark", "check", "--no-wait"), NO_ROOM)
    assert full.status()["pending"] is None
    assert full.live()["store"].startswith("blocked: ")
    assert full.live()["held_records"] == 1
    refused(full.run("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out"), NO_ROOM)

    # A whole run meanwhile: nothing of it can be written.
    full.turn()
    full.until_state("turning")
    until(lambda: "store blocked" in full.log, "the run's opening to be held")
    until(lambda: full.live()["held_records"] >= 3, "a reading to be held")
    told = full.must("status").out
    assert "blocked: " in told
    assert NO_ROOM in " ".join(told.split())
    full.coast()
    full.until_state("no pulses")
    until(lambda: full.live()["held_records"] >= 4, "the run's end to be held")
    held = full.live()["held_records"]
    assert f"until it writes again: {held} records" in full.must("status").out
    assert rows(full) == before
    assert full.must("run", "list", "--json").json[0]["run"] == "0142/1"

    # Space comes back, and nobody does anything else.
    freed_us = time.time_ns() // 1000
    disk.free()
    until(lambda: full.live()["store"] == "ok", "the store to write again", 25.0)
    assert full.live()["held_records"] == 0
    after = rows(full)
    assert all(old <= after[name] for name, old in before.items())
    with full.history() as history:
        run = history.run("0142/2")
        assert str(run.state) == "complete"
        assert run.ended_us is not None
        assert run.ended_us < freed_us
        kept = len(run.readings) + len(history.traces(run.id))
        assert kept == held - 3  # besides the first refusal, the run's opening and its end
        assert all(r.at_us < freed_us for r in run.readings)
        for reading in run.readings:
            assert len(history.reading_raw(reading.id).counts) >= 0.6 * 5120
        (event,) = (e for e in history.events() if e.kind == "store_blocked")
        assert NO_ROOM in event.text
    assert full.live()["dropped_readings"] == 0
    assert full.mark("check", choose="next")["mark"]["state"] == "pending"
    assert full.stop() == 0
    assert full.must("store", "check", "--store", str(full.store)).out.startswith("The store ")


def test_a_weight_is_never_stored_before_the_run_it_came_after(full: Bay, disk: Disk) -> None:
    """The first act after the disk is free writes what is held, however long the back-off still is."""
    disk.fill()
    full.turn()
    until(lambda: full.live()["held_records"] >= 2, "a reading to be held")
    full.coast()
    full.until_state("no pulses")
    until(lambda: full.log.count("store blocked") >= 5, "a long back-off")
    disk.free()
    full.must("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
    with full.history() as history:
        (weight,) = history.job_story("0142").weights
        assert weight.after_run_id == history.run("0142/2").id


def test_a_failure_after_a_reading_is_stored_does_not_store_it_twice(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    bay.start(patch=FULL_ONCE)
    bay.set_up()
    bay.a_run()
    assert "raw samples were not aged out: The store is full." in bay.log
    with bay.history() as history:
        times = [r.at_us for r in history.run("0142/1").readings]
    assert len(set(times)) == len(times)


def test_a_daemon_that_starts_on_a_full_disk_says_so_and_may_be_tried_again(full: Bay, disk: Disk) -> None:
    assert full.stop() == 0
    disk.fill()
    done = full.serve().done()
    no_traceback(done)
    assert done.code == 75
    assert NO_ROOM in done.err
    refused(
        full.run("run", "list", "--stand", str(full.stand)), NO_ROOM
    )  # readers need room for the -shm file
    disk.free()
    full.start()
    assert full.must("run", "list", "--json").json[0]["run"] == "0142/1"


def test_no_store_is_half_made_on_a_full_disk(make_bay: Callable[..., Bay], disk: Disk) -> None:
    disk.fill()
    bay = make_bay(store_name=f"{disk.path}/bay.sqlite")
    done = bay.serve().done()
    no_traceback(done)
    assert done.code == 75
    assert not bay.store.exists()
    disk.free()
    bay.start()
    assert "new, empty store" in bay.log


def test_an_end_while_the_disk_is_full_says_what_is_lost_with_it(full: Bay, disk: Disk) -> None:
    before = rows(full)
    disk.fill()
    full.turn()
    until(lambda: full.live()["held_records"] >= 2, "a reading to be held")
    full.stop()
    assert "records could not be stored and are lost" in full.log
    assert "Traceback" not in full.log
    disk.free()
    assert rows(full) == before
    full.start()
    full.a_run()
