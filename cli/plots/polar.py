"""The polar plot of a job: what is drawn, and how it looks. One panel a channel, a key under each.

Every panel shows the rotor as seen from the end that the stand's angles are seen from, 0 deg at the top,
angles growing against rotation; the page says so in words and shows both senses as arrows.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import tzinfo
from typing import Any

import matplotlib

from cli.output import angle
from cli.plots import words
from cli.plots.geometry import (
    SMALL,
    Box,
    Point,
    Wanted,
    along,
    at_angle,
    clearest_angle,
    place_labels,
    plot_point,
    rings,
)
from cli.plots.page import INK, LINE_IN, Page, shorten, text_width
from config.units import Display
from store.casework_polar import PolarChannel, PolarEffect, PolarPicture, PolarVector, ToleranceCircle

MARGIN = 0.35
PANEL_WIDTH, CIRCLE_HEIGHT, TITLE_HEIGHT = 6.2, 4.8, 0.5
RADIUS, INSET_RADIUS = 1.9, 0.88
KEY_ROW = 0.185
TITLE_PT, PAGE_TITLE_PT, SCALE_PT = 10.0, 13.0, 8.0
GRID, FAINT, RIM = "#b9b9b9", "#dedede", "#222222"
EFFECT, TOLERANCE = "#444444", "#000000"

Line = str | tuple[float, tuple[float, ...]]


@dataclass(frozen=True, slots=True)
class Look:
    """Colours can be told apart with any colour vision; markers and lines differ as well."""

    colour: str
    line: Line
    width: float
    marker: str
    size: float
    filled: bool = True


LOOKS: dict[str, Look] = {
    "O": Look("#0072b2", "-", 2.0, "o", 8.0),
    "O+T": Look("#d55e00", "--", 1.5, "^", 8.5),
    "predicted": Look("#cc79a7", (0, (1, 1.4)), 1.5, "D", 10.5, filled=False),
    "check": Look("#009e73", "-", 1.5, "s", 6.0),
    "trim": Look("#e69f00", "-.", 1.5, "P", 8.5),
    "slow-roll": Look("#56b4e9", (0, (4, 1.5, 1, 1.5)), 1.3, "x", 7.0),
}
TRIALS: tuple[tuple[str, Line], ...] = (
    ("^", "--"),
    ("v", (0, (6, 1.5, 1.2, 1.5))),
    ("<", (0, (2.5, 1.5))),
    (">", (0, (8, 2))),
)


@dataclass(frozen=True, slots=True)
class Dial:
    """A circle of the page: its centre and rim in inches, and the amplitude at the rim as it is shown."""

    channel: str
    centre: Point
    radius: float
    full_scale: float
    angles_grow: str
    unit: str

    def at(self, value: complex) -> Point:
        """Where a vector in the shown unit has its tip."""
        x, y = plot_point(value * (self.radius / self.full_scale), self.angles_grow)
        return (self.centre[0] + x, self.centre[1] + y)

    def rim(self, angle_deg: float, share: float = 1.0) -> Point:
        x, y = at_angle(self.radius * share, angle_deg, self.angles_grow)
        return (self.centre[0] + x, self.centre[1] + y)


@dataclass(frozen=True, slots=True)
class Drawing:
    page: Page
    dials: tuple[Dial, ...]
    """One a channel, in order."""
    insets: tuple[Dial, ...]


@dataclass(frozen=True, slots=True)
class _Shown:
    """A channel in the unit in which it is shown."""

    name: str
    unit: str
    probe_deg: float
    vectors: tuple[tuple[PolarVector, complex, Look], ...]
    effects: tuple[tuple[PolarEffect, complex, complex], ...]
    circle: tuple[complex, float] | None
    tolerance: ToleranceCircle | None


def _shown(channel: PolarChannel, display: Display) -> _Shown:
    circle, trials, vectors = channel.circle, 0, []
    for vector in channel.vectors:
        look = LOOKS[vector.role]
        if vector.role == "O+T":
            marker, line = TRIALS[trials % len(TRIALS)]
            look = Look(look.colour, line, look.width, marker, look.size)
            trials += 1
        vectors.append((vector, vector.value * display.factor, look))
    return _Shown(
        channel.channel,
        display.name,
        channel.probe_deg,
        tuple(vectors),
        tuple((e, e.start * display.factor, e.end * display.factor) for e in channel.effects),
        (circle.centre * display.factor, circle.radius * display.factor) if circle else None,
        circle,
    )


# --- the page ------------------------------------------------------------------------------------------


def draw(picture: PolarPicture, shows: Mapping[str, Display], zone: tzinfo) -> Drawing:
    """The picture on a page. ``shows`` says by channel how amplitudes are shown; dates are in ``zone``."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()  # a user's own style must not change a picture's meaning
        return _draw(picture, [_shown(c, shows[c.channel]) for c in picture.channels], zone)


