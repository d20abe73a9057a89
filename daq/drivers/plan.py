"""What the stand file and the mount tell a driver: channels, and what stands on the stand."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal


@dataclass(frozen=True, slots=True)
class PulsePlan:
    """The once-per-rev channel."""

    name: str
    input: str
    edge: Literal["falling", "rising"] = "falling"
    level_v: float | None = None
    """None = automatic."""
    angle_deg: float = 0.0
    """Stand angle, clockwise from the stand's zero seen from ``ChannelPlan.angles_seen_from``."""
    pulses: int = 1
    """A turn; one of them counts."""
    marked: Literal["long"] | None = None
    """"long": the one that lasts longest counts."""
    spacing_deg: tuple[float, ...] = ()
    """Angles from the pulse that counts to the next, from that to the one after, ...; () = equal."""


@dataclass(frozen=True, slots=True)
class ProbePlan:
    """One probe channel."""

    name: str
    input: str
    kind: Literal["displacement", "velocity", "acceleration"] = "displacement"
    volts_per_unit: float = 0.007874
    """Volts per um, mm/s or m/s2 by ``kind``."""
    positive: int = 1
    """+1 when a rising voltage is positive x, -1 when a falling one is."""
    angle_deg: float = 0.0
    """Stand angle, as ``PulsePlan.angle_deg``."""
    gap_low_v: float | None = None
    gap_high_v: float | None = None
    coupling: Literal["dc", "ac"] = "dc"


@dataclass(frozen=True, slots=True)
class ChannelPlan:
    """Columns of a block: the once-per-rev channel, then the probes in stand-file order."""

    once_per_rev: PulsePlan
    probes: tuple[ProbePlan, ...]
    angles_seen_from: str = "drive"

    @property
    def names(self) -> tuple[str, ...]:
        return (self.once_per_rev.name, *(p.name for p in self.probes))

    @property
    def inputs(self) -> tuple[str, ...]:
        return (self.once_per_rev.input, *(p.input for p in self.probes))


@dataclass(frozen=True, slots=True)
class Piece:
    """A weight on the rotor as somebody fitted it; drilled ones have negative ``gmm``."""

    plane: int
    gmm: float
    from_hole1_deg: float
    """From hole 1 of its plane, against the rotation of ``FittedRotor``."""


@dataclass(frozen=True, slots=True)
class FittedRotor:
    """The machine on the stand and its weights; only a simulated source needs to be told."""

    serial: str
    pieces: tuple[Piece, ...] = ()
    clockwise: bool = True
    """Rotation the angles of ``pieces`` run against, seen from ``ChannelPlan.angles_seen_from``."""
