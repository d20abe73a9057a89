"""What the two probes of an XY pair tell together: the shaft's orbit of one order.

METHODS 6.3: with Y 90 deg from X in the direction of rotation, x + jy = F e^{jwt} + B e^{-jwt},
F = (conj Vx + j conj Vy)/2, B = (Vx + j Vy)/2. Major axis |F| + |B|, minor | |F| - |B| |, tilt
(arg F + arg B)/2. The largest vibration is the major axis, not the larger of the two probes.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from store.balance.angles import angle_deg, difference_deg, same_sense, stationary_with_rotation_deg, wrap_deg
from store.records import ChannelSetUp, Sense, SetUp, Turn, Vector

Floats = NDArray[np.float64]

SURE = 1.959963984540054
"""Standard deviations of a normal that hold 95 %: less far from none, a sense of whirl is not certain."""
CIRCLE_95 = 2.447746830681
"""Radius of the circle that holds 95 % of a circular 2-D normal, in its sd per component (METHODS 10.4)."""

Precession = Literal["forward", "backward"]


@dataclass(frozen=True, slots=True)
class Orbit:
    """One order of an XY pair; amplitudes 0-peak in ``unit``, angles on the stand.

    Angles are stand angles as the set-up counts them: clockwise from its zero seen from ``seen_from``."""

    pair: str
    order: int
    channels: tuple[str, str]
    """(X, Y): Y is the one 90 deg further in the direction of rotation."""
    unit: str
    seen_from: str
    rotation: Sense | None
    """None = not known: "forward" then means clockwise seen from ``seen_from``."""
    forward_pk: float
    backward_pk: float
    major_pk: float
    minor_pk: float
    forward_sd: float
    """Per component of the forward vector."""
    backward_sd: float
    major_sd: float
    forward_deg: float
    """Where the forward vector points when the once-per-rev edge passes."""
    backward_deg: float
    tilt_deg: float | None
    """Of the major axis, 0 to 180; None where it is a circle as far as can be told."""
    tilt_sd_deg: float | None
    whirl: Turn | None
    """Which way the shaft's centre goes round, seen from ``seen_from``; None = not certain."""

    @property
    def precession(self) -> Precession | None:
        """With the rotor's rotation or against it; None = not certain, or the rotation is not known."""
        if self.whirl is None or self.rotation is None:
            return None
        return "forward" if self._sense_of_forward == self.whirl else "backward"

    @property
    def _sense_of_forward(self) -> Turn:
        """The rotor's rotation seen from ``seen_from``."""
        rotation = self.rotation or Sense("clockwise", self.seen_from)
        if rotation.seen_from == self.seen_from:
            return rotation.turn
        return "counterclockwise" if rotation.turn == "clockwise" else "clockwise"


def pairs_of(set_up: SetUp) -> dict[str, tuple[ChannelSetUp, ChannelSetUp]]:
    """The XY pairs of a set-up by name, probes in its order; a name that not two channels bear is none."""
    named: dict[str, list[ChannelSetUp]] = {}
    for channel in set_up.channels:
        if channel.pair is not None:
            named.setdefault(channel.pair, []).append(channel)
    return {name: (two[0], two[1]) for name, two in named.items() if len(two) == 2}


def orbits(vectors: Sequence[Vector], set_up: SetUp, rotation: Sense | None) -> tuple[Orbit, ...]:
    """The orbits of all pairs, pair by pair, orders ascending; ``rotation`` None = nothing is mounted."""
    return tuple(
        orbit(pair, two, a, b, set_up, rotation)
        for pair, two in pairs_of(set_up).items()
        for a, b in _both(vectors, two)
    )


def _both(
    vectors: Sequence[Vector], two: tuple[ChannelSetUp, ChannelSetUp]
) -> Iterator[tuple[Vector, Vector]]:
    first, second = ({v.order: v for v in vectors if v.channel == c.name} for c in two)
    for order in sorted(first.keys() & second.keys()):
        if first[order].unit == second[order].unit:
            yield first[order], second[order]


