"""The tables of a stand file, one class each; the key as typed is the alias where it differs.

A docstring below each field says what it means; it is also the description in the exported schema.
"""

from __future__ import annotations

import re
from dataclasses import replace
from typing import Annotated, Any, Literal
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError, available_timezones

from pydantic import AfterValidator, Field, InstanceOf, ValidationInfo, field_validator, model_validator

from config.errors import BadQuantity
from config.fields import (
    AngleDeg,
    AutoVolts,
    Name,
    Percent,
    Seconds,
    Section,
    SpeedHz,
    Volts,
    amplitude,
    as_text,
    parse_amplitude,
    percent,
    quantity,
    typed,
    wrong,
)
from config.steadiness import PRESETS, SteadinessLimits
from config.units import BASE_UNIT, Display, parse_display, parse_sensitivity

SHOWN_BY_DEFAULT = {"displacement": "um pp", "velocity": "mm/s rms", "acceleration": "m/s2 rms"}


def _time_zone(name: str) -> str:
    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError) as error:
        import difflib

        near = difflib.get_close_matches(name, available_timezones(), 1)
        hint = (
            f'did you mean "{near[0]}"?' if near else 'write one of the IANA names, such as "Europe/Lisbon".'
        )
        raise wrong(f"{name!r} is no time zone known here; {hint}") from error
    return name


class Identity(Section):
    """``[stand]``"""

    name: Name = Field(examples=["bay-1"])
    """Name of the stand, 1 to 64 characters; it stands in every run."""
    time_zone: Annotated[Name, AfterValidator(_time_zone)] = Field(examples=["Europe/Lisbon"])
    """IANA time zone in which dates are shown; the store keeps UTC."""
    ends: tuple[Name, Name] = Field(strict=False, examples=[["drive", "free"]])
    """Names of the stand's two ends, from which rotation, angles and hole numbers are seen."""
    angles_seen_from: Name = Field(examples=["drive"])
    """The end from which the stand angles of probes and sensor run clockwise."""
    zero: Name = Field(examples=["top dead centre"])
    """What stand angle zero is, in words."""

    @field_validator("ends")
    @classmethod
    def _two_ends(cls, ends: tuple[str, str]) -> tuple[str, str]:
        if ends[0].casefold() == ends[1].casefold():
            raise wrong(f"both ends are called {ends[0]!r}; give each a name of its own.")
        return ends

    @field_validator("angles_seen_from")
    @classmethod
    def _one_of_the_ends(cls, end: str, info: ValidationInfo) -> str:
        ends = info.data.get("ends")
        if ends and end not in ends:
            raise wrong(f'{end!r} is neither end; write "{ends[0]}" or "{ends[1]}".')
        return end


class Source(Section):
    """``[source]``"""

    driver: Name = Field(examples=["simulated"])
    """Name of the driver that brings the samples; ``revmark driver list`` names those there are."""
    options: dict[str, Any] = Field(default_factory=dict)
    """The driver's own settings, checked by the driver."""


MOST_PULSES = 60
"""Pulses a turn."""
SPACING_SUM_DEG = 0.1
"""The spacing adds to 360 deg within this."""
SPACING_TOLD_DEG = 1.0
"""Seen from any other pulse, some angle of the spacing is so much different at least."""
SpacingDeg = Annotated[float, quantity("angle", "90 deg", 1.0, 359.0), as_text("90 deg")]


