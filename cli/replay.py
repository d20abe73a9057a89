"""``revmark replay``: a recording measured as the daemon would, without a daemon and without a store."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from cli.output import clean, count, json_option, print_json, say, warn
from config.onethread import one_thread

if TYPE_CHECKING:
    from config.stand import Stand
    from daq.recording import Found, Plateau

Json = dict[str, Any]


class Column(click.ParamType[Any]):
    """``ai0=2``: an input of the stand file, and the file's column that holds it (1 = the first)."""

    name = "column"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[str, int]:
        text, equals, number = value.rpartition("=")
        if not equals or not text.strip() or not number.isdecimal() or not 1 <= int(number) <= 9999:
            self.fail(f'{value!r} is no column of an input. Write for example "ai0=2".', param, ctx)
        return text.strip(), int(number)


@click.command("replay", context_settings={"max_content_width": 80})
@click.argument("file", type=click.Path(path_type=Path))
@click.option("--stand", envvar="REVMARK_STAND", metavar="FILE", required=True,
              help="The stand file that says what the channels are.")  # fmt: skip
@click.option("--full-scale", metavar="VOLTS",
              help='What the highest number means: "30 V"; default: as the stand file says.')  # fmt: skip
@click.option("--column", "columns", multiple=True, type=Column(), metavar="INPUT=N",
              help='Which column holds an input: "ai0=2", 1 = the first.')  # fmt: skip
@json_option
def command(
    file: Path, stand: str, full_scale: str | None, columns: tuple[tuple[str, int], ...], *, as_json: bool
) -> None:
    """Measure the recording FILE (WAV or CSV) and print every steady plateau.

    It goes the way of the daemon's samples and gives the same figures. Nothing is stored: for a job made of
    recordings, serve a stand file that replays.
    """
    one_thread()
    from config.stand import load_stand
    from daq.recording import driver_options, replay

    told = load_stand(stand)
    options = driver_options(told, file, full_scale, dict(columns))
    found = replay(told, file, options, (lambda _: None) if as_json else (lambda one: _print(one, told)))
    if as_json:
        print_json(_json(file, told, found))
        return
    say("", f"{clean(found.source)}, {found.seconds:.1f} s: {count(found.runs, 'run')}, "
            f"{count(len(found.plateaus), 'steady plateau')}; nothing was stored")  # fmt: skip
    for note in found.notes:
        warn(f"note: {clean(note)}")


def _json(file: Path, stand: Stand, found: Found) -> Json:
    return {
        "file": str(file),
        "stand": stand.name,
        "zero": stand.identity.zero,
        "seconds": found.seconds,
        "runs": found.runs,
        "readings": [reading_told(p, stand) for p in found.plateaus],
        "notes": list(found.notes),
    }


def reading_told(plateau: Plateau, stand: Stand) -> Json:
    """A plateau in the keys of ``run show --json``; what only a store gives (id, label, time) is left out."""
    from daq.recording import as_reading, as_set_up
    from store import asjson
    from store.balance.orbit import orbits
    from store.standing_flags import floor_flags

    reading = as_reading(plateau)
    seen = orbits(reading.vectors, as_set_up(stand), None)
    told = asjson.reading_json(reading, floor_flags(reading), seen)
    kept = {k: v for k, v in told.items() if k not in ("id", "label", "labelled_by", "at_utc", "version")}
    return {"run": plateau.run, "begins_s": plateau.begins_s, **kept}


def _print(plateau: Plateau, stand: Stand) -> None:
    from cli.runshow import reading_lines

    show: Mapping[str, str] = {c.name: c.display.name for c in stand.channels}
    say("", f"run {plateau.run}, from {plateau.begins_s:.1f} s of the recording:")
    say(*reading_lines({**reading_told(plateau, stand), "label": None}, show, stand.identity.zero))
