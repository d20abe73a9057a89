"""Windows of counts with many probes that see one machine, each through noise of its own: free trials."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.measure import measure
from daq.signal.shapes import ChannelParams, Measurement, PulseParams

Floats = NDArray[np.float64]
VOLTS_PER_COUNT = 30 / 2**23
SCALE = (-(2**23), 2**23 - 1)
VOLTS_PER_UM = 0.007874
HIGH_V, LOW_V, LEVEL_V = -8.0, -15.0, -11.5


@dataclass(frozen=True)
class Window:
    """So many whole turns and somewhat more, speed constant but for ``ramp`` (relative, per second)."""

    per_turn: float = 256.3
    turns: int = 64
    rpm: float = 3000.0
    ramp: float = 0.0
    vector: complex = 6.0 * np.exp(1j * np.radians(70))
    """1X of every probe, um 0-peak."""
    harmonics: dict[int, complex] = field(default_factory=dict)
    gap_v: float = -10.0
    stamped: bool = False
    """The pulse is drawn from hardware stamps: exact however few samples a turn."""
    start: float = 0.3
    um_per_count: float = VOLTS_PER_COUNT / VOLTS_PER_UM
    """A step of the probes; the once-per-rev channel always has 24 bits."""

    @property
    def edge_samples(self) -> float:
        """That the edge of the pulse takes."""
        return max(2.2, 0.02 * self.per_turn)

    @property
    def pulse_samples(self) -> float:
        """That the pulse lasts."""
        return max(3.0, 0.05 * self.per_turn)

    @property
    def rate_hz(self) -> float:
        return self.per_turn * self.rpm / 60

    @property
    def frames(self) -> int:
        return int(np.ceil((self.turns + 1.2 - self.start) * self.per_turn / (1 + self._stretch)))

    @property
    def _stretch(self) -> float:
        return self.ramp * (self.turns / 2) * 60 / self.rpm

    def angle(self) -> Floats:
        """Turns made at each sample: exact."""
        t = np.arange(self.frames) / self.rate_hz
        return self.start + self.rpm / 60 * (t + self.ramp * t**2 / 2)

    def motion(self) -> Floats:
        """Displacement at each sample, um, from closed forms."""
        theta = 2 * np.pi * self.angle()
        every = {1: self.vector, **self.harmonics}
        x: Floats = sum(abs(v) * np.cos(k * theta - np.angle(v)) for k, v in every.items())  # type: ignore[assignment]
        return x

    def pulse(self, noise_v: Floats | float = 0.0, late: Floats | None = None) -> NDArray[np.int32]:
        """Counts of the once-per-rev channel: the falling edge passes the level at each whole turn, or
        ``late`` (turns + 3,) samples after it."""
        angle = self.angle()
        past = ((angle + 0.5) % 1.0 - 0.5) * self.per_turn  # samples since the edge
        if late is not None:
            past -= late[np.rint(angle).astype(int)]
        if not self.stamped:
            fall = np.clip(past / self.edge_samples + 0.5, 0, 1)
            rise = np.clip((past - self.pulse_samples) / self.edge_samples + 0.5, 0, 1)
            volts = HIGH_V + (LOW_V - HIGH_V) * (fall - rise)
        else:  # the sample before the edge and the one after lie on one straight line through the level
            half = (HIGH_V - LOW_V) / 2
            line = np.where((past >= 1) & (past < 4), -half, half)
            volts = LEVEL_V + np.where(np.abs(past) < 1, -half * past, line)
        return np.rint((volts + noise_v) / VOLTS_PER_COUNT).astype(np.int32)

    def counts(
        self, noise_um: Floats, pulse_noise_v: Floats | float = 0.0, late: Floats | None = None
    ) -> NDArray[np.int32]:
        """(frames, 1 + probes); ``noise_um`` is (frames, probes)."""
        out = np.empty((self.frames, 1 + noise_um.shape[1]), np.int32)
        out[:, 0] = self.pulse(pulse_noise_v, late)
        um = self.motion()[:, None] + noise_um
        out[:, 1:] = np.rint((self.gap_v / VOLTS_PER_UM + um) / self.um_per_count)
        return out

    def measured(self, counts: NDArray[Any], **options: Any) -> Measurement:
        """By the code under test, with the level given."""
        step_v = self.um_per_count * VOLTS_PER_UM
        channels = [ChannelParams(f"p{i}", step_v, SCALE, VOLTS_PER_UM) for i in range(counts.shape[1] - 1)]
        pulse = PulseParams(VOLTS_PER_COUNT, SCALE, level_v=LEVEL_V)
        return measure(counts, pulse, channels, self.rate_hz, **options)


def first_orders(m: Measurement) -> NDArray[np.complex128]:
    """The 1X of all probes."""
    return np.array([v.value for v in m.vectors if v.order == 1])


def inside(m: Measurement, truth: complex) -> NDArray[np.bool_]:
    """Whether the stated 95 % region of each probe's 1X holds the truth; 5.99146 is -2 ln 0.05."""
    off = first_orders(m) - truth
    v = np.stack([off.real, off.imag], axis=-1)
    far: Floats = np.einsum("ni,nij,nj->n", v, np.linalg.inv(covariances(m)), v)
    return far < 5.991464547107979


def covariances(m: Measurement) -> Floats:
    """Stated covariance of the 1X of all probes: (probes, 2, 2)."""
    return np.array([[[v.var_re, v.cov], [v.cov, v.var_im]] for v in m.vectors if v.order == 1])
