"""``revmark mount``: which machine stands on the stand, and how."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import click

from cli.asking import post_or_ask
from cli.client import Client, find, new_key
from cli.output import clean, json_option, operator_option, print_json, say, stand_option
from cli.typed import PieceType, Quantity, RotorMarkType, SenseType, Speed


@click.command(context_settings={"max_content_width": 80})
@click.argument("machine", required=False)
@stand_option
@click.option("--job", metavar="NUMBER", help="The shop's job number.")
@click.option("--rotation", type=SenseType(), metavar="SENSE", help='Such as "clockwise from drive".')
@click.option("--mark-at", "marks", multiple=True, type=RotorMarkType(), metavar="ANGLE",
              help="Where the rotor mark's triggering edge is: angle from hole 1, counted as the holes "
                   "are numbered; 7.5deg, or 1=7.5deg for plane 1.")  # fmt: skip
@click.option("--mark-how", metavar="TEXT", help="How that was measured; without it nothing is reused.")
@click.option("--mark-width", type=Quantity("angle"), metavar="ANGLE", help="Width of the rotor mark.")
@click.option("--mark-moved", is_flag=True, help="The rotor mark is elsewhere than in this job's last mount.")
@click.option("--mark-mistyped", is_flag=True,
              help="Its place was mistyped in this job's last mount; that is put right.")  # fmt: skip
@click.option("--support", default="", metavar="TEXT", help="What it stands on: rigid, soft, own base.")
@click.option("--coupling", default="", metavar="TEXT", help="What drives it: solo, belt, coupled.")
@click.option("--clean", "is_clean", is_flag=True, help="No balance weights are fitted.")
@click.option("--fitted", multiple=True, type=PieceType(), metavar="WEIGHT",
              help='A weight fitted already: "plane 1 hole 3 2.1g".')  # fmt: skip
@click.option("--carry-over", is_flag=True, help="Fitted is what was fitted in this job's last mount.")
@click.option("--rpm", "speeds", multiple=True, type=Speed(), metavar="SPEED",
              help="Balancing speed; default: the service speed.")  # fmt: skip
@click.option("--none", "off", is_flag=True, help="The machine is off the stand.")
@operator_option
@json_option
def command(machine: str | None, stand: str | None, operator: str, *, as_json: bool, **told: Any) -> None:
    """Say which machine stands on the stand, and how. It ends the mount before it.

    A new mount is needed whenever the rotor was taken off and put back. Refused while turning.
    """
    if told["off"]:
        if machine:
            raise click.UsageError("--none takes no machine.")
        answer = Client(find(stand)).post("/v1/unmount", {"key": new_key(), "who": operator})
        print_json(answer) if as_json else say("Nothing is mounted now.")
        return
    _check_usage(machine, told)
    client = Client(find(stand))
    body = _body(str(machine), operator, told)
    answer = post_or_ask(lambda b: client.post("/v1/mount", b), body, as_json=as_json)
    print_json(answer) if as_json else say(*_described(answer, told))


def _check_usage(machine: str | None, told: Mapping[str, Any]) -> None:
    if not machine or not told["job"] or not told["rotation"]:
        raise click.UsageError("A mount needs the machine, --job and --rotation (or --none).")
    if sum([told["is_clean"], bool(told["fitted"]), told["carry_over"]]) != 1:
        raise click.UsageError("Say what is fitted already: one of --clean, --fitted or --carry-over.")
    if told["mark_moved"] and told["mark_mistyped"]:
        raise click.UsageError("--mark-moved and --mark-mistyped exclude each other.")


def _body(machine: str, operator: str, told: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "key": new_key(),
        "who": operator,
        "serial": machine,
        "job": told["job"],
        "rotation": told["rotation"],
        "marks": [{"plane": plane, "from_hole1_deg": degrees} for plane, degrees in told["marks"]],
        "mark_how": told["mark_how"],
        "mark_width_deg": told["mark_width"],
        "support": told["support"],
        "coupling": told["coupling"],
        "fitted": list(told["fitted"]),
        "carry_over": told["carry_over"],
        "mark_change": "moved" if told["mark_moved"] else "mistyped" if told["mark_mistyped"] else None,
        "speeds_hz": list(told["speeds"]),
    }


def _described(mount: Mapping[str, Any], told: Mapping[str, Any]) -> list[str]:
    what = f"{clean(mount['machine'])} (model {clean(mount['model'])})"
    lines = [f"{what} is mounted for job {clean(mount['job'])}, turning {clean(mount['rotation'])}."]
    fitted = "clean" if told["is_clean"] else f"{len(told['fitted'])} weights listed"
    lines.append(f"Fitted already: {'as in its last mount' if told['carry_over'] else fitted}.")
    for mark in mount["marks"]:
        lines.append(f"Plane {mark['plane']}: rotor mark {mark['from_hole1_deg']:g} deg from hole 1.")
    if not mount["marks"]:
        lines.append("The rotor mark's place is not given: no holes can be named, and nothing is reused.")
    elif mount["mark_how"] is None:
        lines.append("How the mark was measured is not given (--mark-how): nothing is reused.")
    return lines
