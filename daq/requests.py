"""What may be asked over the control channel: one model per act, unknown keys refused, numbers finite."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

Key = Annotated[str, Field(min_length=8, max_length=64, pattern=r"^[0-9A-Za-z_-]+$")]
Name = Annotated[str, Field(min_length=1, max_length=64)]
RunName = Annotated[str, Field(min_length=3, max_length=80)]
Text = Annotated[str, Field(max_length=500)]
Finite = Annotated[float, Field(allow_inf_nan=False, strict=True, ge=-1e9, le=1e9)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False, strict=True, le=1e9)]
Grams = Annotated[float, Field(ge=1e-6, allow_inf_nan=False, strict=True, le=1e5)]
Millimetres = Annotated[float, Field(ge=1e-3, allow_inf_nan=False, strict=True, le=1e5)]
PlaneNumber = Annotated[int, Field(ge=1, le=99)]


class Request(BaseModel):
    """Every act carries a client-made key (a retry is no second act) and who asks."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    key: Key
    who: Annotated[str, Field(max_length=64)] = ""


class SenseBody(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)
    turn: Literal["clockwise", "counterclockwise"]
    seen_from: Name


class PlaneBody(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)
    number: PlaneNumber
    radius_mm: Positive
    holes: Annotated[int, Field(ge=0, le=1000)]
    numbering: SenseBody
    position_mm: Finite | None = None


class MachineAsked(Request):
    """What is None or empty stays as it is known of the machine."""

    serial: Name
    model: Name | None = None
    rotor_mass_kg: Positive | None = None
    service_hz: Positive | None = None
    grade_mm_s: Positive | None = None
    permissible_gmm: Positive | None = None
    bearing_loads_kg: tuple[Positive, ...] = ()
    vibration_limit_um_pk: Positive | None = None
    planes: tuple[PlaneBody, ...] = ()
    first_critical_hz: Positive | None = None


class PieceBody(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)
    plane: PlaneNumber
    mass_g: Grams
    hole: Annotated[int, Field(ge=1, le=1000)] | None = None
    angle_deg: Finite | None = None
    radius_mm: Millimetres | None = None


class MarkPositionBody(BaseModel):
    """``plane`` None = every plane of the machine."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    plane: PlaneNumber | None = None
    from_hole1_deg: Finite


class MountAsked(Request):
    serial: Name
    job: Name
    rotation: SenseBody
    marks: tuple[MarkPositionBody, ...] = ()
    mark_how: Text | None = None
    mark_width_deg: Finite | None = None
    support: Text = ""
    coupling: Text = ""
    fitted: tuple[PieceBody, ...] = ()
    carry_over: bool = False
    mark_change: Literal["moved", "mistyped"] | None = None
    """Why the rotor mark's position is another one than at the job's mount before; None = ask."""
    speeds_hz: tuple[Positive, ...] = ()


class UnmountAsked(Request):
    pass


class MarkAsked(Request):
    label: Literal["O", "O+T", "check", "trim", "slow-roll"]
    choose: Literal["last", "next"] | None = None
    run: RunName | None = None
    """The run whose reading is meant, of any job."""
    reading: Annotated[int, Field(ge=1, le=10**9)] | None = None
    """Its number in that run; None = the newest that can take the label."""
    confirmed: bool = False


class CancelAsked(Request):
    """Cancels the mark whose key is ``mark``, or the pending one."""

    mark: Key | None = None


class WeightAsked(Request):
    piece: PieceBody
    drilled: bool = False
    locked_out: bool = False
    confirmed: bool = False
    """The hole that holds a piece already, or a force above the static load, is meant."""
    after: Name | None = None
    """Name of the run after which it was really done (a late entry); None = now."""


class RemovalAsked(Request):
    plane: PlaneNumber
    hole: Annotated[int, Field(ge=1, le=1000)] | None = None
    angle_deg: Finite | None = None
    all: bool = False
    locked_out: bool = False
    after: Name | None = None


class WeightVoidAsked(Request):
    number: Annotated[int, Field(ge=1, le=2**53)]
    """Of the entry, as ``weight list --all`` shows it."""
    why: Annotated[str, Field(min_length=1, max_length=500)]


class SimStartAsked(Request):
    speed_hz: Positive | None = None


class SimStopAsked(Request):
    pass


class SimNextAsked(Request):
    file: Annotated[str, Field(max_length=4096)] | None = None


class SimFaultAsked(Request):
    kind: Name
    seconds: Positive = 1.0
    channel: Name | None = None
    every: Annotated[int, Field(ge=1, le=1000)] | None = None


class VoidAsked(Request):
    run: Name
    why: Annotated[str, Field(min_length=1, max_length=500)]


class AssignAsked(Request):
    run: Name
    job: Name


class RecomputeAsked(Request):
    """Keeps what comes out otherwise than it is stored."""

    runs: Annotated[tuple[RunName, ...], Field(min_length=1, max_length=1000)]


class ChannelBody(BaseModel):
    """What a probe really was; None = as recorded. ``unit``: base unit that ``volts_per_unit`` is per."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    channel: Name
    volts_per_unit: Annotated[float, Field(gt=0, allow_inf_nan=False, strict=True, le=1e12)] | None = None
    unit: Literal["um", "mm/s", "m/s2"] | None = None
    positive: Literal[1, -1] | None = None
    angle_deg: Annotated[float, Field(ge=0, lt=360, allow_inf_nan=False, strict=True)] | None = None


class ReviseAsked(Request):
    runs: Annotated[tuple[RunName, ...], Field(min_length=1, max_length=1000)]
    channels: tuple[ChannelBody, ...] = ()
    sensor_angle_deg: Annotated[float, Field(ge=0, lt=360, allow_inf_nan=False, strict=True)] | None = None
    why: Annotated[str, Field(min_length=1, max_length=500)]
    confirmed: bool = False
    """A sensitivity many times another than recorded is meant."""
