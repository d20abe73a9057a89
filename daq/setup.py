"""From the stand file to what the driver and the store need: one translation each, nothing else."""

from __future__ import annotations

from collections.abc import Sequence

from config.stand import Channel, Stand
from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan, SourceInfo
from daq.signal.shapes import ChannelParams, PulseParams, Surroundings
from store.records import ChannelSetUp, PulseSetUp, SetUpDraft


def _gap_limits(channel: Channel) -> tuple[float | None, float | None]:
    return channel.gap_limits_v or (None, None)


def channel_plan(stand: Stand) -> ChannelPlan:
    """What a driver is told of the channels."""
    pulse = stand.pulse
    probes = tuple(
        ProbePlan(
            c.name,
            c.input,
            c.kind,
            c.volts_per_unit,
            c.positive_sign,
            c.angle_deg,
            *_gap_limits(c),
            c.coupling,
        )
        for c in stand.channels
    )
    once = PulsePlan(
        pulse.name,
        pulse.input,
        pulse.edge,
        pulse.level_v,
        pulse.angle_deg,
        pulse.pulses,
        pulse.marked,
        pulse.spacing_deg or (),
    )
    return ChannelPlan(once, probes, stand.identity.angles_seen_from)


def set_up_draft(stand: Stand, rate_hz: float, skew_s: Sequence[float] = ()) -> SetUpDraft:
    """The set-up as it is recorded, with the source's true rate and its skew (``SourceInfo.skew_s``)."""
    content = stand.set_up_content(rate_hz)
    skews = _skews(stand, skew_s)
    return SetUpDraft(
        stand=content["stand"],
        ends=(content["ends"][0], content["ends"][1]),
        angles_seen_from=content["angles_seen_from"],
        zero=content["zero"],
        channels=tuple(
            ChannelSetUp(**{**c, "skew_s": s}) for c, s in zip(content["channels"], skews, strict=True)
        ),
        pulse=PulseSetUp(**content["pulse"]),
        rate_hz=content["rate_hz"],
        driver=content["driver"],
    )


def signal_params(stand: Stand, info: SourceInfo) -> tuple[PulseParams, tuple[ChannelParams, ...]]:
    """What the signal arithmetic is told: the stand file's channels with the source's scales."""
    pulse = PulseParams(
        info.volts_per_count[0],
        info.full_scale_counts,
        stand.pulse.edge,
        stand.pulse.level_v,
        stand.pulse.hysteresis_v,
        name=stand.pulse.name,
        pulses=stand.pulse.pulses,
        marked=stand.pulse.marked,
        spacing_deg=stand.pulse.spacing_deg or (),
    )
    channels = tuple(
        ChannelParams(
            c.name,
            volts,
            info.full_scale_counts,
            c.volts_per_unit,
            c.positive_sign,
            *_gap_limits(c),
            skew,
            c.noise_limit_pk,
        )
        for c, volts, skew in zip(
            stand.channels, info.volts_per_count[1:], _skews(stand, info.skew_s), strict=True
        )
    )
    return pulse, channels


def surroundings(stand: Stand) -> Surroundings:
    """What else vibrates nearby, as the stand file says."""
    return Surroundings(stand.surroundings.mains_hz, stand.surroundings.neighbours_hz)


def _skews(stand: Stand, skew_s: Sequence[float]) -> tuple[float, ...]:
    """By probe: the stand file's skew (filters, say) and the source's own (an input after the other)."""
    own = tuple(skew_s)[1:] or (0.0,) * len(stand.channels)
    return tuple(c.skew_s + s for c, s in zip(stand.channels, own, strict=True))
