"""Slow roll: runout at a speed too slow for unbalance to bend the shaft, taken off a vector (METHODS 9).

V_c = V - V_slow as vectors, of the same probe and the same rotor mark; the result may be the larger one.
Shaft readings only: on a casing there is no runout to take off. The errors of both vectors stay in the
difference, so their covariances add.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass, replace

from store.records import Kind, Vector

NEAR_CRITICAL = "near a critical speed a residual bow is amplified and the difference is wrong there"
TOO_FAST_SHARE = 0.01
"""(n_slow/n)^2 above which the slow roll's own unbalance response is worth a word (300 of 3000 r/min)."""
CASING = {"velocity": "a velocity sensor", "acceleration": "an acceleration sensor"}


@dataclass(frozen=True, slots=True)
class SlowRoll:
    """The slow-roll vector of one channel, in the frame of the vectors it is taken off."""

    run: str
    reading: int
    """Within its run."""
    speed_hz: float
    vector: Vector
    """1X, 0-peak, base unit."""


def less(value: complex, slow: complex | None) -> complex:
    """A vector less a slow-roll vector in the same unit; None = nothing is taken off."""
    return value if slow is None else value - slow


def less_slow_roll(vector: Vector, slow: SlowRoll) -> Vector:
    """The 1X vector without its runout; covariances are added, and so are the squares of the noise floors.

    ValueError for another channel, order or unit: that is never what is wanted."""
    own = slow.vector
    if (vector.channel, vector.order, vector.unit) != (own.channel, own.order, own.unit):
        raise ValueError(f"{own.channel} {own.order}X in {own.unit} is not the slow roll of {vector.channel}")
    return replace(
        vector,
        value=less(vector.value, own.value),
        var_re=vector.var_re + own.var_re,
        var_im=vector.var_im + own.var_im,
        cov=vector.cov + own.cov,
        noise_floor=math.hypot(vector.noise_floor, own.noise_floor),
    )


def turned(vector: Vector, degrees: float) -> Vector:
    """The vector and its covariance turned in the sense in which lag grows."""
    if not degrees:
        return vector
    c, s = math.cos(math.radians(degrees)), math.sin(math.radians(degrees))
    a, b, k = vector.var_re, vector.var_im, vector.cov
    return replace(
        vector,
        value=vector.value * cmath.rect(1.0, math.radians(degrees)),
        var_re=c * c * a - 2 * c * s * k + s * s * b,
        var_im=s * s * a + 2 * c * s * k + c * c * b,
        cov=c * s * (a - b) + (c * c - s * s) * k,
    )


def unbalance_share(slow_hz: float, speed_hz: float) -> float:
    """How much of the unbalance response at a speed the slow-roll vector holds itself: (n_slow/n)^2.

    300 of 3000 r/min: 0.01; well below the first critical speed (METHODS 9)."""
    return (slow_hz / speed_hz) ** 2


def why_raw(channel: str, kind: Kind) -> str:
    """Why nothing is taken off a casing sensor's vector."""
    return f"{channel} is {CASING[kind]} on the casing, which has no runout: left as measured."


def cautions(slow_hz: float, speed_hz: float) -> list[str]:
    """What a slow roll taken off does not take off, in sentences."""
    share = unbalance_share(slow_hz, speed_hz)
    said = (
        f"the slow roll at {slow_hz * 60:.0f} r/min holds {100 * share:.2g} % of the unbalance response at "
        f"{speed_hz * 60:.0f} r/min itself"
    )
    return [said + (": take it slower" if share > TOO_FAST_SHARE * (1 + 1e-9) else ""), NEAR_CRITICAL]
