"""What a run's traces show against speed: 1X of each channel, up and down apart, and its critical speeds.

Pure: records in, frozen answers out. Nothing is averaged over traces.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from config.errors import Refusal
from store.asjson import polar, utc
from store.balance.critical import Complexes, Critical, Floats, NotCritical, critical_speeds
from store.balance.slowroll import less
from store.casework_slow_roll import Runout
from store.records import Direction, Machine, Run, SetUp, Trace

CIRCLE_95 = 2.447746830681
"""Radius of the circle that holds 95 % of a circular normal, in its sd per component (METHODS 10.4)."""
SHIFTS = (
    "a critical passed at acceleration reads shifted the way the speed goes, and lower: up and down are "
    "listed apart and never averaged"
)


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """One channel over one trace; arrays have shape (steps,), in the order in which they were measured."""

    trace: int
    direction: Direction
    started_us: int
    duration_s: float
    t_s: Floats
    speed_hz: Floats
    values: Complexes
    """0-peak in the channel's base unit, slow roll taken off where asked."""
    se: Floats
    """Per component."""
    criticals: tuple[Critical, ...]
    refused: tuple[NotCritical, ...]

    @property
    def known(self) -> Any:
        """Shape (steps,), where the amplitude is above its noise floor, so that a lag means something."""
        return np.abs(self.values) > CIRCLE_95 * self.se

    def sweep(self, at: Critical) -> float:
        """How fast the speed went at a peak, Hz/s, falling negative."""
        k = int(np.argmin(np.abs(self.speed_hz - at.speed_hz)))
        a, b = max(0, k - 2), min(len(self.t_s) - 1, k + 2)
        return float((self.speed_hz[b] - self.speed_hz[a]) / (self.t_s[b] - self.t_s[a]))


@dataclass(frozen=True, slots=True, eq=False)
class BodeChannel:
    channel: str
    unit: str
    probe_deg: float
    curves: tuple[Curve, ...]
    less_slow_roll: bool


@dataclass(frozen=True, slots=True, eq=False)
class BodePicture:
    run: str
    started_us: int
    origin: str
    machine: Machine | None
    """None for a run of no job."""
    edge: str
    channels: tuple[BodeChannel, ...]
    runout: Runout | None
    """What was taken off; None = vectors as measured."""

    @property
    def top_hz(self) -> float:
        return max(float(c.speed_hz.max()) for channel in self.channels for c in channel.curves)


def bode_picture(
    run: Run,
    traces: Sequence[Trace],
    set_up: SetUp,
    machine: Machine | None,
    *,
    runout: Runout | None = None,
    channels: tuple[str, ...] = (),
    trace: int | None = None,
) -> BodePicture:
    """``channels`` empty = all; ``trace`` None = all. Raises Refusal: no traces, no such trace or channel."""
    chosen = _chosen(run, traces, trace)
    names = tuple(dict.fromkeys(c for t in chosen for c in t.channels))
    for name in channels:
        if name not in names:
            raise Refusal(
                f"Run {run.name} has no trace of a channel {name!r}.", f"Its channels: {', '.join(names)}."
            )
    shown = tuple(_channel(n, chosen, set_up, runout) for n in names if not channels or n in channels)
    return BodePicture(
        run=run.name,
        started_us=run.started_us,
        origin=run.origin.value,
        machine=machine,
        edge=set_up.pulse.edge,
        channels=shown,
        runout=runout,
    )


def _chosen(run: Run, traces: Sequence[Trace], number: int | None) -> list[Trace]:
    if not traces:
        raise Refusal(
            f"Run {run.name} has no run-up or coast-down on record.",
            "One is traced while the speed goes one way by some per cent, from the minimum speed up.",
        )
    chosen = [t for t in traces if number in (None, t.number)]
    if not chosen:
        told = ", ".join(f"{t.number} {t.direction}" for t in traces)
        raise Refusal(f"Run {run.name} has no trace {number}.", f"It has {told}.")
    return chosen


def _channel(name: str, traces: Sequence[Trace], set_up: SetUp, runout: Runout | None) -> BodeChannel:
    of = [t for t in traces if name in t.channels]
    probe = set_up.channel(name)
    slow = runout.slow.get(name) if runout is not None else None
    return BodeChannel(
        channel=name,
        unit=of[0].units[of[0].channels.index(name)],
        probe_deg=probe.angle_deg if probe else 0.0,
        curves=tuple(curve(t, name, runout) for t in of),
        less_slow_roll=slow is not None,
    )


