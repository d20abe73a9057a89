"""A stand with a real daemon and the real commands, for the whole-daemon tests of the hardware drivers."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sysconfig
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

REVMARK = Path(sysconfig.get_path("scripts")) / "revmark"
ROOT = Path(__file__).resolve().parents[2]
LIMIT_S = 30.0


class ServedStand:
    """A folder with ``bay.toml`` and its daemon; whoever made it calls ``end``."""

    def __init__(self, folder: Path, stand_text: str) -> None:
        self.folder = folder
        self.stand = folder / "bay.toml"
        self.stand.write_text(stand_text)
        self.env = {k: v for k, v in os.environ.items() if not k.startswith("REVMARK_")}
        self.env |= {"REVMARK_RUNTIME": str(folder / "run"), "REVMARK_STAND": str(self.stand)}
        self.env["PYTHONPATH"] = os.pathsep.join([str(ROOT), self.env.get("PYTHONPATH", "")])
        self.daemon: subprocess.Popen[bytes] | None = None

    @property
    def log(self) -> str:
        return (self.folder / "serve.log").read_text()

    def serve(self) -> None:
        with (self.folder / "serve.log").open("ab") as out:
            self.daemon = subprocess.Popen([REVMARK, "serve"], cwd=self.folder, env=self.env, stderr=out)
        self.until(lambda: "\nready " in "\n" + self.log, "the daemon to be ready")

    def stop(self) -> None:
        assert self.daemon is not None
        self.daemon.send_signal(signal.SIGTERM)
        assert self.daemon.wait(LIMIT_S) == 0, self.log

    def type(self, *words: str) -> str:
        done = subprocess.run(
            [REVMARK, *words],
            cwd=self.folder,
            env=self.env,
            capture_output=True,
            text=True,
            timeout=60,
            stdin=subprocess.DEVNULL,
        )
        assert done.returncode == 0, f"{words}: {done.stderr}\n{self.log}"
        return done.stdout

    def until(self, true: Callable[[], Any], what: str) -> Any:
        end_s = time.monotonic() + LIMIT_S
        while not (found := true()):
            assert time.monotonic() < end_s, f"waited in vain for {what}\n{self.log}"
            time.sleep(0.05)
        return found

    def state(self) -> str:
        state: str = json.loads(self.type("status", "--json"))["live"]["state"]
        return state

    def end(self) -> None:
        if self.daemon is not None and self.daemon.poll() is None:
            self.daemon.kill()
            self.daemon.wait()
