"""A run's run-ups and coast-downs: amplitude and phase lag of 1X against speed, a panel a channel.

Up is drawn in solid lines, down in broken ones, each trace by itself. A lag is drawn only where the amplitude
is above its own noise floor. Critical speeds are marked at their peak, with the half-power width and AF.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, tzinfo
from typing import Any

import matplotlib
import numpy as np
from numpy.typing import NDArray

from cli.output import angle, clean, figures
from cli.plots.geometry import Point, ring_step
from cli.plots.page import INK, LINE_IN, Page, shorten, text_width, wrap
from config.units import Display
from store.balance.critical import HALF_POWER, Critical
from store.balance.slowroll import cautions
from store.casework_bode import SHIFTS, BodeChannel, BodePicture, Curve

Floats = NDArray[np.float64]

MARGIN = 0.4
PANEL_WIDTH, AXIS_ROOM, GUTTER = 7.6, 0.95, 0.35
AMPLITUDE_HEIGHT, LAG_HEIGHT, BETWEEN = 2.35, 1.55, 0.2
TITLE_HEIGHT, FOOT_HEIGHT = 0.5, 0.5
TITLE_PT, PAGE_TITLE_PT, SCALE_PT = 10.0, 13.0, 8.0
GRID, RIM = "#dedede", "#222222"
UP = (("#0072b2", "-"), ("#009e73", "-"), ("#332288", "-"))
DOWN = (("#d55e00", (0, (5, 1.8))), ("#cc79a7", (0, (5, 1.8))), ("#8c6d00", (0, (5, 1.8))))
LAG_STEPS, MOST_LAG_STEPS = (15, 30, 45, 90, 180, 360), 7
SAMPLE = 0.42
"""Length of a line's sample in the key, inches."""


@dataclass(frozen=True, slots=True)
class Scale:
    """From ``low``, a line each ``step``, ``steps`` of them."""

    low: float
    step: float
    steps: int

    @classmethod
    def over(cls, low: float, high: float, step: float) -> Scale:
        """The whole steps that hold ``low`` to ``high``."""
        first, last = math.floor(low / step + 1e-9), math.ceil(high / step - 1e-9)
        return cls(first * step, step, max(1, last - first))

    @property
    def high(self) -> float:
        return self.low + self.steps * self.step

    @property
    def values(self) -> tuple[float, ...]:
        return tuple(self.low + k * self.step for k in range(self.steps + 1))

    def share(self, value: float) -> float:
        return (value - self.low) / (self.high - self.low)


@dataclass(frozen=True, slots=True)
class Frame:
    """A rectangle of the page with scales: corners in inches, and what lies at them."""

    left: float
    bottom: float
    width: float
    height: float
    x: Scale
    y: Scale

    def at(self, x: float, y: float) -> Point:
        return (self.left + self.x.share(x) * self.width, self.bottom + self.y.share(y) * self.height)

    def outline(self, page: Page) -> None:
        (x0, y0), (x1, y1) = (self.left, self.bottom), (self.left + self.width, self.bottom + self.height)
        page.line([(x0, y0), (x1, y0), (x1, y1), (x0, y1), (x0, y0)], RIM, linewidth=0.9, zorder=4)


@dataclass(frozen=True, slots=True)
class Panel:
    """The two frames of a channel, one above the other."""

    channel: str
    amplitude: Frame
    lag: Frame


@dataclass(frozen=True, slots=True)
class Drawing:
    page: Page
    panels: tuple[Panel, ...]


@dataclass(frozen=True, slots=True)
class _Look:
    colour: str
    line: Any


def draw(picture: BodePicture, shows: Mapping[str, Display], zone: tzinfo) -> Drawing:
    """The picture on a page. ``shows`` says by channel how amplitudes are shown; times are in ``zone``."""
    with matplotlib.rc_context():
        matplotlib.rcdefaults()  # a user's own style must not change a picture's meaning
        return _draw(picture, shows, zone)


