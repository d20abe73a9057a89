"""Trial weight: how heavy, and where it cannot make things worse (METHODS section 5)."""

from __future__ import annotations

import math

from config.units import STANDARD_GRAVITY_M_S2
from store.balance.angles import wrap_deg
from store.records import Kind, Machine

FORCE_SHARE = 0.10
"""Centrifugal force of the trial weight over the static load on its bearing (common practice)."""
BELOW_CRITICAL = 0.7
"""Below this share of the first critical speed the mechanical lag is taken as 0."""
_LAG_OF_DISPLACEMENT_DEG = {"displacement": 0.0, "velocity": 90.0, "acceleration": 180.0}
"""What to add to a kind's lag to have displacement's (METHODS 6.1: velocity reads -90, acceleration -180)."""


def force_n(unbalance_gmm: float, speed_hz: float) -> float:
    """Centrifugal force U Omega^2 in newton."""
    return unbalance_gmm * 1e-6 * (2.0 * math.pi * speed_hz) ** 2


def trial_unbalance_gmm(load_kg: float, speed_hz: float) -> float:
    """U whose force is 10 % of the static load: 0.1 M g / Omega^2."""
    return FORCE_SHARE * load_kg * STANDARD_GRAVITY_M_S2 * 1e6 / (2.0 * math.pi * speed_hz) ** 2


def static_load_kg(machine: Machine, plane: int) -> tuple[float, str]:
    """Static load on the bearing beside a plane, and where the figure comes from."""
    planes = sorted(p.number for p in machine.model.planes)
    loads = machine.bearing_loads_kg
    if loads and len(loads) == len(planes):
        return loads[planes.index(plane)], "the load of the bearing beside this plane"
    if loads:
        return min(loads), "the smaller bearing load, no bearing being named for this plane"
    count = max(len(planes), 1)
    share = "the whole rotor mass" if count == 1 else f"1/{count} of the rotor mass"
    return machine.rotor_mass_kg / count, f"{share}, the bearing loads not being known"


def place_by_coefficient_deg(lag_deg: float, coefficient_angle_deg: float) -> float:
    """theta = arg(V0) - arg(alpha) + 180, against rotation from the rotor mark."""
    return wrap_deg(lag_deg - coefficient_angle_deg + 180.0)


def place_by_lag_deg(
    lag_deg: float,
    probe_deg: float,
    sensor_deg: float,
    kind: Kind = "displacement",
    mechanical_lag_deg: float = 0.0,
) -> float:
    """theta = lag - beta_probe + beta_sensor + 180 - mechanical lag; stationary angles with rotation."""
    lag = lag_deg + _LAG_OF_DISPLACEMENT_DEG[kind]
    return wrap_deg(lag - probe_deg + sensor_deg + 180.0 - mechanical_lag_deg)


def lag_is_known(speed_hz: float, first_critical_hz: float | None) -> bool:
    """Whether the speed lies so far below the first critical that the mechanical lag is near 0."""
    return first_critical_hz is not None and speed_hz < BELOW_CRITICAL * first_critical_hz
