"""From angle, speed and vectors to counts of every channel."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from daq.drivers.plan import ChannelPlan
from daq.drivers.sim.faults import Fault
from daq.drivers.sim.options import SimulatedOptions

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

NODE_STEP = 64
"""Vectors are evaluated every so many samples and joined by straight lines (5 ms at 12.8 kS/s)."""
EDGE_SAMPLES = 4.0
"""Length of the notch's edges, so that a straight line between two samples finds the crossing."""
FULL_COUNTS = 32768


class Painter:
    """Draws blocks of counts; remembers nothing but its noise."""

    def __init__(self, options: SimulatedOptions, channels: ChannelPlan, noise: np.random.Generator) -> None:
        self.volts_per_count = options.full_scale_v / FULL_COUNTS
        self._options = options
        self._noise = noise
        self._pulses = channels.once_per_rev.pulses
        self._depth_v = options.pulse_depth_v * (-1 if channels.once_per_rev.edge == "falling" else 1)
        probes = channels.probes
        self._sense_v = np.array([p.volts_per_unit * p.positive for p in probes])
        steady = np.array([p.kind == "displacement" and p.coupling == "dc" for p in probes])
        self._gap_v = np.where(steady, np.resize(options.gap_v, len(probes)), 0.0)

    def paint(
        self,
        turns: Floats,
        hz: Floats,
        vectors: Callable[[Floats], Complexes],
        faults: Sequence[tuple[Fault, NDArray[np.bool_]]],
    ) -> NDArray[np.int16]:
        """Counts of shape (n, 1 + probes) for ``turns`` and ``hz`` of shape (n,)."""
        volts = np.empty((len(turns), 1 + len(self._gap_v)))
        volts[:, 0] = self._pulse(turns, hz, [(f, m) for f, m in faults if f.kind == "missed"])
        self._probes(volts, turns, hz, vectors)
        volts += self._noise.standard_normal(volts.shape) * (self._options.noise_mv / 1e3)
        for fault, mask in faults:
            if fault.kind == "clip":
                # the mean wanders to the end of the range, where half of every swing is cut off
                gap = self._gap_v[fault.column - 1]
                rail = np.copysign(self._options.full_scale_v, gap)
                volts[mask, fault.column] += rail - gap
        counts = np.rint(volts / self.volts_per_count)
        return np.clip(counts, -FULL_COUNTS, FULL_COUNTS - 1).astype(np.int16)

    def _probes(
        self, volts: Floats, turns: Floats, hz: Floats, vectors: Callable[[Floats], Complexes]
    ) -> None:
        angle = 2 * np.pi * (turns % 1.0)
        cos, sin = np.cos(angle), np.sin(angle)
        at = np.arange(len(turns))
        nodes = np.unique(np.append(at[::NODE_STEP], at[-1]))
        v = vectors(hz[nodes]) * self._sense_v
        for i, gap_v in enumerate(self._gap_v):
            re, im = np.interp(at, nodes, v[:, i].real), np.interp(at, nodes, v[:, i].imag)
            volts[:, 1 + i] = gap_v + re * cos + im * sin

    def _pulse(self, turns: Floats, hz: Floats, missed: Sequence[tuple[Fault, NDArray[np.bool_]]]) -> Floats:
        """The sensor's volts; the named edge passes half depth at each whole turn."""
        options = self._options
        width = min(options.pulse_width_deg / 360, 0.4 / self._pulses)
        half = np.clip(EDGE_SAMPLES / 2 * hz / options.rate_hz, 1e-4, width / 2)
        part = (turns * self._pulses + 0.5) % 1.0 - 0.5
        past = part / self._pulses
        inside = np.clip(0.5 + past / (2 * half), 0, 1) - np.clip(0.5 + (past - width) / (2 * half), 0, 1)
        for fault, mask in missed:
            inside[mask & (np.rint(turns) % fault.every == 0)] = 0.0
        return options.pulse_rest_v + self._depth_v * inside
