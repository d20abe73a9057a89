"""What operators type, as click parameter types: a mistake is exit code 2 and says how it is written."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from typing import Any

import click

from config.errors import BadQuantity
from config.units import Measure, parse_quantity

SENSE = re.compile(r"^(clockwise|counterclockwise|cw|ccw)\s+(?:seen\s+)?from\s+(?:the\s+)?(.+?)(?:\s+end)?$")
SENSE_EXAMPLE = 'Write for example "clockwise from drive".'


class Quantity(click.ParamType[Any]):
    """A number with its unit, in the base unit of its measure."""

    def __init__(self, measure: Measure, minimum: float | None = None) -> None:
        self.name = measure
        self._measure = measure
        self._minimum = minimum

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        if not isinstance(value, str):
            return float(value)
        try:
            return parse_quantity(value, self._measure, minimum=self._minimum)
        except BadQuantity as error:
            self.fail(str(error), param, ctx)


class Number(click.ParamType[Any]):
    """A number above zero, without a unit."""

    name = "number"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        try:
            number = float(value)
        except ValueError:
            self.fail(f"{value!r} is not a number.", param, ctx)
        if not 0 < number < math.inf:
            self.fail(f"{value!r} is not above zero.", param, ctx)
        return number


class Speed(Quantity):
    """A speed; a bare number means r/min, as on every shop floor. In Hz."""

    def __init__(self) -> None:
        super().__init__("speed", 1e-3)

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> float:
        if isinstance(value, str) and re.fullmatch(r"\s*\d+(\.\d*)?\s*", value):
            value = f"{value} rpm"
        return super().convert(value, param, ctx)


class SenseType(click.ParamType[Any]):
    """``clockwise from drive`` as {turn, seen_from}."""

    name = "sense"

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> dict[str, str]:
        if isinstance(value, dict):
            return value
        try:
            return parse_sense(value)
        except BadQuantity as error:
            self.fail(str(error), param, ctx)


def parse_sense(text: str) -> dict[str, str]:
    """``clockwise from drive``, ``ccw seen from the free end``. Raises BadQuantity."""
    found = SENSE.match(text.strip())
    if not found:
        raise BadQuantity(f"{text!r} is no sense of turning seen from an end.", SENSE_EXAMPLE)
    turn = {"cw": "clockwise", "ccw": "counterclockwise"}.get(found.group(1), found.group(1))
    return {"turn": turn, "seen_from": found.group(2)}


def _count(text: str, what: str) -> int:
    if not re.fullmatch(r"\s*\d{1,5}\s*", text, re.ASCII):
        raise BadQuantity(f"{text.strip()!r} is not {what}.")
    return int(text)


class PlaneType(click.ParamType[Any]):
    """``"1: radius 140mm, holes 24, at -220mm, numbered clockwise from drive"`` as the daemon takes it."""

    name = "plane"
    example = 'Write for example "1: radius 140mm, holes 24, at -220mm, numbered clockwise from drive".'

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> dict[str, Any]:
        try:
            return self._parse(value)
        except (BadQuantity, ValueError) as error:
            self.fail(f"{error} {self.example}", param, ctx)

    def _parse(self, text: str) -> dict[str, Any]:
        number, colon, rest = text.partition(":")
        if not colon:
            raise ValueError(f"{text!r} does not begin with the plane's number and a colon.")
        told: dict[str, str] = {}
        for part in rest.split(","):
            word, _, value = part.strip().partition(" ")
            if word not in ("radius", "holes", "at", "numbered") or word in told:
                raise ValueError(f"{part.strip()!r} is not understood.")
            told[word] = value.strip()
        missing = [w for w in ("radius", "holes", "numbered") if w not in told]
        if missing:
            raise ValueError(f"Plane {number}: {' and '.join(missing)} missing.")
        return {
            "number": _count(number, "the number of a plane"),
            "radius_mm": parse_quantity(told["radius"], "length", minimum=1e-3),
            "holes": _count(told["holes"], "a number of holes"),
            "numbering": parse_sense(told["numbered"]),
            "position_mm": parse_quantity(told["at"], "length") if "at" in told else None,
        }


class PieceType(click.ParamType[Any]):
    """``"plane 1 hole 3 2.1g"`` or ``"plane 1 at 40deg 2.1g"`` as the control channel's piece."""

    name = "piece"
    _form = re.compile(r"^plane\s+(\d+)\s+(?:hole\s+(\d+)|at\s+(\S+))\s+(\S+)$")

    def convert(self, value: Any, param: click.Parameter | None, ctx: click.Context | None) -> dict[str, Any]:
        found = self._form.match(value.strip())
        if not found:
            self.fail(f'{value!r} is no weight. Write for example "plane 1 hole 3 2.1g".', param, ctx)
        plane, hole, place, mass = found.groups()
        try:
            return {
                "plane": int(plane),
                "hole": int(hole) if hole else None,
                "angle_deg": parse_quantity(place, "angle") if place else None,
                "mass_g": parse_quantity(mass, "mass", minimum=1e-6),
            }
        except BadQuantity as error:
            self.fail(str(error), param, ctx)


class RotorMarkType(click.ParamType[Any]):
    """``7.5deg`` for every plane, or ``1=7.5deg`` for one: angle from hole 1, counted as the holes are."""

    name = "angle"

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[int | None, float]:
        plane, equals, text = value.rpartition("=")
        try:
            degrees = parse_quantity(text, "angle")
            return (_count(plane, "the number of a plane") if equals else None), degrees
        except (BadQuantity, ValueError) as error:
            self.fail(f'{error} Write for example "7.5deg", or "1=7.5deg" for plane 1.', param, ctx)


class OfChannel(click.ParamType[Any]):
    """``probe 1=200 mV/mil``: something of one channel, as (channel, what ``parse`` makes of the rest)."""

    def __init__(self, name: str, parse: Callable[[str], Any], example: str) -> None:
        self.name = name
        self._parse = parse
        self._example = f'Write for example "{example}".'

    def convert(
        self, value: Any, param: click.Parameter | None, ctx: click.Context | None
    ) -> tuple[str, Any]:
        channel, equals, text = value.rpartition("=")
        try:
            if not equals or not channel.strip():
                raise BadQuantity(f"{value!r} names no channel.")
            return channel.strip(), self._parse(text.strip())
        except BadQuantity as error:
            self.fail(f"{error} {self._example}", param, ctx)


def parse_stand_angle(text: str) -> float:
    """Degrees, 0 up to 360. Raises BadQuantity outside -360 to 360."""
    return parse_quantity(text, "angle", minimum=-360.0, maximum=360.0) % 360.0


def parse_sense_of_positive(text: str) -> int:
    """+1 for ``rising``, -1 for ``falling``. Raises BadQuantity for anything else."""
    senses = {"rising": 1, "falling": -1}
    if text not in senses:
        raise BadQuantity(f"{text!r} is neither rising nor falling.")
    return senses[text]
