"""revmark starts from any folder, also one that holds folders named as its own packages are (HOUSE.md)."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import sysconfig
import time
from pathlib import Path

import pytest

from cli.demo import Shell
from config.version import __version__

REVMARK = Path(sysconfig.get_path("scripts")) / "revmark"
LIMIT_S = 30.0


@pytest.fixture
def stray(tmp_path: Path) -> Path:
    """Folders and files that would shadow ours, were the current folder looked into: each raises an error."""
    for name in ("config", "store", "daq", "cli", "click", "numpy", "sqlalchemy"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "__init__.py").write_text(f"raise RuntimeError('the stray {name} was imported')\n")
    for name in ("main", "random", "typing", "uuid"):
        (tmp_path / f"{name}.py").write_text(f"raise RuntimeError('the stray {name} was imported')\n")
    return tmp_path


@pytest.fixture
def env(tmp_path: Path) -> dict[str, str]:
    kept = {k: v for k, v in os.environ.items() if not k.startswith(("REVMARK_", "PYTHONPATH"))}
    return {**kept, "REVMARK_RUNTIME": str(tmp_path / "run")}


def run(folder: Path, env: dict[str, str], *words: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [REVMARK, *words], cwd=folder, env=env, capture_output=True, text=True, timeout=LIMIT_S
    )


def test_the_strays_would_be_found_without_care(stray: Path, env: dict[str, str]) -> None:
    """Else the tests below could not fail."""
    done = subprocess.run(
        [sys.executable, "-m", "cli.main"],
        cwd=stray,
        env=env,
        capture_output=True,
        text=True,
        timeout=LIMIT_S,
    )
    assert "the stray" in done.stderr


def test_the_script_starts(stray: Path, env: dict[str, str]) -> None:
    done = run(stray, env, "--version")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.strip() == f"revmark, version {__version__}"
    assert run(stray, env, "stand", "new", "bay.toml", "--like", "simulated").returncode == 0
    done = run(stray, env, "stand", "check", "bay.toml")  # pydantic, the drivers
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.slow
def test_the_daemon_starts_and_is_read(stray: Path, env: dict[str, str]) -> None:
    assert run(stray, env, "stand", "new", "bay.toml", "--like", "simulated").returncode == 0
    log = stray / "serve.log"
    with log.open("wb") as out:
        daemon = subprocess.Popen([REVMARK, "serve", "--stand", "bay.toml"], cwd=stray, env=env, stderr=out)
    try:
        until = time.monotonic() + LIMIT_S
        while "\nready " not in "\n" + log.read_text():
            assert daemon.poll() is None, log.read_text()
            assert time.monotonic() < until, log.read_text()
            time.sleep(0.05)
        done = run(stray, env, "run", "list", "--json")  # store, sqlalchemy, alembic
        assert (done.returncode, done.stdout.strip(), done.stderr) == (0, "[]", "")
        daemon.send_signal(signal.SIGTERM)
        assert daemon.wait(LIMIT_S) == 0, log.read_text()
    finally:
        daemon.kill()
        daemon.wait()


@pytest.mark.slow
def test_the_demo_starts_its_commands_and_its_daemon(
    stray: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    """As ``revmark demo --folder`` does, in a folder where strays lie."""
    monkeypatch.setenv("REVMARK_RUNTIME", "to be put back")  # Shell sets it
    monkeypatch.chdir(stray)
    shell = Shell(stray)
    shell.run("stand", "new", "bay.toml", "--like", "simulated")
    with shell.serving():
        shell.run("status")
    out, err = capfd.readouterr()
    assert "$ revmark status\nstand " in out
    assert err == ""
    assert "stopped" in (stray / "serve.log").read_text()
