"""The records that cross the floors: frozen, with units in their names.

Conventions (see DEVELOPERS.md): vectors are 0-peak, ``x(t) = A cos(theta - lag)``, ``V = A e^{+j lag}``,
theta = 0 at the named edge of the once-per-rev pulse. Weight angles run against rotation from the rotor
mark. Stand angles (probes, sensor) are clockwise from the stand's named zero, seen from a named end.
Base units: um, mm/s, m/s2 by the channel's kind; g.mm; Hz; degrees; microseconds UTC.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields
from enum import StrEnum
from typing import Any, Literal
from uuid import UUID

import numpy as np
from numpy.typing import NDArray

Turn = Literal["clockwise", "counterclockwise"]
Kind = Literal["displacement", "velocity", "acceleration"]
Edge = Literal["falling", "rising"]
MarkChange = Literal["moved", "mistyped"]


class Origin(StrEnum):
    """Where a run's samples come from; live jobs pool live runs only."""

    LIVE = "live"
    REPLAYED = "replayed"
    SIMULATED = "simulated"
    TYPED = "typed"


class Label(StrEnum):
    """What a reading is in its job."""

    O = "O"  # noqa: E741 - the trade's own name of the run
    O_T = "O+T"
    CHECK = "check"
    TRIM = "trim"
    SLOW_ROLL = "slow-roll"


class RunState(StrEnum):
    OPEN = "open"
    COMPLETE = "complete"
    INTERRUPTED = "interrupted"


class MarkState(StrEnum):
    """How a mark stands: waiting, or how it ended."""

    PENDING = "pending"
    LABELLED = "labelled"
    MISSED = "missed"
    CANCELLED = "cancelled"


@dataclass(frozen=True, slots=True)
class Sense:
    """A sense of turning as somebody sees it: ``clockwise`` seen from the end named ``seen_from``."""

    turn: Turn
    seen_from: str

    def __str__(self) -> str:
        return f"{self.turn} seen from {self.seen_from}"


# --- the rotor ---------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class WeightPlane:
    """A plane that takes weights: holes equally spaced, hole 1 first, counted in the sense ``numbering``."""

    number: int
    radius_mm: float
    holes: int
    """Number of equally spaced holes; 0 = weights may go at any angle."""
    numbering: Sense
    position_mm: float | None = None
    """Along the shaft, from any named zero; None = not known."""


@dataclass(frozen=True, slots=True)
class Model:
    id: UUID
    code: str
    revision: int
    planes: tuple[WeightPlane, ...]
    first_critical_hz: float | None = None

    def plane(self, number: int) -> WeightPlane | None:
        return next((p for p in self.planes if p.number == number), None)


@dataclass(frozen=True, slots=True)
class Machine:
    id: UUID
    serial: str
    revision: int
    model: Model
    rotor_mass_kg: float
    service_hz: float
    grade_mm_s: float | None = None
    """Balance grade G of ISO 21940-11; None when only ``permissible_gmm`` or nothing is wanted."""
    permissible_gmm: float | None = None
    """Tolerance wanted directly, whole rotor; overrides the grade."""
    bearing_loads_kg: tuple[float, ...] = ()
    """Static load of each bearing, in the order of the planes beside them; empty = not known."""
    vibration_limit_um_pk: float | None = None


# --- the stand ---------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class ChannelSetUp:
    """One probe as it was measured with."""

    name: str
    kind: Kind
    unit: str
    """Base unit of its vectors: um, mm/s or m/s2."""
    input: str
    volts_per_unit: float
    positive: int
    """+1 when a rising voltage is positive x (shaft towards the probe), -1 when it is negative."""
    angle_deg: float
    """Stand angle, clockwise from the stand's zero seen from ``SetUp.angles_seen_from``."""
    coupling: Literal["dc", "ac"] = "dc"
    filter: str = "none"
    skew_s: float = 0.0
    gap_low_v: float | None = None
    gap_high_v: float | None = None
    pair: str | None = None
    """Name shared by the two probes of an XY pair; None = it has no partner."""


