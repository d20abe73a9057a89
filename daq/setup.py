"""From the stand file to what the driver and the store need: one translation each, nothing else."""

from __future__ import annotations

from config.stand import Stand
from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan
from store.records import ChannelSetUp, PulseSetUp, SetUpDraft


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
            *(c.gap_limits_v or (None, None)),
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
