"""What goes wrong is said in a sentence, with its exit code; nothing is made and nothing is lost."""

from __future__ import annotations

import hashlib
import os
import shutil
import sqlite3
from collections.abc import Callable
from contextlib import closing
from pathlib import Path

import pytest
from daemon_kit import MACHINE, MOUNT, Bay, Done, no_traceback

pytestmark = pytest.mark.slow

FIT = ("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
WRITING = (
    MACHINE,
    MOUNT,
    ("mount", "--none"),
    ("mark", "O"),
    ("mark", "O", "--no-wait", "--json"),
    ("mark", "--wait"),
    ("mark", "--cancel"),
    FIT,
    ("weight", "drill", *FIT[2:]),
    ("weight", "remove", "--plane", "1", "--all", "--locked-out"),
    ("run", "void", "0142/1", "why"),
    ("run", "assign", "U/1", "0142"),
    ("sim", "start"),
    ("sim", "stop"),
    ("sim", "next"),
    ("sim", "fault", "dropout"),
    ("status",),
)
READING = (
    ("run", "list"),
    ("run", "show", "0142/1"),
    ("job", "show", "0142"),
    ("machine", "list"),
    ("weight", "list"),
    ("correction",),
    ("coefficient", "list"),
)
TYPED_WRONG = (
    ("weight", "fit", "3.0", *FIT[3:]),
    ("weight", "fit", "3.0um", *FIT[3:]),
    ("weight", "fit", "-3g", *FIT[3:]),
    ("weight", "fit", "nang", *FIT[3:]),
    ("weight", "fit", "three grams", *FIT[3:]),
    ("weight", "fit", "3g", "--plane", "1", "--locked-out"),
    ("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--at", "30deg", "--locked-out"),
    ("weight", "fit", "3g", "--plane", "1", "--at", "30", "--locked-out"),
    ("weight", "fit", "3g", "--plane", "one", "--hole", "1", "--locked-out"),
    ("weight", "fit", "3g", "--hole", "1", "--locked-out"),
    (*MACHINE[:6], "60", *MACHINE[7:]),
    (*MACHINE[:8], "1500mm", *MACHINE[9:]),
    (*MACHINE[:12], "1: radius 140, holes 24, numbered counterclockwise from drive"),
    (*MACHINE[:12], "first"),
    (*MOUNT[:4], "--rotation", "widdershins", *MOUNT[6:]),
    (*MOUNT, "--fitted", "plane 1 hole 3 2.1g"),
    (*MOUNT[:-1],),
    (*MOUNT, "--rpm", "1500kg"),
    ("mark", "P"),
    ("mark", "O", "--timeout", "soon"),
    ("sim", "start", "--rpm", "fast"),
    ("sim", "start", "--rpm", "1500mm"),
    ("sim", "fault", "dropout", "--for", "long"),
    ("run", "list", "--limit", "none"),
    ("run", "show"),
    ("status", "--jsno"),
)
UNKNOWN = (
    (("wieght",), "weight"),
    (("stauts",), "status"),
    (("weight", "fti"), "fit"),
    (("run", "lst"), "list"),
)


def said(done: Done) -> str:
    """What was said on stderr, on one line; nothing went to stdout and no traceback to anybody."""
    no_traceback(done)
    assert done.out == "", done.out
    assert done.err.strip()
    return " ".join(done.err.split())


def listing(folder: Path) -> dict[str, str]:
    """Names and contents of what is in a folder, without what the tests' own processes wrote."""
    return {
        path.name: hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.iterdir())
        if path.suffix not in (".out", ".err") and path.is_file()
    }


