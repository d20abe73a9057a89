"""A page measured in inches: text, lines, markers and arrows on one sheet, whatever it is saved as.

Text is never read as mathematics, so a machine's name may hold any sign. Widths are measured from the
font's outlines, which are the same for PNG, SVG and PDF.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from functools import lru_cache
from io import BytesIO
from typing import Any

import matplotlib
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties, findfont, get_font
from matplotlib.patches import Circle, Polygon
from matplotlib.patheffects import withStroke

from cli.plots.geometry import Point

POINTS_PER_INCH = 72.0
MEASURED_PT = 64.0
"""Text is measured large and scaled down, so that no rounding to dots gets in."""
TEXT_PT = 8.5
LINE_IN = 0.175
"""From one line of text to the next."""
INK = "#1a1a1a"
FAMILY = "DejaVu Sans"
"""Comes with matplotlib, so a picture looks the same on every PC."""


@lru_cache(maxsize=2048)
def text_width(text: str, points: float = TEXT_PT, *, bold: bool = False) -> float:
    """Width of one line of text, inches."""
    font = get_font(findfont(FontProperties(family=FAMILY, weight="bold" if bold else "normal")))
    font.set_size(MEASURED_PT, POINTS_PER_INCH)
    font.set_text(text, 0.0)
    width, _ = font.get_width_height()  # in 1/64 of a dot, here of a point
    return width / 64.0 * points / MEASURED_PT / POINTS_PER_INCH


def shorten(text: str, width: float, points: float = TEXT_PT) -> str:
    """The text, its middle left out where it is wider than ``width`` inches."""
    if text_width(text, points) <= width:
        return text
    for keep in range(len(text) - 1, 1, -1):
        tail = keep // 2
        short = f"{text[: keep - tail]}\N{HORIZONTAL ELLIPSIS}{text[len(text) - tail :]}"
        if text_width(short, points) <= width:
            return short
    return "\N{HORIZONTAL ELLIPSIS}"


def wrap(text: str, width: float, points: float = TEXT_PT, *, bold: bool = False) -> list[str]:
    """Lines no wider than ``width`` inches, broken at spaces; a word too long is shortened."""
    lines: list[str] = []
    for word in text.split(" "):
        longer = f"{lines[-1]} {word}" if lines else word
        if lines and text_width(longer, points, bold=bold) <= width:
            lines[-1] = longer
        else:
            lines.append(shorten(word, width, points))
    return lines


class Page:
    """A white sheet; coordinates in inches from its lower left corner."""

    def __init__(self, width: float, height: float) -> None:
        self.width, self.height = width, height
        self.figure = Figure(figsize=(width, height), facecolor="white")
        self._axes = self.figure.add_axes((0.0, 0.0, 1.0, 1.0))
        self._axes.set(xlim=(0, width), ylim=(0, height))
        self._axes.set_axis_off()

    def text(
        self,
        at: Point,
        text: str,
        *,
        points: float = TEXT_PT,
        bold: bool = False,
        colour: str = INK,
        align: str = "left",
        halo: bool = False,
    ) -> None:
        """One line of text, its middle height at ``at``."""
        effects = [withStroke(linewidth=2.2, foreground="white")] if halo else []
        self._axes.text(
            *at,
            text,
            fontsize=points,
            family=FAMILY,
            weight="bold" if bold else "normal",
            color=colour,
            ha=align,
            va="center_baseline",
            parse_math=False,
            path_effects=effects,
            zorder=7,
        )

    def line(self, points: Sequence[Point], colour: str, **style: Any) -> None:
        """A line through points; ``style`` as matplotlib's (linewidth, linestyle, zorder)."""
        xs, ys = zip(*points, strict=True)
        self._axes.plot(xs, ys, color=colour, solid_capstyle="butt", **style)

    def marker(
        self, at: Point, marker: str, colour: str, size: float, *, filled: bool, zorder: float
    ) -> None:
        face = colour if filled else "none"
        strokes = marker in "x+"
        self._axes.plot(
            [at[0]],
            [at[1]],
            linestyle="none",
            marker=marker,
            markersize=size,
            markerfacecolor=face,
            markeredgecolor=colour if strokes or not filled else "white",
            markeredgewidth=1.6 if strokes or not filled else 0.6,
            zorder=zorder,
        )

    def circle(self, centre: Point, radius: float, colour: str, *, within: Any = None, **style: Any) -> Any:
        """A ring; ``within`` another ring, the only part that is drawn then."""
        ring = Circle(centre, radius, edgecolor=colour, **{"facecolor": "none", **style})
        self._axes.add_patch(ring)
        if within is not None:
            ring.set_clip_path(within)
        return ring

    def arrow(self, points: Sequence[Point], colour: str, *, head: float = 9.0, **style: Any) -> None:
        """A line through points with a solid head at its end, whatever the line's style."""
        (x0, y0), (x1, y1) = points[-2:]
        length = math.hypot(x1 - x0, y1 - y0) or 1.0
        ux, uy = (x1 - x0) / length, (y1 - y0) / length
        long, half = head / POINTS_PER_INCH, 0.38 * head / POINTS_PER_INCH
        neck = (x1 - ux * long, y1 - uy * long)
        corners = [
            (x1, y1),
            (neck[0] - uy * half, neck[1] + ux * half),
            (neck[0] + uy * half, neck[1] - ux * half),
        ]
        self.line([*points[:-1], neck], colour, **style)
        self._axes.add_patch(
            Polygon(corners, facecolor=colour, edgecolor="none", zorder=style.get("zorder", 3))
        )


def encode(page: Page, form: str, dpi: int) -> bytes:
    """The page as ``png``, ``svg`` or ``pdf``."""
    held = BytesIO()
    with matplotlib.rc_context():
        matplotlib.rcdefaults()
        dates: dict[str, None] = {"svg": {"Date": None}, "pdf": {"CreationDate": None}}.get(form, {})
        page.figure.savefig(held, format=form, dpi=dpi, metadata=dates)
    return held.getvalue()
