"""Quantities as people type and read them, and the one place that converts them. Standard library only.

Stored base units: um, mm/s, m/s2 (0-peak) by kind; g, mm, g.mm, kg, Hz, degrees, volts, seconds.
Conversion values: METHODS 6.5 (1 mil = 25.4 um, 1 in = 25.4 mm, 1 oz = 28.349523125 g exactly,
g = 9.80665 m/s2 exactly).
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Literal

from config.errors import BadQuantity

STANDARD_GRAVITY_M_S2 = 9.80665
MM_PER_INCH = 25.4
UM_PER_MIL = 25.4
G_PER_OUNCE = 28.349523125
KG_PER_POUND = 0.45359237

Measure = Literal[
    "mass", "rotor mass", "length", "speed", "angle", "time", "unbalance", "voltage", "grade", "amplitude"
]

# measure -> unit as typed -> factor to the base unit (named first)
_UNITS: dict[str, dict[str, float]] = {
    "mass": {"g": 1.0, "mg": 1e-3, "kg": 1e3, "oz": G_PER_OUNCE},
    "rotor mass": {"kg": 1.0, "g": 1e-3, "t": 1e3, "lb": KG_PER_POUND},
    "length": {"mm": 1.0, "cm": 10.0, "m": 1e3, "in": MM_PER_INCH},
    "speed": {"Hz": 1.0, "rpm": 1 / 60, "r/min": 1 / 60},
    "angle": {"deg": 1.0, "rad": 180 / math.pi},
    "time": {"s": 1.0, "ms": 1e-3, "min": 60.0, "h": 3600.0},
    "unbalance": {"g.mm": 1.0, "kg.mm": 1e3, "oz.in": G_PER_OUNCE * MM_PER_INCH},
    "voltage": {"V": 1.0, "mV": 1e-3},
    "grade": {"mm/s": 1.0},
}

# kind -> unit -> factor to the base unit (named first); the detector (pk, pp, rms) comes beside it
AMPLITUDE_UNITS: dict[str, dict[str, float]] = {
    "displacement": {"um": 1.0, "mm": 1e3, "mil": UM_PER_MIL},
    "velocity": {"mm/s": 1.0, "ips": MM_PER_INCH},
    "acceleration": {"m/s2": 1.0, "g": STANDARD_GRAVITY_M_S2},
}
BASE_UNIT = {kind: next(iter(units)) for kind, units in AMPLITUDE_UNITS.items()}
DETECTORS = {"pk": 1.0, "pp": 2.0, "rms": 1 / math.sqrt(2)}

_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*([^\s\d].*?)?\s*$")


def parse_quantity(
    text: str, measure: Measure, *, minimum: float | None = None, maximum: float | None = None
) -> float:
    """``3.0g``, ``140 mm``, ``1500rpm`` in the base unit of ``measure``.

    Raises BadQuantity when the number has no unit, an unknown one, or lies below ``minimum`` or above
    ``maximum`` (both in the base unit).
    """
    units = _UNITS[measure]
    found = _NUMBER.match(text)
    known = ", ".join(units)
    if not found:
        raise BadQuantity(f"{text!r} is not a {measure}.", f"Write a number and its unit ({known}).")
    unit = found.group(2)
    if unit is None:
        raise BadQuantity(f"{text!r} has no unit.", f"Write the {measure} with its unit ({known}).")
    if unit not in units:
        raise BadQuantity(f"{unit!r} is not a unit of {measure}.", f"Known units: {known}.")
    value = float(found.group(1)) * units[unit]
    if not math.isfinite(value):
        raise BadQuantity(f"{text!r} is out of range.", f"Write a finite {measure}.")
    if minimum is not None and value < minimum:
        raise BadQuantity(
            f"{text!r} is too small.", f"The {measure} must be at least {minimum:g} {next(iter(units))}."
        )
    if maximum is not None and value > maximum:
        raise BadQuantity(
            f"{text!r} is too large.", f"The {measure} must be at most {maximum:g} {next(iter(units))}."
        )
    return value


@dataclass(frozen=True, slots=True)
class Sensitivity:
    """Volts per base unit of a kind of probe."""

    kind: Literal["displacement", "velocity", "acceleration"]
    volts_per_unit: float


def parse_sensitivity(text: str) -> Sensitivity:
    """``200 mV/mil``, ``7.874 mV/um``, ``4 mV/(mm/s)``, ``100 mV/g`` as volts per base unit.

    Raises BadQuantity when the text has no unit, one that is no sensitivity, or is not above zero.
    """
    found = _NUMBER.match(text)
    example = 'Write it with its unit, for example "200 mV/mil", "4 mV/(mm/s)" or "100 mV/g".'
    if not found:
        raise BadQuantity(f"{text!r} is not a sensitivity.", example)
    unit = (found.group(2) or "").replace(" ", "")
    if not unit:
        raise BadQuantity(f"The sensitivity {text!r} has no unit.", example)
    volt, slash, per = unit.partition("/")
    per = per.removeprefix("(").removesuffix(")")
    for kind, factors in AMPLITUDE_UNITS.items():
        if slash and volt in _UNITS["voltage"] and per in factors:
            value = float(found.group(1)) * _UNITS["voltage"][volt] / factors[per]
            if not (math.isfinite(value) and value > 0):
                raise BadQuantity(f"The sensitivity {text!r} must be above zero.", example)
            return Sensitivity(kind, value)  # type: ignore[arg-type]
    raise BadQuantity(f"{unit!r} is not a unit of sensitivity.", example)


@dataclass(frozen=True, slots=True)
class Display:
    """How amplitudes of one kind are shown: ``um pp``, ``mil pp``, ``mm/s rms``."""

    unit: str
    detector: Literal["pk", "pp", "rms"]
    factor: float
    """Shown amplitude = stored 0-peak amplitude in the base unit times this."""

    @property
    def name(self) -> str:
        return f"{self.unit} {self.detector}"


def parse_display(text: str, kind: str) -> Display:
    """``um pp`` for a kind of channel. Raises BadQuantity for a unit of another kind or no detector."""
    unit, _, detector = text.strip().rpartition(" ")
    factors = AMPLITUDE_UNITS[kind]
    if unit not in factors or detector not in DETECTORS:
        choices = ", ".join(f'"{u} {d}"' for u in factors for d in DETECTORS)
        raise BadQuantity(f"{text!r} is no way to show {kind}.", f"Choose one of {choices}.")
    return Display(unit, detector, DETECTORS[detector] / factors[unit])  # type: ignore[arg-type]


def rpm(hz: float) -> float:
    """Revolutions per minute, for people."""
    return hz * 60.0
