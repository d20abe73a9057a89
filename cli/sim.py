"""``revmark sim``: work the simulated rotor, or start the next recording of a replaying stand."""

from __future__ import annotations

from typing import Any

import click

from cli.client import Client, find, new_key
from cli.output import clean, json_option, print_json, say, stand_option
from cli.typed import Quantity, Speed

FAULTS = ("dropout", "clip", "missed", "double", "unplug")


@click.group(help="Work the simulated rotor, or the next recording. A real rotor is never started from here.")
def group() -> None: ...


def _act(stand: str | None, verb: str, body: dict[str, Any], *, as_json: bool) -> None:
    answer = Client(find(stand)).post(f"/v1/sim/{verb}", {"key": new_key(), **body})
    if as_json:
        print_json(answer)
    else:
        say(clean(answer["said"]))


@group.command()
@stand_option
@click.option("--rpm", "speed_hz", type=Speed(), metavar="SPEED",
              help="Speed to run up to, such as 1500; default: the stand file's.")  # fmt: skip
@json_option
def start(stand: str | None, speed_hz: float | None, *, as_json: bool) -> None:
    """Run the simulated rotor up, with the weights fitted now."""
    _act(stand, "start", {"speed_hz": speed_hz}, as_json=as_json)


@group.command()
@stand_option
@json_option
def stop(stand: str | None, *, as_json: bool) -> None:
    """Let the simulated rotor coast down."""
    _act(stand, "stop", {}, as_json=as_json)


@group.command(name="next")
@stand_option
@click.argument("file", required=False)
@json_option
def next_(stand: str | None, file: str | None, *, as_json: bool) -> None:
    """Play the next recording of a replaying stand, or FILE."""
    _act(stand, "next", {"file": file}, as_json=as_json)


@group.command()
@stand_option
@click.argument("kind", type=click.Choice(FAULTS))
@click.option("--for", "seconds", type=Quantity("time", 1e-6), metavar="TIME", default="1 s",
              show_default=True, help="How long it lasts.")  # fmt: skip
@click.option("--channel", metavar="NAME", help="The probe to clip.")
@click.option("--every", type=click.IntRange(1, 1000), help="Miss one pulse in so many; 1 = all.")
@json_option
def fault(
    stand: str | None, kind: str, seconds: float, channel: str | None, every: int | None, *, as_json: bool
) -> None:
    """Inject a fault into the simulated source: dropout, clip, missed, double or unplug."""
    body = {"kind": kind, "seconds": seconds, "channel": channel, "every": every}
    _act(stand, "fault", body, as_json=as_json)