@dataclass(frozen=True, slots=True)
class PulseSetUp:
    """The once-per-rev channel as it was measured with."""

    name: str
    input: str
    edge: Edge
    level_v: float | None
    """Trigger level; None = automatic (middle of the pulse)."""
    angle_deg: float
    pulses: int = 1
    pattern: Mapping[str, Any] | None = None
    """How the one pulse that counts is told from the others of a turn; None = there is one pulse a turn."""


@dataclass(frozen=True, slots=True)
class SetUp:
    """A revision of the stand's measurement set-up."""

    id: UUID
    revision: int
    stand: str
    ends: tuple[str, str]
    angles_seen_from: str
    zero: str
    """What the stand's angle zero is, in words ("top dead centre")."""
    channels: tuple[ChannelSetUp, ...]
    pulse: PulseSetUp
    rate_hz: float
    driver: str

    def channel(self, name: str) -> ChannelSetUp | None:
        return next((c for c in self.channels if c.name == name), None)

    def draft(self) -> SetUpDraft:
        """The same content without identity, to be kept with something changed."""
        same = {f.name: getattr(self, f.name) for f in fields(SetUpDraft)}
        return SetUpDraft(**same)


# --- a job and how the machine stands there ----------------------------------------------------------


@dataclass(frozen=True, slots=True)
class MarkPosition:
    """Where the rotor mark's triggering edge is: angle from hole 1 of a plane, counted as its holes are."""

    plane: int
    from_hole1_deg: float


@dataclass(frozen=True, slots=True)
class Mount:
    id: UUID
    job_id: UUID
    machine: Machine
    """The machine as its revision stood at the mount."""
    rotation: Sense
    marks: tuple[MarkPosition, ...]
    """As known now: one that was mistyped is the one that a later mount told."""
    mark_how: str | None
    """How the mark's position was measured this time; None = not typed anew, so nothing is reused."""
    mark_width_deg: float | None
    support: str
    coupling: str
    at_us: int
    ended_us: int | None = None
    who: str = ""

    def mark_of(self, plane: int) -> MarkPosition | None:
        return next((m for m in self.marks if m.plane == plane), None)


WeightAct = Literal["fitted", "removed", "drilled"]


@dataclass(frozen=True, slots=True)
class WeightEvent:
    """One act on the rotor. The weights at a run are derived from these, never copied into it."""

    id: UUID
    mount_id: UUID
    seq: int
    """Order of entry; among events after the same run the lower comes first."""
    after_run_id: UUID | None
    """The run after which it was done; None = before the first run of the mount."""
    at_mount: bool
    """True for what was already fitted when the machine was mounted."""
    act: WeightAct
    plane: int
    mass_g: float
    """Positive; a drilled mass counts as minus this at its place."""
    radius_mm: float
    hole: int | None
    angle_deg: float | None
    """Against rotation from the rotor mark, where no hole is named."""
    removes_id: UUID | None
    """For ``removed``: the event that fitted the piece now taken off."""
    at_us: int
    who: str
    void: str | None = None
    """Why the entry was taken out; None = it counts. Only lists that ask for them hold void entries."""


# --- runs and readings -------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Vector:
    """One channel, one order: ``value`` = A e^{+j lag}, 0-peak, in the channel's base unit."""

    channel: str
    order: int
    value: complex
    var_re: float
    var_im: float
    cov: float
    noise_floor: float
    unit: str


@dataclass(frozen=True, slots=True)
class Level:
    """What one channel's samples look like beside its vectors; amplitudes in base unit, not 0-peak."""

    channel: str
    gap_v: float
    residual_sd: float
    """Standard deviation of what offset and orders leave."""
    peak_to_peak: float
    """Overall, median over the parts of the window."""
    ac_rms: float
    unit: str


@dataclass(frozen=True, slots=True)
class Measured:
    """A reading's arithmetic done once: what came out, with which set-up, setting and build.

    ``figures`` and ``setting`` are plain JSON (``daq.signal.shapes.Measurement.figures``,
    ``daq.signal.setting.Setting.to_json``); the same setting, counts and build give the same bits."""

    why: str
    """``live``, ``recompute`` or the reason of a revision."""
    set_up_id: UUID | None
    """None in a draft = the run's own."""
    speed_hz: float
    revolutions: int
    duration_s: float
    flags: tuple[str, ...]
    figures: Mapping[str, Any]
    setting: Mapping[str, Any]
    software: str
    numpy: str
    processor: str
    vectors: tuple[Vector, ...]
    levels: tuple[Level, ...]
    version: int = 0
    """1 = live; 0 in a draft = the next."""
    at_us: int = 0
    who: str = ""


