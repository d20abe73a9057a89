"""What is typed wrong: a sentence, exit code 2 or 1, no traceback, no file made (the issue, "Bad input").

Run in one process for speed; the same against real daemons is in tests/daemon.
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import click
import pytest

from cli.main import COMMANDS, main, revmark
from config.version import __version__
from daq.clock import SystemClock
from store.database import create_store
from store.history import History

Words = tuple[str, ...]
COLUMNS = 80
NFS = "1 0 0:1 / / rw - nfs4 server:/export rw\n"
"""A line of /proc/self/mountinfo (proc(5))."""

PLANE = "1: radius 140mm, holes 24, at -220mm, numbered clockwise from drive"
ADD = ("machine", "add", "F-204", "--model", "KR-22", "--mass", "60kg", "--speed", "1500rpm")
MOUNT = ("mount", "F-204", "--job", "0142", "--rotation", "clockwise from drive")
FIT = ("weight", "fit", "3g", "--plane", "1", "--hole", "2")


# --- every command -----------------------------------------------------------------------------------


def leaves(command: click.Command, path: Words) -> Iterator[tuple[Words, click.Command]]:
    """Every command and group below and with this one."""
    yield path, command
    if isinstance(command, click.Group):
        context = click.Context(command)
        for name in command.list_commands(context):
            found = command.get_command(context, name)
            assert found is not None
            yield from leaves(found, (*path, name))


@pytest.fixture(scope="module")
def every() -> list[tuple[Words, click.Command]]:
    return list(leaves(revmark, ()))


def typed(*words: str) -> int:
    """The exit code of a command typed so."""
    with pytest.raises(SystemExit) as ended:
        main(list(words))
    return int(ended.value.code or 0)


def test_every_command_has_help_that_says_something_in_80_columns(
    every: list[tuple[Words, click.Command]], capsys: pytest.CaptureFixture[str]
) -> None:
    assert {path[0] for path, _ in every if path} == set(COMMANDS)
    assert len(every) >= len(COMMANDS) + 15
    for path, command in every:
        assert typed(*path, "--help") == 0, path
        out, err = capsys.readouterr()
        assert err == "", path
        lines = out.splitlines()
        assert lines[0].startswith(" ".join(("Usage: revmark", *path))), path
        assert max(map(len, lines)) <= COLUMNS, path
        said = (command.help or "").strip()
        assert len(said.split()) >= 3, path
        assert said.split("\n\n")[0].endswith("."), path
        for option in command.params:
            if isinstance(option, click.Option):
                assert option.help, (path, option.opts)


def test_the_overview_has_a_line_for_each_command(
    capsys: pytest.CaptureFixture[str],
) -> None:
    """Its lines stand apart from the commands, which are not imported for it: each names one of them."""
    assert typed("--help") == 0
    lines = capsys.readouterr().out.splitlines()
    for name, (_, line) in COMMANDS.items():
        assert any(text.split()[:1] == [name] and text.strip().endswith(line) for text in lines), name


def test_the_version(capsys: pytest.CaptureFixture[str]) -> None:
    assert typed("--version") == 0
    assert capsys.readouterr().out == f"revmark, version {__version__}\n"


# --- a folder to type in -----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def shop(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a stand file, its empty store at rest, and a text that is neither."""
    folder = tmp_path_factory.mktemp("shop")
    main_in(folder, "stand", "new", "bay.toml", "--like", "simulated")
    create_store(folder / "bay-simulated.sqlite", clock=SystemClock(), software=__version__)
    with History.open(folder / "bay-simulated.sqlite"):
        pass  # SQLite's own two files beside a store, which every reader makes, are here from now on
    (folder / "text.txt").write_text("notes of a shift\n")
    return folder


def main_in(folder: Path, *words: str) -> None:
    before = Path.cwd()
    os.chdir(folder)
    try:
        assert typed(*words) == 0
    finally:
        os.chdir(before)