def _draw(picture: BodePicture, shows: Mapping[str, Display], zone: tzinfo) -> Drawing:
    across = 1 if len(picture.channels) <= 2 else 2
    width = across * PANEL_WIDTH + (across - 1) * GUTTER + 2 * MARGIN
    head = [t for fact in _facts(picture, zone) for t in wrap(fact, width - 2 * MARGIN)]
    foot = [t for note in _notes(picture) for t in wrap(note, width - 2 * MARGIN)]
    keys = {c.channel: list(_key(c, shows[c.channel], zone)) for c in picture.channels}
    rows = [picture.channels[i : i + across] for i in range(0, len(picture.channels), across)]
    heights = [_high(max(len(keys[c.channel]) for c in row)) for row in rows]
    page = Page(width, 2 * MARGIN + 0.45 + LINE_IN * (len(head) + len(foot)) + sum(heights) + 0.1)
    top = page.height - MARGIN
    page.text((MARGIN, top - 0.05), _title(picture, width), points=PAGE_TITLE_PT, bold=True)
    top = _lines(page, head, top - 0.33) - 0.1
    panels = []
    for row, high in zip(rows, heights, strict=True):
        for i, channel in enumerate(row):
            corner = (MARGIN + i * (PANEL_WIDTH + GUTTER), top)
            panels.append(_panel(page, channel, shows[channel.channel], corner, keys[channel.channel]))
        top -= high
    _lines(page, foot, top - 0.05)
    return Drawing(page, tuple(panels))


def _high(key_lines: int) -> float:
    return TITLE_HEIGHT + AMPLITUDE_HEIGHT + BETWEEN + LAG_HEIGHT + FOOT_HEIGHT + key_lines * LINE_IN + 0.25


def _lines(page: Page, lines: Sequence[str], top: float) -> float:
    for line in lines:
        page.text((MARGIN, top), line)
        top -= LINE_IN
    return top


# --- words ---------------------------------------------------------------------------------------------


def _title(picture: BodePicture, width: float) -> str:
    of = picture.machine
    name = "no job" if of is None else f"{clean(of.serial)} ({clean(of.model.code)})"
    said = f"Run {clean(picture.run)}: {name}, 1X against speed"
    return shorten(said, width - 2 * MARGIN, PAGE_TITLE_PT * 1.12)


def _facts(picture: BodePicture, zone: tzinfo) -> Iterator[str]:
    begun = datetime.fromtimestamp(picture.started_us / 1e6, UTC).astimezone(zone)
    yield f"{begun.strftime('%Y-%m-%d %H:%M %Z')}; {picture.origin}"
    yield (
        f"Lag counts from the {picture.edge} edge of the once-per-rev pulse, against rotation, and grows "
        "upward; it is drawn only where the amplitude is above its own noise floor (95 %)."
    )
    if picture.runout is None:
        yield "Vectors as measured, runout included."
        return
    slow = picture.runout.reading
    left = "".join(f" {clean(text)}" for text in picture.runout.left_raw)
    yield (
        f"Less the slow roll of run {clean(slow.run)} reading {slow.reading}, "
        f"{slow.speed_hz * 60:.0f} r/min.{left}"
    )


def _notes(picture: BodePicture) -> Iterator[str]:
    if any(k.criticals for c in picture.channels for k in c.curves):
        yield (
            "AF: amplification factor, peak speed over the distance of the half-power speeds (bar at 0.707 "
            "of the peak)."
        )
    yield _sentence(SHIFTS)
    if picture.runout is not None:
        for text in cautions(picture.runout.reading.speed_hz, picture.top_hz):
            yield _sentence(text)


def _sentence(text: str) -> str:
    return f"{text[0].upper()}{text[1:]}."


@dataclass(frozen=True, slots=True)
class _KeyLine:
    text: str
    look: _Look | None = None
    """Of the sample before the text; None = the line belongs to the one above."""


def _key(channel: BodeChannel, display: Display, zone: tzinfo) -> Iterator[_KeyLine]:
    for curve, look in _looked(channel):
        begun = datetime.fromtimestamp(curve.started_us / 1e6, UTC).astimezone(zone)
        rpm = curve.speed_hz * 60
        yield _KeyLine(
            f"trace {curve.trace} {curve.direction}: {rpm[0]:.0f} to {rpm[-1]:.0f} r/min, {len(rpm)} steps "
            f"in {curve.duration_s:.1f} s from {begun.strftime('%H:%M:%S')}",
            look,
        )
        for one in curve.criticals:
            yield _KeyLine(_critical_words(curve, one, display))
        for no in curve.refused:
            told = f"no critical speed is made of the peak at {no.speed_hz * 60:.0f} r/min: {clean(no.why)}"
            yield from (_KeyLine(t) for t in wrap(told, PANEL_WIDTH - SAMPLE - 0.3))


def _critical_words(curve: Curve, one: Critical, display: Display) -> str:
    size = f"{figures(one.amplitude * display.factor)} {display.name} at {angle(one.lag_deg)} deg"
    return (
        f"critical {one.speed_hz * 60:.0f} +- {one.within_hz * 60:.0f} r/min, AF {one.amplification:.1f} "
        f"({one.low_hz * 60:.0f} to {one.high_hz * 60:.0f}), {size}, {curve.sweep(one) * 60:+.0f} r/min per s"
    )