def curve(trace: Trace, channel: str, runout: Runout | None = None) -> Curve:
    """One channel of a trace, with its critical speeds; ``runout`` is taken off where it has the channel."""
    at = trace.channels.index(channel)
    slow = runout.slow.get(channel) if runout is not None else None
    off = None if slow is None else slow.vector.value
    own_se = 0.0 if slow is None else math.sqrt((slow.vector.var_re + slow.vector.var_im) / 2)
    speed = np.array([p.speed_hz for p in trace.points])
    values = np.array([less(p.vectors[at], off) for p in trace.points], np.complex128)
    se = np.hypot(np.array([p.se[at] for p in trace.points]), own_se)
    criticals, refused = critical_speeds(speed, values, se)
    return Curve(
        trace=trace.number,
        direction=trace.direction,
        started_us=trace.started_us,
        duration_s=trace.duration_s,
        t_s=np.array([p.t_s for p in trace.points]),
        speed_hz=speed,
        values=values,
        se=se,
        criticals=criticals,
        refused=refused,
    )


# --- as JSON -------------------------------------------------------------------------------------------


def trace_json(trace: Trace, runout: Runout | None = None) -> dict[str, Any]:
    """A trace in short: its range and what critical speeds each channel shows."""
    curves = {c: curve(trace, c, runout) for c in trace.channels}
    units = dict(zip(trace.channels, trace.units, strict=True))
    return {
        "number": trace.number,
        "direction": trace.direction,
        "from_rpm": trace.points[0].speed_hz * 60,
        "to_rpm": trace.points[-1].speed_hz * 60,
        "steps": len(trace.points),
        "at_utc": utc(trace.started_us),
        "duration_s": trace.duration_s,
        "critical_speeds": [_critical(c, units[c], k, x) for c, k in curves.items() for x in k.criticals],
        "not_critical": [_refused(c, units[c], x) for c, k in curves.items() for x in k.refused],
    }


def _critical(channel: str, unit: str, of: Curve, at: Critical) -> dict[str, Any]:
    return {
        "channel": channel,
        "unit": unit,
        "speed_rpm": at.speed_hz * 60,
        "within_rpm": at.within_hz * 60,
        "amplitude_pk": at.amplitude,
        "lag_deg": at.lag_deg,
        "amplification": at.amplification,
        "half_power_rpm": [at.low_hz * 60, at.high_hz * 60],
        "sweep_rpm_per_s": of.sweep(at) * 60,
    }


def _refused(channel: str, unit: str, at: NotCritical) -> dict[str, Any]:
    return {
        "channel": channel,
        "unit": unit,
        "speed_rpm": at.speed_hz * 60,
        "amplitude_pk": at.amplitude,
        "why": at.why,
    }


def picture_json(picture: BodePicture) -> dict[str, Any]:
    """Every step of every curve that is drawn."""
    return {
        "run": picture.run,
        "machine": picture.machine.serial if picture.machine else None,
        "slow_roll": picture.runout.to_dict(picture.top_hz) if picture.runout else None,
        "channels": [
            {
                "channel": c.channel,
                "unit": c.unit,
                "less_slow_roll": c.less_slow_roll,
                "traces": [_curve_json(c, k) for k in c.curves],
            }
            for c in picture.channels
        ],
    }


def _curve_json(channel: BodeChannel, of: Curve) -> dict[str, Any]:
    amplitudes = [polar(v) for v in of.values.tolist()]
    return {
        "number": of.trace,
        "direction": of.direction,
        "at_utc": utc(of.started_us),
        "speed_rpm": (of.speed_hz * 60).tolist(),
        "amplitude_pk": [a for a, _ in amplitudes],
        "lag_deg": [lag if k else None for (_, lag), k in zip(amplitudes, of.known, strict=True)],
        "se_pk": of.se.tolist(),
        "critical_speeds": [_critical(channel.channel, channel.unit, of, x) for x in of.criticals],
        "not_critical": [_refused(channel.channel, channel.unit, x) for x in of.refused],
    }
