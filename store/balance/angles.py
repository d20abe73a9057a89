"""The one place that turns angles: stand angles, rotation and hole numbering, each seen from a named end.

Everything leaves here in one of two senses. Angles of weights and holes run *against rotation from the
rotor mark's triggering edge* (the sense in which phase lag grows). Angles of things that stand still
(probes, once-per-rev sensor) run *with rotation from the stand's zero*. METHODS sections 0 and 6.1.
All angles are degrees in [0, 360) unless said otherwise.
"""

from __future__ import annotations

import cmath
import math

from config.errors import Refusal
from store.records import Mount, PieceDraft, Sense, WeightEvent, WeightPlane

Ends = tuple[str, str]
"""Names of the stand's two ends."""

MARK_AGREEMENT_DEG = 1.0
"""Planes may differ by this much in how far the one rotor mark moved between two mounts (judgement)."""


def wrap_deg(angle_deg: float) -> float:
    """The angle in [0, 360)."""
    wrapped = math.fmod(angle_deg, 360.0)
    wrapped = wrapped + 360.0 if wrapped < 0 else wrapped
    return 0.0 if wrapped >= 360.0 else wrapped + 0.0


def difference_deg(a_deg: float, b_deg: float) -> float:
    """``a - b`` the short way round, in (-180, 180]."""
    d = wrap_deg(a_deg - b_deg)
    return d - 360.0 if d > 180.0 else d


def polar(amplitude: float, angle_deg: float) -> complex:
    """``amplitude`` at ``angle_deg`` as a complex number."""
    return cmath.rect(amplitude, math.radians(angle_deg))


def angle_deg(value: complex) -> float:
    """Angle of a complex number in [0, 360)."""
    return wrap_deg(math.degrees(cmath.phase(value)))


def turn(value: complex, by_deg: float) -> complex:
    """``value`` turned by ``by_deg`` in the sense in which lag grows."""
    return value * polar(1.0, by_deg) if by_deg else value


def sign_of(sense: Sense, ends: Ends) -> int:
    """+1 when the sense is clockwise seen from the first end, -1 when it is clockwise from the second.

    Raises Refusal when ``sense.seen_from`` is none of the ends.
    """
    if sense.seen_from not in ends:
        raise Refusal(
            f"{sense.seen_from!r} is not an end of the stand.", f"Its ends are {ends[0]!r} and {ends[1]!r}."
        )
    seen = 1 if sense.seen_from == ends[0] else -1
    return seen if sense.turn == "clockwise" else -seen


def same_sense(a: Sense, b: Sense, ends: Ends) -> bool:
    """Whether two senses of turning are one, whichever end each is seen from."""
    return sign_of(a, ends) == sign_of(b, ends)


def stationary_with_rotation_deg(angle_deg: float, seen_from: str, rotation: Sense, ends: Ends) -> float:
    """A stand angle (clockwise from the zero seen from ``seen_from``) as an angle with rotation."""
    clockwise = Sense("clockwise", seen_from)
    return wrap_deg(angle_deg if same_sense(clockwise, rotation, ends) else -angle_deg)


def _against(plane: WeightPlane, mount: Mount, numbering_deg: float, ends: Ends) -> float:
    """An angle counted as the plane's holes are, counted against rotation instead (not wrapped)."""
    return -numbering_deg if same_sense(plane.numbering, mount.rotation, ends) else numbering_deg


def plane_of(mount: Mount, number: int) -> WeightPlane:
    """The mounted machine's plane. Raises Refusal when its model has none of that number."""
    plane = mount.machine.model.plane(number)
    if plane is None:
        known = ", ".join(str(p.number) for p in mount.machine.model.planes) or "none"
        raise Refusal(
            f"Model {mount.machine.model.code} of {mount.machine.serial} has no plane {number}.",
            f"Its planes: {known}.",
        )
    return plane


def _mark_deg(plane: WeightPlane, mount: Mount) -> float:
    mark = mount.mark_of(plane.number)
    if mark is None:
        raise Refusal(
            f"Where the rotor mark of {mount.machine.serial} is, counted from hole 1 of plane "
            f"{plane.number}, was not typed for this mount.",
            "Mount it again with the mark's position and how it was measured, or give angles from the mark.",
        )
    return mark.from_hole1_deg


