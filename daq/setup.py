"""From the stand file to what the driver and the store need: one translation each, nothing else."""

from __future__ import annotations

from config.stand import Channel, Stand
from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan, SourceInfo
from daq.signal.shapes import ChannelParams, PulseParams
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
    once = PulsePlan(pulse.name, pulse.input, pulse.edge, pulse.level_v, pulse.angle_deg, pulse.pulses)
    return ChannelPlan(once, probes, stand.identity.angles_seen_from)


def set_up_draft(stand: Stand, rate_hz: float) -> SetUpDraft:
    """The set-up as it is recorded, with the source's true rate."""
    content = stand.set_up_content(rate_hz)
    return SetUpDraft(
        stand=content["stand"],
        ends=(content["ends"][0], content["ends"][1]),
        angles_seen_from=content["angles_seen_from"],
        zero=content["zero"],
        channels=tuple(ChannelSetUp(**c) for c in content["channels"]),
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
    )
    skews = info.skew_s or (0.0,) * len(info.volts_per_count)
    channels = tuple(
        ChannelParams(
            c.name,
            volts,
            info.full_scale_counts,
            c.volts_per_unit,
            c.positive_sign,
            *_gap_limits(c),
            c.skew_s + skew,
        )
        for c, volts, skew in zip(stand.channels, info.volts_per_count[1:], skews[1:], strict=True)
    )
    return pulse, channels
