"""``revmark weight``: what is put on and taken off the rotor, and what to try."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import click

from cli.asking import post_or_ask
from cli.client import Client, find, new_key
from cli.flagged import flag_lines
from cli.output import (
    ANGLES,
    angle,
    clean,
    json_option,
    operator_option,
    print_json,
    say,
    stand_option,
    table,
    warn,
)
from cli.typed import Quantity

Json = Mapping[str, Any]


@click.group(help="Weights: advice, fitted, removed, drilled, listed, voided.")
def group() -> None: ...


def _place_options(function: Any) -> Any:
    for option in (
        click.option("--locked-out", is_flag=True, help="The drive is locked out, the rotor seen at rest."),
        click.option("--yes", "confirmed", is_flag=True, help="A taken hole, or so heavy a piece, is meant."),
        click.option("--after", metavar="RUN", help="It was done after this run (a late entry)."),
        click.option("--radius", type=Quantity("length", 1e-3), help="Default: the plane's radius."),
        click.option("--at", "angle_deg", type=Quantity("angle"), metavar="ANGLE",
                     help="Angle from the rotor mark, against rotation."),
        click.option("--hole", type=click.IntRange(1, 1000), help="Hole, as numbered on the plane."),
        click.option("--plane", required=True, type=click.IntRange(1, 99), help="Weight plane."),
    ):  # fmt: skip
        function = option(function)
    return function


def _add(
    mass_g: float, stand: str | None, operator: str, told: dict[str, Any], *, drilled: bool, as_json: bool
) -> Json:
    if (told["hole"] is None) == (told["angle_deg"] is None):
        raise click.UsageError("Say where: --hole or --at.")
    body = {
        "key": new_key(),
        "who": operator,
        "piece": {
            "plane": told["plane"],
            "mass_g": mass_g,
            "hole": told["hole"],
            "angle_deg": told["angle_deg"],
            "radius_mm": told["radius"],
        },
        "drilled": drilled,
        "locked_out": told["locked_out"],
        "confirmed": told["confirmed"],
        "after": told["after"],
    }
    client = Client(find(stand))
    answer: Json = post_or_ask(lambda b: client.post("/v1/weight", b), body, as_json=as_json)
    return answer


@group.command(context_settings={"max_content_width": 80})
@click.argument("mass", type=Quantity("mass", 1e-6))
@stand_option
@_place_options
@operator_option
@json_option
def fit(mass: float, stand: str | None, operator: str, *, as_json: bool, **told: Any) -> None:
    """Record a weight of MASS (3.0g) fitted in a plane, in a hole or at an angle."""
    _told(_add(mass, stand, operator, told, drilled=False, as_json=as_json), as_json=as_json)


@group.command(context_settings={"max_content_width": 80})
@click.argument("mass", type=Quantity("mass", 1e-6))
@stand_option
@_place_options
@operator_option
@json_option
def drill(mass: float, stand: str | None, operator: str, *, as_json: bool, **told: Any) -> None:
    """Record that MASS was drilled away at a place."""
    _told(_add(mass, stand, operator, told, drilled=True, as_json=as_json), as_json=as_json)


@group.command(context_settings={"max_content_width": 80})
@stand_option
@click.option("--plane", required=True, type=click.IntRange(1, 99), help="Weight plane.")
@click.option("--hole", type=click.IntRange(1, 1000), help="Only what is in this hole.")
@click.option("--at", "angle_deg", type=Quantity("angle"), help="Only what was fitted at this angle.")
@click.option("--all", "every", is_flag=True, help="Everything fitted in the plane.")
@click.option("--after", metavar="RUN", help="It was done after this run (a late entry).")
@click.option("--locked-out", is_flag=True, help="The drive is locked out and the rotor seen at rest.")
@operator_option
@json_option
def remove(stand: str | None, operator: str, *, as_json: bool, **told: Any) -> None:
    """Record weights taken off a plane."""
    if told["every"] == (told["hole"] is not None):
        raise click.UsageError("Say what came off: --hole or --all.")
    body = {
        "key": new_key(),
        "who": operator,
        "plane": told["plane"],
        "hole": told["hole"],
        "angle_deg": told["angle_deg"],
        "all": told["every"],
        "after": told["after"],
        "locked_out": told["locked_out"],
    }
    client = Client(find(stand))
    answer = post_or_ask(lambda b: client.post("/v1/weight/remove", b), body, as_json=as_json)
    _told(answer, as_json=as_json)


def _told(answer: Json, *, as_json: bool) -> None:
    if as_json:
        print_json(answer)
    else:
        say(*(f"{w['act']}: {place(w)}" for w in answer["weights"]))
        if any(w["hole"] is None for w in answer["weights"]):
            say(ANGLES)
    force = [answer["force"]["caution"]] if answer.get("force") else []
    for line in (*force, *answer.get("cautions", [])):
        warn(f"caution: {clean(line)}")


def place(weight: Json) -> str:
    """``plane 1 hole 16, 3.0 g at 140 mm``."""
    where = f"hole {weight['hole']}" if weight["hole"] is not None else f"at {weight['angle_deg']:.1f} deg"
    return f"plane {weight['plane']} {where}, {weight['mass_g']:g} g at {weight['radius_mm']:g} mm"


@group.command(context_settings={"max_content_width": 80})
@click.argument("number", type=click.IntRange(1, 2**53))
@click.argument("why")
@stand_option
@operator_option
@json_option
def void(number: int, why: str, stand: str | None, operator: str, *, as_json: bool) -> None:
    """Take a wrong entry out, by its NUMBER in weight list --all, saying WHY.

    It stays in the store. The removal of a voided piece goes with it. Type the right entry with --after.
    """
    body = {"key": new_key(), "who": operator, "number": number, "why": why}
    answer = Client(find(stand)).post("/v1/weight/void", body)
    if as_json:
        print_json(answer)
    else:
        say(*(f"entry {w['number']} no longer counts: {w['act']}, {place(w)}" for w in answer["weights"]))


@group.command(name="list", context_settings={"max_content_width": 80})
@stand_option
@click.option("--all", "every", is_flag=True, help="Every entry of the mount with its number, void ones too.")
@click.option("--job", metavar="NUMBER", help="With --all: the entries of every mount of this job.")
@json_option
def list_(stand: str | None, job: str | None, *, every: bool, as_json: bool) -> None:
    """What is fitted on the mounted rotor now."""
    if job and not every:
        raise click.UsageError("--job goes with --all.")
    if every:
        _list_entries(stand, job, as_json=as_json)
    else:
        _list_fitted(stand, as_json=as_json)


def _list_entries(stand: str | None, job: str | None, *, as_json: bool) -> None:
    from cli.place import reading
    from config.errors import Refusal
    from store import consult

    with reading(stand) as history:
        current = history.current_mount()
        if current is None and not job:
            raise Refusal("Nothing is mounted.", "Name a job with --job.")
        mounts = history.mounts(job) if job else (current,) if current else ()
        entries = consult.weight_entries(history, mounts)
    if as_json:
        print_json(entries)
        return
    rows = [
        (w["number"], w["act"], place(w), clean(w["after_run"] or "the mount"), clean(w["who"]),
         clean(w["void"] or ""))
        for w in entries
    ]  # fmt: skip
    say(table(rows, ["number", "act", "where", "after", "who", "void"], "rlllll"))


def _list_fitted(stand: str | None, *, as_json: bool) -> None:
    from cli.place import reading
    from config.errors import Refusal
    from store import asjson
    from store.casework_scene import fitted_piece

    with reading(stand) as history:
        mount = history.current_mount()
        if mount is None:
            raise Refusal("Nothing is mounted.", "Mount a machine with: revmark mount")
        set_up, events = history.newest_set_up(), history.weights(mount.id)
    placed = [fitted_piece(e, mount, set_up.ends).angle_deg if set_up else e.angle_deg for e in events]
    weights = [
        {**asjson.weight_json(e), "against_rotation_deg": degrees}
        for e, degrees in zip(events, placed, strict=True)
    ]
    if as_json:
        print_json(weights)
        return
    rows = [
        (w["plane"], w["act"], w["hole"] or "-",
         "not known" if w["against_rotation_deg"] is None else angle(w["against_rotation_deg"]),
         f"{w['mass_g']:g}", f"{w['radius_mm']:g}", w["who"])
        for w in weights
    ]  # fmt: skip
    say(table(rows, ["plane", "act", "hole", "angle deg", "mass g", "radius mm", "who"], "rlrrrrl"), ANGLES)


@group.command(context_settings={"max_content_width": 80})
@stand_option
@click.option("--plane", required=True, type=click.IntRange(1, 99), help="Weight plane.")
@click.option("--job", metavar="NUMBER", help="Default: the job of the mounted machine.")
@json_option
def advise(stand: str | None, plane: int, job: str | None, *, as_json: bool) -> None:
    """A trial weight for a plane: mass, place if it may be named, force, and why."""
    from cli.place import newest_job, reading
    from store import consult
    from store.balance.cautions import WEIGHT_FIT

    with reading(stand) as history:
        advice = consult.trial(history, job or newest_job(history), plane).to_dict()
    if as_json:
        print_json(advice)
        return
    say(*_advised(advice))
    for line in WEIGHT_FIT:
        warn(f"caution: {line}")


def _advised(advice: Json) -> list[str]:
    lines = [
        f"trial weight for plane {advice['plane']}: {advice['mass_g']:.1f} g at {advice['radius_mm']:g} mm"
    ]
    if advice["hole"] is not None:
        degrees = angle(advice["hole_against_rotation_deg"])
        lines.append(f"  in hole {advice['hole']} ({degrees} deg from the rotor mark, against rotation)")
    elif advice["place_against_rotation_deg"] is not None:
        lines.append(
            f"  at {angle(advice['place_against_rotation_deg'])} deg from the rotor mark, against rotation"
        )
    else:
        lines.append("  no place can be named: choose one, and note it")
    load = advice["static_load_kg"] * 9.80665
    share = 100 * advice["force_n"] / load
    lines.append(
        f"  force {advice['force_n']:.1f} N at {advice['speed_hz'] * 60:.0f} r/min, "
        f"{share:.1f} % of the static load"
    )
    words = (f"  {clean(text)}" for text in (*advice["why"], *advice["notes"]))
    return [*lines, *words, *(f"  {line}" for line in flag_lines(advice["flags"]))]