def hole_angle_deg(plane: WeightPlane, mount: Mount, hole: int, ends: Ends) -> float:
    """Angle of a hole against rotation from the rotor mark.

    Raises Refusal when there is no such hole, or the mark's position in that plane was not typed.
    """
    if not 1 <= hole <= plane.holes:
        have = f"holes 1 to {plane.holes}" if plane.holes else "no holes"
        raise Refusal(
            f"Plane {plane.number} of {mount.machine.serial} has {have}; there is no hole {hole}.",
            "Choose one of them." if plane.holes else "Give the weight an angle instead.",
        )
    from_mark = (hole - 1) * 360.0 / plane.holes - _mark_deg(plane, mount)
    return wrap_deg(_against(plane, mount, from_mark, ends))


def nearest_hole(plane: WeightPlane, mount: Mount, at_deg: float, ends: Ends) -> int:
    """The hole next to an angle against rotation from the rotor mark (ties: the lower turn of numbering)."""
    step = 360.0 / plane.holes
    counted = _against(plane, mount, at_deg, ends) + _mark_deg(plane, mount)
    return math.ceil(counted / step - 0.5) % plane.holes + 1


def piece_angle_deg(piece: WeightEvent | PieceDraft, mount: Mount, ends: Ends) -> float:
    """Angle of a fitted piece against rotation from the rotor mark, by its hole or its typed angle."""
    plane = plane_of(mount, piece.plane)
    if piece.hole is not None:
        return hole_angle_deg(plane, mount, piece.hole, ends)
    if piece.angle_deg is None:
        raise Refusal(
            f"The piece of {piece.mass_g:g} g in plane {piece.plane} has neither a hole nor an angle.",
            "Enter it again with one of them.",
        )
    return wrap_deg(piece.angle_deg)


def piece_unbalance(piece: WeightEvent | PieceDraft, mount: Mount, ends: Ends) -> complex:
    """U = m r of a piece in g.mm, against rotation from the mark; a drilled mass counts as minus."""
    radius = piece.radius_mm if piece.radius_mm is not None else plane_of(mount, piece.plane).radius_mm
    sign = -1.0 if isinstance(piece, WeightEvent) and piece.act == "drilled" else 1.0
    return sign * polar(piece.mass_g * radius, piece_angle_deg(piece, mount, ends))


def frame_turn_deg(then: Mount, now: Mount, ends: Ends) -> float | None:
    """What to add to an angle from ``then``'s rotor mark to count it from ``now``'s; None = not known.

    Vectors and weights turn together, so no coefficient changes. Where the position of either mount's mark
    was not typed anew the two count as one only when the positions kept for both are equal.
    """
    if then.id == now.id:
        return 0.0
    turns = [
        difference_deg(_mark_against(then, plane, ends), _mark_against(now, plane, ends))
        for plane in sorted({m.plane for m in then.marks} & {m.plane for m in now.marks})
    ]
    if not turns or any(abs(difference_deg(t, turns[0])) > MARK_AGREEMENT_DEG for t in turns):
        return None
    if then.mark_how is None or now.mark_how is None:
        return 0.0 if all(abs(t) < 1e-9 for t in turns) else None
    return turns[0]


def mark_shifts_deg(then: Mount, now: Mount, ends: Ends) -> dict[int, float]:
    """By plane, how far the rotor mark's typed place moved on the rotor, against ``now``'s rotation.

    Only planes that both mounts name and that are numbered the same way. One mark moves all planes alike.
    """
    shifts: dict[int, float] = {}
    for mark in now.marks:
        old, plane, was = then.mark_of(mark.plane), plane_of(now, mark.plane), plane_of(then, mark.plane)
        if old is not None and same_sense(was.numbering, plane.numbering, ends):
            moved = difference_deg(mark.from_hole1_deg, old.from_hole1_deg)
            shifts[mark.plane] = _against(plane, now, moved, ends)
    return shifts


def _mark_against(mount: Mount, plane_number: int, ends: Ends) -> float:
    """Angle of the rotor mark against rotation from hole 1 of a plane."""
    plane = plane_of(mount, plane_number)
    return _against(plane, mount, _mark_deg(plane, mount), ends)
