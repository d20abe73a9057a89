"""Permissible residual unbalance of a rigid rotor and each plane's share of it (ISO 21940-11; METHODS 4).

The grade is a property of the rotor's unbalance, not a limit on measured vibration.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from store.records import Machine

SHARE_LIMITS = (0.3, 0.7)
"""Between bearings one plane gets no less and no more than this share of the permissible unbalance."""


def permissible_eccentricity_um(grade_mm_s: float, speed_hz: float) -> float:
    """e_per = 1000 G / Omega, in um (= g.mm/kg)."""
    return 1000.0 * grade_mm_s / (2.0 * math.pi * speed_hz)


def permissible_gmm(grade_mm_s: float, mass_kg: float, speed_hz: float) -> float:
    """U_per = m e_per in g.mm, whole rotor."""
    return mass_kg * permissible_eccentricity_um(grade_mm_s, speed_hz)


def grade_force_share(grade_mm_s: float, speed_hz: float) -> float:
    """Force of a grade's unbalance as a share of the rotor's weight: G Omega / g."""
    return grade_mm_s * 1e-3 * 2.0 * math.pi * speed_hz / 9.80665


def shares_by_load(permissible: float, loads_kg: tuple[float, float]) -> tuple[float, float]:
    """U_A = U_per L_B/L and U_B = U_per L_A/L, with the static loads in place of the distances, limited."""
    low, high = SHARE_LIMITS
    total = sum(loads_kg)
    return (
        permissible * min(max(loads_kg[0] / total, low), high),
        permissible * min(max(loads_kg[1] / total, low), high),
    )


@dataclass(frozen=True, slots=True)
class Tolerance:
    """What may be left on a machine, by plane."""

    permissible_gmm: float
    """Whole rotor."""
    shares_gmm: dict[int, float]
    how: str
    """Where the figure and the shares come from, in words."""


def tolerance_of(machine: Machine) -> Tolerance | None:
    """The machine's tolerance and its planes' shares; None when it has neither a grade nor a figure."""
    if machine.permissible_gmm is not None:
        total, source = machine.permissible_gmm, f"{machine.permissible_gmm:.4g} g.mm wanted for the rotor"
    elif machine.grade_mm_s is not None:
        total = permissible_gmm(machine.grade_mm_s, machine.rotor_mass_kg, machine.service_hz)
        source = (
            f"G {machine.grade_mm_s:g} of ISO 21940-11 for {machine.rotor_mass_kg:g} kg "
            f"at {machine.service_hz * 60:.0f} r/min"
        )
    else:
        return None
    shares, how = _shares(machine, total)
    return Tolerance(total, shares, f"{source}; {how}")


def _shares(machine: Machine, total: float) -> tuple[dict[int, float], str]:
    planes = sorted(p.number for p in machine.model.planes)
    if len(planes) == 1:
        return {planes[0]: total}, "one plane has all of it"
    loads = machine.bearing_loads_kg
    if len(planes) == 2 and len(loads) == 2 and sum(loads) > 0:
        a, b = shares_by_load(total, (loads[0], loads[1]))
        limited = "" if math.isclose(a + b, total) else ", limited to 0.3 to 0.7"
        return {planes[0]: a, planes[1]: b}, f"shared as the bearing loads{limited}"
    even = {p: total / len(planes) for p in planes}
    parts = "half" if len(planes) == 2 else f"1/{len(planes)}"
    return even, f"{parts} for each plane, the bearing loads not being known"