class OncePerRev(Section):
    """``[once_per_rev]``"""

    name: Name = "once-per-rev"
    """Name of the channel in tables and plots."""
    input: Name = Field(examples=["0"])
    """The driver's input that carries the pulse."""
    edge: Literal["falling", "rising"]
    """The edge of the pulse that is angle zero of the rotor mark; the other edge turns all phases."""
    level_v: AutoVolts = Field(default=typed("auto"), alias="level", validate_default=True)
    """Voltage at which the edge counts; "auto" = the middle of the pulse."""
    hysteresis_v: AutoVolts = Field(default=typed("auto"), alias="hysteresis", validate_default=True)
    """How far the voltage must go back before a next edge counts; "auto" = a part of the pulse height."""
    angle_deg: AngleDeg = Field(alias="angle")
    """Stand angle of the sensor, clockwise from the stand's zero seen from ``angles_seen_from``."""
    marked: Literal["long"] | None = None
    """With several pulses a turn: "long" = the pulse that lasts longest counts."""
    spacing_deg: tuple[SpacingDeg, ...] | None = Field(
        default=None, alias="spacing", strict=False, examples=[["90 deg", "85 deg", "95 deg", "90 deg"]]
    )
    """With several, unequally spaced pulses a turn: the angle from the one that counts to the next to pass,
    from that to the one after, and so on; they add to 360 deg."""
    pulses: int = Field(default=1, validate_default=True)
    """Pulses per turn; with more than one, ``marked`` or ``spacing`` says which of them counts."""

    @field_validator("spacing_deg")
    @classmethod
    def _told_apart(cls, spacing_deg: tuple[float, ...] | None) -> tuple[float, ...] | None:
        if spacing_deg is None:
            return None
        total = sum(spacing_deg)
        if abs(total - 360) > SPACING_SUM_DEG:
            raise wrong(f"adds to {total:g} deg: from the pulse that counts round to itself it must be 360.")
        for k in range(1, len(spacing_deg)):
            turned = spacing_deg[k:] + spacing_deg[:k]
            if max(abs(a - b) for a, b in zip(spacing_deg, turned, strict=True)) < SPACING_TOLD_DEG:
                raise wrong(
                    f"looks the same from pulse {k + 1} as from pulse 1 (to {SPACING_TOLD_DEG:g} deg), so "
                    "the one that counts cannot be told; space them more unequally or make one longer."
                )
        return spacing_deg

    @field_validator("pulses")
    @classmethod
    def _one_counts(cls, pulses: int, info: ValidationInfo) -> int:
        marked, spacing_deg = info.data.get("marked"), info.data.get("spacing_deg")
        if not 1 <= pulses <= MOST_PULSES:
            raise wrong(f"must be from 1 to {MOST_PULSES}, not {pulses}.")
        if not {"marked", "spacing_deg"} <= info.data.keys():
            return pulses  # what is wrong there is said there
        if marked and spacing_deg:
            raise wrong("goes with marked or with spacing, not with both; leave one out.")
        if pulses == 1 and (marked or spacing_deg):
            raise wrong("is 1, so there is nothing to tell apart; write how many pulses pass in a turn.")
        if pulses > 1 and not (marked or spacing_deg):
            raise wrong(
                f'is {pulses}, but not which of them counts; write marked = "long" or their spacing, or use '
                "a single mark."
            )
        if spacing_deg and len(spacing_deg) != pulses:
            raise wrong(f"is {pulses}, but spacing has {len(spacing_deg)} angles; write one for each pulse.")
        return pulses

    @property
    def pattern(self) -> dict[str, Any] | None:
        """How the pulse that counts is told from the others, as the set-up records it; None = one pulse."""
        if self.spacing_deg:
            return {"spacing_deg": list(self.spacing_deg)}
        return {"marked": self.marked} if self.marked else None

    @field_validator("hysteresis_v")
    @classmethod
    def _above_zero(cls, hysteresis_v: float | None) -> float | None:
        if hysteresis_v is not None and hysteresis_v <= 0:
            raise wrong('must be above 0 V, or "auto".')
        return hysteresis_v


