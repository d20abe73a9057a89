"""From angle, speed and vectors to counts of every channel."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from daq.drivers.plan import ChannelPlan, PulsePlan
from daq.drivers.sim.faults import Fault
from daq.drivers.sim.options import SimulatedOptions

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

NODE_STEP = 64
"""Vectors are evaluated every so many samples and joined by straight lines (5 ms at 12.8 kS/s)."""
STEEPEST_TURNS = 1e-4
"""Half of an edge at least."""
FAR_SHARE, LONG_TIMES = 0.4, 1.6
"""A pulse lasts so much of the way to the next at most; the marked one is so many times as long as others."""
GOLDEN = 0.6180339887498949
"""Steps of this share of a turn come everywhere."""
FULL_COUNTS = 32768


class Painter:
    """Draws blocks of counts; remembers nothing but its noise."""

    def __init__(self, options: SimulatedOptions, channels: ChannelPlan, noise: np.random.Generator) -> None:
        self.volts_per_count = options.full_scale_v / FULL_COUNTS
        self._options = options
        self._noise = noise
        self._starts, self._widths = _pulses(options, channels.once_per_rev)
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
        volts[:, 0] = self._pulse(turns, hz, [(f, m) for f, m in faults if f.kind in ("missed", "double")])
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

    def _pulse(self, turns: Floats, hz: Floats, faults: Sequence[tuple[Fault, NDArray[np.bool_]]]) -> Floats:
        """The sensor's volts; the named edge passes half depth at each whole turn."""
        options = self._options
        half = options.edge_samples / 2 * hz / options.rate_hz
        inside = np.zeros(len(turns))
        for start, width in zip(self._starts, self._widths, strict=True):
            inside += _trapezoid((turns - start + 0.5) % 1.0 - 0.5, width, half)
        for fault, mask in faults:
            if fault.kind == "missed":
                inside[mask & (np.rint(turns) % fault.every == 0)] = 0.0
            else:
                turn = np.floor(turns)
                place = 0.1 + 0.8 * (turn * GOLDEN % 1.0)
                extra = _trapezoid(turns - turn - place, self._widths[0] / 2, half)
                inside = np.maximum(inside, np.where(mask & (turn % fault.every == 0), extra, 0.0))
        return options.pulse_rest_v + self._depth_v * inside


def _pulses(options: SimulatedOptions, told: PulsePlan) -> tuple[list[float], list[float]]:
    """Where the pulses of a turn begin and how long they last, in turns; the one that counts first."""
    gaps = np.array(told.spacing_deg or (360.0 / told.pulses,) * told.pulses) / 360
    widths = np.minimum(options.pulse_width_deg / 360, FAR_SHARE * gaps)
    if told.marked == "long":
        widths[1:] = widths[0] / LONG_TIMES
    return np.concatenate(([0.0], np.cumsum(gaps)[:-1])).tolist(), widths.tolist()


def _trapezoid(past: Floats, width: float, half: Floats) -> Floats:
    """Height 0 to 1 of a pulse that lasts ``width`` turns, its edges twice ``half``, at ``past`` turns from
    where its first edge is half up."""
    half = np.clip(half, STEEPEST_TURNS, width / 2)
    shape: Floats = np.clip(0.5 + past / (2 * half), 0, 1) - np.clip(0.5 + (past - width) / (2 * half), 0, 1)
    return shape