def listing(folder: Path) -> dict[str, bytes]:
    """What a typo may not change. The -shm file is the readers' own blackboard."""
    files = sorted(p for p in folder.rglob("*") if p.is_file())
    return {str(p.relative_to(folder)): b"" if p.name.endswith("-shm") else p.read_bytes() for p in files}


@pytest.fixture
def fails(
    shop: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> Iterator[Callable[..., str]]:
    """Types a command in the shop, where no daemon runs: an exit code, words on stderr alone, no file."""
    monkeypatch.chdir(shop)
    monkeypatch.setenv("REVMARK_RUNTIME", str(shop / "run"))
    for name in ("REVMARK_STAND", "REVMARK_OPERATOR"):
        monkeypatch.delenv(name, raising=False)
    before = listing(shop)

    def type_(words: Words, code: int) -> str:
        assert typed(*words) == code, words
        out, err = capsys.readouterr()
        assert out == "", words
        assert "Traceback" not in err
        return " ".join(err.split())

    yield type_
    assert listing(shop) == before
    assert sorted(p.name for p in shop.iterdir() if p.is_dir()) == []


# --- typed wrong: 2 ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "said"),
    [
        # commands and options that there are not
        (("stauts",), "There is no command 'stauts'. Did you mean 'status'?"),
        (("corection", "--reuse"), "Did you mean 'correction'?"),
        (("xyzzy",), "There is no command 'xyzzy'."),
        (("run", "lst"), "Did you mean 'list'?"),
        (("weight", "fitt", "3g"), "Did you mean 'fit'?"),
        (("run", "list", "--jbo", "1"), "--job"),
        (("serve", "--stnad", "bay.toml"), "--stand"),
        (("--jsno",), "--jsno"),
        (("run", "list", "extra"), "extra"),
        # what is missing
        (("serve",), "'--stand'"),
        (("machine", "add"), "'SERIAL'"),
        (("mount",), "A mount needs the machine, --job and --rotation (or --none)."),
        (MOUNT, "one of --clean, --fitted or --carry-over"),
        (("mark",), "Name the label: O, O+T, check, trim, slow-roll."),
        (FIT[:3], "'--plane'"),
        (FIT[:5], "Say where: --hole or --at."),
        (("weight", "remove", "--plane", "1"), "Say what came off: --hole or --all."),
        (("weight", "advise"), "'--plane'"),
        (("run", "show"), "'RUN'"),
        (("run", "void", "0142/1"), "'WHY'"),
        (("run", "assign", "U/1"), "'JOB'"),
        (("job", "show"), "'JOB'"),
        (("plot", "polar", "0142"), "'--output'"),
        (("store", "backup"), "'FILE'"),
        (("stand", "new", "new.toml"), "'--like'"),
        (("sim", "fault"), "dropout"),
        # what excludes each other
        ((*FIT, "--at", "30deg"), "Say where: --hole or --at."),
        (("weight", "remove", "--plane", "1", "--all", "--hole", "2"), "--hole or --all"),
        ((*MOUNT, "--clean", "--carry-over"), "one of --clean, --fitted or --carry-over"),
        (("mount", "F-204", "--none"), "--none takes no machine."),
        (("mark", "O", "--last", "--next"), "--last and --next exclude each other."),
        (("mark", "O", "--reading", "2"), "--reading needs its --run."),
        (("mark", "O", "--run", "0142/1", "--last"), "--run takes a label, and neither --last nor --next."),
        (("mark", "--wait", "--run", "0142/1"), "--run takes a label"),
        ((*MOUNT, "--clean", "--mark-moved", "--mark-mistyped"), "exclude each other."),
        (("weight", "list", "--job", "0142"), "--job goes with --all."),
        (("weight", "void", "1"), "'WHY'"),
        (("weight", "void", "one", "wrong hole"), "'one' is not a valid integer"),
        (("mark", "O", "--wait", "--no-wait"), "--wait and --no-wait exclude each other."),
        (("mark", "O", "--cancel"), "--cancel takes no label"),
        (("store", "check", "--stand", "bay.toml", "--store", "x.sqlite"), "either --stand or --store"),
        # a choice that there is not
        (("mark", "P"), "'P' is not one of 'O', 'O+T', 'check', 'trim', 'slow-roll'."),
        (("sim", "fault", "fire"), "'fire' is not one of"),
        (("stand", "new", "new.toml", "--like", "mine"), "'mine' is not one of"),
        (("plot", "polar", "0142", "-o", "0142.txt"), "end it in .png, .svg or .pdf."),
        # units: none, of another measure, a typo
        (
            ("weight", "fit", "3.0", *FIT[3:]),
            "'3.0' has no unit. Write the mass with its unit (g, mg, kg, oz).",
        ),
        (("weight", "fit", "3mm", *FIT[3:]), "'mm' is not a unit of mass."),
        (("weight", "fit", "3G", *FIT[3:]), "'G' is not a unit of mass."),
        (("weight", "fit", "three", *FIT[3:]), "'three' is not a mass."),
        (("weight", "fit", "0g", *FIT[3:]), "'0g' is too small."),
        (("weight", "fit", "1e400g", *FIT[3:]), "'1e400g' is out of range."),
        ((*FIT, "--radius", "140"), "'140' has no unit."),
        ((*FIT[:5], "--at", "30"), "'30' has no unit."),
        ((*ADD[:6], "60", *ADD[7:]), "'60' has no unit. Write the rotor mass"),
        ((*ADD[:6], "-60kg", *ADD[7:]), "'-60kg' is too small."),
        ((*ADD[:8], "1500kg"), "'kg' is not a unit of speed. Known units: Hz, rpm, r/min."),
        ((*ADD[:8], "0"), "'0 rpm' is too small."),
        ((*ADD, "--permissible", "300g"), "'g' is not a unit of unbalance. Known units: g.mm, kg.mm, oz.in."),
        ((*ADD, "--limit", "20um"), "'um' is not a unit of length."),
        ((*ADD, "--first-critical", "fast"), "'fast' is not a speed."),
        ((*ADD, "--grade", "G2.5"), "'G2.5' is not a number."),
        ((*ADD, "--grade", "nan"), "'nan' is not above zero."),
        ((*ADD, "--bearing-load", "30"), "'30' has no unit."),
        (("correction", "--step", "0.1"), "'0.1' has no unit."),
        (("correction", "--rpm", "3kg"), "'kg' is not a unit of speed."),
        (("sim", "start", "--rpm", "fast"), "'fast' is not a speed."),
        (("sim", "fault", "clip", "--for", "1"), "'1' has no unit. Write the time with its unit"),
        (("mark", "O", "--timeout", "soon"), "'soon' is not a number."),
        (("mark", "O", "--timeout", "-1"), "'-1' is not above zero."),
        (("mark", "O", "--timeout", "nan"), "'nan' is not above zero."),
        # numbers out of range
        ((*FIT[:4], "0", *FIT[5:]), "0 is not in the range 1<=x<=99."),
        ((*FIT[:6], "two"), "'two' is not a valid integer"),
        (("run", "list", "--limit", "0"), "0 is not in the range"),
        (("demo", "--pace", "1000"), "is not in the range 1<=x<=50."),
        (("demo", "--seed", "-1"), "-1 is not in the range x>=0."),
        # planes, senses, rotor marks and weights fitted, which are written in words
        ((*ADD, "--plane", "radius 140mm"), "does not begin with the plane's number and a colon."),
        ((*ADD, "--plane", PLANE.replace("1:", "first:")), "'first' is not the number of a plane."),
        ((*ADD, "--plane", PLANE.replace("24", "many")), "'many' is not a number of holes."),
        ((*ADD, "--plane", PLANE.replace("140mm", "140")), "'140' has no unit."),
        ((*ADD, "--plane", PLANE.replace("-220mm", "middle")), "'middle' is not a length."),
        ((*ADD, "--plane", PLANE.replace("radius", "raduis")), "'raduis 140mm' is not understood."),
        ((*ADD, "--plane", "1: radius 140mm"), "holes and numbered missing."),
        ((*ADD, "--plane", PLANE.replace("clockwise", "sunwise")), 'Write for example "1: radius 140mm'),
        ((*MOUNT[:5], "clockwise", "--clean"), 'Write for example "clockwise from drive".'),
        ((*MOUNT, "--clean", "--mark-at", "7"), "'7' has no unit."),
        ((*MOUNT, "--clean", "--mark-at", "one=7deg"), "'one' is not the number of a plane."),
        ((*MOUNT, "--clean", "--mark-width", "5mm"), "'mm' is not a unit of angle."),
        ((*MOUNT, "--clean", "--rpm", "1500g"), "'g' is not a unit of speed."),
        ((*MOUNT, "--fitted", "hole 3, 2g"), 'Write for example "plane 1 hole 3 2.1g".'),
        ((*MOUNT, "--fitted", "plane 1 hole 3 2"), "'2' has no unit."),
    ],
    ids=lambda value: " ".join(value)[-40:] if isinstance(value, tuple) else "",
)
def test_typed_wrong_is_2_with_a_sentence(fails: Callable[..., str], words: Words, said: str) -> None:
    err = fails(words, 2)
    assert said in err
    assert "invalid literal" not in err  # Python's own words
    if words[0] in COMMANDS:
        assert f"Usage: revmark {words[0]}" in err


