"""``revmark mark``: label a reading, waiting for it where need be. Imports nothing heavy."""

from __future__ import annotations

import time
from collections.abc import Callable
from contextlib import suppress
from typing import Any

import click

from cli.asking import post_or_ask
from cli.client import Client, find, new_key
from cli.marked import print_marked
from cli.output import json_option, operator_option, print_json, stand_option, warn
from cli.typed import Number
from config.errors import DaemonError, Refusal

LABELS = ["O", "O+T", "check", "trim", "slow-roll"]
ASK_EVERY_S = 2.0
RETRY_S = 0.5
SEND_FOR_S, LOST_FOR_S = 3.0, 30.0
"""How long a daemon may be away, at the question and while it is waited for."""


@click.command(context_settings={"max_content_width": 80})
@click.argument("label", type=click.Choice(LABELS), required=False)
@stand_option
@click.option("--last", is_flag=True,
              help="The reading of the job's newest run is meant: the one with the highest number, a run "
                   "assigned later too.")  # fmt: skip
@click.option("--next", is_flag=True, help="The next run is meant.")
@click.option("--run", metavar="NAME", help="A reading of this run is meant, such as 0142/3, of any job.")
@click.option("--reading", type=click.IntRange(1, 10**9), metavar="N",
              help="Which of that run's readings; default: the newest that can take the label.")  # fmt: skip
@click.option("--no-wait", is_flag=True, help="Come back at once; the mark stays pending.")
@click.option("--wait", is_flag=True, help="Wait for the mark that is pending, or say how the newest ended.")
@click.option("--cancel", is_flag=True, help="Cancel the mark that is pending.")
@click.option("--timeout", metavar="SECONDS", type=Number(), help="Cancel when it takes longer than this.")
@click.option("--yes", is_flag=True, help="The weights, or another label than it has, are as meant.")
@operator_option
@json_option
def command(
    label: str | None,
    stand: str | None,
    timeout: float | None,
    operator: str,
    run: str | None,
    reading: int | None,
    **flags: bool,
) -> int:
    """Label a run's reading: O, O+T, check, trim or slow-roll.

    While the rotor turns, a reading is taken from now, as soon as it is steady; with no pulses, the
    next run's. Prints the vectors and the run's number.
    """
    _check_usage(label, flags)
    _check_run(label, run, reading, flags)
    link = Link(stand)
    if flags["cancel"]:
        return _end(link.client.post("/v1/mark/cancel", {"key": new_key()}), flags)
    if flags["wait"] and label is None:
        return _wait(link, link.client.get("/v1/mark/newest")["key"], timeout, flags)
    key = new_key()
    choose = "last" if flags["last"] else "next" if flags["next"] else None
    body = {"key": key, "label": label, "choose": choose, "confirmed": flags["yes"], "who": operator}
    which: dict[str, Any] = {"run": run, "reading": reading} if run else {}
    try:
        answer = post_or_ask(link.mark, {**body, **which}, as_json=flags["as_json"])
    except KeyboardInterrupt:
        return _cancel(link, key, flags)
    if flags["no_wait"] or answer["mark"]["state"] != "pending":
        return _end(answer, flags)
    return _wait(link, key, timeout, flags)


class Link:
    """The daemon of the stand; found again when it does not answer, because it may have been restarted."""

    def __init__(self, stand: str | None) -> None:
        self.client = Client(find(stand))

    def mark(self, body: dict[str, Any]) -> Any:
        """Ask for a mark; asked again under the same key, so that it is never a second mark."""
        return self._again(lambda client: client.post("/v1/mark", body), SEND_FOR_S)

    def state(self, key: str, wait_s: float) -> Any:
        path = f"/v1/mark/state/{key}?wait_s={wait_s:.3f}"
        return self._again(lambda client: client.get(path, wait_s), LOST_FOR_S)

    def _again(self, ask: Callable[[Client], Any], for_s: float) -> Any:
        until = time.monotonic() + for_s
        while True:
            try:
                return ask(self.client)
            except DaemonError as error:
                if time.monotonic() > until:
                    raise _stays(error) from error
            time.sleep(RETRY_S)
            with suppress(DaemonError):
                self.client = Client(find(self.client.address.stand_file))


def _stays(error: DaemonError) -> DaemonError:
    return DaemonError(
        f"{error.cause} A mark that it took stays pending.",
        "When the daemon runs again: revmark mark --wait, or --cancel.",
    )


def _check_usage(label: str | None, flags: dict[str, bool]) -> None:
    if flags["cancel"] and (label or flags["wait"]):
        raise click.UsageError("--cancel takes no label and no --wait.")
    if not label and not flags["cancel"] and not flags["wait"]:
        raise click.UsageError(f"Name the label: {', '.join(LABELS)}.")
    if flags["last"] and flags["next"]:
        raise click.UsageError("--last and --next exclude each other.")
    if flags["wait"] and flags["no_wait"]:
        raise click.UsageError("--wait and --no-wait exclude each other.")


def _check_run(label: str | None, run: str | None, reading: int | None, flags: dict[str, bool]) -> None:
    if reading is not None and not run:
        raise click.UsageError("--reading needs its --run.")
    if run and (label is None or flags["last"] or flags["next"]):
        raise click.UsageError("--run takes a label, and neither --last nor --next.")


def _wait(link: Link, key: str, timeout: float | None, flags: dict[str, bool]) -> int:
    until = None if timeout is None else time.monotonic() + timeout
    told, wait_s = "", 0.0
    try:
        while True:
            left = ASK_EVERY_S if until is None else max(0.0, until - time.monotonic())
            answer = link.state(key, min(wait_s, left))
            wait_s = ASK_EVERY_S
            if answer["mark"]["state"] != "pending":
                return _end(answer, flags)
            if until is not None and time.monotonic() >= until:
                return _cancel(link, key, flags)
            if answer["waits_for"] != told and not flags["as_json"]:
                told = answer["waits_for"]
                warn(f"waiting: {told}")
    except KeyboardInterrupt:
        return _cancel(link, key, flags)


def _cancel(link: Link, key: str, flags: dict[str, bool]) -> int:
    """Cancel; a question interrupted on its way may reach the daemon after the first try."""
    body = {"key": new_key(), "mark": key}
    try:
        try:
            answer = link.client.post("/v1/mark/cancel", body)
        except Refusal:
            time.sleep(RETRY_S)
            answer = link.client.post("/v1/mark/cancel", body)
    except DaemonError as error:
        raise _stays(error) from error
    return _end(answer, flags)


def _end(answer: Any, flags: dict[str, bool]) -> int:
    state = answer["mark"]["state"]
    if flags["as_json"]:
        print_json(answer)
    elif state in ("labelled", "pending"):
        print_marked(answer)
    if state == "missed":
        raise Refusal(
            f"The run ended without a reading that fits: {answer['mark']['detail'].rstrip('.')}.",
            "Run again longer at the balancing speed, and mark again.",
        )
    if state == "cancelled" and not flags["cancel"]:
        raise Refusal("The mark was cancelled.", "Nothing was labelled; mark again when ready.")
    if state == "cancelled" and not flags["as_json"]:
        print_marked(answer)
    return 0