def columns(channels: int) -> int:
    """Panels side by side."""
    return next(n for limit, n in ((1, 1), (4, 2), (9, 3), (10**6, 4)) if channels <= limit)


def _draw(picture: PolarPicture, channels: Sequence[_Shown], zone: tzinfo) -> Drawing:
    across = columns(len(channels))
    width = across * PANEL_WIDTH + 2 * MARGIN
    head = words.head(picture, zone, width - 2 * MARGIN)
    foot = words.foot(picture, width - 2 * MARGIN)
    rows = [channels[i : i + across] for i in range(0, len(channels), across)]
    heights = [TITLE_HEIGHT + CIRCLE_HEIGHT + _key_height(row) for row in rows]
    height = 2 * MARGIN + 0.45 + LINE_IN * (len(head) + len(foot)) + sum(heights)
    page = Page(width, height)
    top = _head(page, picture, head)
    made: list[tuple[Dial, Dial | None]] = []
    for row, high in zip(rows, heights, strict=True):
        for i, channel in enumerate(row):
            made.append(_panel(page, channel, picture, (MARGIN + i * PANEL_WIDTH, top)))
        top -= high
    _lines(page, foot, top - 0.1)
    return Drawing(page, tuple(d for d, _ in made), tuple(i for _, i in made if i is not None))


def _key_height(row: Sequence[_Shown]) -> float:
    return KEY_ROW * (1.6 + max(len(c.vectors) + len(c.effects) + (c.circle is not None) for c in row)) + 0.2


def _head(page: Page, picture: PolarPicture, lines: Sequence[words.Line]) -> float:
    """Title and facts; the height at which the panels begin."""
    top = page.height - MARGIN
    title = shorten(words.title(picture), page.width - 2 * MARGIN, PAGE_TITLE_PT * 1.12)
    page.text((MARGIN, top - 0.05), title, points=PAGE_TITLE_PT, bold=True)
    return _lines(page, lines, top - 0.33) - 0.12


def _lines(page: Page, lines: Sequence[words.Line], top: float) -> float:
    for line in lines:
        page.text((MARGIN, top), line.lead)
        page.text((MARGIN + line.indent, top), line.text, bold=line.bold)
        top -= LINE_IN
    return top


def _panel(page: Page, channel: _Shown, picture: PolarPicture, corner: Point) -> tuple[Dial, Dial | None]:
    """One channel below and right of ``corner``: title, circle, enlarged centre where needed, key."""
    left, top = corner
    small = _enlarged(channel)
    middle = left + (2.35 if small else PANEL_WIDTH / 2)
    centre = (middle, top - TITLE_HEIGHT - CIRCLE_HEIGHT / 2)
    full = rings(_largest(channel))
    dial = Dial(channel.name, centre, RADIUS, full[-1], picture.angles_grow, channel.unit)
    name = shorten(channel.name, 3.0, TITLE_PT)
    page.text((left, top - 0.12), f"{name}, 1X in {channel.unit}", points=TITLE_PT, bold=True)
    page.text((left, top - 0.31), words.probe(channel.probe_deg, full, channel.unit))
    _senses(page, dial, picture)
    inset = None
    if small:
        place = (left + PANEL_WIDTH - INSET_RADIUS - 0.05, centre[1] - 1.28)
        inset = Dial(channel.name, place, INSET_RADIUS, rings(small)[-1], picture.angles_grow, channel.unit)
        page.circle(centre, RADIUS * inset.full_scale / full[-1], GRID, linewidth=0.8, linestyle=(0, (2, 2)))
    _dial(page, dial, channel, full, below=inset.full_scale if inset else 0.0)
    if inset:
        _inset(page, inset, channel, rings(small))
    _key(page, channel, (left, top - TITLE_HEIGHT - CIRCLE_HEIGHT))
    return dial, inset