# --- refused: 1 --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "words",
    [
        (*ADD, "--plane", PLANE),
        (*MOUNT, "--clean"),
        ("mount", "--none"),
        ("mark", "O"),
        ("mark", "O", "--no-wait", "--json"),
        ("mark", "--wait"),
        ("mark", "--cancel"),
        (*FIT, "--locked-out"),
        ("weight", "drill", *FIT[2:]),
        ("weight", "remove", "--plane", "1", "--all"),
        ("run", "void", "0142/1", "why"),
        ("run", "assign", "U/1", "0142"),
        ("sim", "start", "--rpm", "1500"),
        ("sim", "stop"),
        ("sim", "next"),
        ("sim", "fault", "dropout"),
        ("status",),
    ],
    ids=" ".join,
)
def test_without_a_daemon_what_writes_names_serve(fails: Callable[..., str], words: Words) -> None:
    none = "revmark: No daemon is running on this PC. Start it with: revmark serve --stand FILE"
    assert fails(words, 1) == none
    named = fails((*words, "--stand", "bay.toml"), 1)
    assert named == (
        "revmark: No daemon runs for the stand file bay.toml. Start it with: revmark serve --stand bay.toml"
    )
    assert "There is no stand file bya.toml." in fails((*words, "--stand", "bya.toml"), 1)


