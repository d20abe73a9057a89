"""Check, backup and restore: checked copies, nothing overwritten, nothing deleted."""

from __future__ import annotations

import json
import shutil
import sqlite3
from pathlib import Path

import pytest
from click.testing import CliRunner, Result
from store_kit import FakeClock, Stand, samples

from cli.store import group
from config.errors import RevmarkError, StoreError
from store import copies
from store.copies import copy_store
from store.history import History
from store.ledger import Ledger
from store.maintenance import check, restore
from store.records import Label


@pytest.fixture
def used(stand: Stand) -> Stand:
    """A store in use, with a marked run in the log that is not folded in yet."""
    stand.mount()
    stand.run(Label.O, raw=samples())
    return stand


def _runs(path: Path) -> list[str]:
    with History.open(path) as history:
        return [line.name for line in history.runs()]


def _damage_page(path: Path) -> None:
    raw = bytearray(path.read_bytes())
    raw[8 * 4096 : 9 * 4096] = b"\xa5" * 4096
    path.write_bytes(raw)


# --- check -------------------------------------------------------------------------------------------


def test_sound_store(used: Stand) -> None:
    report = check(used.path)
    assert (report.problems, report.schema, report.raw_checked) == ((), "0002", 1)
    assert report.rows == sum(used.history.counts().values())
    assert check(used.path, with_raw=False).raw_checked == 0


def test_damaged_raw(used: Stand) -> None:
    with used.ledger._write() as w:
        w.c.exec_driver_sql("DROP TRIGGER raw_no_update")
        w.c.exec_driver_sql("UPDATE raw SET samples = x'00'")
    (problem,) = check(used.path).problems
    assert "cannot be unpacked" in problem
    assert check(used.path, with_raw=False).problems == ()


def test_damaged_page_and_foreign_key(used: Stand, tmp_path: Path) -> None:
    used.close()
    orphan = Path(shutil.copy(used.path, tmp_path / "orphan.sqlite"))
    other = sqlite3.connect(orphan, isolation_level=None)
    other.execute("INSERT INTO label VALUES (99, x'00', 'O', NULL, 0, 'x')")
    other.close()
    assert check(orphan).problems == ("row 99 of label belongs to no row of reading",)
    _damage_page(used.path)
    assert check(used.path).problems != ()


# --- backup ------------------------------------------------------------------------------------------


def test_backup_of_a_store_in_use(used: Stand, tmp_path: Path) -> None:
    """What is committed and still in the log is in the copy; the writer goes on."""
    assert used.history.info().wal_bytes > 0
    made = used.ledger.backup(tmp_path / "copy.sqlite")
    used.fit()
    assert _runs(made) == ["0142/1"]
    assert check(made).problems == ()
    with History.open(made) as history:
        counts = history.counts()
    assert (counts["raw"], counts["weight"]) == (1, 0)
    assert not made.with_name("copy.sqlite.part").exists()


def test_backup_never_overwrites(used: Stand, tmp_path: Path) -> None:
    target = tmp_path / "copy.sqlite"
    target.write_text("precious")
    with pytest.raises(StoreError, match="is there already") as caught:
        used.ledger.backup(target)
    assert caught.value.kind == "refused"
    assert target.read_text() == "precious"
    with pytest.raises(StoreError, match="There is no folder"):
        used.ledger.backup(tmp_path / "nowhere" / "copy.sqlite")


