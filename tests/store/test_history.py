"""Lists are one query and quick; the coefficient query never opens the table."""

from __future__ import annotations

import sqlite3
import time
from collections.abc import Callable
from pathlib import Path

import pytest
from sqlalchemy import event
from sqlalchemy.dialects import sqlite
from store_kit import Stand

from config.errors import Refusal
from store import database
from store.history import History
from store.recall_lists import _reset_safe, coefficients_like
from store.records import Label, Origin, RunState

RUNS = 10_000


def _statements(history: History, act: Callable[[], object]) -> list[str]:
    """SQL that ``act`` sends, without the transaction's own."""
    seen: list[str] = []

    def note(conn: object, cursor: object, statement: str, *_: object) -> None:
        seen.append(statement)

    event.listen(history._engine, "before_cursor_execute", note)
    try:
        act()
    finally:
        event.remove(history._engine, "before_cursor_execute", note)
    return [s for s in seen if s != "BEGIN"]


def test_run_list(stand: Stand) -> None:
    stand.run(None)
    stand.mount()
    stand.run(Label.O)
    run = stand.begin()
    newest, *_ = stand.history.runs(limit=1)
    assert (newest.name, newest.state, newest.readings, newest.speed_hz) == ("0142/2", RunState.OPEN, 0, None)
    stand.end(run.id)
    lines = stand.history.runs()
    assert [line.name for line in lines] == ["0142/2", "0142/1", "U/1"]
    marked = lines[1]
    assert (marked.labels, marked.readings, marked.speed_hz) == ((Label.O,), 1, 25.0)
    assert (marked.machine_serial, marked.origin, marked.operator) == ("F-204", Origin.LIVE, "ana")
    assert (lines[2].machine_serial, lines[2].job_number) == (None, None)
    assert [line.name for line in stand.history.runs(job="0142")] == ["0142/2", "0142/1"]
    assert [line.name for line in stand.history.runs(machine="F-204", limit=1)] == ["0142/2"]
    with pytest.raises(Refusal, match="no job '9999'"):
        stand.history.runs(job="9999")
    with pytest.raises(Refusal, match="no machine 'F-999'"):
        stand.history.runs(machine="F-999")


def _many_runs(path: Path, runs: int) -> None:
    """Runs copied from the one there is, each with two readings, one of them labelled."""
    other = sqlite3.connect(path)
    numbers = f"WITH RECURSIVE n(i) AS (SELECT 2 UNION ALL SELECT i + 1 FROM n WHERE i < {runs})"
    columns = [c for _, c, *_ in other.execute("PRAGMA table_info(run)")]
    fresh = {"seq": "i", "id": "randomblob(16)", "number": "i"}
    values = ", ".join(fresh.get(c, c) for c in columns)
    other.execute(f"INSERT INTO run {numbers} SELECT {values} FROM n, run WHERE run.seq = 1")
    other.execute(
        "INSERT INTO run_end SELECT id, 'complete', 'no pulses', '', started_us + 1, 0 FROM run WHERE seq > 1"
    )
    columns = [c for _, c, *_ in other.execute("PRAGMA table_info(reading)")]
    fresh = {"seq": "NULL", "id": "randomblob(16)", "run_id": "run.id", "number": "k"}
    values = ", ".join(fresh.get(c, f"reading.{c}") for c in columns)
    other.execute(
        f"INSERT INTO reading SELECT {values} FROM run, reading, (SELECT 1 AS k UNION SELECT 2) "
        "WHERE run.seq > 1 AND reading.seq = 1"
    )
    other.execute(
        "INSERT INTO label SELECT NULL, reading.id, 'check', NULL, 0, 'ana' FROM reading JOIN run "
        "ON run.id = reading.run_id WHERE run.seq > 1 AND reading.number = 2"
    )
    other.commit()
    other.close()


def _slowness() -> float:
    """How much slower than the machine the limit was set for (a million squares in 50 ms) this one is now."""
    began = time.process_time()
    sum(i * i for i in range(1_000_000))
    return max(1.0, (time.process_time() - began) / 0.05)


def test_ten_thousand_runs_in_one_query(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O)
    stand.ledger.close()
    _many_runs(stand.path, RUNS)
    assert len(_statements(stand.history, stand.history.runs)) == 1
    best = 9.0
    for _ in range(5):
        began = time.process_time()
        lines = stand.history.runs()
        best = min(best, time.process_time() - began)
    assert len(lines) == RUNS
    assert (lines[0].name, lines[0].readings, lines[0].labels) == ("0142/10000", 2, (Label.CHECK,))
    assert best < 0.2 * _slowness()  # STYLE habit 19


def test_story_does_not_ask_per_run(stand: Stand) -> None:
    """The number of statements does not grow with the number of runs."""
    stand.mount()
    stand.run(Label.O)
    few = len(_statements(stand.history, lambda: stand.history.job_story("0142")))
    for _ in range(5):
        stand.run(Label.CHECK)
    assert len(_statements(stand.history, lambda: stand.history.job_story("0142"))) == few