# --- sizes ---------------------------------------------------------------------------------------------


def _largest(channel: _Shown) -> float:
    """The longest vector, or the tolerance circle where it is not much larger than that."""
    longest = max(abs(v) for _, v, _ in channel.vectors)
    reach = abs(channel.circle[0]) + channel.circle[1] if channel.circle else 0.0
    return reach if longest < reach <= 1.6 * longest else longest


def _enlarged(channel: _Shown) -> float:
    """Amplitude that an enlarged centre must hold; 0 = nothing is too small to be seen as it is."""
    full = rings(_largest(channel))[-1]
    sizes = [s for _, v, _ in channel.vectors if 0 < (s := abs(v)) < SMALL * full]
    reach = abs(channel.circle[0]) + channel.circle[1] if channel.circle else 0.0
    return max([*sizes, *([reach] if reach < 2 * SMALL * full else [])]) if sizes else 0.0


# --- the circle ----------------------------------------------------------------------------------------


def _dial(page: Page, dial: Dial, channel: _Shown, full: Sequence[float], below: float) -> None:
    """Grid, vectors, effects and labels; vectors within ``below`` get theirs in the enlarged centre."""
    rim = page.circle(dial.centre, dial.radius, RIM, linewidth=1.1, zorder=2)
    for ring in full[:-1]:
        page.circle(dial.centre, dial.radius * ring / full[-1], GRID, linewidth=0.6, zorder=1)
    _scale(page, dial)
    _tolerance(page, dial, channel, rim)
    tips = [(v, dial.at(value), look) for v, value, look in channel.vectors]
    busy = [p for _, tip, _ in tips for p in along(dial.centre, tip, 0.05)]
    for _, start, end in channel.effects:
        _effect(page, dial.at(start), dial.at(end))
        busy += along(dial.at(start), dial.at(end), 0.05)
    for (_, tip, look), (_, value, _) in zip(tips, channel.vectors, strict=True):
        _vector(page, dial, tip, look, value, again=abs(value) <= below)
    taken = _ring_labels(page, dial, full, busy)
    big = [(v, tip) for (v, tip, _), (_, x, _) in zip(tips, channel.vectors, strict=True) if abs(x) > below]
    _labels(page, dial, big, taken, [*busy, *_around([t for _, t, _ in tips])])


def _scale(page: Page, dial: Dial) -> None:
    """Spokes each 30 deg with their angles, ticks each 10 and 5 deg."""
    for degrees in range(0, 360, 30):
        page.line([dial.rim(degrees, 0.06), dial.rim(degrees)], FAINT, linewidth=0.6, zorder=0.5)
        text = f"{degrees}\N{DEGREE SIGN}"
        page.text(dial.rim(degrees, 1.105), text, points=SCALE_PT, bold=degrees == 0, align="center")
    for degrees in range(0, 360, 5):
        inner = 0.965 if degrees % 10 == 0 else 0.98
        page.line([dial.rim(degrees, inner), dial.rim(degrees)], RIM, linewidth=0.6, zorder=2)
    page.line([dial.rim(0, 0.93), dial.rim(0)], RIM, linewidth=1.6, zorder=2)


def _ring_labels(page: Page, dial: Dial, full: Sequence[float], busy: Sequence[Point]) -> list[Box]:
    radii = [dial.radius * r / full[-1] for r in full]
    own = [(x - dial.centre[0], y - dial.centre[1]) for x, y in busy]
    where = clearest_angle(own, dial.angles_grow, radii)
    boxes = []
    for ring in full:
        text = f"{ring:g}"
        at = dial.rim(where, ring / full[-1] if ring != full[-1] else 0.915)
        page.text(at, text, points=SCALE_PT, colour="#555555", align="center", halo=True)
        boxes.append(Box.around(at, text_width(text, SCALE_PT) + 0.06, 0.16))
    return boxes


