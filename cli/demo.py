"""``revmark demo``: a whole balance job by itself, on the simulated stand, as a user's commands.

Every line that begins with ``$`` is a real command, run as its own process against a real daemon in a
folder of the demo's own; what follows is what it printed. The machines, the job numbers and the shop are
invented.
"""

from __future__ import annotations

import os
import shlex
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from cli.client import Client, find
from cli.output import COLUMNS
from config.errors import RevmarkError

if TYPE_CHECKING:
    from store.casework import Verdict
    from store.history import History

STAND = "bay.toml"
MODEL = "KR-22"
FIRST, SECOND = ("F-204", "0142"), ("F-211", "0143")
SPEED_RPM = 1500
READY_S, COAST_S = 30.0, 60.0
COMMAND_S = 60.0


class DemoFailed(RevmarkError):
    """A command of the demo failed."""


class Shell:
    """Runs revmark commands in the demo's folder, printing each before its output."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._revmark = [sys.executable, "-P", "-m", "cli.main"]
        os.environ["REVMARK_RUNTIME"] = str(folder / "run")
        os.environ.pop("REVMARK_STAND", None)
        self._env = {**os.environ, "PYTHONUNBUFFERED": "1"}

    def run(self, *words: str) -> None:
        """Print and run a command; its output goes to the terminal as it comes. Raises DemoFailed."""
        click.echo("\n$ " + _folded(["revmark", *words]))
        done = subprocess.run(
            [*self._revmark, *words], cwd=self.folder, env=self._env, timeout=COMMAND_S, check=False
        )
        if done.returncode:
            raise DemoFailed(f"revmark {words[0]} ended with {done.returncode}.", "Its message is above.")

    @contextmanager
    def reading(self) -> Iterator[History]:
        """The demo's store, for its own decisions: what the command just printed, as numbers."""
        from config.stand import load_stand
        from store.history import History

        with History.open(load_stand(self.folder / STAND).store_path) as history:
            yield history

    @contextmanager
    def serving(self) -> Iterator[None]:
        """The daemon, in the background, its log in ``serve.log``."""
        click.echo(f"\n$ revmark serve --stand {STAND} 2> serve.log &")
        with (self.folder / "serve.log").open("wb") as log:
            daemon = subprocess.Popen(
                [*self._revmark, "serve", "--stand", STAND], cwd=self.folder, env=self._env, stderr=log
            )
        try:
            self._until(lambda: self._ready(daemon), READY_S, "the daemon to be ready")
            yield
        finally:
            daemon.send_signal(signal.SIGTERM)
            try:
                daemon.wait(COMMAND_S)
            except subprocess.TimeoutExpired:
                daemon.kill()
                daemon.wait()

    def _ready(self, daemon: subprocess.Popen[bytes]) -> bool:
        if daemon.poll() is not None:
            log = (self.folder / "serve.log").read_text()
            raise DemoFailed(f"The daemon ended with {daemon.returncode}.", log)
        return b"\nready " in b"\n" + (self.folder / "serve.log").read_bytes()

    def until_no_pulses(self) -> None:
        """Wait for the rotor to coast down, as one would at the stand."""
        client = Client(find(None))
        self._until(
            lambda: client.get("/v1/status")["live"]["state"] == "no pulses",
            COAST_S,
            "the rotor to coast down",
        )

    @staticmethod
    def _until(true: Any, limit_s: float, what: str) -> None:
        until = time.monotonic() + limit_s
        while not true():
            if time.monotonic() > until:
                raise DemoFailed(f"Waited {limit_s:.0f} s in vain for {what}.", "Is the PC busy?")
            time.sleep(0.05)


def _folded(words: Sequence[str]) -> str:
    """A command in 80 columns, continued between its words as a shell would take it."""
    lines = [""]
    for word in map(shlex.quote, words):
        if lines[-1] and len(lines[-1]) + 1 + len(word) > COLUMNS - 6:
            lines.append("   ")
        lines[-1] += f" {word}" if lines[-1] else word
    return " \\\n".join(lines)


@click.command(context_settings={"max_content_width": 80})
@click.option("--keep", is_flag=True, help="Keep the folder with the store, the log and the plots.")
@click.option("--folder", type=click.Path(path_type=Path, file_okay=False), metavar="DIR",
              help="Make it here instead of among the temporary files; it must not exist.")  # fmt: skip
@click.option("--seed", type=click.IntRange(0), default=1, show_default=True, help="Other machines.")
@click.option("--pace", type=click.FloatRange(1, 50), default=10, show_default=True,
              help="Times as fast as a real rotor.")  # fmt: skip
def command(*, keep: bool, folder: Path | None, seed: int, pace: float) -> int:
    """A whole balance job by itself, on the simulated stand.

    The first machine is balanced with trial weights, the second of the same model from history, with no
    trial run. Exit code 1 when a machine ends out of tolerance.
    """
    place = _own_folder(folder)
    try:
        return _play(Shell(place), seed, pace, kept=keep)
    finally:
        if keep:
            click.echo(f"\nkept: {place}")
        else:
            shutil.rmtree(place, ignore_errors=True)


def _own_folder(folder: Path | None) -> Path:
    if folder is None:
        return Path(tempfile.mkdtemp(prefix="revmark-demo-"))
    try:
        folder.mkdir(parents=True)
    except FileExistsError as error:
        raise DemoFailed(f"{folder} exists already.", "Name a folder that does not, or none.") from error
    return folder.absolute()


