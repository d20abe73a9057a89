"""A stand in a folder of its own, with a real daemon in another process, for the tests here.

Nothing waits without a deadline, and whatever a test started is killed when it ends.
"""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import sysconfig
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from cli.client import Client, find, new_key
from store.history import History

Json = dict[str, Any]
READY_S, COMMAND_S = 20.0, 20.0
REVMARK = Path(sysconfig.get_path("scripts")) / "revmark"
RPM = 1500
"""With the ramps below the rotor does not come to rest with its mark's edge just under the sensor."""

STAND = """\
[stand]
name = "{name}"
time_zone = "Europe/Lisbon"
ends = ["drive", "free"]
angles_seen_from = "drive"
zero = "top dead centre"

[source]
driver = "simulated"
[source.options]
pace = {pace}
seed = 3
rate_hz = 5120
hunting = 0.0
run_up_rpm_per_s = 3000
coast_down_rpm_per_s = 2700
pulse_width_deg = 30.0

[once_per_rev]
input = "0"
edge = "falling"
angle = "0 deg"

[[channel]]
name = "probe 1"
input = "1"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "0 deg"
gap_limits = ["-16 V", "-4 V"]

[[channel]]
name = "probe 2"
input = "2"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "0 deg"
gap_limits = ["-16 V", "-4 V"]

[steadiness]
preset = "small"
window = "{window}"
blocks = 6

[run]
minimum_speed = "60 rpm"
minimum_duration = "0.5 s"
slow_roll_limit = "300 rpm"

[store]
path = "{store}"

[access]
group = "{group}"
"""

MACHINE = (
    "machine", "add", "F-204", "--model", "KR-22", "--mass", "60kg", "--speed", f"{RPM}rpm", "--grade", "2.5",
    "--plane", "1: radius 140mm, holes 24, numbered counterclockwise from drive",
    "--plane", "2: radius 140mm, holes 24, numbered counterclockwise from drive",
)  # fmt: skip
MOUNT = (
    "mount", "F-204", "--job", "0142", "--rotation", "clockwise from drive", "--mark-at", "0deg",
    "--mark-how", "by eye", "--support", "rigid", "--coupling", "belt", "--clean",
)  # fmt: skip