class Channel(Section):
    """One ``[[channel]]``: a probe."""

    name: Name = Field(examples=["probe 1"])
    """Name of the probe; coefficients are kept under it."""
    input: Name = Field(examples=["1"])
    """The driver's input it is wired to."""
    kind: Literal["displacement", "velocity", "acceleration"]
    """What the probe measures."""
    volts_per_unit: Annotated[float, as_text("200 mV/mil")] = Field(alias="sensitivity")
    """Volts per unit of motion, held per um, mm/s or m/s2."""
    positive: Literal["rising", "falling"]
    """Which way the voltage goes for positive motion (shaft towards the probe)."""
    angle_deg: AngleDeg = Field(alias="angle")
    """Stand angle of the probe, clockwise from the stand's zero seen from ``angles_seen_from``."""
    coupling: Literal["dc", "ac"] = "dc"
    """Whether the input passes the probe's mean voltage (dc) or not (ac)."""
    gap_limits_v: tuple[Volts, Volts] | None = Field(
        default=None, alias="gap_limits", strict=False, examples=[["-16 V", "-4 V"]]
    )
    """Lowest and highest mean voltage of a healthy probe; left out = not watched."""
    filter: Name = "none"
    """Filters before the converter, in words: a changed filter is another set-up."""
    skew_s: Annotated[float, quantity("time", "0.02 ms", -1, 1), as_text("0.02 ms")] = Field(
        default=typed("0 s"), alias="skew", validate_default=True
    )
    """How much later than the once-per-rev channel this one is sampled; -1 s to 1 s."""
    pair: Name | None = Field(default=None, examples=["drive bearing"])
    """Name shared by the two displacement probes of an XY pair: 90 deg apart (5 deg slack) at one place."""
    noise_limit_pk: Annotated[float | None, as_text("2 um rms")] = Field(default=None, alias="noise_limit")
    """What may be left beside the harmonics, an amplitude with unit and detector (held as the 0-peak of a
    sine of the same rms); more is flagged. Left out = not watched."""
    shown: Annotated[InstanceOf[Display] | None, as_text("um pp")] = Field(default=None, alias="show")
    """How its amplitudes are shown, unit and detector; left out = um pp, mm/s rms or m/s2 rms by kind."""

    @field_validator("volts_per_unit", mode="before")
    @classmethod
    def _sensitivity(cls, text: object, info: ValidationInfo) -> float:
        if not isinstance(text, str):
            raise wrong(f'{text!r} has no unit: write it in quotes with one, for example "200 mV/mil".')
        try:
            found = parse_sensitivity(text)
        except BadQuantity as error:
            raise wrong(str(error)) from error
        kind = info.data.get("kind", found.kind)
        if found.kind != kind:
            raise wrong(f"{text!r} is the sensitivity for {found.kind}, but kind is {kind!r}.")
        return found.volts_per_unit

    @field_validator("gap_limits_v")
    @classmethod
    def _low_then_high(
        cls, limits: tuple[float, float] | None, info: ValidationInfo
    ) -> tuple[float, float] | None:
        if limits and limits[0] >= limits[1]:
            raise wrong(f"{limits[0]:g} V is not below {limits[1]:g} V; write the lower limit first.")
        if limits and info.data.get("coupling") == "ac":
            raise wrong("an ac-coupled input shows no gap voltage; leave gap_limits out.")
        return limits

    @field_validator("noise_limit_pk", mode="before")
    @classmethod
    def _noise_limit(cls, text: object, info: ValidationInfo) -> float | None:
        kind = info.data.get("kind")
        example = f"2 {SHOWN_BY_DEFAULT[kind].split()[0]} rms" if kind else "2 um rms"
        if not isinstance(text, str):
            raise wrong(f'{text!r} has no unit: write it in quotes with one, for example "{example}".')
        try:
            return parse_amplitude(text, kind, example) if kind else None
        except BadQuantity as error:
            raise wrong(str(error)) from error

    @field_validator("shown", mode="before")
    @classmethod
    def _shown(cls, text: object, info: ValidationInfo) -> Display | None:
        kind = info.data.get("kind")
        if not isinstance(text, str):
            raise wrong('must be text such as "um pp".')
        try:
            return parse_display(text, kind) if kind else None
        except BadQuantity as error:
            raise wrong(str(error)) from error

    @property
    def display(self) -> Display:
        """How its amplitudes are shown."""
        return self.shown or parse_display(SHOWN_BY_DEFAULT[self.kind], self.kind)

    @property
    def unit(self) -> str:
        """Base unit of its vectors: um, mm/s or m/s2."""
        return BASE_UNIT[self.kind]

    @property
    def positive_sign(self) -> int:
        """+1 when a rising voltage is positive motion, -1 when it is negative."""
        return 1 if self.positive == "rising" else -1


