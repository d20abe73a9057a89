"""``revmark stand``: make, check and describe stand files. Parses, calls, prints."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from cli.output import clean, json_option, print_json, say, table
from config.errors import Refusal, StandFileError
from config.templates import template_names, template_text

if TYPE_CHECKING:
    from config.stand import Stand


@click.group("stand")
def group() -> None:
    """Make and check stand files."""


@group.command("new")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--like",
    "template",
    required=True,
    type=click.Choice(template_names()),
    metavar="NAME",
    help=f"The stand to start from: {', '.join(template_names())}.",
)
def new(file: Path, template: str) -> None:
    """Write a commented stand file to FILE. Nothing is ever overwritten."""
    try:
        with file.open("x", encoding="utf-8") as out:
            out.write(template_text(template))
    except FileExistsError as error:
        raise Refusal(f"{file} exists already.", "Choose another name, or remove it first.") from error
    except FileNotFoundError as error:
        raise Refusal(f"There is no folder {file.parent}.", "Make it first.") from error
    except OSError as error:
        raise Refusal(f"{file} cannot be written: {error.strerror}.", "Choose another place.") from error
    say(f"Wrote {file}.", f"Look it through, then: revmark stand check {file}")


@group.command("check")
@click.argument("file", type=click.Path(path_type=Path), envvar="REVMARK_STAND")
@click.option("--live", is_flag=True, help="Open the source and look at each channel for a few seconds.")
@click.option("--seconds", type=click.FloatRange(1, 60), default=4, show_default=True, help="How long.")
@json_option
def check(file: Path, *, live: bool, seconds: float, as_json: bool) -> int:
    """Name every mistake in FILE at once, or say that it is right.

    With --live the source is opened too (the daemon must not be using it) and each channel reported.
    """
    from config.stand import check_stand
    from daq.drivers.registry import options_problems

    try:
        stand = check_stand(file, options_problems)
    except StandFileError as error:
        if not as_json:
            raise
        print_json({"ok": False, "file": str(file), **error.as_dict()})
        raise click.exceptions.Exit(1) from error
    if live:
        from cli.livecheck import print_live

        return print_live(stand, seconds, as_json=as_json)
    if as_json:
        print_json(_summary(stand))
    else:
        say(*_lines(stand))
    return 0


@group.command("schema")
def schema() -> None:
    """Print the JSON schema of a stand file."""
    from config.stand import stand_schema

    print_json(stand_schema())


def _summary(stand: Stand) -> Mapping[str, Any]:
    return {
        "ok": True,
        "file": str(stand.file),
        "stand": stand.name,
        "driver": stand.source.driver,
        "store": str(stand.store_path),
        "once_per_rev": stand.pulse.model_dump(),
        "channels": [c.model_dump(exclude={"shown"}) | {"show": c.display.name} for c in stand.channels],
        "steadiness": {"preset": stand.steadiness_keys.preset, **stand.steadiness.to_dict()},
        "surroundings": stand.surroundings.model_dump(),
        "run": stand.run.model_dump(),
    }


def _lines(stand: Stand) -> list[str]:
    limits, preset = stand.steadiness, stand.steadiness_keys.preset
    steady = f"{limits.window_s:g} s and {limits.min_revolutions} turns at least"
    return [
        f"{stand.file.name} is right: stand {clean(stand.name)}, driver {clean(stand.source.driver)}.",
        f"Angles run clockwise seen from {clean(stand.identity.angles_seen_from)}.",
        f"Zero is {clean(stand.identity.zero)}.",
        table(_rows(stand), ("channel", "input", "sensitivity or edge", "deg", "shown"), "lllrl"),
        f"Steady ({preset}): {steady}, lookback {limits.lookback_s:g} s, hold {limits.hold_s:g} s.",
        *_around(stand),
        f"Store: {clean(stand.store_path)}",
    ]


def _around(stand: Stand) -> list[str]:
    """XY pairs, and what else vibrates nearby."""
    near, pairs = stand.surroundings, dict.fromkeys(c.pair for c in stand.channels if c.pair)
    lines = [
        f"XY pair {clean(name)}: {' and '.join(clean(c.name) for c in stand.channels if c.pair == name)}."
        for name in pairs
    ]
    mains = "not watched ([surroundings] mains)" if near.mains_hz is None else f"{near.mains_hz:g} Hz"
    others = ", ".join(f"{hz * 60:g} rpm" for hz in near.neighbours_hz)
    return [*lines, f"Mains hum: {mains}." + (f" Neighbours: {others}." if others else "")]


def _rows(stand: Stand) -> list[tuple[str, ...]]:
    """Five columns whose widths add up to less than 80."""
    pulse = stand.pulse
    level = "auto" if pulse.level_v is None else f"{pulse.level_v:g} V"
    rows = [(pulse.name, pulse.input, f"{pulse.edge} edge at {level}", pulse.angle_deg, "-")]
    for c in stand.channels:
        sensitivity = f"{1000 * c.volts_per_unit:.4g} mV per {c.unit}"
        rows.append((c.name, c.input, sensitivity, c.angle_deg, c.display.name))
    return [
        (_short(name, 20), _short(wire, 12), how, f"{angle_deg:.4g}", shown)
        for name, wire, how, angle_deg, shown in rows
    ]


def _short(text: str, most: int) -> str:
    return text if len(text) <= most else text[: most - 3] + "..."