def _looked(channel: BodeChannel) -> list[tuple[Curve, _Look]]:
    """Each curve with its look: up and down by line style, several of one way by colour too."""
    seen = {"up": 0, "down": 0}
    found = []
    for curve in channel.curves:
        looks = UP if curve.direction == "up" else DOWN
        found.append((curve, _Look(*looks[seen[curve.direction] % len(looks)])))
        seen[curve.direction] += 1
    return found


# --- a panel -------------------------------------------------------------------------------------------


def _panel(
    page: Page, channel: BodeChannel, display: Display, corner: Point, key: Sequence[_KeyLine]
) -> Panel:
    left, top = corner
    name = shorten(clean(channel.channel), 4.5, TITLE_PT)
    page.text((left, top - 0.12), f"{name}, 1X in {display.name}", points=TITLE_PT, bold=True)
    how = "less slow roll" if channel.less_slow_roll else "as measured"
    page.text((left, top - 0.31), f"probe at {channel.probe_deg:g} deg on the stand; {how}")
    x = _speed_scale(channel)
    bottom = top - TITLE_HEIGHT - AMPLITUDE_HEIGHT
    wide = PANEL_WIDTH - AXIS_ROOM
    upper = Frame(left + AXIS_ROOM, bottom, wide, AMPLITUDE_HEIGHT, x, _amplitude_scale(channel, display))
    bottom -= BETWEEN + LAG_HEIGHT
    lags = lags_of(channel.curves)
    lower = Frame(left + AXIS_ROOM, bottom, wide, LAG_HEIGHT, x, lag_scale(lags))
    _grid(page, upper, lower, display)
    looks = _looked(channel)
    for (curve, look), lag in zip(looks, lags, strict=True):
        _amplitude(page, upper, curve, look, display)
        _lag(page, lower, curve, look, lag)
    _criticals(page, upper, lower, looks, display)
    _key_lines(page, key, (left, bottom - FOOT_HEIGHT))
    return Panel(channel.channel, upper, lower)


def _speed_scale(channel: BodeChannel) -> Scale:
    """r/min from zero on."""
    top = max(float(c.speed_hz.max()) for c in channel.curves) * 60
    return Scale.over(0.0, top * 1.001, ring_step(top / 2))


def _amplitude_scale(channel: BodeChannel, display: Display) -> Scale:
    """With room above the highest peak for its words."""
    top = max(float(np.abs(c.values).max()) for c in channel.curves) * display.factor or 1.0
    return Scale.over(0.0, top * 1.08, ring_step(top))


def lags_of(curves: Sequence[Curve]) -> list[Floats]:
    """Lag of each curve in degrees, shape (steps,), unwrapped along speed; nan where it means nothing.

    Each is moved by whole turns so that it lies beside the first; the first begins between 0 and 360."""
    found: list[Floats] = []
    for curve in curves:
        lag = np.full(len(curve.speed_hz), np.nan)
        order = np.argsort(curve.speed_hz, kind="stable")
        order = order[curve.known[order]]
        if len(order):
            lag[order] = np.degrees(np.unwrap(np.angle(curve.values[order])))
            lag -= 360 * _turns_off(curve.speed_hz, lag, curves, found)
        found.append(lag)
    return found


def _turns_off(speed_hz: Floats, lag: Floats, curves: Sequence[Curve], found: Sequence[Floats]) -> float:
    """By how many whole turns a curve's lag lies above that of an earlier curve, or above its first turn."""
    known = ~np.isnan(lag)
    for curve, other in zip(curves, found, strict=False):
        order = np.argsort(curve.speed_hz)
        order = order[~np.isnan(other[order])]
        if len(order):
            beside = np.interp(speed_hz[known], curve.speed_hz[order], other[order])
            return float(np.rint(np.median(lag[known] - beside) / 360))
    slowest = np.flatnonzero(known)[np.argmin(speed_hz[known])]
    return math.floor(float(lag[slowest]) / 360)


def lag_scale(lags: Sequence[Floats]) -> Scale:
    """Whole steps from the least lag to the largest; one turn when none is known."""
    known = np.concatenate(lags)
    known = known[~np.isnan(known)]
    if not len(known):
        return Scale(0.0, 90.0, 4)
    low, high = float(known.min()), float(known.max())
    step = next((s for s in LAG_STEPS if (high - low) / s <= MOST_LAG_STEPS), LAG_STEPS[-1])
    return Scale.over(low, high, step)


# --- scales --------------------------------------------------------------------------------------------