class Surroundings(Section):
    """``[surroundings]``: what else vibrates near the machine, at frequencies known beforehand."""

    mains_hz: SpeedHz | None = Field(default=None, alias="mains", examples=["50 Hz"])
    """Frequency of the supply, "50 Hz" or "60 Hz": it hums, multiples too. Left out = hum is not watched."""
    neighbours_hz: tuple[SpeedHz, ...] = Field(
        default=(), alias="neighbours", strict=False, max_length=16, examples=[["1480 rpm"]]
    )
    """Running speeds of machines nearby, at most 16."""


class ChangeFloor(Section):
    """``[steadiness.change_floor]``"""

    displacement_um_pk: Annotated[float, amplitude("displacement", "1 um pp"), as_text("1 um pp")] | None = (
        Field(default=None, alias="displacement")
    )
    """Change that always passes on displacement channels."""
    velocity_mm_s_pk: (
        Annotated[float, amplitude("velocity", "0.05 mm/s rms"), as_text("0.05 mm/s rms")] | None
    ) = Field(default=None, alias="velocity")
    """Change that always passes on velocity channels."""
    acceleration_m_s2_pk: (
        Annotated[float, amplitude("acceleration", "0.02 m/s2 pk"), as_text("0.02 m/s2 pk")] | None
    ) = Field(default=None, alias="acceleration")
    """Change that always passes on acceleration channels."""


class Steadiness(Section):
    """``[steadiness]``: a preset, and what overrides it. Each limit is described in config/steadiness.py."""

    preset: Literal["standard", "small"] = "standard"
    """Where the limits start from: "standard" (60 s, 100 turns) or "small" (3 s, 10 turns)."""
    window_s: Annotated[float, quantity("time", "60 s", 0.1, 3600), as_text("60 s")] | None = Field(
        default=None, alias="window"
    )
    """Shortest averaging window, 0.1 s to 1 h."""
    longest_window_s: Annotated[float, quantity("time", "600 s", 0.1, 14_400), as_text("600 s")] | None = (
        Field(default=None, alias="longest_window")
    )
    """Longest averaging window, up to 4 h; left out = ten shortest ones."""
    min_revolutions: int | None = Field(default=None, ge=6, le=100_000)
    """Fewest whole turns in the window; at least one for each block."""
    blocks: int | None = Field(default=None, ge=6, le=64)
    """Equal parts of the window, 6 to 64."""
    amplitude_target_pct: Percent | None = Field(default=None, alias="amplitude_target")
    """Averaging ends when the standard error of each 1X amplitude is down to this."""
    phase_target_deg: Annotated[float, quantity("angle", "0.3 deg", 0.001, 30), as_text("0.3 deg")] | None = (
        Field(default=None, alias="phase_target")
    )
    """The same for each 1X phase."""
    speed_band_pct: Percent | None = Field(default=None, alias="speed_band")
    """Largest distance of the speed from its mean while it counts as held."""
    speed_sd_pct: Percent | None = Field(default=None, alias="speed_sd")
    """Largest standard deviation of the speed in the window."""
    speed_drift_pct_per_min: Annotated[float, percent("0.1 %/min"), as_text("0.1 %/min")] | None = Field(
        default=None, alias="speed_drift"
    )
    """Largest slope of the speed in the window."""
    change_pct: Percent | None = Field(default=None, alias="change")
    """Largest change of a vector between windows, of its amplitude."""
    change_floor: ChangeFloor = Field(default_factory=ChangeFloor)
    """Changes so small that they always pass, by kind of probe."""
    scatter_pct: Percent | None = Field(default=None, alias="scatter")
    """Largest scatter of the blocks' vectors, of the amplitude."""
    lookback_s: Seconds | None = Field(default=None, alias="lookback")
    """How far back the vectors are compared; "0 s" = within the window itself."""
    hold_s: Seconds | None = Field(default=None, alias="hold")
    """Time at speed before a reading counts."""
    thermal_time_constant_s: Seconds | None = Field(default=None, alias="thermal_time_constant")
    """Of what warms up slowest; a shorter quiet stretch than 0.7 of it is told with the reading."""
    min_signal_to_noise: float | None = Field(default=None, gt=0, le=1000)
    """1X amplitude over noise; below it a reading is flagged."""

    @model_validator(mode="after")
    def _turn_per_block(self) -> Steadiness:
        limits = self.limits()
        if limits.min_revolutions < limits.blocks:
            raise wrong(
                f"{limits.min_revolutions} turns do not fill {limits.blocks} blocks; ask for more turns."
            )
        if limits.longest_window_s < limits.window_s:
            raise wrong(
                f"longest_window ({limits.longest_window_s:g} s) is shorter than window "
                f"({limits.window_s:g} s); write {limits.window_s:g} s or more."
            )
        return self

    def limits(self) -> SteadinessLimits:
        """The preset with what the file says otherwise."""
        given = self.model_dump(exclude={"preset", "change_floor"}, exclude_none=True)
        floors = self.change_floor.model_dump(exclude_none=True)
        given.update({"change_floor_" + name.partition("_")[2]: value for name, value in floors.items()})
        if self.window_s is not None:
            given.setdefault("longest_window_s", 10 * self.window_s)
        return replace(PRESETS[self.preset], **given)


