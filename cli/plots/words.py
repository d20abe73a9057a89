"""The words on a polar plot: title, facts, senses, weights and verdict, wrapped to the page."""

from __future__ import annotations

import cmath
import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, tzinfo
from itertools import groupby

from cli.marked import words
from cli.output import angle, clean
from cli.plots.page import shorten, text_width, wrap
from store.balance.slowroll import NEAR_CRITICAL
from store.casework_answers import FittedPiece, PlaneVerdict, Verdict
from store.casework_polar import (
    FittedAt,
    PolarEffect,
    PolarPicture,
    PolarVector,
    ToleranceCircle,
)

LONG_NAME = 12
FLAGS = 24
"""Most letters of a vector's flags in the key."""
NO_BREAK = "\N{NO-BREAK SPACE}"


@dataclass(frozen=True, slots=True)
class Line:
    text: str
    indent: float = 0.0
    """Inches."""
    lead: str = ""
    """Stands at the left edge of the same line."""
    bold: bool = False


def lag_deg(value: complex) -> float:
    return math.degrees(cmath.phase(value))


# --- head ----------------------------------------------------------------------------------------------


def title(picture: PolarPicture) -> str:
    machine = f"{clean(picture.machine_serial)} ({clean(picture.model_code)})"
    return f"Job {clean(picture.job_number)}: {machine}, {picture.speed_hz * 60:.0f} r/min"


def head(picture: PolarPicture, zone: tzinfo, width: float) -> list[Line]:
    runs = ", ".join(clean(r) for r in picture.runs)
    many = "s" if len(picture.runs) > 1 else ""
    facts = f"{_dates(picture, zone)}; run{many} {runs}; {' and '.join(picture.origins)}"
    lines = [Line(t) for t in wrap(facts, width)]
    lines += [Line(t, bold=True) for t in wrap(senses(picture), width, bold=True)]
    return lines + [Line(t) for t in wrap(zeros(picture), width)]


def _dates(picture: PolarPicture, zone: tzinfo) -> str:
    first, last = (
        datetime.fromtimestamp(us / 1e6, UTC).astimezone(zone) for us in (picture.first_us, picture.last_us)
    )
    form = "%H:%M" if first.date() == last.date() else "%Y-%m-%d %H:%M"
    end = "" if last.strftime(form) == first.strftime(form) else f" to {last.strftime(form)}"
    return f"{first.strftime('%Y-%m-%d %H:%M')}{end} {first.strftime('%Z')}"


def senses(picture: PolarPicture) -> str:
    return (
        f"Rotation: {picture.turns} seen from {clean(picture.seen_from)}, and so drawn. "
        f"Lag and weight angles grow against rotation ({picture.angles_grow} here) from 0 deg at the top."
    )


def zeros(picture: PolarPicture) -> str:
    return (
        f"Lag counts from the {picture.edge} edge of the once-per-rev pulse, "
        "weight angles from the rotor mark. "
        f"Once-per-rev sensor at {picture.sensor_deg:g} deg, clockwise seen from {clean(picture.seen_from)} "
        f"(0 deg: {clean(picture.zero)}). {runout(picture)}"
    )


def runout(picture: PolarPicture) -> str:
    if picture.slow_roll is None:
        return "Vectors as measured, runout included."
    run, number, hz = picture.slow_roll
    left = "".join(f" {clean(text)}" for text in picture.left_raw)
    bow = NEAR_CRITICAL[0].upper() + NEAR_CRITICAL[1:]
    return (
        f"Vectors less the slow roll of run {clean(run)} reading {number}, {hz * 60:.0f} r/min.{left} {bow}."
    )


# --- panels --------------------------------------------------------------------------------------------


def probe(probe_deg: float, rings: Sequence[float], unit: str) -> str:
    return f"probe at {probe_deg:g} deg on the stand; a ring every {rings[0]:g} {unit}"


def short_label(vector: PolarVector) -> str:
    number = f" no {vector.reading}" if vector.reading else ""
    return f"{vector.role} {_brief(vector.run)}{number}"


def _brief(run: str) -> str:
    """A run's name; of a long one its number in the job."""
    name = clean(run)
    return name if len(name) <= LONG_NAME else f"\N{HORIZONTAL ELLIPSIS}/{name.rpartition('/')[2]}"


def role_label(vector: PolarVector, others: Sequence[PolarVector]) -> str:
    """The role, and the run's number where several have the same one."""
    alike = sum(o.role == vector.role for o in others) > 1
    return f"{vector.role} /{clean(vector.run).rpartition('/')[2]}" if alike else vector.role


