"""How answers are printed: a table for people within 80 columns, JSON for programs. One way for all."""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from datetime import tzinfo

    from config.units import Display

F = TypeVar("F", bound=Callable[..., Any])
Json = Mapping[str, Any]
COLUMNS = 80
ANGLES = "angles: degrees from the rotor mark, against rotation"
"""Said once by whatever prints places on the rotor."""


NO_LAG = "lag -: the amplitude is within its own 95 % uncertainty, so it has none"


def clean(text: object) -> str:
    """Text fit for a terminal: control characters shown as escapes, never sent."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in str(text))


def stand_option(function: F) -> F:
    """``--stand FILE`` (or REVMARK_STAND): which daemon or store is meant."""
    return click.option(
        "--stand",
        envvar="REVMARK_STAND",
        metavar="FILE",
        help="The stand file; default: the one daemon that runs on this PC.",
    )(function)


def json_option(function: F) -> F:
    return click.option("--json", "as_json", is_flag=True, help="Print JSON, units in its keys.")(function)


def operator_option(function: F) -> F:
    return click.option(
        "--operator",
        envvar="REVMARK_OPERATOR",
        default="",
        metavar="NAME",
        help="Who does this; default: the user logged in.",
    )(function)


def print_json(answer: object) -> None:
    click.echo(json.dumps(answer, indent=2, allow_nan=False))


def table(rows: Iterable[Sequence[object]], headers: Sequence[str], right: str = "") -> str:
    """A plain table. ``right`` holds one letter a column: ``r`` right-aligned, anything else left."""
    import tabulate

    tabulate.MIN_PADDING = 0  # else every heading is two columns wider than its text
    align = ["right" if letter == "r" else "left" for letter in right.ljust(len(headers))]
    cells = [[clean(cell) for cell in row] for row in rows]
    return tabulate.tabulate(
        cells, [clean(h) for h in headers], tablefmt="simple", disable_numparse=True, colalign=align
    )


def say(*lines: str) -> None:
    """Print lines; prose beyond 80 columns is wrapped, a table (several lines in one) is left as it is."""
    for line in lines:
        click.echo(wrapped(line))


def warn(line: str) -> None:
    """A caution or a warning, on stderr, out of the way of data."""
    click.echo(wrapped(line), err=True)


def wrapped(line: str) -> str:
    """One line of prose, folded at 80 columns under its own indentation."""
    if len(line) <= COLUMNS or "\n" in line:
        return line
    import textwrap

    indent = line[: len(line) - len(line.lstrip())]
    return textwrap.fill(line, COLUMNS, subsequent_indent=indent + "  ", break_long_words=False,
                         break_on_hyphens=False)  # fmt: skip


def is_terminal() -> bool:
    return sys.stdin.isatty() and sys.stdout.isatty()


DEFAULT_SHOW = {"um": "um pp", "mm/s": "mm/s rms", "m/s2": "m/s2 rms"}


Show = Mapping[str, str]
"""By channel, how its amplitudes are shown: ``um pp``."""


def display_of(channel: str, unit: str, show: Show | None = None) -> Display:
    """How a channel of this base unit is shown: as the stand file says, else by its unit alone.

    A channel that measured something else when it was recorded is not shown in today's unit.
    """
    from config.units import AMPLITUDE_UNITS, parse_display

    kind = next(k for k, units in AMPLITUDE_UNITS.items() if unit in units)
    told = (show or {}).get(channel) or DEFAULT_SHOW[unit]
    fits = told.rpartition(" ")[0] in AMPLITUDE_UNITS[kind]
    return parse_display(told if fits else DEFAULT_SHOW[unit], kind)


def decimals(display: Display) -> int:
    """Three for um and mm/s, more where the unit is a coarse one (mil, ips)."""
    return 3 + max(0, math.floor(-math.log10(display.factor)))


def shown(vector: Json, show: Show | None = None) -> tuple[str, str, str]:
    """Amplitude, its unit and the lag of a vector of the JSON answers, as text for a table."""
    display, lag = display_of(vector["channel"], vector["unit"], show), vector["lag_deg"]
    size = vector["amplitude_pk"] * display.factor
    return (
        f"{size:.{decimals(display)}f}",
        display.name,
        "below noise" if lag is None else angle(lag),
    )


def shown_short(vector: Json, show: Show | None = None) -> tuple[str, str, str]:
    """The same where several lags stand side by side: one below its floor is a dash."""
    size, unit, lag = shown(vector, show)
    return size, unit, "-" if vector["lag_deg"] is None else lag


def shown_size(level: Json, size: float, show: Show | None = None) -> str:
    """A size that has its own detector (overall pp, residual rms), in the unit its channel is shown in."""
    from config.units import DETECTORS

    display = display_of(level["channel"], level["unit"], show)
    return f"{size * display.factor / DETECTORS[display.detector]:.{decimals(display)}f}"


def plus_minus_deg(degrees: float | None) -> str:
    """The uncertainty of a lag: one decimal, two below 0.1; none where there is no lag."""
    if degrees is None:
        return "-"
    if degrees < 0.005:
        return "<0.01"
    return f"{degrees:.1f}" if degrees >= 0.1 else f"{degrees:.2f}"


def cut(text: object, most: int) -> str:
    """Text in at most so many columns, what is left out shown by dots."""
    told = clean(text)
    return told if len(told) <= most else told[: most - 2] + ".."


def shown_error(vector: Json, error_pk: float, show: Show | None = None) -> str:
    """An error of a vector's amplitude, in the vector's unit as it is shown, to three figures."""
    return figures(error_pk * display_of(vector["channel"], vector["unit"], show).factor)


def figures(value: float) -> str:
    """Three significant figures without an exponent: ``0.00412``, ``1.23``, ``162``."""
    if not math.isfinite(value) or value == 0:
        return f"{value:g}"
    return f"{value:.{min(9, max(0, 2 - math.floor(math.log10(abs(value)))))}f}"


def count(number: int, what: str) -> str:
    """``1 run``, ``2 runs``."""
    return f"{number} {what}{'' if number == 1 else 's'}"


def local(at_utc: str | None, zone: tzinfo) -> str:
    """A time of the JSON answers in a time zone, to the second and without the zone's name."""
    from datetime import datetime

    if not at_utc:
        return "-"
    return datetime.fromisoformat(at_utc).astimezone(zone).strftime("%Y-%m-%d %H:%M:%S")


def times(zone: tzinfo) -> str:
    """The line that names the zone of the times above it."""
    return f"times: {getattr(zone, 'key', 'UTC')}"


def angle(degrees: float) -> str:
    """0.0 to 359.9: never 360.0."""
    return f"{round(degrees % 360, 1) % 360:.1f}"


def finite(value: float | None, form: str = ".3g", missing: str = "-") -> str:
    return missing if value is None or not math.isfinite(value) else format(value, form)
