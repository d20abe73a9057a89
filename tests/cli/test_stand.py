"""``revmark stand``: each command's help, success, bad input and exit code."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from cli.main import main
from config.templates import template_names


def run(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str, str]:
    """Exit code, stdout, stderr."""
    code = 0
    try:
        main(list(arguments))
    except SystemExit as ended:
        code = int(ended.code or 0)
    out = capsys.readouterr()
    return code, out.out, out.err


@pytest.mark.parametrize("words", [(), ("new",), ("check",), ("schema",)])
def test_help(capsys: pytest.CaptureFixture[str], words: tuple[str, ...]) -> None:
    code, out, _ = run(capsys, "stand", *words, "--help")
    assert code == 0
    assert out.startswith("Usage: revmark stand")


@pytest.mark.parametrize("name", template_names())
def test_new_then_check(capsys: pytest.CaptureFixture[str], tmp_path: Path, name: str) -> None:
    file = tmp_path / "bay.toml"
    code, out, _ = run(capsys, "stand", "new", str(file), "--like", name)
    assert code == 0
    assert f"revmark stand check {file}" in " ".join(out.split())  # however long the path is
    code, out, err = run(capsys, "stand", "check", str(file))
    assert (code, err) == (0, "")
    assert out.startswith("bay.toml is right: stand ")
    assert " mV per " in out
    if '"200 mV/mil"' in file.read_text():
        assert "7.874 mV per um" in out  # 25.4 um to the mil
    assert not list(tmp_path.glob("*.sqlite"))


def test_the_summary_fits_80_columns_whatever_the_names(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    file = tmp_path / "b.toml"
    run(capsys, "stand", "new", str(file), "--like", "simulated")
    text = (
        file.read_text().replace('"probe 1"', f'"{"p" * 64}"').replace('input = "1"', f'input = "{"i" * 64}"')
    )
    file.write_text(text.replace('angle = "0 deg"', 'angle = "123.456 deg"').replace('"auto"', '"-11.555 V"'))
    code, out, _ = run(capsys, "stand", "check", str(file))
    assert code == 0
    rows = [line for line in out.splitlines() if ".sqlite" not in line]  # a path is as long as it is
    assert max(map(len, rows)) <= 80


def test_check_as_json(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    file = tmp_path / "b.toml"
    run(capsys, "stand", "new", str(file), "--like", "replay")
    code, out, _ = run(capsys, "stand", "check", str(file), "--json")
    answer = json.loads(out)
    assert code == 0
    assert answer["ok"] is True
    assert answer["once_per_rev"]["level_v"] == -11.5
    assert answer["channels"][0]["show"] == "um pp"
    assert answer["steadiness"]["window_s"] == 3.0


def test_check_names_all_mistakes_the_drivers_too(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    file = tmp_path / "b.toml"
    run(capsys, "stand", "new", str(file), "--like", "simulated")
    text = (
        file.read_text()
        .replace("seed = 1", "sead = 1")
        .replace('sensitivity = "200 mV/mil"', 'sensitivity = "200"', 1)
    )
    file.write_text(text.replace('edge = "falling"', 'edge = "down"'))
    keys = ["once_per_rev.edge", "channel.1.sensitivity", "source.options.sead"]
    code, out, err = run(capsys, "stand", "check", str(file))
    assert (code, out) == (1, "")
    assert all(key in err for key in keys)
    assert "Traceback" not in err
    code, out, err = run(capsys, "stand", "check", str(file), "--json")
    assert (code, err) == (1, "")
    assert [key for key, _ in json.loads(out)["problems"]] == keys


def test_an_unknown_driver_is_named_with_those_there_are(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    file = tmp_path / "b.toml"
    run(capsys, "stand", "new", str(file), "--like", "simulated")
    file.write_text(file.read_text().replace('driver = "simulated"', 'driver = "simulatd"'))
    code, _, err = run(capsys, "stand", "check", str(file))
    assert code == 1
    assert "source.driver" in err
    assert "simulated" in err


def test_new_never_overwrites(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    file = tmp_path / "bay.toml"
    file.write_text("mine")
    code, _, err = run(capsys, "stand", "new", str(file), "--like", "simulated")
    assert code == 1
    assert "exists already. Choose another name" in err
    assert file.read_text() == "mine"


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("new", "bay.toml"), 2, "--like"),
        (("new", "bay.toml", "--like", "simulatd"), 2, "simulated"),
        (("new", "none/bay.toml", "--like", "simulated"), 1, "There is no folder none. Make it first."),
        (("check", "bay.toml"), 1, "Make one with: revmark stand new bay.toml --like simulated"),
        (("check",), 2, "FILE"),
        (("chekc",), 2, "chekc"),
    ],
)
def test_what_is_typed_wrong_makes_no_file(
    capsys: pytest.CaptureFixture[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    arguments: tuple[str, ...],
    code: int,
    words: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("REVMARK_STAND", raising=False)
    ended, _, err = run(capsys, "stand", *arguments)
    assert ended == code
    assert words in err
    assert list(tmp_path.iterdir()) == []


def test_check_takes_the_stand_of_the_environment(
    capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file = tmp_path / "b.toml"
    run(capsys, "stand", "new", str(file), "--like", "simulated")
    monkeypatch.setenv("REVMARK_STAND", str(file))
    assert run(capsys, "stand", "check")[0] == 0


def test_the_schema_is_json(capsys: pytest.CaptureFixture[str]) -> None:
    code, out, _ = run(capsys, "stand", "schema")
    assert code == 0
    assert json.loads(out)["additionalProperties"] is False


def test_help_loads_neither_pydantic_nor_a_driver() -> None:
    code = (
        "import sys; from cli.main import main\n"
        "try: main(['stand', 'new', '--help'])\n"
        "except SystemExit: pass\n"
        "print([m for m in ('pydantic', 'numpy', 'daq.drivers') if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"