def key_label(vector: PolarVector) -> str:
    number = f" reading {vector.reading}" if vector.reading else ""
    role = "predicted for" if vector.role == "predicted" else vector.role
    flagged = vector.flagged and vector.role != "predicted"
    flag = f" (flagged: {words(list(vector.flags), FLAGS)})" if flagged else ""
    return f"{role} {clean(vector.run)}{number}{flag}"


def effect(change: PolarEffect) -> str:
    added = ", ".join(
        f"{abs(w):.4g} g.mm at {angle(lag_deg(w))} deg in plane {p}" for p, w in change.weights.items()
    )
    return f"effect of {added} (from {_brief(change.since_run)})"


def circle(tolerance: ToleranceCircle, *, slow_roll: bool, beyond: bool) -> str:
    about = " about the slow roll" if slow_roll else ""
    return f"tolerance {tolerance.permissible_gmm:.4g} g.mm{about}{', beyond the rim' if beyond else ''}"


# --- foot ----------------------------------------------------------------------------------------------


def foot(picture: PolarPicture, width: float) -> list[Line]:
    lines = [Line("Weights on the rotor (angles against rotation from the rotor mark)", bold=True)]
    lines += _weights(picture.weights, width)
    lines.append(Line(""))
    lines += _verdict(picture, width)
    for run, why in picture.left:
        lines += [Line(t) for t in wrap(f"Not drawn: run {clean(run)}, {clean(why)}.", width)]
    return lines


def _weights(fitted: Sequence[FittedAt], width: float) -> Iterator[Line]:
    names = ["now" if f.run is None else f"{f.role} {clean(f.run)}" for f in fitted]
    indent = min(2.5, max((text_width(n) for n in names), default=0.0) + 0.2)
    for name, held in zip(names, fitted, strict=True):
        told = wrap(_held(held.pieces), width - indent)
        yield Line(told[0], indent, lead=shorten(name, indent - 0.1))
        yield from (Line(t, indent) for t in told[1:])


def _held(pieces: tuple[FittedPiece, ...]) -> str:
    """What a rotor holds, plane by plane; a piece is not broken across lines."""
    ordered = sorted(pieces, key=lambda p: p.plane)
    by_plane = [
        f"plane {plane}: {', '.join(_piece(p).replace(' ', NO_BREAK) for p in held)}"
        for plane, held in groupby(ordered, key=lambda p: p.plane)
    ]
    return "; ".join(by_plane) or "none"


def _piece(piece: FittedPiece) -> str:
    at = "" if piece.angle_deg is None else f"{angle(piece.angle_deg)} deg"
    radius = f" at {piece.radius_mm:g} mm" if piece.own_radius else ""
    drilled = "drilled " if piece.drilled else ""
    if piece.hole is None:
        return f"{drilled}{piece.mass_g:g} g{radius} at {at}"
    return f"{drilled}{piece.mass_g:g} g{radius} in hole {piece.hole}" + (f" ({at})" if at else "")


def _verdict(picture: PolarPicture, width: float) -> Iterator[Line]:
    verdict = picture.verdict
    circles = any(c.circle for c in picture.channels)
    if verdict is None:
        yield Line("No check run yet, so no residual unbalance to judge.")
    else:
        yield Line(_said(verdict), bold=True)
        for text in [_plane(p) for p in verdict.planes] + [clean(verdict.tolerance_how)]:
            yield from (Line(t, 0.15) for t in wrap(text, width - 0.15))
    if picture.planes > 1:
        yield Line("No tolerance circle: with two planes each probe sees the unbalance of both.")
    elif circles and len(picture.channels) > 1:
        yield Line("Each tolerance circle is of its own channel; the verdict takes all channels together.")


def _said(verdict: Verdict) -> str:
    said = {True: "IN TOLERANCE", False: "OUT OF TOLERANCE", None: "NOT JUDGED"}[verdict.in_tolerance]
    runout = "runout included" if verdict.runout_included else f"less slow roll {verdict.slow_roll_run}"
    return f"{verdict.label} {clean(verdict.run_name)}: {said} ({clean(runout)})"


def _plane(plane: PlaneVerdict) -> str:
    if plane.residual is None:
        return f"plane {plane.plane}: not judged, {clean(plane.why_not)}"
    share = "no tolerance on record" if plane.share_gmm is None else f"permissible {plane.share_gmm:.1f} g.mm"
    left = f"residual {abs(plane.residual):.1f} g.mm, heavy spot {angle(lag_deg(plane.residual))} deg"
    said = {True: "in", False: "OUT", None: "not judged"}[plane.in_tolerance]
    return f"plane {plane.plane}: {left}, {share}: {said}"
