"""Critical speeds of a run-up or coast-down: peaks of |1X| against speed, with their amplification factor.

AF = Np / (N2 - N1), N1 and N2 where the amplitude is 1/sqrt 2 of the peak's, by linear interpolation between
the steps (half-power form; METHODS 7.1). A trace that passes a critical at acceleration reads the peak
shifted in the way it goes, and lower: up and down are looked at apart and never averaged.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]

HALF_POWER = float(np.sqrt(0.5))
STANDS_OUT_SE = 6.0
"""A peak stands at least so many standard errors above the dip between it and higher ones (judgement: the
highest of a thousand normal errors lies 3.2 above, the lowest 3.2 below)."""
STANDS_OUT_SHARE = 0.1
"""And at least this share of its own amplitude: what is flatter is no resonance."""


@dataclass(frozen=True, slots=True)
class Critical:
    """A peak with both of its half-power points."""

    speed_hz: float
    within_hz: float
    """Half of the wider step beside the peak: the speed is not known better than that."""
    amplitude: float
    """0-peak in the trace's unit."""
    lag_deg: float
    """At the peak, 0 <= lag < 360."""
    low_hz: float
    high_hz: float
    """The half-power speeds."""

    @property
    def amplification(self) -> float:
        return self.speed_hz / (self.high_hz - self.low_hz)


@dataclass(frozen=True, slots=True)
class NotCritical:
    """A peak that cannot be called a critical speed, and why."""

    speed_hz: float
    amplitude: float
    why: str


def critical_speeds(
    speed_hz: Floats, vectors: Complexes, se: Floats
) -> tuple[tuple[Critical, ...], tuple[NotCritical, ...]]:
    """Those of one trace (one way, one channel), by rising speed, and the peaks refused.

    ``speed_hz``, ``vectors`` (0-peak) and ``se`` (per component) have shape (steps,), in any order."""
    order = np.argsort(speed_hz, kind="stable")
    speed, found = np.asarray(speed_hz, float)[order], np.asarray(vectors, complex)[order]
    size, error = np.abs(found), np.asarray(se, float)[order]
    if len(size) < 3:
        return (), ()
    taken: list[Critical] = []
    refused: list[NotCritical] = []
    peaks = [int(p) for p in np.flatnonzero((size[1:-1] > size[:-2]) & (size[1:-1] >= size[2:])) + 1]
    standing = [p for p in peaks if _stands_out(size, error, p)]
    for p in standing:
        one = _at(p, speed, found, size)
        (taken if isinstance(one, Critical) else refused).append(one)  # type: ignore[arg-type]
    refused += _ends(speed, size, error)
    if not taken and not refused and peaks:
        refused.append(_flat(max(peaks, key=lambda p: size[p]), speed, size, error))
    return tuple(taken), tuple(sorted(refused, key=lambda r: r.speed_hz))


# --- peaks ---------------------------------------------------------------------------------------------


def _rise(size: Floats, error: Floats, p: int) -> tuple[float, float]:
    """How far a peak stands above what lies between it and higher ground, and the standard error of that.

    On a side without higher ground the trace ends and nothing is known of the foot; the highest peak of all
    is held against the lowest step."""
    higher = np.flatnonzero(size > size[p])
    feet = []
    if (higher < p).any():
        left = int(higher[higher < p].max())
        feet.append(left + int(np.argmin(size[left : p + 1])))
    if (higher > p).any():
        feet.append(p + int(np.argmin(size[p : int(higher[higher > p].min())])))
    foot = max(feet, key=lambda k: size[k]) if feet else int(np.argmin(size))
    return float(size[p] - size[foot]), float(np.hypot(error[p], error[foot]))


def _stands_out(size: Floats, error: Floats, p: int) -> bool:
    rise, its_se = _rise(size, error, p)
    return rise >= STANDS_OUT_SE * its_se and rise >= STANDS_OUT_SHARE * size[p]


def _flat(p: int, speed: Floats, size: Floats, error: Floats) -> NotCritical:
    rise, its_se = _rise(size, error, p)
    if rise < STANDS_OUT_SE * its_se:
        found, wanted = f"{rise / its_se:.1f} of its standard errors", f"{STANDS_OUT_SE:g}"
    else:
        found, wanted = f"{100 * rise / size[p]:.0f} % of itself", f"{100 * STANDS_OUT_SHARE:g} %"
    why = f"it stands out by {found} only ({wanted} are wanted)"
    return NotCritical(float(speed[p]), float(size[p]), why)


def _ends(speed: Floats, size: Floats, error: Floats) -> list[NotCritical]:
    """The end of the trace, where the amplitude is highest there and so still rises."""
    found = []
    for at, way in ((0, "below"), (len(size) - 1, "above")):
        rise = float(size[at] - size.min())
        wide = speed.max() - speed.min()
        if size[at] == size.max() and rise >= STANDS_OUT_SE * error[at] and wide > 0:
            why = f"the amplitude is highest at the trace's end: a critical may lie {way}"
            found.append(NotCritical(float(speed[at]), float(size[at]), why))
    return found


def _at(p: int, speed: Floats, vectors: Complexes, size: Floats) -> Critical | NotCritical:
    low, high = _half_power(p, -1, speed, size), _half_power(p, +1, speed, size)
    why = [side for side in (low, high) if isinstance(side, str)]
    if isinstance(low, str) or isinstance(high, str):
        return NotCritical(float(speed[p]), float(size[p]), "; ".join(why))
    if not high > low:
        return NotCritical(float(speed[p]), float(size[p]), "the steps beside it have the same speed")
    return Critical(
        speed_hz=float(speed[p]),
        within_hz=float(max(speed[p] - speed[p - 1], speed[p + 1] - speed[p])) / 2,
        amplitude=float(size[p]),
        lag_deg=float(np.degrees(np.angle(vectors[p])) % 360),
        low_hz=low,
        high_hz=high,
    )


def _half_power(p: int, way: int, speed: Floats, size: Floats) -> float | str:
    """Where the amplitude falls through 1/sqrt 2 of the peak's going ``way`` from it, or why nowhere."""
    side, level = ("lower", HALF_POWER * size[p]) if way < 0 else ("upper", HALF_POWER * size[p])
    k = p
    while 0 <= k + way < len(size):
        if size[k + way] > size[p]:
            return f"a higher peak lies before its {side} half-power point: the two are not apart"
        if size[k + way] <= level:
            share = (size[k] - level) / (size[k] - size[k + way])
            return float(speed[k] + share * (speed[k + way] - speed[k]))
        k += way
    return f"its {side} half-power point lies outside the trace"
