"""From an unbalance to pieces in real holes, and back (METHODS section 3). U = m r in g.mm throughout."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

from store.balance.angles import Ends, angle_deg, difference_deg, hole_angle_deg, nearest_hole, polar
from store.records import Mount, WeightPlane

DEFAULT_STEP_G = 0.1
"""Masses are advised in steps of this."""
ON_THE_HOLE_DEG = 1e-6


@dataclass(frozen=True, slots=True)
class Piece:
    """A piece to fit: mass at the plane's radius, in a hole or (plane without holes) at an angle."""

    plane: int
    hole: int | None
    angle_deg: float
    """Against rotation from the rotor mark."""
    mass_g: float
    radius_mm: float

    @property
    def unbalance(self) -> complex:
        """g.mm against rotation from the rotor mark."""
        return polar(self.mass_g * self.radius_mm, self.angle_deg)


def split(amount: float, at_deg: float, first_deg: float, second_deg: float) -> tuple[float, float]:
    """Parts of ``amount`` at two angles less than 180 deg apart that add up to it.

    m1 = m sin(t2 - t)/sin(t2 - t1), m2 = m sin(t - t1)/sin(t2 - t1), differences mod 360. A negative part
    means the angle lies outside the span.
    """
    gap = math.sin(math.radians(difference_deg(second_deg, first_deg)))
    return (
        amount * math.sin(math.radians(difference_deg(second_deg, at_deg))) / gap,
        amount * math.sin(math.radians(difference_deg(at_deg, first_deg))) / gap,
    )


def combine(pieces: Iterable[complex]) -> complex:
    """The one weight that equals several."""
    return sum(pieces, start=0j)


def rounded(mass_g: float, step_g: float) -> float:
    """The nearest multiple of the step, as a clean decimal."""
    return round(round(mass_g / step_g) * step_g, 9)


def rounded_down(mass_g: float, step_g: float) -> float:
    """The multiple of the step not above the mass, as a clean decimal."""
    return round(math.floor(mass_g / step_g + 1e-9) * step_g, 9)


def place(
    unbalance: complex, plane: WeightPlane, mount: Mount, ends: Ends, step_g: float
) -> tuple[Piece, ...]:
    """Pieces that come nearest to an unbalance: the two neighbouring holes, masses rounded, none of zero.

    With fewer than three holes only the nearest one can be used, with the part that acts there. A plane
    without holes takes one piece at the angle itself.
    """
    mass, at_deg = abs(unbalance) / plane.radius_mm, angle_deg(unbalance)
    anywhere: list[tuple[int | None, float, float]] = [(None, at_deg, mass)]
    parts = _in_holes(mass, at_deg, plane, mount, ends) if plane.holes else anywhere
    made = [Piece(plane.number, h, a, rounded(m, step_g), plane.radius_mm) for h, a, m in parts]
    return tuple(p for p in made if p.mass_g > 0)


def _in_holes(
    mass: float, at_deg: float, plane: WeightPlane, mount: Mount, ends: Ends
) -> list[tuple[int | None, float, float]]:
    nearest = nearest_hole(plane, mount, at_deg, ends)
    near_deg = hole_angle_deg(plane, mount, nearest, ends)
    off = difference_deg(at_deg, near_deg)
    if abs(off) < ON_THE_HOLE_DEG:
        return [(nearest, near_deg, mass)]
    if plane.holes < 3:
        return [(nearest, near_deg, max(mass * math.cos(math.radians(off)), 0.0))]
    beside = [(nearest - 1 + step) % plane.holes + 1 for step in (1, -1)]
    angles = {h: hole_angle_deg(plane, mount, h, ends) for h in beside}
    other = max(beside, key=lambda h: difference_deg(angles[h], near_deg) * math.copysign(1.0, off))
    m1, m2 = split(mass, at_deg, near_deg, angles[other])
    return [(nearest, near_deg, m1), (other, angles[other], m2)]
