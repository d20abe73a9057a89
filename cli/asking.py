"""Questions that the daemon has: asked on a terminal, left a refusal anywhere else."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import click

from cli.output import is_terminal, warn
from config.errors import NeedsAnswer

Body = dict[str, Any]

ANSWERS: dict[str, Body] = {
    "--locked-out": {"locked_out": True},
    "--yes": {"confirmed": True},
    "--last": {"choose": "last"},
    "--next": {"choose": "next"},
    "--mark-moved": {"mark_change": "moved"},
    "--mark-mistyped": {"mark_change": "mistyped"},
}
"""What each option says to the control channel."""


def post_or_ask(post: Callable[[Body], Any], body: Body, *, as_json: bool) -> Any:
    """Post ``body``; a question is asked on a terminal and answered by posting again.

    Raises NeedsAnswer, naming the options, with ``--json``, without a terminal, and when the answer is no.
    """
    try:
        return post(body)
    except NeedsAnswer as question:
        if as_json or not is_terminal():
            raise
        return post_or_ask(post, {**body, **_answer(question)}, as_json=as_json)


def _answer(question: NeedsAnswer) -> Body:
    warn(question.cause)
    if len(question.options) > 1:
        names = [o.removeprefix("--") for o in question.options]
        chosen = click.prompt("Which is meant", type=click.Choice([*names, "neither"]), err=True)
        if chosen == "neither":
            raise question
        return ANSWERS[f"--{chosen}"]
    if not click.confirm(PROMPTS[question.options[0]], err=True):
        raise question
    return ANSWERS[question.options[0]]


PROMPTS = {
    "--locked-out": "Is the drive locked out, and have you seen the rotor at rest?",
    "--yes": "Go on all the same?",
    "--mark-mistyped": "Was it mistyped before, and is it right now?",
}
