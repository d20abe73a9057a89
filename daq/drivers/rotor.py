"""A rigid rotor on two isotropic bearings, in closed form (METHODS 7.2, derived and verified there by ODE).

With q = (translation, tilt) of the centre of mass and unbalance U_j at z_j:

    D q = [sum U_j, sum U_j z_j] w^2
    D   = [[K - m w^2,        K12              ],
           [K12,              K22 - (It-Ip) w^2]],   K.. from the complex stiffnesses k + j w c

A probe at z sees [1 z] q. Responses here are in the lag convention (A cos(theta - lag), vector A e^{+j lag},
weight angles against rotation), which is the complex conjugate of that solution.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import pi

import numpy as np
from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True)
class RigidRotor:
    """Positions z run along the shaft from the centre of mass."""

    mass_kg: float
    transverse_kg_m2: float
    polar_kg_m2: float
    bearing_z_m: tuple[float, float]
    stiffness_n_per_m: tuple[float, float]
    damping_ns_per_m: tuple[float, float]

    def scaled(self, *, stiffness: float = 1.0, damping: float = 1.0, mass: float = 1.0) -> RigidRotor:
        """A sister of this rotor; inertias scale with the mass."""
        k1, k2 = self.stiffness_n_per_m
        c1, c2 = self.damping_ns_per_m
        return replace(
            self,
            mass_kg=self.mass_kg * mass,
            transverse_kg_m2=self.transverse_kg_m2 * mass,
            polar_kg_m2=self.polar_kg_m2 * mass,
            stiffness_n_per_m=(k1 * stiffness, k2 * stiffness),
            damping_ns_per_m=(c1 * damping, c2 * damping),
        )


def response(
    rotor: RigidRotor, speed_hz: ArrayLike, probe_z_m: Sequence[float], plane_z_m: Sequence[float]
) -> NDArray[np.complex128]:
    """Influence of each plane on each probe, um 0-peak per g.mm.

    Shape (speeds, probes, planes) for speeds of shape (speeds,). Mark, probe and sensor at one angle.
    """
    w = 2 * pi * np.asarray(speed_hz, dtype=float)[:, None, None]
    z1, z2 = rotor.bearing_z_m
    s1, s2 = (k + 1j * w * c for k, c in zip(rotor.stiffness_n_per_m, rotor.damping_ns_per_m, strict=True))
    d11 = s1 + s2 - rotor.mass_kg * w**2
    d12 = s1 * z1 + s2 * z2
    d22 = s1 * z1**2 + s2 * z2**2 - (rotor.transverse_kg_m2 - rotor.polar_kg_m2) * w**2
    zp = np.asarray(probe_z_m, dtype=float)[None, :, None]
    zj = np.asarray(plane_z_m, dtype=float)[None, None, :]
    # [1 zp] D^-1 [1 zj]^T w^2; m per kg.m is um per g.mm
    solved: NDArray[np.complex128] = (d22 - d12 * (zp + zj) + d11 * zp * zj) * w**2 / (d11 * d22 - d12**2)
    return solved.conj()


def critical_speeds_hz(rotor: RigidRotor) -> tuple[float, ...]:
    """Undamped speeds at which unbalance resonates, rising; one only when Ip >= It (METHODS 7.3)."""
    (z1, z2), (k1, k2) = rotor.bearing_z_m, rotor.stiffness_n_per_m
    k11, k12, k22 = k1 + k2, k1 * z1 + k2 * z2, k1 * z1**2 + k2 * z2**2
    m, i = rotor.mass_kg, rotor.transverse_kg_m2 - rotor.polar_kg_m2
    roots = np.roots([m * i, -(m * k22 + i * k11), k11 * k22 - k12**2])
    return tuple(sorted(float(np.sqrt(r)) / (2 * pi) for r in np.real(roots) if r > 0))
