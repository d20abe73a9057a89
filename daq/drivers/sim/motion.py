"""How the simulated rotor turns: still, ramps, a dwell that hunts a little. Angle never jumps."""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, pi
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
PhaseName = Literal["still", "run-up", "dwell", "coast-down"]

START_TURNS = 0.5
"""Where the rotor stands at first, so that no pulse is under the sensor."""


@dataclass(frozen=True, slots=True)
class Phase:
    """A stretch of one law; ``k`` counts samples from its begin."""

    name: PhaseName
    samples: float
    """Length; inf = until told otherwise."""
    turns0: float
    hz0: float
    hz_per_s: float = 0.0
    hunting: float = 0.0
    hunting_hz: float = 1.0

    def turns(self, t_s: Floats) -> Floats:
        swing = self.hz0 * self.hunting / (2 * pi * self.hunting_hz)
        hunted = swing * (1 - np.cos(2 * pi * self.hunting_hz * t_s)) if swing else 0.0
        return self.turns0 + self.hz0 * t_s + 0.5 * self.hz_per_s * t_s**2 + hunted

    def hz(self, t_s: Floats) -> Floats:
        hunted = self.hz0 * self.hunting * np.sin(2 * pi * self.hunting_hz * t_s) if self.hunting else 0.0
        return self.hz0 + self.hz_per_s * t_s + hunted


@dataclass(frozen=True, slots=True)
class Law:
    """Accelerations and the hunting of the drive."""

    up_hz_per_s: float
    down_hz_per_s: float
    hunting: float
    hunting_hz: float


class Motion:
    """The rotor's angle, sample by sample."""

    def __init__(self, rate_hz: float, law: Law) -> None:
        self._rate_hz = rate_hz
        self._law = law
        self._target_hz = 0.0
        self._phase = Phase("still", inf, START_TURNS, 0.0)
        self._k = 0

    @property
    def phase(self) -> PhaseName:
        return self._phase.name

    @property
    def hz(self) -> float:
        """Speed at the next sample."""
        return float(self._phase.hz(self._now()))

    def go(self, target_hz: float) -> None:
        """Ramp from the present speed to ``target_hz``; 0 = coast down."""
        self._target_hz = target_hz
        turns, hz = float(self._phase.turns(self._now())), self.hz
        up = target_hz > hz
        slope = self._law.up_hz_per_s if up else self._law.down_hz_per_s
        samples = round(abs(target_hz - hz) / slope * self._rate_hz)
        rise = (target_hz - hz) / samples * self._rate_hz if samples else 0.0
        self._enter(Phase("run-up" if up else "coast-down", samples, turns, hz, rise))
        self._settle()

    def take(self, n: int) -> tuple[Floats, Floats]:
        """Turns and speed in Hz at the next ``n`` samples, shape (n,) each."""
        parts = []
        while n > 0:
            m = self._room(n)
            t_s = np.arange(self._k, self._k + m) / self._rate_hz
            parts.append((self._phase.turns(t_s), self._phase.hz(t_s)))
            self._pass(m)
            n -= m
        if len(parts) == 1:
            return parts[0]
        return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])

    def skip(self, n: int) -> None:
        """Let ``n`` samples go by."""
        while n > 0:
            m = self._room(n)
            self._pass(m)
            n -= m

    def _now(self) -> Floats:
        return np.asarray(self._k / self._rate_hz)

    def _room(self, n: int) -> int:
        return int(min(n, self._phase.samples - self._k))

    def _pass(self, m: int) -> None:
        self._k += m
        self._settle()

    def _settle(self) -> None:
        """Enter the phase that follows when this one is over."""
        if self._k < self._phase.samples:
            return
        turns = float(self._phase.turns(self._now()))
        if self._target_hz > 0:
            law = self._law
            self._enter(Phase("dwell", inf, turns, self._target_hz, 0.0, law.hunting, law.hunting_hz))
        else:
            self._enter(Phase("still", inf, turns, 0.0))

    def _enter(self, phase: Phase) -> None:
        self._phase = phase
        self._k = 0