@dataclass(frozen=True)
class Done:
    """A command that has ended."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> Any:
        return json.loads(self.out)


@dataclass(frozen=True)
class Who:
    """A user of the operating system, as a process may be started for."""

    uid: int
    gid: int
    groups: tuple[int, ...] = ()


class Forks:
    """The zygote: see its file."""

    def __init__(self, cache: Path) -> None:
        self.env = {k: v for k, v in os.environ.items() if not k.startswith(("REVMARK_", "XDG_"))}
        self.env.pop("PYTHONDONTWRITEBYTECODE", None)
        self.env["PYTHONPYCACHEPREFIX"] = os.fspath(cache)  # the second start of a command compiles nothing
        self.env["OPENBLAS_NUM_THREADS"] = "1"
        self._process = subprocess.Popen(
            [sys.executable, "-P", Path(__file__).with_name("zygote.py")],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            env=self.env,
            text=True,
        )
        assert self._answer() == "ready"

    def _answer(self) -> Any:
        assert self._process.stdout is not None
        return json.loads(self._process.stdout.readline())

    def ask(self, **asked: Any) -> Any:
        assert self._process.stdin is not None
        self._process.stdin.write(json.dumps(asked) + "\n")
        self._process.stdin.flush()
        return self._answer()

    def close(self) -> None:
        with self._process as process:
            assert process.stdin is not None
            process.stdin.close()
            process.wait(COMMAND_S)


class Process:
    """A forked command."""

    def __init__(self, forks: Forks, out: Path, err: Path, **asked: Any) -> None:
        self._forks = forks
        self._out, self._err = out, err
        self.pid: int = forks.ask(out=os.fspath(out), err=os.fspath(err), **asked)
        self.code: int | None = None

    def signal(self, number: int) -> None:
        if self.code is None:
            os.kill(self.pid, number)

    def poll(self) -> int | None:
        return self.wait(0.0)

    def wait(self, limit_s: float) -> int | None:
        """Its exit code, None while it runs."""
        if self.code is None:
            self.code = self._forks.ask(wait=self.pid, limit_s=limit_s)
        return self.code

    def end(self) -> None:
        if self.wait(0.0) is None:
            self.signal(signal.SIGKILL)
            self.wait(COMMAND_S)

    @property
    def err(self) -> str:
        return self._err.read_text() if self._err.exists() else ""

    def done(self, limit_s: float = COMMAND_S) -> Done:
        code = self.wait(limit_s)
        if code is None:
            self.end()
            pytest.fail(f"still running after {limit_s:g} s; on stderr:\n{self.err}")
        return Done(code, self._out.read_text(), self.err)


def until(true: Callable[[], Any], what: str, limit_s: float = 10.0, every_s: float = 0.01) -> Any:
    """Wait for something to become true, with a deadline; returns it."""
    end = time.monotonic() + limit_s
    while not (found := true()):
        if time.monotonic() > end:
            pytest.fail(f"waited {limit_s:g} s in vain for {what}")
        time.sleep(every_s)
    return found


@dataclass
class Bay:
    """A folder with a stand file, a store and a runtime folder, and whatever runs in it."""

    forks: Forks
    folder: Path
    runtime: Path
    name: str = "bay-1"
    pace: float = 10
    window: str = "0.6 s"
    group: str = ""
    store_name: str = "bay.sqlite"
    daemon: Process | None = None
    started: list[Process] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.stand.write_text(
            STAND.format(
                name=self.name, pace=self.pace, window=self.window, group=self.group, store=self.store_name
            )
        )

    @property
    def stand(self) -> Path:
        return self.folder / f"{self.name}.toml"

    @property
    def store(self) -> Path:
        return self.folder / self.store_name

    @property
    def log(self) -> str:
        return "" if self.daemon is None else self.daemon.err

    @property
    def env(self) -> dict[str, str]:
        return {**self.forks.env, "REVMARK_RUNTIME": os.fspath(self.runtime)}

    # --- processes

    def fork(self, *words: str, who: Who | None = None, patch: str = "", **env: str) -> Process:
        """A command in a process of its own, from modules loaded already."""
        number = len(self.started)
        process = Process(
            self.forks,
            self.folder / f"{self.name}-{number}.out",
            self.folder / f"{self.name}-{number}.err",
            argv=words,
            cwd=os.fspath(self.folder),
            env={**self.env, **env},
            patch=patch,
            uid=who and who.uid,
            gid=who and who.gid,
            groups=list(who.groups) if who else [],
        )
        self.started.append(process)
        return process

    def run(self, *words: str, who: Who | None = None, **env: str) -> Done:
        """A command and its end, whatever it was."""
        return self.fork(*words, who=who, **env).done()

    def must(self, *words: str, who: Who | None = None) -> Done:
        """A command that has to succeed."""
        done = self.run(*words, who=who)
        assert done.code == 0, f"{words}: {done.err}\n--- daemon:\n{self.log}"
        return done

    def real(self, *words: str, cwd: Path | None = None, **env: str) -> Done:
        """The installed script itself, with a start of its own."""
        done = subprocess.run(
            [REVMARK, *words],
            cwd=cwd or self.folder,
            env={**self.env, **env},
            capture_output=True,
            text=True,
            timeout=COMMAND_S,
            stdin=subprocess.DEVNULL,
        )
        return Done(done.returncode, done.stdout, done.stderr)

    # --- the daemon

    def serve(self, *, who: Who | None = None, patch: str = "") -> Process:
        """Start the daemon without waiting for it."""
        self.daemon = self.fork("serve", "--stand", os.fspath(self.stand), who=who, patch=patch)
        return self.daemon

    def start(self, *, who: Who | None = None, patch: str = "") -> None:
        """Start the daemon and wait until it takes marks."""
        daemon = self.serve(who=who, patch=patch)

        def ready() -> bool:
            assert daemon.poll() is None, f"the daemon ended with {daemon.code}:\n{daemon.err}"
            return "\nready " in "\n" + daemon.err

        until(ready, "the daemon to be ready", READY_S, 0.002)

    def stop(self) -> int:
        """SIGTERM, and the exit code."""
        assert self.daemon is not None
        self.daemon.signal(signal.SIGTERM)
        code = self.daemon.wait(COMMAND_S)
        assert code is not None, f"the daemon does not end:\n{self.log}"
        return code

    def kill(self) -> None:
        assert self.daemon is not None
        self.daemon.signal(signal.SIGKILL)
        assert self.daemon.wait(COMMAND_S) == -signal.SIGKILL

    def end(self) -> None:
        for process in self.started:
            process.end()

    def client(self) -> Client:
        """A client in this process (the fixture has set REVMARK_RUNTIME)."""
        return Client(find(os.fspath(self.stand)))

    def post(self, path: str, **body: Any) -> Any:
        return self.client().post(path, {"key": new_key(), **body})

    def history(self) -> History:
        return History.open(self.store)

    # --- the stand

    def set_up(self) -> None:
        """A machine on the stand, clean."""
        self.must(*MACHINE)
        self.must(*MOUNT)

    def status(self) -> Json:
        told: Json = self.client().get("/v1/status")
        return told

    def live(self) -> Json:
        live: Json = self.status()["live"]
        return live

    def turn(self, rpm: float = RPM) -> None:
        self.post("/v1/sim/start", speed_hz=rpm / 60)

    def coast(self) -> None:
        self.post("/v1/sim/stop")

    def until_state(self, state: str, limit_s: float = 10.0) -> Json:
        found: Json = until(lambda: (live := self.live())["state"] == state and live, state, limit_s)
        return found

    def until_run(self) -> str:
        """A run is open; its name."""
        name: str = until(lambda: self.live()["run"], "a run to begin")
        return name

    def until_idle(self) -> None:
        """No pulses, and the last run is closed."""
        until(lambda: (live := self.live())["state"] == "no pulses" and not live["run"], "the run to end")

    def until_readings(self, number: int = 1) -> None:
        """The open run holds so many readings."""
        with self.history() as history:
            until(lambda: (run := history.open_run()) and len(run.readings) >= number, "a reading")

    def a_run(self, rpm: float = RPM) -> None:
        """A whole run with at least one reading."""
        self.turn(rpm)
        self.until_readings()
        self.coast()
        self.until_idle()

    def mark(self, label: str, **more: Any) -> Json:
        told: Json = self.post("/v1/mark", label=label, **more)
        return told


@contextmanager
def a_bay(forks: Forks, folder: Path, runtime: Path, **options: Any) -> Iterator[Bay]:
    """A bay whose processes are killed at the end; the log goes to stdout (seen on failure)."""
    bay = Bay(forks, folder, runtime, **options)
    try:
        yield bay
    finally:
        bay.end()
        print(f"--- log of {bay.name}\n{bay.log}")


@contextmanager
def short_folder() -> Iterator[Path]:
    """A runtime folder with a path short enough for a Unix socket."""
    path = Path(tempfile.mkdtemp(prefix="rm-"))
    try:
        yield path
    finally:
        shutil.rmtree(path, ignore_errors=True)


def no_traceback(done: Done) -> None:
    """What goes to people is sentences."""
    assert "Traceback" not in done.err, done.err
    assert "Traceback" not in done.out, done.out