class RunRules(Section):
    """``[run]``: what counts as a run and not as jogging or windmilling."""

    minimum_speed_hz: SpeedHz = Field(default=typed("60 rpm"), alias="minimum_speed", validate_default=True)
    """Slower turning is no run."""
    minimum_duration_s: Seconds = Field(default=typed("2 s"), alias="minimum_duration", validate_default=True)
    """Shorter turning is no run."""
    slow_roll_limit_hz: SpeedHz = Field(
        default=typed("300 rpm"), alias="slow_roll_limit", validate_default=True
    )
    """A reading may be labelled slow-roll only below this speed."""

    @field_validator("slow_roll_limit_hz")
    @classmethod
    def _above_minimum(cls, limit_hz: float, info: ValidationInfo) -> float:
        lowest_hz = info.data.get("minimum_speed_hz")
        if lowest_hz is not None and limit_hz <= lowest_hz:
            raise wrong(f"{limit_hz * 60:g} rpm is not above minimum_speed ({lowest_hz * 60:g} rpm).")
        return limit_hz


class RawBudget(Section):
    """``[raw]``: how many raw samples are kept."""

    per_reading_mib: int = Field(default=128, ge=1, le=16_384)
    """Most that one reading keeps, before compression, in MiB."""
    total_mib: int = Field(default=20_480, ge=1, le=16_777_216)
    """Most that the store keeps; the oldest go first, and that is recorded."""

    @field_validator("total_mib")
    @classmethod
    def _holds_a_reading(cls, total_mib: int, info: ValidationInfo) -> int:
        one_mib = info.data.get("per_reading_mib")
        if one_mib is not None and total_mib < one_mib:
            raise wrong(f"{total_mib} MiB do not hold one reading of {one_mib} MiB (per_reading_mib).")
        return total_mib


class StoreFile(Section):
    """``[store]``"""

    path: Name | None = Field(default=None, examples=["bay-1.sqlite"])
    """The store's file, from the stand file's folder; left out = named after the stand file."""


class Access(Section):
    """``[access]``"""

    group: str = ""
    """Group of the operating system whose members may mark and read; "" = only the service's user."""

    @field_validator("group")
    @classmethod
    def _group_name(cls, group: str) -> str:
        if not re.fullmatch(r"([A-Za-z_][A-Za-z0-9_.-]{0,31})?", group):
            raise wrong(f"{group!r} is no name of a group; letters, digits and . _ - only, at most 32.")
        return group
