"""``revmark mark``: label a reading, waiting for it where need be. Imports nothing heavy."""

from __future__ import annotations

import time
from typing import Any

import click

from cli.asking import post_or_ask
from cli.client import Client, find, new_key
from cli.marked import print_marked
from cli.output import json_option, operator_option, print_json, stand_option, warn
from config.errors import DaemonError, Refusal

LABELS = ["O", "O+T", "check", "trim", "slow-roll"]
ASK_EVERY_S = 2.0
SLOW_RETRY_S = 1.0
LOST_FOR_S = 30.0


@click.command(context_settings={"max_content_width": 80})
@click.argument("label", type=click.Choice(LABELS), required=False)
@stand_option
@click.option("--last", "choose", flag_value="last", help="The newest run's reading is meant.")
@click.option("--next", "choose", flag_value="next", help="The next run is meant.")
@click.option("--no-wait", is_flag=True, help="Come back at once; the mark stays pending.")
@click.option("--wait", is_flag=True, help="Wait for the mark that is pending, or say how the newest ended.")
@click.option("--cancel", is_flag=True, help="Cancel the mark that is pending.")
@click.option("--timeout", metavar="SECONDS", type=float, help="Cancel when it takes longer than this.")
@click.option("--yes", is_flag=True, help="The weights are as they are meant to be.")
@operator_option
@json_option
def command(
    label: str | None,
    stand: str | None,
    choose: str | None,
    timeout: float | None,
    operator: str,
    **flags: bool,
) -> int:
    """Label a run's reading: O, O+T, check, trim or slow-roll.

    While the rotor turns, a reading is taken from now, as soon as it is steady; with no pulses, the
    next run's. Prints the vectors and the run's number.
    """
    _check_usage(label, flags)
    client = Client(find(stand))
    if flags["cancel"]:
        return _end(client.post("/v1/mark/cancel", {"key": new_key()}), flags)
    if flags["wait"] and label is None:
        key = client.get("/v1/mark/newest")["key"]
    else:
        body = {"label": label, "choose": choose, "confirmed": flags["yes"], "who": operator}
        key = new_key()
        answer = post_or_ask(lambda b: _send(client, b), {"key": key, **body}, as_json=flags["as_json"])
        if flags["no_wait"] or answer["mark"]["state"] != "pending":
            return _end(answer, flags)
    return _wait(client, key, timeout, flags)


def _check_usage(label: str | None, flags: dict[str, bool]) -> None:
    if flags["cancel"] and (label or flags["wait"]):
        raise click.UsageError("--cancel takes no label and no --wait.")
    if not label and not flags["cancel"] and not flags["wait"]:
        raise click.UsageError(f"Name the label: {', '.join(LABELS)}.")
    if flags["wait"] and flags["no_wait"]:
        raise click.UsageError("--wait and --no-wait exclude each other.")


def _send(client: Client, body: dict[str, Any]) -> Any:
    """Ask; a broken connection is tried once more under the same key, so it is never a second mark."""
    try:
        return client.post("/v1/mark", body)
    except DaemonError:
        time.sleep(SLOW_RETRY_S)
        return client.post("/v1/mark", body)


def _wait(client: Client, key: str, timeout: float | None, flags: dict[str, bool]) -> int:
    until = None if timeout is None else time.monotonic() + timeout
    told = ""
    try:
        while True:
            answer = _state(client, key, until)
            if answer["mark"]["state"] != "pending":
                return _end(answer, flags)
            if until is not None and time.monotonic() >= until:
                return _cancel(client, key, flags)
            if answer["waits_for"] != told and not flags["as_json"]:
                told = answer["waits_for"]
                warn(f"waiting: {told}")
    except KeyboardInterrupt:
        return _cancel(client, key, flags)


def _state(client: Client, key: str, until: float | None) -> Any:
    wait_s = ASK_EVERY_S if until is None else max(0.0, min(ASK_EVERY_S, until - time.monotonic()))
    lost_at = time.monotonic()
    while True:
        try:
            return client.get(f"/v1/mark/state/{key}?wait_s={wait_s:.3f}", wait_s)
        except DaemonError as error:
            if time.monotonic() - lost_at > LOST_FOR_S:
                raise DaemonError(
                    f"{error.cause} The mark stays pending.",
                    "When the daemon runs again: revmark mark --wait, or --cancel.",
                ) from error
            time.sleep(SLOW_RETRY_S)


def _cancel(client: Client, key: str, flags: dict[str, bool]) -> int:
    return _end(client.post("/v1/mark/cancel", {"key": new_key(), "mark": key}), flags)


def _end(answer: Any, flags: dict[str, bool]) -> int:
    state = answer["mark"]["state"]
    if flags["as_json"]:
        print_json(answer)
    elif state in ("labelled", "pending"):
        print_marked(answer)
    if state == "missed":
        raise Refusal(
            f"The run ended without a reading that fits: {answer['mark']['detail']}",
            "Run again longer at the balancing speed, and mark again.",
        )
    if state == "cancelled" and not flags["cancel"]:
        raise Refusal("The mark was cancelled.", "Nothing was labelled; mark again when ready.")
    if state == "cancelled" and not flags["as_json"]:
        print_marked(answer)
    return 0
