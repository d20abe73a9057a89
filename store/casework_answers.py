"""What the arithmetic answers: frozen, each with ``to_dict()`` for ``--json`` (units in the keys).

Vectors: ``{"amplitude_pk", "unit", "lag_deg"}``, 0-peak in the channel's base unit. Unbalances and weights:
``{"gmm", "against_rotation_deg"}`` from the rotor mark of the mount in question. No number is rounded here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

from store.balance.angles import angle_deg, difference_deg
from store.balance.holes import Piece
from store.balance.orbit import CIRCLE_95
from store.balance.reuse import NotReused
from store.casework_flags import FlaggedReading

Source = Literal["own", "history"]
SAME_PLACE_DEG = 0.5
"""A piece fitted at an angle this near to a hole is said to be in it (judgement)."""


def vector_dict(value: complex, unit: str, *, lag_known: bool = True) -> dict[str, Any]:
    """``lag_known`` False: the amplitude is below its noise floor, so no lag is told."""
    return {"amplitude_pk": abs(value), "unit": unit, "lag_deg": angle_deg(value) if lag_known else None}


def foreseen_has_lag(predicted: complex, sd: float | None) -> bool:
    """Whether a foreseen vector is larger than the 95 % circle of what may come of it."""
    return sd is None or abs(predicted) > CIRCLE_95 * sd


def unbalance_dict(value: complex) -> dict[str, Any]:
    return {"gmm": abs(value), "against_rotation_deg": angle_deg(value)}


def piece_dict(piece: Piece) -> dict[str, Any]:
    return {
        "plane": piece.plane,
        "hole": piece.hole,
        "against_rotation_deg": piece.angle_deg,
        "mass_g": piece.mass_g,
        "radius_mm": piece.radius_mm,
    }


@dataclass(frozen=True, slots=True)
class FittedPiece:
    """What is on the rotor now, or was at a run."""

    plane: int
    mass_g: float
    radius_mm: float
    own_radius: bool
    """True where the radius is not the plane's."""
    hole: int | None
    angle_deg: float | None
    """Against rotation from the rotor mark; None = the mark's position is not known."""
    drilled: bool

    def in_place_of(self, advised: Piece) -> bool:
        """True when it sits where a piece is advised."""
        if self.plane != advised.plane:
            return False
        if self.hole is not None and advised.hole is not None:
            return self.hole == advised.hole
        if self.angle_deg is None:
            return False
        return abs(difference_deg(self.angle_deg, advised.angle_deg)) <= SAME_PLACE_DEG

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "hole": self.hole,
            "against_rotation_deg": self.angle_deg,
            "mass_g": self.mass_g,
            "radius_mm": self.radius_mm,
            "drilled": self.drilled,
        }


@dataclass(frozen=True, slots=True)
class UsedCoefficient:
    """A coefficient the answer rests on."""

    plane: int
    channel: str
    unit: str
    value: complex
    """Base unit 0-peak per g.mm."""
    sd: float
    """Per component: standard error of an own one, spread of one from history."""
    source: Source
    behind: tuple[str, ...]
    """Runs of an own one, jobs of one from history."""
    machines: tuple[str, ...]
    effect_ratio: float | None
    basis: str

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "channel": self.channel,
            "amplitude_pk_per_gmm": abs(self.value),
            "unit": self.unit,
            "lag_deg": angle_deg(self.value),
            "sd_per_component_pk_per_gmm": self.sd,
            "source": self.source,
            "runs" if self.source == "own" else "jobs": list(self.behind),
            "machines": list(self.machines),
            "effect_ratio": self.effect_ratio,
            "basis": self.basis,
        }


def refused_dict(refused: NotReused) -> dict[str, Any]:
    return {
        "job": refused.job_number,
        "machine": refused.machine_serial,
        "plane": refused.plane,
        "channel": refused.channel,
        "why": refused.why,
    }


@dataclass(frozen=True, slots=True)
class LeftOut:
    """A plane of the rotor that is not corrected: its unbalance stays."""

    plane: int
    why: str
    stays: complex | None = None
    """Its unbalance with what is fitted now, g.mm at its heavy spot; None = not known."""

    def to_dict(self) -> dict[str, Any]:
        stays = None if self.stays is None else unbalance_dict(self.stays)
        return {"plane": self.plane, "why": self.why, "unbalance_that_stays": stays}


