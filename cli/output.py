"""How answers are printed: a table for people within 80 columns, JSON for programs. One way for all."""

from __future__ import annotations

import json
import math
import sys
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])
Json = Mapping[str, Any]
COLUMNS = 80


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
    from tabulate import tabulate

    align = ["right" if letter == "r" else "left" for letter in right.ljust(len(headers))]
    cells = [[clean(cell) for cell in row] for row in rows]
    return tabulate(
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


def amplitude(value_pk: float, unit: str, show: str) -> float:
    """A stored 0-peak amplitude as it is shown (``show`` like ``um pp``)."""
    from config.units import AMPLITUDE_UNITS, parse_display

    kind = next(k for k, units in AMPLITUDE_UNITS.items() if unit in units)
    return value_pk * parse_display(show, kind).factor


DEFAULT_SHOW = {"um": "um pp", "mm/s": "mm/s rms", "m/s2": "m/s2 rms"}


def shown(vector: Json, show: Mapping[str, str] | None = None) -> tuple[str, str, str]:
    """Amplitude, its unit and the lag of a vector of the JSON answers, as text for a table."""
    how = (show or {}).get(vector["channel"]) or DEFAULT_SHOW[vector["unit"]]
    lag = vector["lag_deg"]
    return (
        f"{amplitude(vector['amplitude_pk'], vector['unit'], how):.3f}",
        how,
        "below noise" if lag is None else angle(lag),
    )


def angle(degrees: float) -> str:
    """0.0 to 359.9: never 360.0."""
    return f"{round(degrees % 360, 1) % 360:.1f}"


def finite(value: float | None, form: str = ".3g", missing: str = "-") -> str:
    return missing if value is None or not math.isfinite(value) else format(value, form)