def test_without_a_daemon_every_writing_command_names_serve(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    before = listing(bay.folder)
    for words in WRITING:
        done = bay.run(*words)
        assert done.code == 1, (words, done)
        assert "revmark serve --stand FILE" in said(done), words
        named = bay.run(*words, "--stand", os.fspath(bay.stand))
        assert named.code == 1, (words, named)
        assert f"revmark serve --stand {bay.stand}" in said(named), words
    assert listing(bay.folder) == before


def test_without_a_daemon_reading_commands_need_the_stand(mounted: Bay) -> None:
    mounted.a_run()
    assert mounted.stop() == 0
    for words in READING:
        done = mounted.run(*words)
        assert done.code == 1, (words, done)
        assert "--stand FILE" in said(done), words
    named = ("--stand", os.fspath(mounted.stand), "--json")
    assert mounted.must("run", "list", *named).json[0]["run"] == "0142/1"


def test_reading_a_store_that_is_not_there_makes_none(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    before = listing(bay.folder)
    for words in READING:
        done = bay.run(*words, "--stand", os.fspath(bay.stand))
        assert done.code == 1, (words, done)
        assert f"There is no store {bay.store}" in said(done), words
    done = bay.run("run", "list", "--stand", "no-such.toml")
    assert done.code == 1
    assert "no-such.toml" in said(done)
    assert listing(bay.folder) == before


def test_typed_wrong_is_exit_2_and_changes_nothing(mounted: Bay) -> None:
    with mounted.history() as history:
        before = dict(history.counts())
    for words in TYPED_WRONG:
        done = mounted.run(*words)
        assert done.code == 2, (words, done)
        said(done)
    with mounted.history() as history:
        assert dict(history.counts()) == before


@pytest.mark.parametrize(("words", "meant"), UNKNOWN)
def test_an_unknown_command_is_answered_with_the_one_meant(
    make_bay: Callable[..., Bay], words: tuple[str, ...], meant: str
) -> None:
    done = make_bay().run(*words)
    assert done.code == 2
    assert meant in said(done).replace("Usage", "")
    assert "Did you mean" in said(done)


def test_names_with_control_characters_are_refused(mounted: Bay) -> None:
    for serial in ("F\x1b[2J", "F\n1", "", " ", "F" * 65):
        done = mounted.run("machine", "add", serial, *MACHINE[3:])
        assert done.code in (1, 2), (serial, done)
        assert "\x1b" not in said(done)
    with mounted.history() as history:
        assert [m.serial for m in history.machines()] == ["F-204"]


# --- serve


def served(bay: Bay, *words: str) -> Done:
    """``revmark serve`` of a bay, to its end."""
    return bay.run("serve", "--stand", *(words or (os.fspath(bay.stand),)))


def stored(mounted: Bay) -> Path:
    """A store with a run in it, at rest."""
    mounted.a_run()
    assert mounted.stop() == 0
    return mounted.store


def test_a_newer_store_is_not_touched(mounted: Bay) -> None:
    store = stored(mounted)
    with closing(sqlite3.connect(store)) as raw:
        raw.execute("pragma journal_mode=delete")
        raw.execute("pragma user_version=99")
        raw.commit()
    before = listing(mounted.folder)
    done = served(mounted)
    assert done.code == 78
    assert "was written by a newer version" in said(done)
    named = ("--stand", os.fspath(mounted.stand))
    for words in (("run", "list"), ("job", "show", "0142")):
        refused = mounted.run(*words, *named)
        assert refused.code == 1
        assert "was written by a newer version" in said(refused)
    assert listing(mounted.folder) == before


def test_what_is_no_store_of_ours_is_not_touched(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    for content in (b"", b"some notes\n" * 40, b"SQLite format 3\0" + bytes(200)):
        bay.store.write_bytes(content)
        done = served(bay)
        assert done.code == 78, (content[:20], done)
        assert str(bay.store) in said(done)
        assert bay.store.read_bytes() == content
    bay.store.unlink()
    with closing(sqlite3.connect(bay.store)) as raw:
        raw.execute("create table mine (a)")
        raw.commit()
    before = bay.store.read_bytes()
    done = served(bay)
    assert done.code == 78
    assert "is a database of another program" in said(done)
    assert bay.store.read_bytes() == before


def test_a_damaged_store_is_refused_and_kept(mounted: Bay) -> None:
    store = stored(mounted)
    data = bytearray(store.read_bytes())
    data[4096 : 4096 * 40] = os.urandom(4096 * 39)
    store.write_bytes(data)
    done = served(mounted)
    assert done.code == 78, done
    assert "revmark store" in said(done)
    assert store.read_bytes() == bytes(data)


def test_a_stand_file_with_mistakes_names_them_all(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    before = listing(bay.folder)
    text = bay.stand.read_text()
    for old, new in (
        ("seed = 3", "sede = 3"),
        ('sensitivity = "200 mV/mil"', 'sensitivity = "200"'),
        ('input = "2"', 'input = "1"'),
        ("[run]", "[rum]"),
    ):
        assert old in text
        text = text.replace(old, new, 1)
    wrong = bay.folder / "wrong.toml"
    wrong.write_text(text)
    done = served(bay, os.fspath(wrong))
    assert done.code == 78
    for key in ("source.options.sede", "sensitivity", "input", "rum"):
        assert key in said(done)
    wrong.unlink()
    assert listing(bay.folder) == before


@pytest.mark.parametrize("content", [None, b"", b"not toml at all [", b"\xff\xfe\x00", b"[stand]\n"])
def test_a_stand_file_that_is_none(make_bay: Callable[..., Bay], content: bytes | None) -> None:
    bay = make_bay()
    if content is None:
        bay.stand.unlink()
    else:
        bay.stand.write_bytes(content)
    done = served(bay)
    assert done.code == 78, done
    assert bay.stand.name in said(done)
    assert not bay.store.exists()


def test_serve_makes_no_folder_for_a_store(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay(store_name="no-such-folder/bay.sqlite")
    done = served(bay)
    assert done.code == 78
    assert "There is no folder" in said(done)
    assert not (bay.folder / "no-such-folder").exists()


def test_serve_says_that_the_store_is_new(make_bay: Callable[..., Bay]) -> None:
    bay = make_bay()
    bay.start()
    assert f"new, empty store {bay.store}" in bay.log
    assert bay.stop() == 0
    bay.start()
    assert "new, empty store" not in bay.log


def test_serve_without_a_stand_is_typed_wrong(make_bay: Callable[..., Bay]) -> None:
    done = make_bay().run("serve")
    assert done.code == 2
    assert "--stand" in said(done)


def test_a_recording_that_does_not_fit_costs_nothing(make_bay: Callable[..., Bay]) -> None:
    """A replaying stand: truncated, of other channels, or not there; the daemon goes on."""
    bay = make_bay()
    recordings = bay.folder / "wav"
    recordings.mkdir()
    (recordings / "short.wav").write_bytes(b"RIFF\x04\x00\x00\x00WAVE")
    (recordings / "text.csv").write_text("this,is\nno,recording\n")
    text = bay.stand.read_text()
    head, _, rest = text.partition("[source]")
    source = '[source]\ndriver = "replay"\n[source.options]\nfiles = ["wav/short.wav"]\npace = "fast"\n'
    source += 'full_scale = "30 V"\nrate_hz = 5120\nbits = 16\n'
    bay.stand.write_text(head + source + rest[rest.index("[once_per_rev]") :])
    bay.start()
    for words in (("next",), ("next", "wav/text.csv"), ("next", "wav/none.wav"), ("start",)):
        done = bay.run("sim", *words)
        assert done.code == 1, (words, done)
        said(done)
    bay.until_state("no pulses")
    assert bay.stop() == 0
    shutil.rmtree(recordings)