Direction = Literal["up", "down"]


@dataclass(frozen=True, slots=True)
class TracePoint:
    """1X of all channels over one step of a run-up or coast-down."""

    t_s: float
    """From the start of the trace to the middle of the step."""
    speed_hz: float
    revolutions: int
    vectors: tuple[complex, ...]
    """By channel of the trace, 0-peak, base unit, raw (no slow roll taken off)."""
    se: tuple[float, ...]
    gap_v: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Trace:
    """One stretch of a run in which the speed went one way; up and down are never averaged."""

    direction: Direction
    channels: tuple[str, ...]
    units: tuple[str, ...]
    started_us: int
    duration_s: float
    points: tuple[TracePoint, ...]
    number: int = 0
    """Within the run, from 1; 0 in a draft."""


def flags_of(flags: Iterable[str], channel: str) -> tuple[str, ...]:
    """Of a reading's health flags (``code``, or ``code:channel``) those that concern a channel."""
    return tuple(f for f in flags if f.partition(":")[2] in ("", channel))


@dataclass(frozen=True, slots=True)
class Reading:
    """One steady plateau of a run."""

    id: UUID
    run_id: UUID
    number: int
    """Within its run, from 1."""
    at_us: int
    """UTC of its first sample."""
    duration_s: float
    speed_hz: float
    revolutions: int
    steadiness: Mapping[str, Any]
    flags: tuple[str, ...]
    vectors: tuple[Vector, ...]
    label: Label | None = None
    """The newest label; earlier ones stay in the store."""
    labelled_by: str = ""
    levels: tuple[Level, ...] = ()
    """By channel; empty for readings made before they were kept."""
    figures: Mapping[str, Any] = field(default_factory=dict)
    """Of the newest arithmetic: see ``Measured``."""
    version: int = 1
    """Of the arithmetic that stands: 1 = live, later ones recomputed or revised."""

    def level(self, channel: str) -> Level | None:
        return next((v for v in self.levels if v.channel == channel), None)

    def vector(self, channel: str, order: int = 1) -> Vector | None:
        return next((v for v in self.vectors if v.channel == channel and v.order == order), None)


@dataclass(frozen=True, slots=True)
class Run:
    id: UUID
    job_number: str | None
    """The shop's number of the job; None = unassigned."""
    number: int | None
    """Within the job; None = unassigned."""
    unassigned_number: int | None
    """U/n by store, kept when the run is assigned later."""
    mount_id: UUID | None
    set_up_id: UUID
    origin: Origin
    operator: str
    condition: Mapping[str, Any]
    software: str
    started_us: int
    ended_us: int | None
    state: RunState
    reason: str
    void: str | None
    """Why it was taken out; None = it counts."""
    readings: tuple[Reading, ...] = ()

    @property
    def name(self) -> str:
        """``0142/3``, or ``U/1`` while unassigned."""
        if self.job_number is not None and self.number is not None:
            return f"{self.job_number}/{self.number}"
        return f"U/{self.unassigned_number}"


@dataclass(frozen=True, slots=True)
class Mark:
    """An act of labelling, from question to end. ``key`` is made by the client: a retry is no second mark."""

    key: str
    label: Label
    job_number: str
    asked_us: int
    who: str
    state: MarkState
    run_name: str | None = None
    reading_id: UUID | None = None
    reading_number: int | None = None
    detail: str = ""
    """How it ended, in a sentence (for ``missed``: the figure still out)."""


@dataclass(frozen=True, slots=True)
class Job:
    id: UUID
    number: str
    machine_serial: str
    speeds_hz: tuple[float, ...]
    """Balancing speeds, the first is the one meant when none is named."""
    opened_us: int


