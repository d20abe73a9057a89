"""Runs measured again with a corrected set-up: from the counts where they are kept, else scaled exactly.

A sensitivity or a sense of positive changes the vectors; the angle of a probe or of the once-per-rev sensor
changes only where they are said to point, so the vectors come out as they were.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from config.errors import NeedsAnswer, Refusal
from daq.build import this_build
from daq.recompute import Again, again
from daq.signal.setting import Setting
from store.again import scale_factors
from store.history import History
from store.records import ChannelSetUp, Level, Measured, Reading, SetUp, SetUpDraft, Vector


@dataclass(frozen=True, slots=True)
class ChannelChange:
    """What a probe really was; None = as recorded."""

    channel: str
    volts_per_unit: float | None = None
    unit: str | None = None
    """Base unit that ``volts_per_unit`` is per, to be held against the channel's."""
    positive: int | None = None
    angle_deg: float | None = None

    @property
    def told(self) -> dict[str, Any]:
        """Fields of a channel's set-up that it puts right."""
        given = {
            "volts_per_unit": self.volts_per_unit,
            "positive": self.positive,
            "angle_deg": self.angle_deg,
        }
        return {k: v for k, v in given.items() if v is not None}


@dataclass(frozen=True, slots=True)
class Correction:
    """What the set-up really was."""

    channels: tuple[ChannelChange, ...] = ()
    sensor_angle_deg: float | None = None


def corrected(set_up: SetUp, correction: Correction, run: str) -> SetUpDraft:
    """The run's set-up put right. Raises Refusal: no such channel, another kind, or nothing changes."""
    named = [c.channel for c in correction.channels]
    for name in named:
        if set_up.channel(name) is None:
            known = ", ".join(c.name for c in set_up.channels)
            raise Refusal(f"Run {run} has no channel {name!r}.", f"Its channels: {known}.")
    changes = {c.channel: c for c in correction.channels}
    channels = tuple(_put_right(c, changes[c.name]) if c.name in changes else c for c in set_up.channels)
    pulse = set_up.pulse
    if correction.sensor_angle_deg is not None:
        pulse = replace(pulse, angle_deg=correction.sensor_angle_deg)
    draft = replace(set_up.draft(), channels=channels, pulse=pulse)
    if draft == set_up.draft():
        raise Refusal(
            f"Run {run} was measured with that set-up already.", "Nothing to do; `revmark run show` tells it."
        )
    return draft


FAR_OFF = 3.0
"""A sensitivity so many times another is asked about: more likely a slip of the unit."""


def question_far_off(then: SetUp, now: SetUpDraft, run: str) -> None:
    """Raises NeedsAnswer when a corrected sensitivity is many times the recorded one, or a small part."""
    for old, new in zip(then.channels, now.channels, strict=True):
        times = new.volts_per_unit / old.volts_per_unit
        if not 1 / FAR_OFF <= times <= FAR_OFF:
            raise NeedsAnswer(
                f"The sensitivity of {old.name} would be {times:.3g} times the one of run {run}, and its "
                f"amplitudes {1 / times:.3g} times what they were.",
                "Check the unit; --yes goes on all the same.",
                options=("--yes",),
            )


def changes(then: SetUp, now: SetUpDraft) -> list[dict[str, Any]]:
    """What a correction makes of the set-up, as plain JSON: channel (None = once-per-rev), what, was, is."""
    fields = ("volts_per_unit", "positive", "angle_deg")
    found = [
        {"channel": old.name, "what": name, "was": getattr(old, name), "is": getattr(new, name)}
        for old, new in zip(then.channels, now.channels, strict=True)
        for name in fields
        if getattr(old, name) != getattr(new, name)
    ]
    if then.pulse.angle_deg != now.pulse.angle_deg:
        pulse = (then.pulse.angle_deg, now.pulse.angle_deg)
        found.append({"channel": None, "what": "angle_deg", "was": pulse[0], "is": pulse[1]})
    return found


def _put_right(channel: ChannelSetUp, change: ChannelChange) -> ChannelSetUp:
    if change.volts_per_unit is not None and change.unit != channel.unit:
        raise Refusal(
            f"{channel.name} measures {channel.kind}; a sensitivity per {change.unit} is none of it.",
            f"Write it per {channel.unit}, or in another unit of {channel.kind}.",
        )
    return replace(channel, **change.told)


