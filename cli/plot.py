"""``revmark plot``: pictures of a job or a run, for the file and for the wall."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, Protocol, TypeVar

import click

from cli.output import clean, display_of, json_option, print_json, say, stand_option, warn
from cli.traced import minus_slow_roll_option
from cli.typed import Speed

if TYPE_CHECKING:
    from cli.place import Manner
    from cli.plots.page import Page
    from config.units import Display
    from store.casework_polar import PolarPicture
    from store.history import History

F = TypeVar("F", bound=Callable[..., Any])
SUFFIXES = (".png", ".svg", ".pdf")
MOST_DOTS = 2**15
"""Longest side of a PNG in dots; beyond it memory runs short long before the page is of use."""


class Drawn(Protocol):
    """A picture that has been laid out."""

    @property
    def page(self) -> Page: ...


class PictureFile(click.ParamType[Any]):
    """A file whose ending says how it is drawn."""

    name = "file"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> Path:
        path = Path(value)
        if path.suffix.lower() not in SUFFIXES:
            known = f"{', '.join(SUFFIXES[:-1])} or {SUFFIXES[-1]}"
            self.fail(f"{clean(path.name)!r} is no picture that can be drawn: end it in {known}.", param, ctx)
        return path


@click.group(help="Pictures of a job or a run.")
def group() -> None: ...


def picture_options(function: F) -> F:
    """What every picture's command takes: where to, how fine, which stand."""
    for option in (
        click.option("-o", "--output", "file", required=True, type=PictureFile(), metavar="FILE",
                     help="Where to: a name ending in .png, .svg or .pdf."),
        stand_option,
        click.option("--channel", "channels", multiple=True, metavar="NAME", help="Only this channel."),
        minus_slow_roll_option,
        click.option("--dpi", type=click.IntRange(50, 600), default=150, show_default=True,
                     help="Dots per inch of a PNG."),
        click.option("--force", is_flag=True, help="Replace FILE if it exists."),
        json_option,
    ):  # fmt: skip
        function = option(function)
    return function


@group.command(context_settings={"max_content_width": 80})
@click.argument("job")
@click.option("--rpm", "speed_hz", type=Speed(), metavar="SPEED", help="Balancing speed, if several.")
@picture_options
def polar(job: str, file: Path, stand: str | None, *, as_json: bool, **told: Any) -> None:
    """Draw a job's vectors: O, O+T and its effect, check, predicted check, trim, slow roll."""
    _may_write(file, force=told["force"])
    from cli.place import manner, reading

    with reading(stand) as history:
        picture = _polar(history, job, told)
    how = manner(stand)

    def drawn() -> Drawn:
        from cli.plots.polar import draw

        return draw(picture, _shows(picture.channels, how), how.zone)

    _draw(drawn, len(picture.channels), file, told["dpi"])
    if as_json:
        print_json({"file": str(file), **picture.to_dict()})
        return
    names = ", ".join(clean(c.channel) for c in picture.channels)
    say(
        f"{clean(file)}: job {clean(picture.job_number)}, {names} at {picture.speed_hz * 60:.0f} r/min",
        f"rotation {picture.turns} seen from {clean(picture.seen_from)}; angles grow {picture.angles_grow}",
    )


@group.command(context_settings={"max_content_width": 80})
@click.argument("run")
@click.option("--trace", type=click.IntRange(1), metavar="N", help="Only this run-up or coast-down.")
@picture_options
def bode(run: str, file: Path, stand: str | None, *, as_json: bool, **told: Any) -> None:
    """Draw a run's run-ups and coast-downs: 1X amplitude and phase lag against speed."""
    _may_write(file, force=told["force"])
    from cli.place import manner, reading
    from store import consult

    with reading(stand) as history:
        picture = consult.bode(
            history, run, minus_slow_roll=told["slow"], channels=told["channels"], trace=told["trace"]
        )
    how = manner(stand)

    def drawn() -> Drawn:
        from cli.plots.bode import draw

        return draw(picture, _shows(picture.channels, how), how.zone)

    _draw(drawn, len(picture.channels), file, told["dpi"])
    if as_json:
        from store.casework_bode import picture_json

        print_json({"file": str(file), **picture_json(picture)})
        return
    names = ", ".join(clean(c.channel) for c in picture.channels)
    curves = {k.trace: k for c in picture.channels for k in c.curves}.values()
    traced = ", ".join(f"{k.direction} {k.speed_hz[0] * 60:.0f}-{k.speed_hz[-1] * 60:.0f}" for k in curves)
    say(f"{clean(file)}: run {clean(picture.run)}, {names}, {traced} r/min")


def _polar(history: History, job: str, told: Mapping[str, Any]) -> PolarPicture:
    from contextlib import suppress

    from config.errors import Refusal
    from store import consult
    from store.casework_polar import polar_picture

    story = history.job_story(job)
    verdicts = []
    for reading in (x for run in story.runs for x in run.readings if x.label in consult.JUDGED):
        with suppress(Refusal):
            verdicts.append(consult.verdict(history, job, reading.id))
    return polar_picture(
        story,
        verdicts,
        reuse=consult.candidates(history, story),
        channels=told["channels"],
        speed_hz=told["speed_hz"],
        minus_slow_roll=told["slow"],
    )


def _shows(channels: Iterable[Any], how: Manner) -> dict[str, Display]:
    """By channel, how its amplitudes are shown."""
    return {c.channel: display_of(c.channel, c.unit, how.show) for c in channels}


def _draw(drawn: Callable[[], Drawn], channels: int, file: Path, dpi: int) -> None:
    """Everything is drawn before the file is touched."""
    import warnings

    from cli.plots.page import encode
    from config.errors import Refusal

    form = file.suffix.lower().removeprefix(".")
    with warnings.catch_warnings(record=True) as missing:
        warnings.simplefilter("always")
        page = drawn().page
        longest = max(page.width, page.height) * dpi
        if form == "png" and longest > MOST_DOTS:
            raise Refusal(
                f"The picture of {channels} channels would be {longest:.0f} dots long.",
                "Take fewer dots per inch (--dpi) or name channels (--channel).",
            )
        data = encode(page, form, dpi)
    if any("missing from font" in str(w.message) for w in missing):
        warn("note: some characters of the names are not in the font and are drawn as boxes")
    _write(file, data)


# --- the file ------------------------------------------------------------------------------------------


def _may_write(file: Path, *, force: bool) -> None:
    from config.errors import Refusal

    if file.is_dir() or (file.exists() and not force):
        raise Refusal(f"{clean(file)} exists already.", "Name another file, or replace it with --force.")
    if not file.absolute().parent.is_dir():
        raise Refusal(f"There is no folder {clean(file.parent)}.", "Make it first, or name another one.")


def _write(file: Path, data: bytes) -> None:
    """Whole or not at all: an older picture stays until the new one is complete."""
    from config.errors import Refusal

    part = file.with_name(f".{file.name}.part")
    try:
        part.write_bytes(data)
        part.replace(file)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise Refusal(
            f"{clean(file)} cannot be written: {error.strerror}.", "Check the folder's space and permissions."
        ) from error
