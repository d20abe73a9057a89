"""Signals of known truth, made from closed forms that share nothing with the code under test."""

from __future__ import annotations

import sys
import wave
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from daq.signal.shapes import ChannelParams, PulseParams

sys.path.insert(0, str(Path(__file__).parent))  # for records

RECORDINGS = Path(__file__).resolve().parents[1] / "recordings"
VOLTS_PER_UM = 0.007874  # 200 mV/mil


@dataclass(frozen=True)
class Signal:
    """A stand with a trapezoid pulse whose falling edge passes half depth at angle 0, and probes."""

    rate_hz: float = 12_800.0
    speed_hz: float = 41.7
    ramp: float = 0.0
    """Change of speed per second, relative."""
    seconds: float = 3.0
    start_turns: float = 0.3
    probes: tuple[dict[int, complex], ...] = ({1: 6.0 * np.exp(1j * np.radians(70))},)
    """Per probe: order -> vector in um 0-peak."""
    gap_v: float = -10.0
    noise_um: float = 0.0
    pulse_noise_v: float = 0.0
    edge_turns: float = 0.02
    """Share of a turn that the edge of the pulse takes."""
    mark_turns: float = 0.06
    full_scale_v: float = 30.0
    bits: int = 24
    skew_s: float = 0.0
    """Probes are sampled so much later than the pulse."""
    seed: int = 1

    @property
    def volts_per_count(self) -> float:
        return self.full_scale_v / 2 ** (self.bits - 1)

    @property
    def scale(self) -> tuple[int, int]:
        return -(2 ** (self.bits - 1)), 2 ** (self.bits - 1) - 1

    @property
    def pulse(self) -> PulseParams:
        return PulseParams(self.volts_per_count, self.scale)

    @property
    def channels(self) -> tuple[ChannelParams, ...]:
        return tuple(
            ChannelParams(f"probe {i + 1}", self.volts_per_count, self.scale, VOLTS_PER_UM, 1, -16.0, -4.0)
            for i in range(len(self.probes))
        )

    def turns_at(self, t: NDArray[np.float64]) -> NDArray[np.float64]:
        """Turns made at time t (s): constant acceleration, exact."""
        return self.start_turns + self.speed_hz * (t + self.ramp * t**2 / 2)

    def counts(self) -> NDArray[Any]:
        """(frames, 1 + probes) of int16 or int32."""
        rng = np.random.default_rng(self.seed)
        t = np.arange(int(self.seconds * self.rate_hz)) / self.rate_hz
        volts = np.empty((len(t), 1 + len(self.probes)))
        u = (self.turns_at(t) + 0.5) % 1.0 - 0.5  # turns from the edge
        fall = np.clip(u / self.edge_turns + 0.5, 0, 1)
        rise = np.clip((u - self.mark_turns) / self.edge_turns + 0.5, 0, 1)
        volts[:, 0] = -8.0 - 7.0 * (fall - rise) + rng.normal(0, self.pulse_noise_v or 1e-12, len(t))
        theta = 2 * np.pi * self.turns_at(t + self.skew_s)
        for i, orders in enumerate(self.probes):
            x = sum(abs(v) * np.cos(k * theta - np.angle(v)) for k, v in orders.items())
            x = x + rng.normal(0, self.noise_um or 1e-12, len(t))
            volts[:, 1 + i] = self.gap_v + x * VOLTS_PER_UM
        kind = np.int16 if self.bits <= 16 else np.int32
        return np.clip(np.rint(volts / self.volts_per_count), *self.scale).astype(kind)


@dataclass(frozen=True)
class Recording:
    """A WAV of 24 bits as counts, with what its truth file says of it."""

    counts: NDArray[np.int32]
    rate_hz: float
    pulse: PulseParams
    channels: tuple[ChannelParams, ...]
    truth: dict[str, Any] = field(default_factory=dict)


def read_recording(truth: dict[str, Any]) -> Recording:
    with wave.open(str(RECORDINGS / truth["file"])) as source:
        frames, width = source.getnframes(), source.getnchannels()
        assert source.getsampwidth() == 3
        raw = np.frombuffer(source.readframes(frames), np.uint8).reshape(frames, width, 3)
        rate_hz = float(source.getframerate())
    wide = np.zeros((frames, width, 4), np.uint8)
    wide[:, :, 1:] = raw
    counts = (wide.view("<i4")[:, :, 0] >> 8).astype(np.int32)
    volts = truth["fullscale_v"] / 2**23
    scale = (-(2**23), 2**23 - 1)
    channels = tuple(
        ChannelParams(f"probe {i + 1}", volts, scale, truth["mv_per_um"] / 1000) for i in range(width - 1)
    )
    return Recording(counts, rate_hz, PulseParams(volts, scale), channels, truth)


@pytest.fixture(scope="session")
def signal() -> Callable[..., Signal]:
    """``signal(speed_hz=..., ...)`` makes a :class:`Signal`."""

    def make(**changes: Any) -> Signal:
        return replace(Signal(), **changes)

    return make


@pytest.fixture(scope="session")
def recording() -> Callable[[dict[str, Any]], Recording]:
    return read_recording