def orbit(
    pair: str,
    probes: tuple[ChannelSetUp, ChannelSetUp],
    a: Vector,
    b: Vector,
    set_up: SetUp,
    rotation: Sense | None,
) -> Orbit:
    """The orbit of two vectors of one order; the probes' angles decide which of them is X.

    Probes some degrees off 90 are taken at their true angle."""
    seen, turns = set_up.angles_seen_from, rotation or Sense("clockwise", set_up.angles_seen_from)
    at = [stationary_with_rotation_deg(p.angle_deg, seen, turns, set_up.ends) for p in probes]
    if difference_deg(at[1], at[0]) < 0:
        at, a, b = at[::-1], b, a
    values, cov = _forward_backward(a, b, difference_deg(at[1], at[0]))

    def stand_deg(with_rotation_deg: float) -> float:
        return stationary_with_rotation_deg(with_rotation_deg, seen, turns, set_up.ends)

    forward, backward = complex(values[0], values[1]), complex(values[2], values[3])
    tilt, tilt_sd = _tilt(values, cov)
    clockwise = same_sense(Sense("clockwise", seen), turns, set_up.ends)
    return Orbit(
        pair=pair,
        order=a.order,
        channels=(a.channel, b.channel),
        unit=a.unit,
        seen_from=seen,
        rotation=rotation,
        forward_pk=abs(forward),
        backward_pk=abs(backward),
        major_pk=abs(forward) + abs(backward),
        minor_pk=abs(abs(forward) - abs(backward)),
        forward_sd=_per_component(cov[:2, :2]),
        backward_sd=_per_component(cov[2:, 2:]),
        major_sd=_major_sd(values, cov),
        forward_deg=stand_deg(at[0] + angle_deg(forward)),
        backward_deg=stand_deg(at[0] + angle_deg(backward)),
        tilt_deg=None if tilt is None else stand_deg(at[0] + tilt) % 180.0,
        tilt_sd_deg=tilt_sd,
        whirl=_whirl(_sense(values, cov), clockwise=clockwise),
    )


def _forward_backward(x: Vector, y: Vector, apart_deg: float) -> tuple[Floats, Floats]:
    """(F re, F im, B re, B im) and their covariance, the two probes' errors being independent."""
    sin, cos = math.sin(math.radians(apart_deg)), math.cos(math.radians(apart_deg))
    square = np.array([[1, 0, 0, 0], [0, 1, 0, 0], [-cos / sin, 0, 1 / sin, 0], [0, -cos / sin, 0, 1 / sin]])
    to_circles = np.array([[1, 0, 0, 1], [0, -1, 1, 0], [1, 0, 0, -1], [0, 1, 1, 0]]) / 2
    made = to_circles @ square
    cov = np.zeros((4, 4))
    for i, v in ((0, x), (2, y)):
        cov[i : i + 2, i : i + 2] = [[v.var_re, v.cov], [v.cov, v.var_im]]
    values = np.array([x.value.real, x.value.imag, y.value.real, y.value.imag])
    return made @ values, made @ cov @ made.T


def _per_component(cov: Floats) -> float:
    return math.sqrt(max(0.0, float(np.trace(cov)) / 2))


def _major_sd(values: Floats, cov: Floats) -> float:
    """First order; a circle of exactly no size counts with its sd per component."""
    slope = np.zeros(4)
    for i in (0, 2):
        size = math.hypot(values[i], values[i + 1])
        slope[i : i + 2] = values[i : i + 2] / size if size else math.sqrt(0.5)
    return math.sqrt(max(0.0, float(slope @ cov @ slope)))


def _tilt(values: Floats, cov: Floats) -> tuple[float | None, float | None]:
    """(tilt from X with rotation, its sd) in deg; none where either circle is below its own 95 % floor."""
    slope = np.zeros(4)
    for i in (0, 2):
        size = math.hypot(values[i], values[i + 1])
        if size <= max(CIRCLE_95 * _per_component(cov[i : i + 2, i : i + 2]), 1e-9 * np.abs(values).max()):
            return None, None
        slope[i : i + 2] = np.array([-values[i + 1], values[i]]) / size**2 / 2
    both = math.atan2(values[1], values[0]) + math.atan2(values[3], values[2])
    sd = math.sqrt(max(0.0, float(slope @ cov @ slope)))
    return wrap_deg(math.degrees(both / 2)), math.degrees(sd)


def _sense(values: Floats, cov: Floats) -> int:
    """+1 when the forward circle is the larger beyond doubt, -1 when the backward one is, else 0.

    By |F|^2 - |B|^2 = r'Ar, which is smooth where a circle vanishes; its variance for a normal r is
    4 m'ACAm + 2 tr(ACAC) (quadratic forms, textbook, from memory)."""
    sign = np.diag([1.0, 1.0, -1.0, -1.0])
    size = float(values @ sign @ values)
    turned = sign @ cov
    variance = 4 * float(values @ turned @ sign @ values) + 2 * float(np.trace(turned @ turned))
    doubt = SURE * math.sqrt(max(0.0, variance)) + 1e-12 * float(values @ values)
    return 0 if abs(size) <= doubt else int(math.copysign(1, size))


def _whirl(sense: int, *, clockwise: bool) -> Turn | None:
    if sense == 0:
        return None
    return "clockwise" if (sense > 0) == clockwise else "counterclockwise"
