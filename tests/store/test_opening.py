"""What opens, what is refused, and that a refusal changes nothing."""

from __future__ import annotations

import hashlib
import os
import shutil
import sqlite3
import stat
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from store_kit import FakeClock, Stand

from config.errors import StoreError
from store import database
from store.database import create_store
from store.history import History
from store.ledger import Ledger
from store.lock import StoreLock
from store.migrations import KNOWN

Opens = Callable[[Path], object]

NEXT = len(KNOWN) + 1
"""Number of the schema after the newest known one: revisions are counted from 1."""


def _ledger(path: Path) -> Ledger:
    return Ledger.open(path, clock=FakeClock(), software="revmark test")


both = pytest.mark.parametrize("opens", [_ledger, History.open], ids=["ledger", "history"])


def _with_version(path: Path, number: int, stamp: str) -> None:
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("UPDATE alembic_version SET version_num = ?", (stamp,))
    other.execute(f"PRAGMA user_version = {number}")
    other.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    other.close()


def _folder(path: Path) -> dict[str, str]:
    return {f.name: hashlib.sha256(f.read_bytes()).hexdigest() for f in path.parent.iterdir()}


@both
def test_typo_makes_no_file(tmp_path: Path, opens: Opens) -> None:
    with pytest.raises(StoreError, match=r"There is no store .*tyop\.sqlite") as caught:
        opens(tmp_path / "tyop.sqlite")
    assert caught.value.kind == "missing"
    with pytest.raises(StoreError, match="There is no folder"):
        opens(tmp_path / "tyop" / "bay.sqlite")
    assert list(tmp_path.iterdir()) == []


@both
def test_newer_store_is_refused_untouched(store_path: Path, opens: Opens) -> None:
    _with_version(store_path, NEXT, f"{NEXT:04}")
    before = _folder(store_path)
    with pytest.raises(StoreError, match=rf"newer version \(schema {NEXT:04}") as caught:
        opens(store_path)
    assert caught.value.kind == "newer"
    assert _folder(store_path) == before


@both
def test_newer_stamp_behind_an_older_header(store_path: Path, opens: Opens) -> None:
    """A kill right after a migration leaves the new header in the log: the stamp tells."""
    _with_version(store_path, NEXT - 1, f"{NEXT:04}")
    with pytest.raises(StoreError, match=f"schema {NEXT:04}") as caught:
        opens(store_path)
    assert caught.value.kind == "newer"
    StoreLock.take(store_path).release()  # a refusal leaves no lock behind


@both
def test_older_store_names_the_command(store_path: Path, opens: Opens) -> None:
    _with_version(store_path, 0, "0000")
    before = _folder(store_path)
    with pytest.raises(StoreError, match="revmark store migrate --store") as caught:
        opens(store_path)
    assert caught.value.kind == "older"
    assert _folder(store_path) == before


@both
@pytest.mark.parametrize(
    ("content", "kind", "says"),
    [
        (b"", "corrupt", "is no store"),
        (b"[stand]\nname = 'bay'\n" * 20, "corrupt", "is no store"),
        (None, "refused", "another program"),
    ],
)
def test_other_files(tmp_path: Path, opens: Opens, content: bytes | None, kind: str, says: str) -> None:
    path = tmp_path / "other.sqlite"
    if content is None:
        other = sqlite3.connect(path)
        other.execute("CREATE TABLE t (a)")
        other.close()
    else:
        path.write_bytes(content)
    before = _folder(path)
    with pytest.raises(StoreError, match=says) as caught:
        opens(path)
    assert caught.value.kind == kind
    assert _folder(path) == before


@both
def test_damaged_pages_are_told(store_path: Path, opens: Opens) -> None:
    raw = bytearray(store_path.read_bytes())
    raw[100:4096] = b"\xff" * 3996  # the schema's own page
    store_path.write_bytes(raw)
    with pytest.raises(StoreError) as caught:
        opens(store_path)
    assert caught.value.kind == "corrupt"