@dataclass(frozen=True, slots=True)
class ChannelOutlook:
    """What a probe read, and what it should read with the advised pieces fitted."""

    channel: str
    unit: str
    base: complex
    """Base reading, turned into the present mount's frame."""
    now: complex
    """Expected with what is fitted now."""
    slow_roll: complex | None
    """Subtracted before solving; None = nothing was."""
    predicted: complex
    """As a probe will read it (runout included)."""
    sd: float
    """Per component, of the next reading about ``predicted``."""
    median_pk: float
    p90_pk: float
    lag_known: bool = True
    """False where the base reading is below its noise floor."""

    def to_dict(self) -> dict[str, Any]:
        slow = None if self.slow_roll is None else vector_dict(self.slow_roll, self.unit)
        now_known = self.lag_known or self.now != self.base
        has_lag = foreseen_has_lag(self.predicted, self.sd)
        return {
            "channel": self.channel,
            "base": vector_dict(self.base, self.unit, lag_known=self.lag_known),
            "now": vector_dict(self.now, self.unit, lag_known=now_known),
            "slow_roll_subtracted": slow,
            "predicted": vector_dict(self.predicted, self.unit, lag_known=has_lag),
            "predicted_sd_per_component_pk": self.sd,
            "predicted_median_pk": self.median_pk,
            "predicted_p90_pk": self.p90_pk,
        }


@dataclass(frozen=True, slots=True)
class PlaneAdvice:
    """What to do in one plane."""

    plane: int
    radius_mm: float
    fitted_now: complex
    """Sum of what is fitted there, g.mm against rotation from the mark."""
    add: complex
    """The exact correction to add to it."""
    sd_gmm: float
    """Standard deviation of ``add`` per component."""
    pieces: tuple[Piece, ...]
    """To fit beside what is fitted."""
    instead: tuple[Piece, ...]
    """To fit in place of all that is fitted; empty when nothing is, or when it was drilled."""
    there: tuple[FittedPiece, ...]
    """What sits already where ``pieces`` go."""
    left: complex
    """What rounding to holes and masses leaves with ``pieces`` fitted, g.mm at its heavy spot."""
    left_instead: complex | None
    """The same with ``instead`` fitted; None when that is empty."""
    share_gmm: float | None
    """This plane's share of the permissible residual unbalance; None = no tolerance on record."""
    force_n: float
    """Centrifugal force of ``pieces`` together at the highest speed of the job or service."""

    @property
    def chosen(self) -> complex:
        """What ``pieces`` add up to, g.mm."""
        return sum((p.unbalance for p in self.pieces), start=0j)

    def _piece_dict(self, piece: Piece) -> dict[str, Any]:
        held = [p for p in self.there if p.in_place_of(piece)]
        return {
            **piece_dict(piece),
            "there_now_g": sum(p.mass_g for p in held if not p.drilled),
            "drilled_there_g": sum(p.mass_g for p in held if p.drilled),
        }

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "radius_mm": self.radius_mm,
            "fitted_now": unbalance_dict(self.fitted_now),
            "add": unbalance_dict(self.add),
            "add_mass_g": abs(self.add) / self.radius_mm,
            "add_sd_per_component_gmm": self.sd_gmm,
            "pieces": [self._piece_dict(p) for p in self.pieces],
            "pieces_sum": unbalance_dict(self.chosen),
            "instead_of_what_is_fitted": [piece_dict(p) for p in self.instead],
            "left_by_rounding": unbalance_dict(self.left),
            "left_by_rounding_instead": (
                None if self.left_instead is None else unbalance_dict(self.left_instead)
            ),
            "permissible_share_gmm": self.share_gmm,
            "force_n": self.force_n,
        }


