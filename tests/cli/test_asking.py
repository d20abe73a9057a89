"""Questions of the daemon: asked on a terminal; anywhere else a refusal that names the option (HOUSE.md)."""

from __future__ import annotations

import os
import re
import select
import subprocess
import sys
import time
from collections.abc import Callable
from contextlib import suppress
from typing import Any

import click
import pytest

from cli import asking
from cli.asking import ANSWERS, PROMPTS, post_or_ask
from config.errors import NeedsAnswer

Body = dict[str, Any]
LIMIT_S = 20.0


class Desk:
    """Stands for the daemon: asks one question after the other until each is answered in the body."""

    def __init__(self, *questions: tuple[str, ...]) -> None:
        self.questions = questions
        self.asked: list[Body] = []

    def post(self, body: Body) -> str:
        self.asked.append(body)
        for options in self.questions:
            if not any(body.items() >= ANSWERS[o].items() for o in options):
                raise NeedsAnswer(f"Is it {options}?", f"Say {' or '.join(options)}.", options=options)
        return "done"


@pytest.fixture
def types(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Pretends a terminal on which these lines are typed."""

    def typed(*lines: str) -> None:
        left = list(lines)
        monkeypatch.setattr(asking, "is_terminal", lambda: True)
        monkeypatch.setattr(click.termui, "visible_prompt_func", lambda _prompt: left.pop(0))

    return typed


@pytest.mark.parametrize("option", ["--locked-out", "--yes", "--mark-mistyped"])
def test_yes_posts_the_same_again_with_the_answer(types: Callable[..., None], option: str) -> None:
    desk = Desk((option,))
    types("y")
    body = {"key": "k", "label": "O"}
    assert post_or_ask(desk.post, body, as_json=False) == "done"
    assert desk.asked == [body, {**body, **ANSWERS[option]}]
    assert body == {"key": "k", "label": "O"}  # the caller's own is left alone


@pytest.mark.parametrize("typed", ["n", "no", ""])
def test_anything_else_than_yes_is_the_refusal(types: Callable[..., None], typed: str) -> None:
    """Return alone is no: a weight may hang on it."""
    desk = Desk(("--locked-out",))
    types(typed)
    with pytest.raises(NeedsAnswer) as refused:
        post_or_ask(desk.post, {"key": "k"}, as_json=False)
    assert refused.value.remedy == "Say --locked-out."
    assert len(desk.asked) == 1


@pytest.mark.parametrize(("typed", "choose"), [("last", "last"), ("next", "next")])
def test_one_of_two_is_chosen(types: Callable[..., None], typed: str, choose: str) -> None:
    desk = Desk(("--last", "--next"))
    types("perhaps", typed)  # what is none of them is asked again
    assert post_or_ask(desk.post, {}, as_json=False) == "done"
    assert desk.asked[-1] == {"choose": choose}


def test_neither_of_two_is_the_refusal(types: Callable[..., None]) -> None:
    desk = Desk(("--last", "--next"))
    types("neither")
    with pytest.raises(NeedsAnswer):
        post_or_ask(desk.post, {}, as_json=False)
    assert len(desk.asked) == 1


def test_a_second_question_is_asked_too(types: Callable[..., None]) -> None:
    desk = Desk(("--last", "--next"), ("--yes",))
    types("next", "y")
    assert post_or_ask(desk.post, {}, as_json=False) == "done"
    assert desk.asked[-1] == {"choose": "next", "confirmed": True}


@pytest.mark.parametrize("as_json", [True, False])
def test_with_json_or_without_a_terminal_nothing_is_asked(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], *, as_json: bool
) -> None:
    monkeypatch.setattr(asking, "is_terminal", lambda: as_json)
    desk = Desk(("--last", "--next"))
    with pytest.raises(NeedsAnswer) as refused:
        post_or_ask(desk.post, {}, as_json=as_json)
    assert str(refused.value).endswith("Say --last or --next.")
    assert capsys.readouterr() == ("", "")


def test_every_option_that_answers_alone_has_its_question() -> None:
    assert set(PROMPTS) == {"--locked-out", "--yes", "--mark-mistyped"}
    assert all(text.endswith("?") for text in PROMPTS.values())


# --- a real terminal ---------------------------------------------------------------------------------

PROGRAM = """
import os, signal, sys
signal.signal(signal.SIGINT, signal.default_int_handler)  # ignored where the tests run in the background
if sys.stdin.isatty():
    os.close(os.open(os.ttyname(0), os.O_RDWR))  # a session's leader gets its terminal so, and with it Ctrl-C
from cli.asking import post_or_ask
from cli.main import revmark, main
from config.errors import NeedsAnswer
import click

def post(body):
    if not body.get("locked_out"):
        raise NeedsAnswer("No pulses is not standstill.", "Say --locked-out.", options=("--locked-out",))
    return "stored"

@click.command()
def command():
    click.echo(post_or_ask(post, {}, as_json="--json" in sys.argv))

revmark.get_command = lambda ctx, name: command
main(["weight"])
"""


def _conversation(ours: int, typed: bytes) -> bytes:
    """What is shown up to the end; types when the question is there, and Ctrl-C again until it is heeded.

    A signal that comes just before Python's C code waits for a line is seen only after that line.
    """
    shown, until, type_at = b"", time.monotonic() + LIMIT_S, None
    while (now := time.monotonic()) < until:
        if b"[y/N]" in shown and (type_at is None or (typed == b"\x03" and now > type_at + 0.5)):
            type_at = now
            with suppress(OSError):  # it has ended already
                os.write(ours, typed)
        if not select.select([ours], [], [], 0.1)[0]:
            continue
        try:
            piece = os.read(ours, 4096)
        except OSError:  # Linux: the other end is closed
            break
        if not piece:
            break
        shown += piece
    return shown


def on_a_terminal(typed: str, *words: str) -> tuple[int, str]:
    """Exit code and everything that a real (pseudo-) terminal shows."""
    import pty

    ours, theirs = pty.openpty()
    try:
        child = subprocess.Popen(
            [sys.executable, "-c", PROGRAM, *words],
            stdin=theirs,
            stdout=theirs,
            stderr=theirs,
            start_new_session=True,
        )
    finally:
        os.close(theirs)
    try:
        shown = _conversation(ours, typed.encode())
        return child.wait(LIMIT_S), shown.decode()
    finally:
        child.kill()
        child.wait()
        with suppress(OSError):
            os.close(ours)


@pytest.mark.skipif(sys.platform == "win32", reason="allowed: there is no pty on Windows")
@pytest.mark.parametrize(
    ("typed", "words", "code", "shown"),
    [
        ("y\n", (), 0, r"No pulses is not standstill\.\s+Is the drive locked out.*\[y/N\].*stored\s*$"),
        ("n\n", (), 1, r"\[y/N\].*revmark: No pulses is not standstill\. Say --locked-out\.\s*$"),
        ("\x03", (), 1, r"\[y/N\].*Given up; nothing more was done\.\s*$"),
        ("\x04", (), 1, r"\[y/N\].*Given up; nothing more was done\.\s*$"),
        ("", ("--json",), 1, r"^revmark: No pulses is not standstill\. Say --locked-out\.\s*$"),
    ],
)
def test_on_a_real_terminal(typed: str, words: tuple[str, ...], code: int, shown: str) -> None:
    ended, screen = on_a_terminal(typed, *words)
    assert ended == code, screen
    assert re.search(shown, screen, re.DOTALL), screen
    assert "Traceback" not in screen


@pytest.mark.parametrize("stdin", [subprocess.DEVNULL, subprocess.PIPE])
def test_without_a_terminal_it_is_a_refusal_and_waits_for_nothing(stdin: int) -> None:
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM],
        capture_output=True,
        text=True,
        timeout=LIMIT_S,
        **({"stdin": stdin} if stdin == subprocess.DEVNULL else {"input": "y\n"}),
    )
    assert done.returncode == 1
    assert (done.stdout, done.stderr) == ("", "revmark: No pulses is not standstill. Say --locked-out.\n")
