"""What is said where work can hurt, one line each. revmark computes and logs; it protects nothing."""

from __future__ import annotations

WEIGHT_FIT = (
    "Stop and lock out the drive before you reach in; no pulses is not standstill.",
    "Secure every weight against flying off, and check its clearance by turning the rotor by hand.",
    "Keep everybody out of the plane of rotation at run-up.",
)
CORRECTION = (
    "Check that each piece can be held at full speed, and stand clear of the plane of rotation at run-up.",
    "Local codes and licensed practice come before any figure printed here.",
)
SERVE = (
    "revmark logs and computes; it is no machine protection system and trips nothing.",
    "Local codes and licensed practice apply to every run on this stand.",
)


def force_caution(force_n: float, share_of_load: float, speed_rpm: float) -> str:
    """The force of a weight at speed, as a caution."""
    return (
        f"At {speed_rpm:.0f} r/min it pulls with {force_n:.3g} N, "
        f"{100 * share_of_load:.2g} % of the static load on its bearing."
    )
