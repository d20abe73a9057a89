"""How a machine stood when it was measured, and what keeps two standings from being one.

A coefficient belongs to a standing: mount (rotation, support, coupling) and measurement set-up. Moving
the once-per-rev sensor is an exact turn; a moved rotor mark changes no coefficient; whatever else differs
forbids reuse and is named (REUSE section (d); METHODS 6.1).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from store.balance.angles import (
    Ends,
    difference_deg,
    same_sense,
    stationary_with_rotation_deg,
)
from store.records import ChannelSetUp, Mount, PulseSetUp, SetUp

ANGLE_SLACK_DEG = 0.1
"""Stand angles closer than this are the same place (typing accuracy; judgement)."""


@dataclass(frozen=True, slots=True)
class Standing:
    """A machine as mounted, and the set-up it is measured with."""

    mount: Mount
    set_up: SetUp

    @property
    def ends(self) -> Ends:
        return self.set_up.ends


def sensor_with_rotation_deg(standing: Standing) -> float:
    """Angle of the once-per-rev sensor with rotation from the stand's zero."""
    return _stationary(standing.set_up.pulse.angle_deg, standing)


def probe_with_rotation_deg(standing: Standing, channel: str) -> float | None:
    """Angle of a probe with rotation from the stand's zero; None when the set-up has no such channel."""
    found = standing.set_up.channel(channel)
    return None if found is None else _stationary(found.angle_deg, standing)


def _stationary(angle_deg: float, standing: Standing) -> float:
    set_up = standing.set_up
    return stationary_with_rotation_deg(
        angle_deg, set_up.angles_seen_from, standing.mount.rotation, set_up.ends
    )


def sensor_turn_deg(then: Standing, now: Standing) -> float:
    """What to add to a lag (or to a coefficient's angle) measured ``then`` to read it ``now``.

    lag = theta + psi + beta_probe - beta_sensor: a sensor moved d with rotation reads -d (METHODS 6.1).
    """
    return difference_deg(sensor_with_rotation_deg(then), sensor_with_rotation_deg(now))


def differences(channel: str, then: Standing, now: Standing) -> tuple[str, ...]:
    """Why readings of a channel in two standings may not be taken together; empty = they may, turned."""
    if set(then.ends) != set(now.ends):
        return (f"the stand's ends had other names then ({', '.join(then.ends)})",)
    old, new = then.set_up.channel(channel), now.set_up.channel(channel)
    if old is None or new is None:
        return (f"there is no channel {channel!r} {'then' if old is None else 'now'}",)
    found = _of_mount(then.mount, now.mount, now.ends) + _of_stand(then.set_up, now.set_up)
    found += _of_pulse(then.set_up.pulse, now.set_up.pulse) + _of_channel(old, new)
    return found + _of_probe_angle(channel, then, now)


def _changed(what: str, then: object, now: object) -> tuple[str, ...]:
    return () if then == now else (f"{what} was {then}, now {now}",)


def _of_mount(then: Mount, now: Mount, ends: Ends) -> tuple[str, ...]:
    turned = () if same_sense(then.rotation, now.rotation, ends) else ("it turned the other way then",)
    return (
        turned
        + _changed("the support", repr(then.support), repr(now.support))
        + _changed("the shaft's coupling", repr(then.coupling), repr(now.coupling))
    )


def _of_stand(then: SetUp, now: SetUp) -> tuple[str, ...]:
    return _changed("the stand", repr(then.stand), repr(now.stand)) + _changed(
        "the stand's zero", repr(then.zero), repr(now.zero)
    )


def _of_pulse(then: PulseSetUp, now: PulseSetUp) -> tuple[str, ...]:
    return (
        _changed("the once-per-rev edge", then.edge, now.edge)
        + _changed("the once-per-rev level", _level(then), _level(now))
        + _changed("the number of pulses a turn", then.pulses, now.pulses)
        + (_changed("the pulse that counts", _told(then), _told(now)) if then.pulses == now.pulses else ())
    )


def _told(pulse: PulseSetUp) -> str:
    """By what the pulse that counts is told from the others."""
    pattern = pulse.pattern or {}
    if "spacing_deg" in pattern:
        return "told by a spacing of " + "/".join(f"{d:g}" for d in pattern["spacing_deg"]) + " deg"
    return "the longest" if pattern else "the only one"


def _level(pulse: PulseSetUp) -> str:
    return "automatic" if pulse.level_v is None else f"{pulse.level_v:g} V"


def _of_channel(then: ChannelSetUp, now: ChannelSetUp) -> tuple[str, ...]:
    scale: tuple[str, ...] = ()
    if not math.isclose(then.volts_per_unit, now.volts_per_unit, rel_tol=1e-6):
        scale = _changed("the sensitivity", _sensitivity(then), _sensitivity(now))
    skew: tuple[str, ...] = ()
    if not math.isclose(then.skew_s, now.skew_s, abs_tol=1e-7):
        skew = _changed("the channel's skew", f"{then.skew_s:g} s", f"{now.skew_s:g} s")
    return (
        _changed("the kind of channel", then.kind, now.kind)
        + _changed("the unit", then.unit, now.unit)
        + scale
        + _changed("the sense of positive", _sense(then), _sense(now))
        + _changed("the input coupling", then.coupling, now.coupling)
        + _changed("the filter", repr(then.filter), repr(now.filter))
        + skew
    )


def _sensitivity(channel: ChannelSetUp) -> str:
    per = f"({channel.unit})" if "/" in channel.unit else channel.unit
    return f"{channel.volts_per_unit * 1e3:.6g} mV/{per}"


def _sense(channel: ChannelSetUp) -> str:
    return "rising" if channel.positive > 0 else "falling"


def _of_probe_angle(channel: str, then: Standing, now: Standing) -> tuple[str, ...]:
    old, new = probe_with_rotation_deg(then, channel), probe_with_rotation_deg(now, channel)
    if old is None or new is None or abs(difference_deg(new, old)) <= ANGLE_SLACK_DEG:
        return ()
    moved = difference_deg(new, old)
    exact = "turning by that is exact only on isotropic supports"
    return (f"the probe was moved by {moved:+.4g} deg with rotation, and {exact}",)