@both
def test_network_folder_is_refused(store_path: Path, opens: Opens, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(database, "is_network_folder", lambda path: "nfs4")
    with pytest.raises(StoreError, match=r"another machine \(nfs4\)") as caught:
        opens(store_path)
    assert caught.value.kind == "network"
    with pytest.raises(StoreError, match="nfs4"):
        create_store(store_path.with_name("new.sqlite"), clock=FakeClock(), software="x")


# --- making ------------------------------------------------------------------------------------------


def test_create_never_replaces(store_path: Path) -> None:
    before = store_path.read_bytes()
    with pytest.raises(StoreError, match="is there already") as caught:
        create_store(store_path, clock=FakeClock(), software="x")
    assert caught.value.kind == "refused"
    assert store_path.read_bytes() == before


def test_create_beside_a_left_over_log(tmp_path: Path) -> None:
    (tmp_path / "bay.sqlite-wal").write_bytes(b"x" * 40)
    with pytest.raises(StoreError, match=r"bay\.sqlite-wal is there already"):
        create_store(tmp_path / "bay.sqlite", clock=FakeClock(), software="x")


def test_create_after_a_crash_while_creating(tmp_path: Path) -> None:
    (tmp_path / "bay.sqlite.new").write_bytes(b"half")
    create_store(tmp_path / "bay.sqlite", clock=FakeClock(), software="x")
    with History.open(tmp_path / "bay.sqlite") as history:
        assert history.info().made_by == "x"
    assert not (tmp_path / "bay.sqlite.new").exists()


@pytest.mark.skipif(os.name == "nt", reason="allowed: modes are POSIX")
@pytest.mark.parametrize(("umask", "mode"), [(0o007, 0o660), (0o077, 0o600), (0o027, 0o640)])
def test_modes_follow_the_umask(tmp_path: Path, umask: int, mode: int) -> None:
    before = os.umask(umask)
    try:
        path = tmp_path / "bay.sqlite"
        create_store(path, clock=FakeClock(), software="x")
        with _ledger(path) as ledger:
            ledger.note_event("test", "")
            files = [path, path.with_name("bay.sqlite.lock"), *database.beside(path)]
            modes = [stat.S_IMODE(f.stat().st_mode) for f in files]
        ledger.close()
        ledger.backup(tmp_path / "copy.sqlite")
    finally:
        os.umask(before)
    assert modes == [mode] * 4
    assert stat.S_IMODE((tmp_path / "copy.sqlite").stat().st_mode) == mode


@pytest.mark.parametrize("name", ["a b.sqlite", "50%?#x.sqlite", "größe.sqlite"])
def test_odd_paths(empty_store: Path, tmp_path: Path, name: str) -> None:
    path = Path(shutil.copy(empty_store, tmp_path / name))
    with _ledger(path) as ledger:
        ledger.note_event("test", "here")
        with History.open(path) as history:
            assert [e.text for e in history.events()] == ["here"]
    assert sorted(f.name for f in tmp_path.iterdir()) == sorted([name, name + ".lock"])


# --- one writer --------------------------------------------------------------------------------------


def test_second_writer_is_refused_with_the_first_ones_pid(stand: Stand) -> None:
    with pytest.raises(StoreError, match=rf"in use by another process \(pid {os.getpid()}\)") as caught:
        _ledger(stand.path)
    assert caught.value.kind == "locked"


def test_lock_ends_with_its_process(store_path: Path) -> None:
    code = """
import sys, time
from pathlib import Path
from store.lock import StoreLock
from store.migrations import KNOWN
lock = StoreLock.take(Path(sys.argv[1]))
print("held", flush=True)
sys.stdin.read()
"""
    holder = subprocess.Popen(
        [sys.executable, "-c", code, str(store_path)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
        cwd=Path(__file__).parents[2],
    )
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(StoreError, match=rf"pid {holder.pid}"):
            _ledger(store_path)
    finally:
        holder.kill()
        holder.communicate(timeout=10)
    _ledger(store_path).close()


def test_close_leaves_one_file_and_a_free_lock(stand: Stand) -> None:
    stand.close()
    stand.ledger.close()
    assert sorted(f.name for f in stand.path.parent.iterdir()) == ["bay.sqlite", "bay.sqlite.lock"]
    with pytest.raises(StoreError, match="is closed"):
        stand.ledger.note_event("test", "")
    assert stand.ledger.checkpoint() is False
    _ledger(stand.path).close()


def test_locked_by_another_program(stand: Stand, monkeypatch: pytest.MonkeyPatch) -> None:
    other = sqlite3.connect(stand.path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    driver = stand.ledger._driver()
    driver.execute("PRAGMA busy_timeout = 50")
    with pytest.raises(StoreError, match="being written by another process") as caught:
        stand.ledger.note_event("test", "no")
    assert caught.value.kind == "locked"
    other.execute("ROLLBACK")
    other.close()
    stand.ledger.note_event("test", "yes")
    assert [e.text for e in stand.history.events()] == ["yes"]


def test_reader_never_blocks_the_writer_for_long(stand: Stand) -> None:
    """A long reader costs the checkpoint, not the commit; afterwards the log is folded in whole."""
    with stand.history._read() as c:
        c.exec_driver_sql("SELECT * FROM store_info").all()
        stand.ledger.note_event("test", "meanwhile")
        assert stand.ledger.checkpoint() is False
        assert stand.history.info().wal_bytes > 0
    assert stand.ledger.checkpoint() is True
    assert stand.history.info().wal_bytes == 0


def test_history_cannot_write(stand: Stand) -> None:
    with pytest.raises(StoreError) as caught, stand.history._read() as c:
        c.exec_driver_sql("INSERT INTO event VALUES (9, NULL, 'a', 'b', 0)")
    assert caught.value.kind == "read_only"
