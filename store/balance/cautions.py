"""What is said where work can hurt, one line each. revmark computes and logs; it protects nothing."""

from __future__ import annotations

LOCK_OUT = "Stop and lock out the drive before you reach in; no pulses is not standstill."
RETENTION = "Secure every weight against flying off; turn the rotor by hand to check clearance."
STAND_CLEAR = "Keep everybody out of the plane of rotation at run-up."
LOCAL_CODES = "Local codes and licensed practice come before any figure printed here."
NO_PROTECTION = "revmark logs and computes; it is no machine protection system and trips nothing."

WEIGHT_FIT = (LOCK_OUT, RETENTION, STAND_CLEAR, LOCAL_CODES)
"""The force of the weight at speed is said beside them (``force_caution``)."""
CORRECTION = (LOCK_OUT, RETENTION, STAND_CLEAR, LOCAL_CODES)
"""The force of each plane's pieces stands in the advice itself."""
SERVE = (NO_PROTECTION, LOCK_OUT, STAND_CLEAR, LOCAL_CODES)


def force_caution(force_n: float, share_of_load: float, speed_rpm: float) -> str:
    """The force of a weight at speed, as a caution."""
    return (
        f"At {speed_rpm:.0f} r/min it pulls with {force_n:.3g} N, "
        f"{100 * share_of_load:.2g} % of the static load on its bearing."
    )