def _vector(page: Page, dial: Dial, tip: Point, look: Look, value: complex, *, again: bool) -> None:
    """Line from the centre, marker at the tip (smaller if drawn again enlarged), stroke at the rim."""
    page.line([dial.centre, tip], look.colour, linewidth=look.width, linestyle=look.line, zorder=3)
    size = look.size * (0.7 if again else 1.0)
    page.marker(tip, look.marker, look.colour, size, filled=look.filled, zorder=6 if look.filled else 5)
    if value:
        x, y = plot_point(value / abs(value) * dial.radius, dial.angles_grow)
        ends = [(dial.centre[0] + x * s, dial.centre[1] + y * s) for s in (1.0, 1.045)]
        page.line(ends, look.colour, linewidth=2.2, zorder=3)


def _effect(page: Page, start: Point, end: Point) -> None:
    """From just off one tip to just short of the other; nothing where they lie on one another."""
    length = math.dist(start, end)
    if length < 0.16:
        return
    ux, uy = (end[0] - start[0]) / length, (end[1] - start[1]) / length
    points = [(start[0] + 0.06 * ux, start[1] + 0.06 * uy), (end[0] - 0.06 * ux, end[1] - 0.06 * uy)]
    page.arrow(points, EFFECT, linewidth=1.1, linestyle=(0, (5, 1.5)), zorder=4)


def _tolerance(page: Page, dial: Dial, channel: _Shown, rim: Any) -> None:
    if channel.circle is None:
        return
    centre, radius = channel.circle
    page.circle(
        dial.at(centre),
        radius * dial.radius / dial.full_scale,
        TOLERANCE,
        within=rim,
        linewidth=1.3,
        linestyle=(0, (7, 2, 1.5, 2)),
        zorder=2.5,
    )


def _around(tips: Sequence[Point]) -> list[Point]:
    """Points that stand for the markers at tips."""
    return [(x + dx, y + dy) for x, y in tips for dx in (-0.08, 0, 0.08) for dy in (-0.08, 0, 0.08)]


def _labels(
    page: Page,
    dial: Dial,
    tips: Sequence[tuple[PolarVector, Point]],
    taken: list[Box],
    busy: list[Point],
    *,
    short: bool = False,
) -> None:
    """Role and run beside each tip, or the role alone."""
    others = [v for v, _ in tips]
    texts = [words.role_label(v, others) if short else shorten(words.short_label(v), 1.25) for v, _ in tips]
    wanted = [Wanted(tip, text_width(t) + 0.05, 0.15) for (_, tip), t in zip(tips, texts, strict=True)]
    kept = [*taken, *(Box.around(tip, 0.15, 0.15) for _, tip in tips)]
    boxes = place_labels(wanted, centre=dial.centre, radius=dial.radius, taken=kept, busy=busy)
    for (vector, tip), text, box in zip(tips, texts, boxes, strict=True):
        near = box.nearest(tip)
        if (near[0] - tip[0]) ** 2 + (near[1] - tip[1]) ** 2 > 0.16**2:
            page.line([tip, near], LOOKS[vector.role].colour, linewidth=0.6, zorder=4)
        page.text(box.centre, text, align="center", halo=True)


def _senses(page: Page, dial: Dial, picture: PolarPicture) -> None:
    """Two arrows beside the circle: which way the rotor turns, which way angles grow."""
    turns_right = picture.turns == "clockwise"
    for right_side, text, rightward, style in (
        (True, "rotation", turns_right, {"linewidth": 2.2, "linestyle": "-"}),
        (False, "angles grow", not turns_right, {"linewidth": 1.1, "linestyle": "-"}),
    ):
        sweep = range(33, 58) if right_side else range(-57, -32)
        points = [
            (dial.centre[0] + x, dial.centre[1] + y)
            for x, y in (at_angle(dial.radius * 1.235, d, "clockwise") for d in sweep)
        ]
        page.arrow(points if rightward else points[::-1], INK, head=14, zorder=3, **style)
        x, y = at_angle(dial.radius * 1.30, 42 if right_side else -42, "clockwise")
        align = "left" if right_side else "right"
        at = (dial.centre[0] + x, dial.centre[1] + y + 0.06)
        page.text(at, text, align=align, bold=right_side)