READING = [
    ("run", "list"),
    ("run", "show", "0142/1"),
    ("job", "list"),
    ("job", "show", "0142"),
    ("machine", "list"),
    ("machine", "show", "F-204"),
    ("weight", "list"),
    ("weight", "advise", "--plane", "1"),
    ("coefficient", "list"),
    ("correction",),
    ("correction", "--reuse", "--json"),
    ("plot", "polar", "0142", "-o", "0142.png"),
    ("store", "check"),
    ("store", "backup", "copy.sqlite"),
    ("store", "migrate"),
    ("store", "migrate", "--list"),
]


@pytest.mark.parametrize("words", READING, ids=" ".join)
def test_without_a_daemon_what_reads_names_stand(fails: Callable[..., str], words: Words) -> None:
    err = fails(words, 1)
    assert "Name the stand whose store to read: --stand FILE." in err
    assert "revmark serve" in err
    assert "There is no stand file" in fails((*words, "--stand", "bya.toml"), 1)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("run", "show", "0142/1"), "There is no run 0142/1 in the store. `revmark run list` shows"),
        (("run", "show", "U/7"), "There is no run U/7 in the store."),
        (("run", "show", "first"), "'first' is no run's name. Write it as 0142/3, or U/1"),
        (("run", "list", "--job", "0142"), "There is no job '0142' in the store."),
        (("run", "list", "--machine", "F-204"), "There is no machine 'F-204' in the store."),
        (("job", "show", "0142"), "There is no job '0142' in the store."),
        (("job", "list", "--machine", "F-204"), "There is no machine 'F-204' in the store."),
        (("machine", "show", "F-204"), "There is no machine 'F-204' in the store."),
        (("machine", "show", "F\x1b[31m"), "There is no machine"),
        (("coefficient", "list", "--model", "KR-22"), "There is no model 'KR-22' in the store."),
        (("correction",), "The store holds no job yet. Begin one with"),
        (("correction", "--job", "0142"), "There is no job '0142' in the store."),
        (("weight", "list"), "Nothing is mounted."),
        (("weight", "advise", "--plane", "1", "--job", "0142"), "There is no job '0142' in the store."),
        (("plot", "polar", "0142", "-o", "0142.png"), "There is no job '0142' in the store."),
        (("plot", "polar", "0142", "-o", "plots/0142.png"), "There is no folder plots."),
        (("store", "backup", "copies/copy.sqlite"), "There is no folder copies."),
        (("store", "backup", "text.txt"), "text.txt is there already."),
        (("store", "restore", "copy.sqlite"), "There is no backup copy.sqlite."),
        (("store", "restore", "text.txt"), "text.txt is no store."),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, tuple) else "",
)
def test_what_is_not_there_is_named(fails: Callable[..., str], words: Words, said: str) -> None:
    err = fails((*words, "--stand", "bay.toml"), 1)
    assert err.startswith(f"revmark: {said}")
    assert "\x1b" not in err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("store", "check", "--store", "bya.sqlite"), "There is no store bya.sqlite."),
        (("store", "check", "--store", "stores/bay.sqlite"), "There is no folder stores/"),
        (("store", "check", "--store", "text.txt"), "text.txt is no store."),
        (("store", "migrate", "--store", "bya.sqlite"), "There is no store bya.sqlite."),
        (("run", "list", "--stand", "text.txt"), "The stand file text.txt has one mistake."),
        (("run", "list", "--stand", "bay-simulated.sqlite"), "is not text in UTF-8"),
        (("run", "list", "--stand", "."), "cannot be read: Is a directory."),
        (("stand", "new", "bay.toml", "--like", "simulated"), "bay.toml exists already."),
        (("stand", "new", "stands/bay.toml", "--like", "simulated"), "There is no folder stands."),
        (("stand", "check", "bya.toml"), "There is no stand file"),
        (("demo", "--folder", "."), "exists already. Name a folder that does not, or none."),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, tuple) else "",
)
def test_a_file_that_will_not_do_is_named(fails: Callable[..., str], words: Words, said: str) -> None:
    assert said in fails(words, 1)


def test_a_stand_on_another_machines_disk_is_refused(
    fails: Callable[..., str], shop: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("config.places._read_mountinfo", lambda: NFS)
    for words in (("run", "list", "--stand", "bay.toml"), ("store", "check", "--stand", "bay.toml")):
        err = fails(words, 1)
        assert f"The folder {shop} lies on another machine (nfs4)" in err
        assert "Set store.path in the stand file to a folder on a local disk." in err


@pytest.mark.slow
def test_a_daemon_on_another_machines_disk_is_refused(tmp_path: Path) -> None:
    main_in(tmp_path, "stand", "new", "bay.toml", "--like", "simulated")
    code = (
        f"import config.places; config.places._read_mountinfo = lambda: {NFS!r}\n"
        "from cli.main import main; main(['serve', '--stand', 'bay.toml'])"
    )
    done = subprocess.run([sys.executable, "-P", "-c", code], cwd=tmp_path, capture_output=True, text=True)
    assert done.returncode == 78
    assert "Traceback" not in done.stderr
    assert f"The folder {tmp_path} lies on another machine (nfs4)" in done.stderr
    assert [p.name for p in tmp_path.iterdir()] == ["bay.toml"]