def _plan(path: Path, sql: str) -> str:
    other = sqlite3.connect(path)
    plan = " ".join(row[3] for row in other.execute(f"EXPLAIN QUERY PLAN {sql}"))
    other.close()
    return plan


def test_a_run_is_read_by_index_alone(stand: Stand) -> None:
    """What it costs to read one run must not grow with the store: no statement looks through a table."""
    stand.mount()
    run, _ = stand.run(Label.O)
    asked = _statements(stand.history, lambda: stand.history.run(run.name))
    plans = [_plan(stand.path, sql.replace("?", "1")) for sql in asked]
    assert len(plans) >= 4
    assert [plan for plan in plans if "SCAN" in plan] == []


def test_coefficients_use_the_covering_index(store_path: Path) -> None:
    wanted = coefficients_like("KR-22", 1, "probe 1", 25.0, 0.005, 5)
    sql = str(wanted.compile(dialect=sqlite.dialect(), compile_kwargs={"literal_binds": True}))
    assert (
        "SEARCH coefficient USING COVERING INDEX ix_coefficient_covering "
        "(model_code=? AND plane=? AND channel=? AND speed_hz>? AND speed_hz<?)"
    ) in _plan(store_path, sql)


def test_a_jobs_runs_are_found_by_index(stand: Stand) -> None:
    """With many other runs in the store, a story must not read them all."""
    stand.mount()
    stand.run(Label.O)
    sent = _statements(stand.history, lambda: stand.history.job_story("0142"))
    (runs,) = [s for s in sent if "FROM run_now" in s]
    plan = _plan(stand.path, runs.replace("?", "x'00'"))
    assert "SCAN run " not in plan
    assert "SCAN run_now" not in plan


def test_coefficients_by_what_was_asked(stand: Stand) -> None:
    stand.mount()
    stand.run(Label.O, 10 + 0j)
    stand.fit()
    run, _ = stand.run(Label.O_T, 4 + 3j)
    history = stand.history
    (first, second) = history.coefficients()
    assert (first.channel, second.channel) == ("probe 1", "probe 2")
    assert (first.model_code, first.plane, first.speed_hz, first.origin) == ("KR-22", 1, 25.0, Origin.LIVE)
    assert history.mount(first.mount_id).machine.serial == first.machine_serial == "F-204"
    assert history.set_up(first.set_up_id).channel("probe 1") is not None
    assert first.at_us == run.started_us
    assert history.coefficients("KR-22", 1, "probe 1", 25.0) == (first,)
    for none in (
        history.coefficients(model="KR-23"),
        history.coefficients(plane=2),
        history.coefficients(channel="probe 3"),
        history.coefficients(speed_hz=25.2),
        history.coefficients(before_us=first.at_us),
    ):
        assert none == ()
    assert history.coefficients(speed_hz=25.2, within=0.01) == (first, second)
    assert history.coefficients(before_us=first.at_us + 1) == (first, second)


def test_unknown_things_are_refused(stand: Stand) -> None:
    for ask in (
        lambda: stand.history.machine("F-999"),
        lambda: stand.history.model("KR-99"),
        lambda: stand.history.job("9999"),
        lambda: stand.history.job_story("9999"),
        lambda: stand.history.mount(stand.set_up_id),
        lambda: stand.history.mounts("9999"),
        lambda: stand.history.set_up(stand.ledger.session),
    ):
        with pytest.raises(Refusal, match="There is no"):
            ask()
    assert stand.history.current_mount() is None
    assert stand.history.pending_mark() is None
    assert stand.history.last_mark() is None
    assert stand.history.mark("k") is None
    assert stand.history.last_mount("F-204") is None
    assert stand.history.runs() == ()


def test_info(stand: Stand) -> None:
    info = stand.history.info()
    assert (info.schema, info.made_by, info.made_us % 1000) == ("0002", "revmark test", 0)
    assert info.store_id.version == 7
    assert info.file_bytes == stand.path.stat().st_size
    assert info.wal_bytes > 0
    assert info.sqlite == sqlite3.sqlite_version


@pytest.mark.parametrize(
    ("version", "safe"),
    [
        # sqlite.org/wal.html: fixed in 3.51.3, back-ported to 3.50.7 and 3.44.6
        ((3, 40, 1), False),
        ((3, 44, 5), False),
        ((3, 44, 6), True),
        ((3, 45, 0), False),
        ((3, 50, 7), True),
        ((3, 51, 2), False),
        ((3, 51, 3), True),
    ],
)
def test_wal_reset_bug(version: tuple[int, int, int], safe: bool) -> None:
    assert _reset_safe(version) is safe


def test_reading_makes_no_store_and_needs_no_daemon(store_path: Path) -> None:
    before = store_path.read_bytes()
    with History.open(store_path) as history:
        assert history.machines() == ()
    assert store_path.read_bytes() == before
    assert database.read_header(store_path).user_version == 2