@dataclass(frozen=True, slots=True)
class JobStory:
    """All of a job that arithmetic needs, in order; void runs left out unless asked for."""

    job: Job
    mounts: tuple[Mount, ...]
    runs: tuple[Run, ...]
    """By start, with readings."""
    weights: tuple[WeightEvent, ...]
    """In the order in which they were done: by run, then by entry."""
    set_ups: Mapping[UUID, SetUp]
    machine_now: Machine | None = None
    """The machine's newest revision, whose tolerance counts; None = as mounted."""


@dataclass(frozen=True, slots=True)
class Coefficient:
    """Response in base unit (0-peak) per g.mm at (plane, channel, speed), from all runs of a job. Derived."""

    job_number: str
    machine_serial: str
    model_code: str
    plane: int
    channel: str
    speed_hz: float
    value: complex
    se: float
    """Standard error per component."""
    run_names: tuple[str, ...]
    origin: Origin
    mount_id: UUID
    set_up_id: UUID
    at_us: int
    """Start of the newest run it came from."""
    largest_effect_ratio: float = 0.0
    """|V1-V0| / (sqrt2 s) of the strongest weight difference behind it."""


# --- drafts: what daq and the control channel hand to the ledger ---------------------------------------


@dataclass(frozen=True, slots=True)
class RawSamples:
    """Integer counts as the converter gave them: ``volts = counts * volts_per_count`` per channel."""

    counts: NDArray[np.int16] | NDArray[np.int32]
    """Shape (frames, channels); the once-per-rev channel first, then the probes in set-up order."""
    volts_per_count: tuple[float, ...]
    rate_hz: float
    first_sample: int


@dataclass(frozen=True, slots=True)
class ReadingDraft:
    """A reading as the analysis hands it over; the ledger gives it its identity."""

    at_us: int
    duration_s: float
    speed_hz: float
    revolutions: int
    segment: int
    first_sample: int
    mono_s: float
    steadiness: Mapping[str, Any]
    flags: tuple[str, ...]
    vectors: tuple[Vector, ...]
    raw: RawSamples | None
    measured: Measured | None = None
    """How it was measured; None (typed or made by tests) leaves no such row."""


@dataclass(frozen=True, slots=True)
class RunDraft:
    set_up_id: UUID
    origin: Origin
    operator: str
    started_us: int
    mono_s: float
    first_sample: int
    segment: int
    condition: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class PieceDraft:
    """A piece as typed: mass, and a hole or an angle; ``radius_mm`` None = the plane's radius."""

    plane: int
    mass_g: float
    hole: int | None = None
    angle_deg: float | None = None
    radius_mm: float | None = None


@dataclass(frozen=True, slots=True)
class MachineDraft:
    """``planes`` and ``first_critical_hz`` are the model's. What is None or empty stays as it is known; a
    new machine needs model, mass and speed, a new model its planes.
    """

    serial: str
    model_code: str | None = None
    rotor_mass_kg: float | None = None
    service_hz: float | None = None
    grade_mm_s: float | None = None
    permissible_gmm: float | None = None
    bearing_loads_kg: tuple[float, ...] = ()
    vibration_limit_um_pk: float | None = None
    planes: tuple[WeightPlane, ...] = ()
    first_critical_hz: float | None = None


@dataclass(frozen=True, slots=True)
class MountDraft:
    serial: str
    job_number: str
    rotation: Sense
    marks: tuple[MarkPosition, ...]
    mark_how: str | None
    mark_width_deg: float | None
    support: str
    coupling: str
    fitted: tuple[PieceDraft, ...]
    """What is already on the rotor; empty = clean."""
    speeds_hz: tuple[float, ...]
    """Balancing speeds; empty = the machine's service speed."""
    carry_over: bool = False
    """True: what was fitted in the job's previous mount is fitted still."""
    mark_change: MarkChange | None = None
    """Why the rotor mark's position is another one than at the job's mount before; None = it is asked."""


@dataclass(frozen=True, slots=True)
class SetUpDraft:
    """A set-up as the stand file and the driver give it; the ledger gives it identity and revision."""

    stand: str
    ends: tuple[str, str]
    angles_seen_from: str
    zero: str
    channels: tuple[ChannelSetUp, ...]
    pulse: PulseSetUp
    rate_hz: float
    driver: str