def revised(history: History, run: str, reading: Reading, then: SetUp, now: SetUpDraft, why: str) -> Again:
    """One reading measured with the corrected set-up; where it cannot be, its newest version scaled exactly,
    with ``why_not`` saying why."""
    found = again(history, run, reading, lambda setting: with_set_up(setting, then, now), why)
    if found.measured is not None:
        return found
    stored = next(iter(reversed(history.measured(reading.id))), None) or _unrecorded(reading)
    return replace(found, measured=scaled(stored, then, now, why, found.why_not))


def with_set_up(setting: Setting, then: SetUp, now: SetUpDraft) -> Setting:
    """The setting with the scales that the corrected set-up has otherwise."""
    scales = _scales(then, now)
    return replace(setting, channels=tuple(replace(c, **scales.get(c.name, {})) for c in setting.channels))


def _scales(then: SetUp, now: SetUpDraft) -> dict[str, dict[str, Any]]:
    """By channel whose scale was corrected, what it is now."""
    return {
        new.name: {"volts_per_unit": new.volts_per_unit, "positive": new.positive}
        for old, new in zip(then.channels, now.channels, strict=True)
        if (old.volts_per_unit, old.positive) != (new.volts_per_unit, new.positive)
    }


# --- without counts ------------------------------------------------------------------------------------


def scaled(stored: Measured, then: SetUp, now: SetUpDraft, why: str, why_scaled: str) -> Measured:
    """A measurement with another scale: amplitudes go with old sensitivity over new, times the senses.

    Gap voltages stay, and so do the flags, none of which hangs on a scale but the noise limit."""
    by = scale_factors(then, now)
    build = this_build()
    return replace(
        stored,
        why=why,
        set_up_id=None,
        figures={**_scaled_lines(stored.figures, by), "scaled": {"by": by, "why": why_scaled}},
        setting=_scaled_setting(stored.setting, _scales(then, now)),
        software=build.software,
        numpy=build.numpy,
        processor=build.processor,
        vectors=tuple(_scaled_vector(v, by.get(v.channel, 1.0)) for v in stored.vectors),
        levels=tuple(_scaled_level(v, abs(by.get(v.channel, 1.0))) for v in stored.levels),
        version=0,
        at_us=0,
        who="",
    )


def _scaled_vector(v: Vector, by: float) -> Vector:
    square = by * by
    return replace(
        v,
        value=v.value * by,
        var_re=v.var_re * square,
        var_im=v.var_im * square,
        cov=v.cov * square,
        noise_floor=v.noise_floor * abs(by),
    )


def _scaled_level(v: Level, by: float) -> Level:
    return replace(v, residual_sd=v.residual_sd * by, peak_to_peak=v.peak_to_peak * by, ac_rms=v.ac_rms * by)


def _scaled_lines(figures: Mapping[str, Any], by: Mapping[str, float]) -> dict[str, Any]:
    """The figures with the amplitudes of lines (``daq.signal.shapes.Line``) scaled."""
    lines = [
        {**line, "amplitude": line["amplitude"] * abs(by.get(line["channel"], 1.0))}
        for line in figures.get("lines", ())
    ]
    return {**figures, "lines": lines} if lines else dict(figures)


def _scaled_setting(setting: Mapping[str, Any], scales: Mapping[str, Any]) -> dict[str, Any]:
    """The stored setting with the corrected scales, so that a later revision starts from them."""
    channels = [{**c, **scales.get(c["name"], {})} for c in setting.get("channels", ())]
    return {**setting, "channels": channels} if channels else dict(setting)


def _unrecorded(reading: Reading) -> Measured:
    """A reading that is older than the record of how it was measured, as far as it is known."""
    return Measured(
        why="live",
        set_up_id=None,
        speed_hz=reading.speed_hz,
        revolutions=reading.revolutions,
        duration_s=reading.duration_s,
        flags=reading.flags,
        figures={},
        setting={},
        software="",
        numpy="",
        processor="",
        vectors=reading.vectors,
        levels=(),
    )
