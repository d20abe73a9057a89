"""s per component of one vector: the larger of its own standard error and the run-to-run scatter.

The run-to-run scatter is a prior until this job's own repeats update it (REUSE section (c), row "stop,
restart, same state": 3 % of the amplitude and 1 um pp or 0.05 mm/s rms, nu0 = 4; judgement, no table
published). All amplitudes 0-peak in the channel's base unit.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

PRIOR_SHARE = 0.03
PRIOR_DOF = 4.0
FLOOR_UM_PK = 0.5
"""1 um peak-to-peak."""
FLOOR_MM_S_PK = 0.05 * math.sqrt(2.0)
"""0.05 mm/s rms."""


def floor_pk(unit: str, speed_hz: float) -> float:
    """The part of the scatter that does not shrink with the amplitude, in ``unit`` 0-peak.

    For acceleration the velocity floor times 2 pi f (derived).
    """
    if unit == "um":
        return FLOOR_UM_PK
    if unit == "mm/s":
        return FLOOR_MM_S_PK
    return FLOOR_MM_S_PK * 2.0 * math.pi * speed_hz / 1e3


def prior_sd(amplitude_pk: float, unit: str, speed_hz: float) -> float:
    """Run-to-run scatter per component before any repeat is known."""
    return math.hypot(PRIOR_SHARE * amplitude_pk, floor_pk(unit, speed_hz))


@dataclass(frozen=True, slots=True)
class Scatter:
    """Run-to-run scatter of a channel: the prior times ``factor``, which repeats have updated."""

    unit: str
    speed_hz: float
    factor: float = 1.0
    repeats_dof: int = 0
    """2 (n - 1) summed over sets of repeats; 0 = a prior, not measured."""

    @property
    def is_prior(self) -> bool:
        return self.repeats_dof == 0

    def run_to_run(self, amplitude_pk: float) -> float:
        return self.factor * prior_sd(amplitude_pk, self.unit, self.speed_hz)

    def sd(self, value: complex, own_sd: float = 0.0) -> float:
        """s per component of one vector."""
        return max(own_sd, self.run_to_run(abs(value)))


def scatter_from_repeats(repeats: Iterable[Sequence[complex]], unit: str, speed_hz: float) -> Scatter:
    """Prior updated by sets of vectors measured in different runs with the same weights.

    s^2 = (nu0 s0^2 + sum |V - mean|^2) / (nu0 + 2 (n - 1)), REUSE section (c), pooled over the sets in
    units of each set's own s0.
    """
    total, dof = 0.0, 0
    for values in repeats:
        if len(values) < 2:
            continue
        mean = sum(values) / len(values)
        s0 = prior_sd(abs(mean), unit, speed_hz)
        total += sum(abs(v - mean) ** 2 for v in values) / s0**2
        dof += 2 * (len(values) - 1)
    return Scatter(unit, speed_hz, math.sqrt((PRIOR_DOF + total) / (PRIOR_DOF + dof)), dof)
