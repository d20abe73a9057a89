"""Sister machines: who stands there, how it differs from its model, and what its probes see."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.typing import NDArray

from daq.drivers.plan import ChannelPlan, FittedRotor, ProbePlan
from daq.drivers.rotor import RigidRotor, response
from daq.drivers.sim.options import SimulatedOptions

Complexes = NDArray[np.complex128]

_STRUCTURE, _UNBALANCE, _START = range(3)


def generator(seed: int, serial: str, *purpose: int) -> np.random.Generator:
    """Random numbers that depend on the seed, the machine and the purpose alone."""
    digest = hashlib.sha256(serial.encode()).digest()
    return np.random.default_rng([seed, int.from_bytes(digest[:8]), *purpose])


@dataclass(frozen=True, slots=True)
class SimMachine:
    """One machine of the model."""

    serial: str
    rotor: RigidRotor
    unbalance_gmm: tuple[complex, ...]
    """By plane, angle from hole 1 against rotation, before any weight."""


def build_machine(options: SimulatedOptions, serial: str) -> SimMachine:
    """The machine of this serial number: always the same for the same seed."""
    draw = generator(options.seed, serial, _STRUCTURE)
    stiffness, damping, mass = np.exp(options.sister_scatter * draw.standard_normal(3))
    rotor = options.rotor.rotor().scaled(stiffness=stiffness, damping=damping, mass=mass)
    return SimMachine(serial, rotor, _initial_unbalance(options, serial))


def _initial_unbalance(options: SimulatedOptions, serial: str) -> tuple[complex, ...]:
    draw = generator(options.seed, serial, _UNBALANCE)
    planes = len(options.rotor.plane_z_mm)
    share = draw.uniform(0.85, 1.15, planes)
    total_gmm = options.tolerance_gmm * draw.uniform(*options.initial_times)
    angle = draw.uniform(0, 2 * pi, planes)
    return tuple((total_gmm * share / share.sum() * np.exp(1j * angle)).tolist())


def with_pieces(unbalance_gmm: Iterable[complex], fitted: FittedRotor, *, clockwise: bool) -> Complexes:
    """Unbalance by plane with the fitted pieces, from hole 1 against the rotor's true rotation.

    A piece whose angle runs against the other rotation lies at the mirrored angle.
    """
    total = np.array(list(unbalance_gmm), dtype=complex)
    sense = 1.0 if fitted.clockwise == clockwise else -1.0
    for piece in fitted.pieces:
        total[piece.plane - 1] += piece.gmm * np.exp(1j * np.radians(sense * piece.from_hole1_deg))
    return total


def run_factors(options: SimulatedOptions, serial: str, start: int, probes: int) -> Complexes:
    """What multiplies each probe's response in one run, shape (probes,)."""
    draw = generator(options.seed, serial, _START, start).standard_normal((2, probes))
    factors: Complexes = 1 + options.run_scatter * (draw[0] + 1j * draw[1])
    return factors


class ProbeView:
    """What the probes see of a rotor: their places, angles, kinds and runout."""

    def __init__(self, options: SimulatedOptions, channels: ChannelPlan) -> None:
        probes = channels.probes
        self.z_m = [z / 1e3 for z in probe_places(options, len(probes))]
        self._plane_z_m = [z / 1e3 for z in options.rotor.plane_z_mm]
        turn = 1.0 if options.rotation == "clockwise" else -1.0
        beta = np.array([p.angle_deg for p in probes]) - channels.once_per_rev.angle_deg
        self._geometry = np.exp(1j * np.radians(turn * beta))
        self._runout = _runout(options, probes)
        self._power = np.array([("displacement", "velocity", "acceleration").index(p.kind) for p in probes])

    def vectors(
        self, rotor: RigidRotor, unbalance_gmm: Complexes, factors: Complexes, hz: NDArray[np.float64]
    ) -> Complexes:
        """1X vectors, shape (speeds, probes), um, mm/s or m/s2 0-peak in the lag convention.

        ``unbalance_gmm`` by plane, from the rotor mark against rotation. lag = theta + mechanical lag +
        probe angle - sensor angle (METHODS 6.1); velocity lags 90 deg less, acceleration 180 deg less.
        """
        um = response(rotor, hz, self.z_m, self._plane_z_m) @ unbalance_gmm * factors * self._geometry
        # d/dt is a lead of 90 degrees: a factor -j w in the lag convention; um -> mm -> m
        per_order = -1j * 2 * pi * hz[:, None] / 1e3
        seen: Complexes = um * per_order**self._power + self._runout
        return seen


def probe_places(options: SimulatedOptions, probes: int) -> tuple[float, ...]:
    """z of each probe in mm."""
    if options.probe_z_mm:
        return options.probe_z_mm
    z1, z2 = options.rotor.bearing_z_mm
    first = (probes + 1) // 2
    return (z1,) * first + (z2,) * (probes - first)


def _runout(options: SimulatedOptions, probes: tuple[ProbePlan, ...]) -> Complexes:
    um = np.resize(options.runout_um, len(probes))
    deg = np.resize(options.runout_deg, len(probes))
    seen = np.array([p.kind == "displacement" for p in probes])
    return np.where(seen, um * np.exp(1j * np.radians(deg)), 0)