@dataclass(frozen=True, slots=True)
class CorrectionAdvice:
    """The answer of ``revmark correction``."""

    job_number: str
    machine_serial: str
    model_code: str
    speed_hz: float
    origins: tuple[str, ...]
    base_run: str
    base_reading: int
    base_label: str
    slow_roll_run: str | None
    """Run whose slow-roll vectors were subtracted; None = runout is corrected as if it were unbalance."""
    fitted: tuple[FittedPiece, ...]
    """All that is on the rotor now: the advice is to be added to it."""
    planes: tuple[PlaneAdvice, ...]
    left_out: tuple[LeftOut, ...]
    channels: tuple[ChannelOutlook, ...]
    condition_number: float
    coefficients: tuple[UsedCoefficient, ...]
    not_reused: tuple[NotReused, ...]
    scatter_is_prior: bool
    permissible_gmm: float | None
    tolerance_how: str
    warnings: tuple[str, ...]
    notes: tuple[str, ...]
    flags: tuple[FlaggedReading, ...] = ()
    """Of the readings it rests on, by channel used."""

    def to_dict(self) -> dict[str, Any]:
        return {
            "job": self.job_number,
            "machine": self.machine_serial,
            "model": self.model_code,
            "speed_hz": self.speed_hz,
            "origins": list(self.origins),
            "base": {"run": self.base_run, "reading": self.base_reading, "label": self.base_label},
            "slow_roll_run": self.slow_roll_run,
            "fitted_now": [p.to_dict() for p in self.fitted],
            "planes": [p.to_dict() for p in self.planes],
            "left_out": [p.to_dict() for p in self.left_out],
            "channels": [c.to_dict() for c in self.channels],
            "condition_number": self.condition_number,
            "coefficients": [c.to_dict() for c in self.coefficients],
            "not_reused": [refused_dict(r) for r in self.not_reused],
            "scatter_is_prior": self.scatter_is_prior,
            "permissible_gmm": self.permissible_gmm,
            "tolerance": self.tolerance_how,
            "warnings": list(self.warnings),
            "notes": list(self.notes),
            "flags": [f.to_dict() for f in self.flags],
        }


@dataclass(frozen=True, slots=True)
class TrialAdvice:
    """The answer of ``revmark weight advise``."""

    plane: int
    radius_mm: float
    mass_g: float
    """Rounded down to a step; a mass below one step is left as it is."""
    limit_gmm: float
    """What the 10 % force rule allows."""
    halved: bool
    """True when no place may be named, so half the mass is advised."""
    speed_hz: float
    """Speed the force was taken at: the highest of O run, balancing and service speed."""
    force_n: float
    static_load_kg: float
    load_how: str
    place_deg: float | None
    """Against rotation from the rotor mark; None = no place may be named."""
    hole: int | None
    hole_deg: float | None
    channel: str | None
    why: tuple[str, ...]
    notes: tuple[str, ...] = ()
    flags: tuple[FlaggedReading, ...] = ()
    """Of the readings it rests on, by channel used."""

    @property
    def unbalance_gmm(self) -> float:
        return self.mass_g * self.radius_mm

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "mass_g": self.mass_g,
            "radius_mm": self.radius_mm,
            "unbalance_gmm": self.unbalance_gmm,
            "limit_gmm": self.limit_gmm,
            "halved": self.halved,
            "speed_hz": self.speed_hz,
            "force_n": self.force_n,
            "static_load_kg": self.static_load_kg,
            "static_load": self.load_how,
            "place_against_rotation_deg": self.place_deg,
            "hole": self.hole,
            "hole_against_rotation_deg": self.hole_deg,
            "channel": self.channel,
            "why": list(self.why),
            "notes": list(self.notes),
            "flags": [f.to_dict() for f in self.flags],
        }


@dataclass(frozen=True, slots=True)
class ForceAdvice:
    """How hard a piece pulls at speed."""

    plane: int
    mass_g: float
    radius_mm: float
    speed_hz: float
    """The highest of the job's balancing speeds and the service speed."""
    force_n: float
    static_load_kg: float
    share_of_load: float
    caution: str

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "mass_g": self.mass_g,
            "radius_mm": self.radius_mm,
            "unbalance_gmm": self.mass_g * self.radius_mm,
            "speed_hz": self.speed_hz,
            "force_n": self.force_n,
            "static_load_kg": self.static_load_kg,
            "share_of_static_load": self.share_of_load,
            "caution": self.caution,
        }


