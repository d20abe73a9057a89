"""Migrations are all or nothing: after an exception or kill -9 the old store is whole, and a retry works."""

from __future__ import annotations

import shutil
import signal
import sqlite3
import subprocess
import sys
from pathlib import Path

import pytest
from store_kit import FakeClock, Stand, samples

from config.errors import StoreError
from store import maintenance, schema
from store.database import writer_engine
from store.history import History
from store.lock import StoreLock
from store.maintenance import list_migrations, migrate
from store.migrations import SCRIPTS
from store.records import Label

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
    with pytest.raises(StoreError, match="schema 0003 is not known") as caught:
        migrate(store_path, clock=FakeClock())
    assert caught.value.kind == "newer"
    assert _schema(store_path) == before


def _at_0001(now: Path, path: Path, scripts: Path) -> None:
    """A store as the first migration alone makes it, with all that ``now`` holds and its tables take."""
    for later in (scripts / "versions").glob("0002*"):
        later.unlink()
    path.touch()
    engine = writer_engine(path)
    schema.upgrade(engine, scripts)
    engine.dispose()
    old = sqlite3.connect(path, isolation_level=None)
    old.execute("ATTACH ? AS now", (str(now),))
    tables = old.execute(
        "SELECT name FROM main.sqlite_master WHERE type = 'table' AND name <> 'alembic_version'"
    )
    for (table,) in tables.fetchall():
        columns = ", ".join(f'"{c[1]}"' for c in old.execute(f"PRAGMA main.table_info({table})"))
        old.execute(f"INSERT INTO main.{table} ({columns}) SELECT {columns} FROM now.{table}")
    old.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    old.close()


def test_a_store_of_the_first_schema_reads_on(stand: Stand, tmp_path: Path, scripts: Path) -> None:
    """Vectors as they were, no levels, version 1; and a reading of it can get a second version."""
    stand.mount()
    stand.run(Label.O, 10 + 0j, raw=samples(7))
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    before = {c.channel: c.value for c in stand.history.coefficients()}
    stand.close()
    path = tmp_path / "old.sqlite"
    _at_0001(stand.path, path, scripts)
    assert "measured" not in {name for name, _ in _schema(path)[:-2]}
    with pytest.raises(StoreError, match="store migrate"):
        History.open(path)
    assert [s.revision for s in migrate(path, clock=FakeClock()).done] == ["0002"]
    again = Stand(path, FakeClock())
    try:
        first, second = again.history.run("0142/1"), again.history.run("0142/2")
        (r1,), (r2,) = first.readings, second.readings
        assert [(v.channel, v.order, v.value) for v in r2.vectors] == [
            ("probe 1", 1, 4 + 3j),
            ("probe 2", 1, 4 + 3j),
            ("probe 1", 2, 0.1j),
        ]
        assert (r1.version, r1.levels, r1.figures, r1.flags) == (1, (), {}, ("near gap limit",))
        assert (r1.label, r2.label) == (Label.O, Label.O_T)
        assert again.history.measured(r1.id) == ()
        assert again.history.reading_raw(r1.id).counts.tolist() == samples(7).counts.tolist()
        assert {c.channel: c.value for c in again.history.coefficients()} == before
        assert again.history.set_up(first.set_up_id).pulse.pattern is None
        kept = again.again("0142/1", 11 + 0j)
        assert (kept.readings[0].version, kept.readings[0].vectors[0].value) == (2, 11 + 0j)
        assert again.history.run_as("0142/1", 1).readings[0].vectors == r1.vectors
    finally:
        again.close()
