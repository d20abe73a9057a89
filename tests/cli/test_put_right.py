"""Commands that put the record right: what they send to the daemon, and what they list."""

from __future__ import annotations

import importlib.util
import json
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

from cli import machine, mark, mount, weight
from cli.main import main
from store.database import create_store
from store.records import PieceDraft

KIT_FILE = Path(__file__).parent.parent / "store" / "store_kit.py"


def _kit() -> ModuleType:
    """The builders of the store's tests, by their file: test folders are no packages."""
    spec = importlib.util.spec_from_file_location("put_right_store_kit", KIT_FILE)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


kit: Any = _kit()
MOUNT = ("mount", "F-204", "--job", "0142", "--rotation", "ccw from drive", "--clean", "--mark-at", "37.5deg")


def typed(*words: str) -> int:
    try:
        main(list(words))
    except SystemExit as ended:
        return int(ended.code or 0)
    return 0


class Daemon:
    """Stands for the control channel: keeps what is posted and answers with what it was given."""

    def __init__(self) -> None:
        self.posted: list[tuple[str, dict[str, Any]]] = []
        self.answer: Any = {}

    def post(self, path: str, body: dict[str, Any]) -> Any:
        self.posted.append((path, body))
        return self.answer


@pytest.fixture
def daemon(monkeypatch: pytest.MonkeyPatch) -> Daemon:
    made = Daemon()
    for module in (machine, mark, mount, weight):
        monkeypatch.setattr(module, "find", lambda _stand: None)
        monkeypatch.setattr(module, "Client", lambda _address: made)
    return made


@pytest.fixture
def stand(tmp_path: Path) -> Iterator[Any]:
    """A store bay.sqlite with F-204 mounted for job 0142, and the stand file bay.toml that names it."""
    file = tmp_path / "bay.toml"
    typed("stand", "new", str(file), "--like", "replay")
    file.write_text(file.read_text() + '\n[store]\npath = "bay.sqlite"\n')
    create_store(tmp_path / "bay.sqlite", clock=kit.FakeClock(), software="revmark test")
    made = kit.Stand(tmp_path / "bay.sqlite", kit.FakeClock())
    made.mount()
    yield made
    made.close()


@pytest.mark.parametrize(
    ("options", "change"), [((), None), (("--mark-moved",), "moved"), (("--mark-mistyped",), "mistyped")]
)
def test_mount_says_why_the_mark_is_elsewhere(
    daemon: Daemon, options: tuple[str, ...], change: str | None
) -> None:
    assert typed(*MOUNT, *options, "--json") == 0
    ((path, body),) = daemon.posted
    assert (path, body["mark_change"]) == ("/v1/mount", change)


def test_mark_names_a_run_and_its_reading(daemon: Daemon) -> None:
    daemon.answer = {"mark": {"state": "labelled"}}
    assert typed("mark", "check", "--run", "0142/3", "--reading", "2", "--json") == 0
    assert typed("mark", "check", "--json") == 0
    (_, named), (_, plain) = daemon.posted
    assert (named["run"], named["reading"], named["choose"]) == ("0142/3", 2, None)
    assert "run" not in plain


def test_machine_add_sends_what_is_typed_and_prints_the_note(
    daemon: Daemon, capsys: pytest.CaptureFixture[str], stand: Any
) -> None:
    from store import asjson

    known = asjson.machine_json(stand.history.machine("F-204"))
    daemon.answer = {
        **known,
        "notes": ["F-204 is mounted as its revision 1; mount it again for the new one."],
    }
    capsys.readouterr()
    assert typed("machine", "add", "F-204", "--grade", "6.3") == 0
    ((_, body),) = daemon.posted
    assert {k for k, v in body.items() if v not in (None, [])} - {"key", "who"} == {"serial", "grade_mm_s"}
    assert "F-204 is mounted as its revision 1" in " ".join(capsys.readouterr().err.split())


def test_weight_void_names_the_entries_that_went(daemon: Daemon, capsys: pytest.CaptureFixture[str]) -> None:
    entry = {"number": 5, "act": "fitted", "plane": 1, "hole": 16, "mass_g": 3.0, "radius_mm": 140.0}
    daemon.answer = {"weights": [entry, {**entry, "number": 7, "act": "removed"}]}
    assert typed("weight", "void", "5", "it was hole 17") == 0
    ((path, body),) = daemon.posted
    assert (path, body["number"], body["why"]) == ("/v1/weight/void", 5, "it was hole 17")
    assert [line.split(":")[0] for line in capsys.readouterr().out.splitlines()] == [
        "entry 5 no longer counts",
        "entry 7 no longer counts",
    ]


def test_weight_list_all_shows_every_entry_with_its_number(
    stand: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    (wrong,) = stand.ledger.fit(PieceDraft(1, 3.0, 16), "ana")
    stand.run(None)
    stand.ledger.remove(1, "ana", hole=16)
    stand.ledger.void_weight(wrong.seq, "it was hole 17", "ana")
    stand.mount(carry_over=True)
    stand.fit(1.0, 2)
    file = str(stand.path.with_name("bay.toml"))
    capsys.readouterr()
    assert typed("weight", "list", "--all", "--job", "0142", "--stand", file, "--json") == 0
    entries = json.loads(capsys.readouterr().out)
    assert [(e["number"], e["act"], e["after_run"], e["void"]) for e in entries] == [
        (1, "fitted", None, "it was hole 17"),
        (2, "removed", "0142/1", "it was hole 17"),
        (3, "fitted", None, None),
    ]
    assert typed("weight", "list", "--all", "--stand", file) == 0
    shown = capsys.readouterr().out
    assert "plane 1 hole 2, 1 g at 140 mm" in shown
    assert "hole 16" not in shown  # that was the mount before
