"""Migrations are all or nothing: after an exception or kill -9 the old store is whole, and a retry works."""

from __future__ import annotations

import shutil
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import pytest
from store_kit import FakeClock, Stand

from config.errors import StoreError
from store import maintenance
from store.lock import StoreLock
from store.maintenance import list_migrations, migrate
from store.migrations import SCRIPTS

NEXT = '''"""A later step, for the tests."""

import os, signal
from alembic import op

revision = "0003"
down_revision = "0002"


def upgrade():
    op.get_bind().exec_driver_sql("ALTER TABLE run ADD COLUMN weather TEXT")
    op.get_bind().exec_driver_sql("CREATE TABLE weather (seq INTEGER PRIMARY KEY, text TEXT)")
    {crash}
    op.get_bind().exec_driver_sql("INSERT INTO weather VALUES (1, 'fine')")
    op.get_bind().exec_driver_sql("PRAGMA user_version = 3")
'''


@pytest.fixture
def scripts(tmp_path: Path) -> Path:
    """Our migrations and one more."""
    ignored = shutil.ignore_patterns("__pycache__")
    return Path(shutil.copytree(SCRIPTS, tmp_path / "scripts", ignore=ignored))


def _next(scripts: Path, crash: str = "") -> None:
    (scripts / "versions" / "0003_weather.py").write_text(NEXT.format(crash=crash))
    shutil.rmtree(scripts / "versions" / "__pycache__", ignore_errors=True)


def _schema(path: Path) -> list[tuple[object, ...]]:
    other = sqlite3.connect(path)
    found = other.execute("SELECT name, sql FROM sqlite_master ORDER BY name").fetchall()
    found += other.execute("SELECT * FROM alembic_version").fetchall()
    found += other.execute("PRAGMA user_version").fetchall()
    other.close()
    return found


def _weather(path: Path) -> object:
    other = sqlite3.connect(path)
    found = other.execute("SELECT text FROM weather").fetchall()
    other.close()
    return found


def test_migrate(store_path: Path, scripts: Path) -> None:
    _next(scripts)
    assert [(s.revision, s.done) for s in list_migrations(store_path, scripts=scripts)] == [
        ("0001", True),
        ("0002", True),
        ("0003", False),
    ]
    before = _schema(store_path)
    report = migrate(store_path, clock=FakeClock(), scripts=scripts)
    assert [s.revision for s in report.done] == ["0003"]
    assert _weather(store_path) == [("fine",)]
    # 1 700 000 000 s after 1970 is 14 November 2023, 22:13:20 UTC
    assert report.backup == store_path.with_name("bay.sqlite.before-0003-20231114T221320Z")
    assert report.backup is not None
    assert _schema(report.backup) == before
    again = migrate(store_path, clock=FakeClock(), scripts=scripts)
    assert (again.done, again.backup) == ((), None)


def test_exception_inside_then_retry(store_path: Path, scripts: Path) -> None:
    before = _schema(store_path)
    _next(scripts, "raise RuntimeError('power')")
    for _ in range(2):
        with pytest.raises(RuntimeError, match="power"):
            migrate(store_path, clock=FakeClock(_later()), scripts=scripts)
        assert _schema(store_path) == before
    _next(scripts)
    migrate(store_path, clock=FakeClock(_later()), scripts=scripts)
    assert _weather(store_path) == [("fine",)]


_seconds = iter(range(1000))


def _later() -> int:
    """Each backup has a second of its own in its name."""
    return (1_700_000_000 + next(_seconds)) * 1_000_000


def test_kill_inside_then_retry(store_path: Path, scripts: Path) -> None:
    before = _schema(store_path)
    _next(scripts, "os.kill(os.getpid(), signal.SIGKILL)")
    code = """
import sys
from pathlib import Path
from daq.clock import SystemClock
from store.maintenance import migrate
migrate(Path(sys.argv[1]), clock=SystemClock(), scripts=Path(sys.argv[2]))
"""
    killed = subprocess.run(
        [sys.executable, "-c", code, str(store_path), str(scripts)],
        cwd=Path(__file__).parents[2],
        timeout=60,
    )
    assert killed.returncode == -signal.SIGKILL
    assert _schema(store_path) == before
    _next(scripts)
    migrate(store_path, clock=FakeClock(), scripts=scripts)
    assert _weather(store_path) == [("fine",)]


def test_statement_that_fails_is_a_store_error(store_path: Path, scripts: Path) -> None:
    before = _schema(store_path)
    _next(scripts, 'op.get_bind().exec_driver_sql("CREATE TABLE run (a)")')
    with pytest.raises(StoreError, match="cannot be used"):
        migrate(store_path, clock=FakeClock(), scripts=scripts)
    assert _schema(store_path) == before


def test_refused_while_somebody_writes(stand: Stand, scripts: Path) -> None:
    _next(scripts)
    with pytest.raises(StoreError) as caught:
        migrate(stand.path, clock=FakeClock(), scripts=scripts)
    assert caught.value.kind == "locked"
    assert not list(stand.path.parent.glob("*.before-*"))


def test_refused_without_room(store_path: Path, scripts: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    _next(scripts)
    monkeypatch.setattr(maintenance, "ROOM_FOR_MIGRATION", 1e15)
    with pytest.raises(StoreError, match="MiB free; migrating the store needs") as caught:
        migrate(store_path, clock=FakeClock(), scripts=scripts)
    assert caught.value.kind == "full"
    StoreLock.take(store_path).release()


def test_newer_store_is_refused(store_path: Path, scripts: Path) -> None:
    _next(scripts)
    migrate(store_path, clock=FakeClock(), scripts=scripts)
    before = _schema(store_path)
    with pytest.raises(StoreError, match="0002") as caught:
        migrate(store_path, clock=FakeClock())
    assert caught.value.kind == "newer"
    assert _schema(store_path) == before
