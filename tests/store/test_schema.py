"""The migrated schema: as the tables say, append-only, readable by any program."""

from __future__ import annotations

import sqlite3
from pathlib import Path

import pytest
from alembic.autogenerate import compare_metadata
from alembic.migration import MigrationContext
from alembic.script import ScriptDirectory
from sqlalchemy import select
from store_kit import Stand, measured, samples

from store import tables
from store.database import reader_engine, writer_engine
from store.migrations import KNOWN, configuration, statements
from store.records import Label, MarkPosition, PieceDraft, Trace, TracePoint
from store.views import views


def test_tables_are_what_the_migrations_make(store_path: Path) -> None:
    engine = reader_engine(store_path)
    with engine.begin() as connection:
        assert compare_metadata(MigrationContext.configure(connection), tables.metadata) == []
        for view in views.sorted_tables:
            connection.execute(select(view)).all()
    engine.dispose()


def test_known_revisions_are_the_files() -> None:
    steps = ScriptDirectory.from_config(configuration()).walk_revisions()
    assert tuple(s.revision for s in steps)[::-1] == KNOWN == ("0001", "0002")


def test_statements_keep_triggers_whole(tmp_path: Path) -> None:
    file = tmp_path / "a.sql"
    trigger = "CREATE TRIGGER t BEFORE UPDATE ON a\nBEGIN SELECT 1; SELECT 2; END;"
    file.write_text(f"-- a; b\nCREATE TABLE a (b);\n{trigger}\n")
    assert list(statements(file)) == ["-- a; b\nCREATE TABLE a (b);", trigger]
    file.write_text("CREATE TABLE a (b)")
    with pytest.raises(ValueError, match="ends in the middle"):
        list(statements(file))


def _fill(stand: Stand) -> None:
    """At least one row in every table."""
    unassigned = stand.begin()  # before anything is mounted
    step = TracePoint(0.5, 12.0, 1, (3 + 4j, 2j), (0.1, 0.1), (-9.8, -10.1))
    stand.ledger.add_trace(
        unassigned.id, Trace("up", ("probe 1", "probe 2"), ("um", "um"), 1000, 1.0, (step,))
    )
    stand.end(unassigned.id)
    stand.mount()
    stand.run(Label.O, raw=samples(), measured=measured())
    stand.fit()
    stand.run(Label.O_T, 4 + 3j, raw=samples(2))
    run, _ = stand.run(None, raw=samples(3))
    stand.ledger.void_run(run.name, "door was open", "ana")
    stand.ledger.assign_run("U/1", "0142", "ana")
    stand.ledger.revise_run("U/1", stand.set_up_id, "read again", "ana")
    stand.again("0142/1", 10 + 0j)
    stand.ledger.age_raw(0, at_most=1)
    stand.ledger.note_event("clock_step", "0.7 s")
    stand.ledger.once("request-1", "weight", {"mass_g": 3.0}, lambda: {"done": True})
    (wrong,) = stand.ledger.fit(PieceDraft(1, 9.0, 2), "ana")
    stand.ledger.void_weight(wrong.seq, "it went into hole 3", "ana")
    stand.mount(marks=(MarkPosition(1, 40.0),), mark_change="mistyped")


def test_source_tables_refuse_change(stand: Stand) -> None:
    """From any program, with or without our pragmas."""
    _fill(stand)
    assert [t for t, n in stand.history.counts().items() if not n] == []
    stand.ledger.close()
    other = sqlite3.connect(stand.path, isolation_level=None)
    for table in tables.metadata.sorted_tables:
        if table.name == "coefficient":
            continue
        for act in ("DELETE FROM {}", "UPDATE {} SET rowid = rowid"):
            sql = act.format(table.name)
            if table.name in {"vector", "measured_vector", "level", "trace_vector"}:  # they have no rowid
                sql = sql.replace("rowid", "unit")
            with pytest.raises(sqlite3.IntegrityError, match=r"append-only|raw "):
                other.execute(sql)
    other.close()


def test_raw_goes_only_with_a_record(stand: Stand) -> None:
    stand.mount()
    _, found = stand.run(None, raw=samples())
    stand.ledger.close()
    other = sqlite3.connect(stand.path, isolation_level=None)
    with pytest.raises(sqlite3.IntegrityError, match="only after a row in raw_aged"):
        other.execute("DELETE FROM raw WHERE reading_id = ?", (found.id.bytes,))
    other.execute("INSERT INTO raw_aged VALUES (1, ?, 5, 5, 'by hand', 0)", (found.id.bytes,))
    other.execute("DELETE FROM raw WHERE reading_id = ?", (found.id.bytes,))
    assert other.execute("SELECT count(*) FROM raw").fetchone() == (0,)
    other.close()


def test_writer_pragmas(store_path: Path) -> None:
    engine = writer_engine(store_path)
    with engine.connect() as connection:
        found = {
            name: connection.exec_driver_sql(f"PRAGMA {name}").scalar()
            for name in ("journal_mode", "synchronous", "foreign_keys", "wal_autocheckpoint", "busy_timeout")
        }
    engine.dispose()
    # synchronous 2 = FULL (sqlite.org/pragma.html)
    assert found == {
        "journal_mode": "wal",
        "synchronous": 2,
        "foreign_keys": 1,
        "wal_autocheckpoint": 0,
        "busy_timeout": 5000,
    }


def test_views_for_other_programs(stand: Stand) -> None:
    _fill(stand)
    stand.ledger.close()
    other = sqlite3.connect(stand.path)
    names = [n for (n,) in other.execute("SELECT name FROM sqlite_master WHERE name LIKE 'v!_%' ESCAPE '!'")]
    for name in names:
        assert other.execute(f"SELECT count(*) FROM {name}").fetchone()[0] > 0, name
    assert sorted(names) == [
        "v_coefficient",
        "v_event",
        "v_job",
        "v_label",
        "v_level",
        "v_machine",
        "v_mark",
        "v_measured",
        "v_mount",
        "v_plane",
        "v_reading",
        "v_run",
        "v_set_up",
        "v_trace",
        "v_vector",
        "v_weight",
    ]
    runs = other.execute("SELECT run, machine, state, reason, void FROM v_run ORDER BY started_us").fetchall()
    assert runs == [
        ("0142/4", "F-204", "complete", "no pulses", None),
        ("0142/1", "F-204", "complete", "no pulses", None),
        ("0142/2", "F-204", "complete", "no pulses", None),
        ("0142/3", "F-204", "complete", "no pulses", "door was open"),
    ]
    vectors = """SELECT v.re_base_unit_pk, v.im_base_unit_pk, v.base_unit FROM v_vector v
        JOIN v_reading USING (reading_id) WHERE label = 'O+T' AND channel = 'probe 1' AND harmonic = 1"""
    assert other.execute(vectors).fetchall() == [(4.0, 3.0, "um")]
    weights = "SELECT act, plane, mass_g, radius_mm, hole, angle_against_rotation_deg, void FROM v_weight"
    assert other.execute(weights).fetchall() == [
        ("fitted", 1, 3.0, 140.0, 16, None, None),
        ("fitted", 1, 9.0, 140.0, 2, None, "it went into hole 3"),
    ]
    marks = "SELECT plane, mark_from_hole1_deg, mark_typed_from_hole1_deg FROM v_mount ORDER BY mounted_us"
    assert other.execute(marks).fetchall() == [(1, 40.0, 30.0), (1, 40.0, 40.0)]
    other.close()
