"""Records of steady and unsteady machines as samples, from closed forms that share nothing with the code.

Units of time are the shortest window (``window_s`` of the limits). The limit is ``change_pct``, 5 %: the
depth of a beat is how far it takes the vector from its mean, over the mean; a drift is the change from one
window to the next, over the vector.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.steadiness import SteadinessLimits
from daq.signal.blocks import BlockFitter
from daq.signal.shapes import ChannelParams, PulseParams
from daq.signal.steadiness import Probe, Verdict, block_seconds
from daq.signal.watcher import SteadyWatch

RATE_HZ = 2000.0
VOLTS_PER_COUNT = 24.0 / 2**23
SCALE = (-(2**23), 2**23 - 1)
VOLTS_PER_UM = 0.007874
UNSTEADY = ("ramp", "hunting", "warm-up", "beat")
Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Record:
    """Two probes; ``v`` (um 0-peak) of the first moves by ``course(t)`` besides."""

    kind: str
    speed_hz: float
    v: tuple[complex, complex]
    noise_um: float
    seconds: float
    seed: int
    window_s: float = 3.0
    ramp: float = 0.0
    """Of the speed, per second."""
    hunt: float = 0.0
    """Amplitude, of the speed."""
    hunt_s: float = 1.0
    phase: float = 0.0
    drift: complex = 0j
    """um per second."""
    tau_s: float = np.inf
    """The drift dies away with this time constant."""
    beat: complex = 0j
    """um: amplitude and direction."""
    beat_s: float = 1.0
    rotating: bool = False
    """The beat turns about the mean (a neighbour's line), else it goes to and fro."""

    def turns(self, t: Floats) -> Floats:
        w = 2 * np.pi / self.hunt_s
        hunted = self.hunt / w * (np.cos(self.phase) - np.cos(w * t + self.phase))
        return 0.3 + self.speed_hz * (t + self.ramp * t**2 / 2 + hunted)

    def vector(self, t: Floats) -> NDArray[np.complex128]:
        moved = self.drift * (t if np.isinf(self.tau_s) else self.tau_s * -np.expm1(-t / self.tau_s))
        w = 2 * np.pi * t / self.beat_s + self.phase
        return self.v[0] + moved + self.beat * (np.exp(1j * w) if self.rotating else np.cos(w))

    def counts(self) -> NDArray[np.int32]:
        rng = np.random.default_rng(self.seed)
        t = np.arange(int(self.seconds * RATE_HZ)) / RATE_HZ
        turns = self.turns(t)
        carrier = np.exp(2j * np.pi * turns)
        u = (turns + 0.5) % 1.0 - 0.5
        fall, rise = np.clip(u / 0.08 + 0.5, 0, 1), np.clip((u - 0.2) / 0.08 + 0.5, 0, 1)
        volts = np.empty((len(t), 3))
        volts[:, 0] = -8.0 - 7.0 * (fall - rise)
        for i, v in enumerate((self.vector(t), self.v[1])):
            um = np.real(np.conj(v) * carrier) + rng.normal(0, self.noise_um, len(t))
            volts[:, 1 + i] = -10.0 + um * VOLTS_PER_UM
        return np.rint(volts / VOLTS_PER_COUNT).astype(np.int32)

    @property
    def needs_s(self) -> float:
        """Dwell: the window, or until white noise leaves 0.5 % and 0.3 deg, a tenth of the floor at least.

        METHODS 8.2: the standard error of a component is sqrt(2/N) times the noise."""
        target = min(max(min(0.005, np.radians(0.3)) * abs(v), 0.05) for v in self.v)
        return max(self.window_s, 2 * (self.noise_um / target) ** 2 / RATE_HZ)


def steady(k: int) -> Record:
    """The k-th steady machine: signal-to-noise from 4 (every fifth) to 1000."""
    rng = np.random.default_rng(10_000 + k)
    size = 10 ** rng.uniform(0.7, 2.0)
    v = (
        size * np.exp(2j * np.pi * rng.random()),
        size * rng.uniform(1.0, 3.0) * np.exp(2j * np.pi * rng.random()),
    )
    ratio = 4.0 if k % 5 == 0 else 4.0 * 250 ** rng.random()
    hunt, hunt_s = 2e-4 * rng.random(), 10 ** rng.uniform(-0.3, 1.0)
    return Record("steady", rng.uniform(20, 50), v, size / ratio, 0.0, k, hunt=hunt, hunt_s=hunt_s)


def unsteady(k: int, seconds: float = 12.0) -> Record:
    """The k-th unsteady machine, of the four kinds in turn; signal-to-noise from 4 to 1000."""
    rng = np.random.default_rng(20_000 + k)
    kind = UNSTEADY[k % 4]
    size = 10 ** rng.uniform(1.1, 2.0)
    turn = np.exp(2j * np.pi * rng.random(4))
    v, noise = (size * turn[0], 2 * size * turn[1]), size / (4.0 * 250 ** rng.random())
    over = 10 ** rng.uniform(np.log10(1.05), 0.7)
    made: dict[str, Any] = {"phase": 2 * np.pi * rng.random()}
    if kind == "ramp":
        made["ramp"] = rng.choice([-1, 1]) * 0.02 / 60 * over * 1.1
    elif kind == "hunting":
        made |= {"hunt": np.sqrt(2) * 1e-3 * over * 1.1, "hunt_s": rng.uniform(0.25, 2.0) * 3.0}
    elif kind == "warm-up":
        tau_s = rng.choice([np.inf, 60.0, 30.0])
        dies = 1.0 if np.isinf(tau_s) else np.exp(seconds / tau_s)
        share = 0.05 / 3.0 * min(over, 1.8) * dies  # per second, at the end still, of the vector grown since
        made |= {"drift": size * share / (1 - share * seconds) * turn[2], "tau_s": tau_s}
    else:
        along = (turn[2], turn[0], 1j * turn[0])[rng.integers(3)]
        beat_s = rng.uniform(0.3, 2.0) * 3.0
        made |= {"beat": 0.05 * size * over * along, "beat_s": beat_s, "rotating": rng.random() < 0.4}
    return Record(kind, rng.uniform(20, 50), v, noise, seconds, k, **made)


def verdicts(
    record: Record, limits: SteadinessLimits, *, hop_s: float = 0.5, seconds: float | None = None
) -> Iterator[tuple[float, Verdict]]:
    """(end of the newest block in s, verdict), by the fitter and the watch that the analysis has."""
    channels = tuple(ChannelParams(f"probe {i}", VOLTS_PER_COUNT, SCALE, VOLTS_PER_UM) for i in (1, 2))
    fitter = BlockFitter(
        PulseParams(VOLTS_PER_COUNT, SCALE), channels, RATE_HZ, block_s=block_seconds(limits)
    )
    watch = SteadyWatch(limits, [Probe(c.name, "displacement") for c in channels])
    counts, hop = record.counts(), int(hop_s * RATE_HZ)
    for first in range(0, len(counts), hop):
        for fit in fitter.feed(counts[first : first + hop], first):
            yield fit.t_end_s, watch.take(fit)
