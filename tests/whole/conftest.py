"""The installed command against a real daemon, as an operator types it."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sysconfig
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

REVMARK = Path(sysconfig.get_path("scripts")) / "revmark"
READY_S, COMMAND_S = 30.0, 90.0


class Operator:
    """Types commands in a folder of its own."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.env = {**os.environ, "REVMARK_RUNTIME": str(folder / "run"), "COLUMNS": "80"}
        for name in ("REVMARK_STAND", "REVMARK_OPERATOR"):
            self.env.pop(name, None)

    def type(self, *words: str, code: int = 0) -> str:
        """Standard output of a command, whose exit code must be ``code``."""
        done = subprocess.run(
            [REVMARK, *words],
            cwd=self.folder,
            env=self.env,
            capture_output=True,
            text=True,
            timeout=COMMAND_S,
            check=False,
        )
        assert done.returncode == code, f"revmark {words} ended with {done.returncode}:\n{done.stderr}"
        assert "Traceback" not in done.stderr
        return done.stdout

    def json(self, *words: str) -> Any:
        return json.loads(self.type(*words, "--json"))

    def until_no_pulses(self) -> None:
        """Wait for the rotor to run down, or the recording to end."""
        until = time.monotonic() + READY_S
        while self.json("status")["live"]["state"] != "no pulses":
            assert time.monotonic() < until, "the rotor turns still"
            time.sleep(0.1)

    @contextmanager
    def serving(self, stand: str) -> Iterator[None]:
        log = self.folder / "serve.log"
        with log.open("wb") as out:
            daemon = subprocess.Popen(
                [REVMARK, "serve", "--stand", stand], cwd=self.folder, env=self.env, stderr=out
            )
        try:
            until = time.monotonic() + READY_S
            while b"\nready " not in b"\n" + log.read_bytes():
                assert daemon.poll() is None, log.read_text()
                assert time.monotonic() < until, log.read_text()
                time.sleep(0.05)
            yield
            daemon.send_signal(signal.SIGTERM)
            assert daemon.wait(READY_S) == 0, log.read_text()
        finally:
            if daemon.poll() is None:
                daemon.kill()
                daemon.wait()


@pytest.fixture
def operator(tmp_path: Path) -> Operator:
    return Operator(tmp_path)
