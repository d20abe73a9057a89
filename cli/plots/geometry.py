"""Where things lie on a polar plot: pure arithmetic, no drawing library.

A vector ``A e^{+j lag}`` is drawn as the rotor is seen from a named end: 0 deg at the top, angles growing
against rotation. Plot coordinates are x to the right and y upwards, in any unit of length.
"""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

Point = tuple[float, float]

STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)
MOST_RINGS = 5
ROOM = 1.02
"""The rim lies at least this much beyond the longest vector."""
SMALL = 0.15
"""Vectors shorter than this share of the full scale are drawn again, enlarged."""


def plot_point(value: complex, angles_grow: str) -> Point:
    """(x, y) of a vector's tip: straight up at lag 0.

    ``angles_grow`` counterclockwise (a rotor seen turning clockwise): lag 90 deg is to the left.
    Clockwise: to the right.
    """
    left = 1.0 if angles_grow == "counterclockwise" else -1.0
    return (-left * value.imag, value.real)


def plot_vector(point: Point, angles_grow: str) -> complex:
    """The vector whose tip is drawn at ``point``: the way back from ``plot_point``."""
    left = 1.0 if angles_grow == "counterclockwise" else -1.0
    return complex(point[1], -left * point[0])


def at_angle(radius: float, angle_deg: float, angles_grow: str) -> Point:
    """The point at a radius and at an angle of the plot's scale."""
    return plot_point(cmath.rect(radius, math.radians(angle_deg)), angles_grow)


def ring_step(largest: float) -> float:
    """A round distance between rings so that at most five hold ``largest``."""
    if not (math.isfinite(largest) and largest > 0):
        return 1.0
    power = 10.0 ** math.floor(math.log10(largest * ROOM / MOST_RINGS))
    return next(s * power for s in STEPS if s * power * MOST_RINGS >= largest * ROOM * (1 - 1e-9))


def rings(largest: float) -> tuple[float, ...]:
    """The rings' amplitudes; the last one is the rim, the full scale."""
    step = ring_step(largest)
    count = max(2, math.ceil(largest * ROOM / step - 1e-9))
    return tuple(step * (n + 1) for n in range(count))


def clearest_angle(busy: Iterable[Point], angles_grow: str, radii: Sequence[float]) -> float:
    """The angle (midway between two spokes) at which labels at these radii are farthest from ``busy``."""
    points = list(busy)

    def room(angle_deg: float) -> float:
        own = [at_angle(r, angle_deg, angles_grow) for r in radii]
        return min((math.dist(a, b) for a in own for b in points), default=math.inf)

    return max((15.0 + 30.0 * n for n in range(12)), key=room)


# --- labels --------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, order=True)
class Box:
    """An upright rectangle."""

    left: float
    bottom: float
    right: float
    top: float

    @staticmethod
    def around(centre: Point, width: float, height: float) -> Box:
        x, y = centre
        return Box(x - width / 2, y - height / 2, x + width / 2, y + height / 2)

    @property
    def centre(self) -> Point:
        return ((self.left + self.right) / 2, (self.bottom + self.top) / 2)

    def overlap(self, other: Box) -> float:
        """Common area."""
        width = min(self.right, other.right) - max(self.left, other.left)
        height = min(self.top, other.top) - max(self.bottom, other.bottom)
        return max(width, 0.0) * max(height, 0.0)

    def holds(self, point: Point) -> bool:
        return self.left <= point[0] <= self.right and self.bottom <= point[1] <= self.top

    def nearest(self, point: Point) -> Point:
        """The point of the box next to ``point``."""
        x, y = point
        return (min(max(x, self.left), self.right), min(max(y, self.bottom), self.top))

    def corners(self) -> tuple[Point, Point, Point, Point]:
        return (
            (self.left, self.bottom),
            (self.right, self.bottom),
            (self.right, self.top),
            (self.left, self.top),
        )


@dataclass(frozen=True, slots=True)
class Wanted:
    """A label to be placed beside a tip."""

    tip: Point
    width: float
    height: float


def along(start: Point, end: Point, spacing: float) -> list[Point]:
    """Points on a line, ends included, at most ``spacing`` apart."""
    count = max(1, math.ceil(math.dist(start, end) / spacing))
    return [
        (start[0] + (end[0] - start[0]) * i / count, start[1] + (end[1] - start[1]) * i / count)
        for i in range(count + 1)
    ]


def place_labels(
    wanted: Sequence[Wanted],
    *,
    centre: Point,
    radius: float,
    taken: Sequence[Box] = (),
    busy: Sequence[Point] = (),
) -> list[Box]:
    """A box for each label, inside the circle, apart from the others, and off what is drawn.

    ``taken`` holds boxes that must stay free, ``busy`` points of drawn lines and markers. A label moves away
    from its tip only as far as it must.
    """
    placed: list[Box] = []
    drawn = list(busy)
    for label in wanted:
        fixed = [*taken, *placed]
        costs = [
            (_cost(box, gap, label, fixed, drawn, centre, radius), i, box)
            for i, (box, gap) in enumerate(_choices(label, centre))
        ]
        placed.append(min(costs)[2])
        drawn += _leader(label, placed[-1])
    return placed


def _leader(label: Wanted, box: Box) -> list[Point]:
    """Points of the line from a tip to its label."""
    return along(label.tip, box.nearest(label.tip), 0.05)


def _choices(label: Wanted, centre: Point) -> list[tuple[Box, float]]:
    """(box, distance from the tip in label heights) all round the tip, nearest first, outward first."""
    outward = math.atan2(label.tip[1] - centre[1], label.tip[0] - centre[0])
    found: list[tuple[Box, float]] = []
    for gap in (0.6, 1.0, 1.7, 2.6, 3.8, 5.5, 7.5):
        for turn in (0, 1, -1, 2, -2, 3, -3, 4, -4, 5, -5, 6, -6, 7, -7, 8):
            x, y = math.cos(outward + turn * math.pi / 8), math.sin(outward + turn * math.pi / 8)
            reach = gap * label.height
            middle = (
                label.tip[0] + x * (reach + label.width / 2),
                label.tip[1] + y * (reach + label.height / 2),
            )
            found.append((Box.around(middle, label.width, label.height), gap))
    return found


def _cost(
    box: Box,
    gap: float,
    label: Wanted,
    taken: Sequence[Box],
    drawn: Sequence[Point],
    centre: Point,
    radius: float,
) -> float:
    """What speaks against a box: text or lines under it, a leader through another label, distance."""
    area = (box.right - box.left) * (box.top - box.bottom)
    over = sum(box.overlap(b) for b in taken) / area
    crossed = sum(b.holds(p) for p in _leader(label, box) for b in taken)
    hit = sum(box.holds(p) for p in drawn)
    outside = sum(max(0.0, math.dist(c, centre) / radius - 0.98) for c in box.corners())
    return 60.0 * over + 5.0 * crossed + 1.5 * hit + 100.0 * outside + gap