def _inset(page: Page, dial: Dial, channel: _Shown, full: Sequence[float]) -> None:
    """The centre again, enlarged, with the vectors that are short beside the others."""
    rim = page.circle(dial.centre, dial.radius, RIM, linewidth=0.9, zorder=2, facecolor="white")
    for ring in full[:-1]:
        page.circle(dial.centre, dial.radius * ring / full[-1], GRID, linewidth=0.5, zorder=2.1)
    for degrees in range(0, 360, 30):
        page.line([dial.rim(degrees, 0.9), dial.rim(degrees)], RIM, linewidth=0.6, zorder=2.2)
    page.text(dial.rim(0, 1.16), "0\N{DEGREE SIGN}", points=SCALE_PT, bold=True, align="center")
    _tolerance(page, dial, channel, rim)
    small = [(v, x, look) for v, x, look in channel.vectors if abs(x) <= dial.full_scale]
    tips = [(v, dial.at(x)) for v, x, _ in small]
    for (_, _, look), (_, tip) in zip(small, tips, strict=True):
        page.line([dial.centre, tip], look.colour, linewidth=look.width, linestyle=look.line, zorder=3)
        zorder = 6 if look.filled else 5
        page.marker(tip, look.marker, look.colour, look.size * 0.85, filled=look.filled, zorder=zorder)
    busy = [p for _, tip in tips for p in along(dial.centre, tip, 0.05)]
    _labels(page, dial, tips, [], [*busy, *_around([t for _, t in tips])], short=True)
    below = (dial.centre[0], dial.centre[1] - dial.radius - 0.13)
    page.text(below, f"centre enlarged: rim {full[-1]:g} {dial.unit}", points=SCALE_PT, align="center")


# --- the key -------------------------------------------------------------------------------------------


def _key(page: Page, channel: _Shown, corner: Point) -> None:
    """Every vector in figures, beside the marker and line that stand for it."""
    left, top = corner
    amount, lag = left + PANEL_WIDTH - 1.05, left + PANEL_WIDTH - 0.3
    y = top - 0.1
    page.text((amount, y), channel.unit, align="right", colour="#555555")
    page.text((lag, y), "lag deg", align="right", colour="#555555")
    y -= 0.11
    page.line([(left, y), (lag, y)], GRID, linewidth=0.7)
    for sample, text, size, degrees in _key_rows(page, channel):
        y -= KEY_ROW
        sample((left + 0.05, y), (left + 0.5, y))
        page.text((left + 0.72, y), shorten(text, amount - left - 1.35))
        page.text((amount, y), size, align="right")
        page.text((lag, y), degrees, align="right")
    page.line([(left, y - 0.11), (lag, y - 0.11)], GRID, linewidth=0.7)


Row = tuple[Callable[[Point, Point], None], str, str, str]


def _key_rows(page: Page, channel: _Shown) -> list[Row]:
    rows: list[Row] = []
    for vector, value, look in channel.vectors:
        lag = angle(words.lag_deg(value)) if vector.lag_known else "below noise"
        rows.append((_sample(page, look), words.key_label(vector), f"{abs(value):.3f}", lag))
        for effect, start, end in channel.effects:
            if vector.role == "O+T" and (effect.end, effect.run) == (vector.value, vector.run):
                size, degrees = f"{abs(end - start):.3f}", angle(words.lag_deg(end - start))
                rows.append((_effect_sample(page), words.effect(effect), size, degrees))
    if channel.circle and channel.tolerance:
        beyond = channel.circle[1] - abs(channel.circle[0]) > rings(_largest(channel))[-1]
        text = words.circle(channel.tolerance, slow_roll=channel.circle[0] != 0, beyond=beyond)
        rows.append((_circle_sample(page), text, f"{channel.circle[1]:.3f}", "radius"))
    return rows


def _sample(page: Page, look: Look) -> Callable[[Point, Point], None]:
    def drawn(start: Point, end: Point) -> None:
        page.line([start, end], look.colour, linewidth=look.width, linestyle=look.line, zorder=3)
        page.marker(end, look.marker, look.colour, look.size * 0.85, filled=look.filled, zorder=4)

    return drawn


def _effect_sample(page: Page) -> Callable[[Point, Point], None]:
    return lambda start, end: _effect(page, start, (end[0] + 0.06, end[1]))


def _circle_sample(page: Page) -> Callable[[Point, Point], None]:
    return lambda start, end: page.line(
        [start, end], TOLERANCE, linewidth=1.3, linestyle=(0, (7, 2, 1.5, 2)), zorder=3
    )