@dataclass(frozen=True, slots=True)
class ChannelVerdict:
    """Measured beside predicted, for the weights really fitted."""

    channel: str
    unit: str
    measured: complex
    predicted: complex | None
    sd: float | None
    """Of the difference, per component."""
    innovation: float | None
    """|measured - predicted|^2 / (2 sd^2); above 4.6 99 % of honest runs do not lie."""
    slow_roll: complex | None
    lag_known: bool = True
    """False where what was measured is below its noise floor."""

    def to_dict(self) -> dict[str, Any]:
        predicted, slow = self.predicted, self.slow_roll
        return {
            "channel": self.channel,
            "measured": vector_dict(self.measured, self.unit, lag_known=self.lag_known),
            "predicted": None
            if predicted is None
            else vector_dict(predicted, self.unit, lag_known=foreseen_has_lag(predicted, self.sd)),
            "difference_pk": None if predicted is None else abs(self.measured - predicted),
            "difference_sd_per_component_pk": self.sd,
            "innovation": self.innovation,
            "slow_roll_subtracted": None if slow is None else vector_dict(slow, self.unit),
        }


@dataclass(frozen=True, slots=True)
class PlaneVerdict:
    plane: int
    residual: complex | None
    """g.mm at its heavy spot, against rotation from the mark; None = it cannot be told, see ``why_not``."""
    sd_gmm: float | None
    slow_roll_bound_gmm: float | None
    """How much of it the slow-roll vector's own unbalance response may be, doubled; None = no slow roll."""
    share_gmm: float | None
    in_tolerance: bool | None
    why_not: str = ""

    def to_dict(self) -> dict[str, Any]:
        return {
            "plane": self.plane,
            "residual": None if self.residual is None else unbalance_dict(self.residual),
            "residual_sd_per_component_gmm": self.sd_gmm,
            "slow_roll_bound_gmm": self.slow_roll_bound_gmm,
            "permissible_share_gmm": self.share_gmm,
            "in_tolerance": self.in_tolerance,
            "why_not_judged": self.why_not or None,
        }


@dataclass(frozen=True, slots=True)
class VibrationVerdict:
    """The machine's vibration limit, judged apart on the 1X as measured."""

    limit_um_pk: float
    largest_um_pk: float
    channel: str

    @property
    def within(self) -> bool:
        return self.largest_um_pk <= self.limit_um_pk

    def to_dict(self) -> dict[str, Any]:
        return {
            "limit_um_pk": self.limit_um_pk,
            "largest_1x_um_pk": self.largest_um_pk,
            "channel": self.channel,
            "within": self.within,
        }


@dataclass(frozen=True, slots=True)
class Verdict:
    """How a reading stands: against the prediction, the tolerance and the vibration limit."""

    job_number: str
    machine_serial: str
    run_name: str
    reading_number: int
    label: str
    speed_hz: float
    channels: tuple[ChannelVerdict, ...]
    planes: tuple[PlaneVerdict, ...]
    permissible_gmm: float | None
    tolerance_how: str
    slow_roll_run: str | None
    vibration: VibrationVerdict | None
    coefficients: tuple[UsedCoefficient, ...]
    not_reused: tuple[NotReused, ...]
    warnings: tuple[str, ...]
    notes: tuple[str, ...]
    flags: tuple[FlaggedReading, ...] = ()
    """Of the readings it rests on, by channel used."""

    @property
    def in_tolerance(self) -> bool | None:
        """False when any plane is out; True when every plane is in; None when some plane is not judged."""
        judged = [p.in_tolerance for p in self.planes]
        if any(j is False for j in judged):
            return False
        return True if judged and all(judged) else None

    @property
    def runout_included(self) -> bool:
        return self.slow_roll_run is None

    def to_dict(self) -> dict[str, Any]:
        return {
            "job": self.job_number,
            "machine": self.machine_serial,
            "run": self.run_name,
            "reading": self.reading_number,
            "label": self.label,
            "speed_hz": self.speed_hz,
            "in_tolerance": self.in_tolerance,
            "runout_included": self.runout_included,
            "slow_roll_run": self.slow_roll_run,
            "permissible_gmm": self.permissible_gmm,
            "tolerance": self.tolerance_how,
            "channels": [c.to_dict() for c in self.channels],
            "planes": [p.to_dict() for p in self.planes],
            "vibration": None if self.vibration is None else self.vibration.to_dict(),
            "coefficients": [c.to_dict() for c in self.coefficients],
            "not_reused": [refused_dict(r) for r in self.not_reused],
            "warnings": list(self.warnings),
            "notes": list(self.notes),
            "flags": [f.to_dict() for f in self.flags],
        }