def _grid(page: Page, upper: Frame, lower: Frame, display: Display) -> None:
    for rpm in upper.x.values:
        for frame in (upper, lower):
            ends = [frame.at(rpm, y) for y in (frame.y.low, frame.y.high)]
            page.line(ends, GRID, linewidth=0.6, zorder=1)
        at = lower.at(rpm, lower.y.low)
        page.text((at[0], at[1] - 0.13), f"{rpm:g}", points=SCALE_PT, align="center")
    middle = (lower.left + lower.width / 2, lower.bottom - 0.31)
    page.text(middle, "r/min", align="center")
    _levels(page, upper, "{:g}")
    _levels(page, lower, "{:g}\N{DEGREE SIGN}", turn=360.0)
    for frame, text in ((upper, display.name), (lower, "lag")):
        page.text((frame.left - AXIS_ROOM, frame.bottom + frame.height / 2), text)
        frame.outline(page)


def _levels(page: Page, frame: Frame, form: str, turn: float = math.inf) -> None:
    for value in frame.y.values:
        ends = [frame.at(x, value) for x in (frame.x.low, frame.x.high)]
        page.line(ends, GRID, linewidth=0.6, zorder=1)
        at = (ends[0][0] - 0.08, ends[0][1])
        page.text(at, form.format(value % turn), points=SCALE_PT, align="right")


# --- curves --------------------------------------------------------------------------------------------


def _amplitude(page: Page, frame: Frame, curve: Curve, look: _Look, display: Display) -> None:
    sizes = np.abs(curve.values) * display.factor
    points = [frame.at(s * 60, a) for s, a in zip(curve.speed_hz.tolist(), sizes.tolist(), strict=True)]
    page.line(points, look.colour, linewidth=1.5, linestyle=look.line, zorder=3)


def _lag(page: Page, frame: Frame, curve: Curve, look: _Look, lag: Floats) -> None:
    """In pieces: nothing joins two known lags across one that is not."""
    piece: list[Point] = []
    for speed, value in zip([*curve.speed_hz.tolist(), math.nan], [*lag.tolist(), math.nan], strict=True):
        if not math.isnan(value):
            piece.append(frame.at(speed * 60, value))
            continue
        if len(piece) > 1:
            page.line(piece, look.colour, linewidth=1.5, linestyle=look.line, zorder=3)
        elif piece:
            page.marker(piece[0], "o", look.colour, 2.5, filled=True, zorder=3)
        piece = []


def _criticals(
    page: Page, upper: Frame, lower: Frame, looks: Sequence[tuple[Curve, _Look]], display: Display
) -> None:
    """Peak, half-power bar and words: those of up to the left, those of down to the right, where they fit."""
    for curve, look in looks:
        for one in curve.criticals:
            rpm, size = one.speed_hz * 60, one.amplitude * display.factor
            for frame in (upper, lower):
                ends = [frame.at(rpm, frame.y.low), frame.at(rpm, frame.y.high if frame is lower else size)]
                page.line(ends, look.colour, linewidth=0.8, linestyle=(0, (1, 2)), zorder=2)
            bar = [upper.at(x * 60, size * HALF_POWER) for x in (one.low_hz, one.high_hz)]
            page.line(bar, look.colour, linewidth=0.9, linestyle=look.line, zorder=2.5)
            for x, y in bar:
                page.line([(x, y - 0.05), (x, y + 0.05)], look.colour, linewidth=1.1, zorder=2.5)
            peak = upper.at(rpm, size)
            page.marker(
                peak, "v" if curve.direction == "down" else "^", look.colour, 6.5, filled=True, zorder=5
            )
            _label(page, upper, peak, one, look, left=curve.direction == "up")


def _label(page: Page, frame: Frame, peak: Point, one: Critical, look: _Look, *, left: bool) -> None:
    text = f"{one.speed_hz * 60:.0f} r/min, AF {one.amplification:.1f}"
    room = text_width(text) + 0.15
    if left and peak[0] - room < frame.left:
        left = False
    elif not left and peak[0] + room > frame.left + frame.width:
        left = True
    at = (peak[0] + (-0.12 if left else 0.12), peak[1] + 0.06)
    page.text(at, text, colour=look.colour, align="right" if left else "left", halo=True, bold=True)


def _key_lines(page: Page, key: Sequence[_KeyLine], corner: Point) -> None:
    left, top = corner
    for line in key:
        if line.look is not None:
            sample = [(left, top), (left + SAMPLE, top)]
            page.line(sample, line.look.colour, linewidth=1.8, linestyle=line.look.line)
        page.text((left + SAMPLE + (0.1 if line.look else 0.25), top), line.text, colour=INK)
        top -= LINE_IN