def _play(shell: Shell, seed: int, pace: float, *, kept: bool) -> int:
    click.echo(
        f"A simulated stand, {pace:g} times as fast as a real rotor, seed {seed}.\n"
        "Readings by the preset 'small': a window of 3 s and at least 10 turns, no\n"
        "lookback, no hold."
    )
    shell.run("stand", "new", STAND, "--like", "simulated")
    _set(shell.folder / STAND, seed, pace)
    shell.run("stand", "check", STAND)
    with shell.serving():
        verdicts = [_by_trial_weight(shell), _by_reuse(shell)]
        _looked_at(shell, f"{FIRST[1]}/1")
        for _, job in (FIRST, SECOND):
            shell.run("job", "show", job)
            shell.run("plot", "polar", job, "-o", f"job-{job}.png")
            click.echo("" if kept else "(the plot goes with the folder; --keep keeps both)")
    return _summary(verdicts)


def _set(stand: Path, seed: int, pace: float) -> None:
    """The two lines of the stand file that the demo changes."""
    text = stand.read_text()
    for old, new in (('pace = "real"', f"pace = {pace:g}"), ("seed = 1 ", f"seed = {seed} ")):
        if old not in text:
            raise DemoFailed(f"The template no longer holds {old!r}.", "Mend the demo.")
        text = text.replace(old, new, 1)
    stand.write_text(text)
    click.echo(f"(set in {STAND}: pace = {pace:g}, seed = {seed})")


def _by_trial_weight(shell: Shell) -> Verdict:
    from store import consult

    machine, job = FIRST
    click.echo(f"\n# Machine {machine} by trial weights, job {job}")
    shell.run(
        "machine", "add", machine, "--model", MODEL, "--mass", "60kg", "--speed", f"{SPEED_RPM}rpm",
        "--grade", "2.5", "--first-critical", "2600rpm",
        "--plane", "1: radius 140mm, holes 24, at -220mm, numbered ccw from drive",
        "--plane", "2: radius 140mm, holes 24, at 220mm, numbered ccw from drive",
    )  # fmt: skip
    _mount(shell, machine, job)
    _run(shell, "O")
    for plane in ("1", "2"):
        shell.run("weight", "advise", "--plane", plane)
        with shell.reading() as history:
            advice = consult.trial(history, job, int(plane))
        _fit(shell, advice.plane, advice.hole or 1, advice.mass_g)
        _run(shell, "O+T")
        shell.run("weight", "remove", "--plane", plane, "--all", "--locked-out")
    return _correct(shell, job, reuse=False)


def _by_reuse(shell: Shell) -> Verdict:
    machine, job = SECOND
    click.echo(f"\n# Machine {machine} of the same model, job {job}: from history, no trial run")
    shell.run(
        "machine", "add", machine, "--model", MODEL, "--mass", "60kg", "--speed", f"{SPEED_RPM}rpm",
        "--grade", "2.5",
    )  # fmt: skip
    _mount(shell, machine, job)
    _run(shell, "O")
    return _correct(shell, job, reuse=True)


def _looked_at(shell: Shell, run: str) -> None:
    """What a run holds beside its vectors, and that they can be had again from the stored samples."""
    click.echo(f"\n# Run {run} once more")
    shell.run("run", "show", run)
    shell.run("plot", "bode", run, "-o", f"bode-{run.replace('/', '-')}.png")
    shell.run("run", "recompute", "--all")


def _mount(shell: Shell, machine: str, job: str) -> None:
    shell.run(
        "mount", machine, "--job", job, "--rotation", "clockwise from drive", "--mark-at", "0deg",
        "--mark-how", "edge of the slot against hole 1", "--support", "pedestals", "--coupling", "belt",
        "--clean",
    )  # fmt: skip


def _run(shell: Shell, label: str) -> None:
    shell.run("mark", label, "--no-wait")
    shell.run("sim", "start", "--rpm", str(SPEED_RPM))
    shell.run("mark", "--wait")
    shell.run("sim", "stop")
    shell.until_no_pulses()


def _fit(shell: Shell, plane: int, hole: int, mass_g: float) -> None:
    shell.run("weight", "fit", f"{mass_g:.1f}g", "--plane", str(plane), "--hole", str(hole), "--locked-out")


def _correct(shell: Shell, job: str, *, reuse: bool) -> Verdict:
    from store import consult

    shell.run("correction", *(["--reuse"] if reuse else []))
    with shell.reading() as history:
        advice = consult.correction(history, job, reuse=reuse)
    for plane in advice.planes:
        for piece in plane.pieces:
            _fit(shell, piece.plane, piece.hole or 1, piece.mass_g)
    _run(shell, "check")
    with shell.reading() as history:
        verdict = consult.newest_verdict(history, history.job_story(job))
    if verdict is None:
        raise DemoFailed(f"Job {job} has no verdict.", "Its runs are above.")
    return verdict


def _summary(verdicts: Sequence[Verdict]) -> int:
    click.echo("\n# Verdicts")
    for verdict in verdicts:
        for plane in verdict.planes:
            click.echo(
                f"{verdict.machine_serial} job {verdict.job_number} plane {plane.plane}: residual "
                f"{abs(plane.residual or 0):.0f} g.mm, permissible {plane.share_gmm or 0:.0f} g.mm: "
                f"{'in' if plane.in_tolerance else 'OUT OF'} tolerance"
            )
    return 0 if all(v.in_tolerance for v in verdicts) else 1