def test_backup_that_somebody_makes_meanwhile(
    used: Stand, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    target = tmp_path / "copy.sqlite"
    monkeypatch.setattr(copies, "_sync", lambda path: target.write_text("precious"))
    with pytest.raises(StoreError, match="File exists"):
        used.ledger.backup(target)
    assert target.read_text() == "precious"
    assert not target.with_name("copy.sqlite.part").exists()


def test_damaged_store_gives_no_backup(used: Stand, tmp_path: Path) -> None:
    used.close()
    _damage_page(used.path)
    with pytest.raises(StoreError) as caught:
        copy_store(used.path, tmp_path / "copy.sqlite")
    assert caught.value.kind == "corrupt"
    assert sorted(f.name for f in tmp_path.glob("copy*")) == []


# --- restore -----------------------------------------------------------------------------------------


def test_restore_keeps_the_old_store(used: Stand, tmp_path: Path) -> None:
    backup = used.ledger.backup(tmp_path / "copy.sqlite")
    used.run(Label.CHECK)
    used.close()
    # 1 700 000 000 s after 1970 is 14 November 2023, 22:13:20 UTC
    aside = restore(used.path, backup, clock=FakeClock())
    assert aside == used.path.with_name("bay.sqlite.replaced-20231114T221320Z")
    assert aside is not None
    assert (_runs(used.path), _runs(aside), _runs(backup)) == (["0142/1"], ["0142/2", "0142/1"], ["0142/1"])
    Ledger.open(used.path, clock=FakeClock(), software="x").close()


def test_restore_after_a_kill_takes_the_log_along(used: Stand, tmp_path: Path) -> None:
    """The old store's log moves with it: beside the new store it would be replayed into it."""
    killed = tmp_path / "killed"
    killed.mkdir()
    backup = used.ledger.backup(tmp_path / "copy.sqlite")
    used.run(Label.CHECK)
    for file in used.path.parent.glob("bay.sqlite*"):
        shutil.copy(file, killed / file.name)
    store = killed / "bay.sqlite"
    assert (killed / "bay.sqlite-wal").stat().st_size > 0
    aside = restore(store, backup, clock=FakeClock())
    assert aside is not None
    assert (_runs(store), _runs(aside)) == (["0142/1"], ["0142/2", "0142/1"])


def test_restore_where_there_is_no_store(used: Stand, tmp_path: Path) -> None:
    backup = used.ledger.backup(tmp_path / "copy.sqlite")
    assert restore(tmp_path / "new.sqlite", backup, clock=FakeClock()) is None
    assert _runs(tmp_path / "new.sqlite") == ["0142/1"]


def test_restore_refuses_and_changes_nothing(used: Stand, tmp_path: Path) -> None:
    backup = used.ledger.backup(tmp_path / "copy.sqlite")
    with pytest.raises(StoreError, match="in use by another process"):
        restore(used.path, backup, clock=FakeClock())
    used.close()
    before = used.path.read_bytes()
    with pytest.raises(StoreError, match="is the store itself"):
        restore(used.path, used.path, clock=FakeClock())
    with pytest.raises(StoreError, match="There is no backup"):
        restore(used.path, tmp_path / "nothing.sqlite", clock=FakeClock())
    newer = Path(shutil.copy(backup, tmp_path / "newer.sqlite"))
    other = sqlite3.connect(newer)
    other.execute("PRAGMA user_version = 9")
    other.close()
    with pytest.raises(StoreError, match="newer version") as caught:
        restore(used.path, newer, clock=FakeClock())
    assert caught.value.kind == "newer"
    _damage_page(backup)
    with pytest.raises(StoreError) as caught:
        restore(used.path, backup, clock=FakeClock())
    assert caught.value.kind == "corrupt"
    assert used.path.read_bytes() == before
    assert not list(used.path.parent.glob("*.replaced-*"))


# --- the commands ------------------------------------------------------------------------------------


def _type(*words: str | Path, env: dict[str, str] | None = None) -> Result:
    return CliRunner().invoke(group, [str(w) for w in words], env={"REVMARK_STAND": "", **(env or {})})


def test_check_command(used: Stand) -> None:
    done = _type("check", "--store", used.path)
    assert done.exit_code == 0
    assert "is sound: schema 0002" in " ".join(done.output.split())
    assert "Raw samples of 1 readings checked." in done.output
    told = json.loads(_type("check", "--quick", "--json", "--store", used.path).output)
    assert (told["sound"], told["problems"], told["raw_checked"]) == (True, [], 0)
    used.close()
    _damage_page(used.path)
    done = _type("check", "--store", used.path)
    assert done.exit_code == 1
    assert "is damaged" in " ".join(done.output.split())


def test_backup_and_restore_commands(used: Stand, tmp_path: Path) -> None:
    copy = tmp_path / "copy.sqlite"
    assert "Backup written and checked" in _type("backup", copy, "--store", used.path).output
    refused = _type("backup", copy, "--store", used.path)
    assert isinstance(refused.exception, RevmarkError)
    used.close()
    told = json.loads(_type("restore", copy, "--json", "--store", used.path).output)
    assert told["store"] == str(used.path)
    assert ".replaced-" in told["old_store"]


def test_migrate_command(used: Stand) -> None:
    told = json.loads(_type("migrate", "--list", "--json", "--store", used.path).output)
    assert [(s["revision"], s["done"]) for s in told] == [("0001", True), ("0002", True)]
    assert "0001  done  The record" in _type("migrate", "--list", "--store", used.path).output
    locked = _type("migrate", "--store", used.path)
    assert isinstance(locked.exception, StoreError)
    assert locked.exception.kind == "locked"
    used.close()
    assert "nothing was done" in _type("migrate", "--store", used.path).output


def test_stand_or_store(used: Stand, tmp_path: Path) -> None:
    both = _type("check", "--store", used.path, "--stand", tmp_path / "bay.toml")
    assert both.exit_code == 2
    assert "either --stand or --store" in both.output
    # REVMARK_STAND is a default, so naming the store is no contradiction
    env = {"REVMARK_STAND": str(tmp_path / "bay.toml")}
    assert _type("check", "--store", used.path, env=env).exit_code == 0
    missing = _type("check", "--stand", tmp_path / "tyop.toml")
    assert isinstance(missing.exception, RevmarkError)
    assert sorted(f.name for f in tmp_path.iterdir() if "tyop" in f.name) == []
