"""The one function that makes a stored vector: from integer counts, their scale and the set-up, nothing else.

Used live when a reading is taken and again whenever it is recomputed from its stored samples: same counts,
same set-up, same result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal import health
from daq.signal.blocks import usable_orders
from daq.signal.covariance import stated_covariance
from daq.signal.edges import EdgeFinder, trigger_of
from daq.signal.revolutions import Turns, turns_of
from daq.signal.shapes import (
    NOWHERE,
    ChannelLevel,
    ChannelParams,
    Complexes,
    Floats,
    Measurement,
    OrderVector,
    PulseParams,
    Surroundings,
    check_columns,
    noise_floor,
)
from daq.signal.vectors import Accumulator, Fit, turn_pieces

PARTS = 16
"""A window is cut into so many parts, or one a turn, whose vectors give the scatter."""
FEWEST_PARTS = 4
"""With fewer turns than this only the residuals tell the uncertainty."""
EDGE_FRAMES = 1 << 16


@dataclass(frozen=True, slots=True, eq=False)
class _Sums:
    """All that the samples of a window give."""

    turns: Turns
    fit: Fit
    parts: list[Fit]
    scan: health.RangeScan
    peak_to_peak: Floats
    """Shape (probes,), counts."""


def measure(
    counts: NDArray[Any],
    pulse: PulseParams,
    channels: Sequence[ChannelParams],
    rate_hz: float,
    *,
    start: int = 0,
    stop: int | None = None,
    orders: Sequence[int] = (1, 2, 3),
    min_signal_to_noise: float = 3.0,
    surroundings: Surroundings = NOWHERE,  # noqa: ARG001 - what is built on it comes next
    breaks: Sequence[int] = (),
) -> Measurement:
    """Vectors of all probes over the whole turns in ``counts[start:stop]``, with their uncertainty.

    ``counts`` is (frames, 1 + probes) int16 or int32, column 0 the once-per-rev channel. ``breaks`` are
    frames before which samples were lost (a window across a gap). Memory beside ``counts`` does not grow with
    the window but for some bytes a turn. Nothing is raised for a bad signal: see ``flags``."""
    check_columns(counts, channels)
    stop = len(counts) if stop is None else stop
    finder, turns = _turns(counts, pulse, start, stop, breaks)
    lost = [health.SAMPLES_LOST] if any(start < b < stop for b in breaks) else []
    if not turns.good.any():
        return _nothing(turns, [*lost, health.NO_PULSES])
    speed_hz = turns.speed(rate_hz)
    usable = usable_orders(orders, rate_hz / speed_hz)
    sums = _sums(counts, turns, channels, usable) if 1 in usable else None
    if sums is None:
        return _nothing(turns, [*lost, health.FEW_SAMPLES])
    flags = lost + health.pulse_flags(turns.missed, turns.doubles, finder.pulse_length, rate_hz / speed_hz)
    return _measurement(sums, channels, rate_hz, tuple(flags), min_signal_to_noise)


def _turns(
    counts: NDArray[Any], pulse: PulseParams, start: int, stop: int, breaks: Sequence[int]
) -> tuple[EdgeFinder, Turns]:
    column = counts[:, 0]
    trigger = trigger_of(column[start:stop], pulse)
    finder = EdgeFinder(pulse, 1.0, trigger)
    if trigger is None:
        return finder, turns_of(np.empty(0))
    found = [finder.feed(column[i : min(i + EDGE_FRAMES, stop)], i) for i in range(start, stop, EDGE_FRAMES)]
    return finder, turns_of(np.concatenate(found), [b for b in breaks if start < b < stop])


def _nothing(turns: Turns, flags: Sequence[str]) -> Measurement:
    return Measurement(0.0, 0, 0.0, 0, 0, turns.missed, turns.doubles, (), (), tuple(flags))


def _sums(
    counts: NDArray[Any], turns: Turns, channels: Sequence[ChannelParams], orders: tuple[int, ...]
) -> _Sums | None:
    """Sum up the window part by part; None when it has too few samples to solve."""
    scales = health.full_scales(channels)
    whole, scan = Accumulator(orders), health.RangeScan(scales)
    parts, spans = [], []
    for part in _parts(turns):
        sums, seen = Accumulator(orders), health.RangeScan(scales)
        for fractions, a, b in turn_pieces(part):
            sums.add(fractions, counts[a:b])
            seen.add(counts[a:b])
        parts.append(sums.solve())
        spans.append((seen.high - seen.low)[1:])
        whole.combine(sums)
        scan.combine(seen)
    fit = whole.solve()
    if fit is None:
        return None
    solved = [p.without_first() for p in parts if p is not None]
    return _Sums(turns, fit.without_first(), solved, scan, np.asarray(np.median(spans, axis=0), np.float64))


def _parts(turns: Turns) -> list[Turns]:
    """The good turns cut into about equal parts."""
    good = np.flatnonzero(turns.good)
    groups = np.array_split(good, min(PARTS, len(good)))
    return [turns.part(int(g[0]), int(g[-1]) + 1) for g in groups]


def _measurement(
    sums: _Sums,
    channels: Sequence[ChannelParams],
    rate_hz: float,
    flags: tuple[str, ...],
    min_signal_to_noise: float,
) -> Measurement:
    turns, fit = sums.turns, sums.fit
    speed_hz = turns.speed(rate_hz)
    good = np.flatnonzero(turns.good)
    first, last = float(turns.edges[good[0]]), float(turns.edges[good[-1] + 1])
    size = np.array([abs(c.units_per_count) for c in channels])
    gap_v = fit.offset * np.array([c.volts_per_count for c in channels])
    probe = health.probe_flags(
        channels,
        sums.scan,
        gap_v,
        np.abs(fit.value(1)) * size,
        fit.residual_sd * size,
        min_signal_to_noise,
    )
    return Measurement(
        speed_hz=speed_hz,
        revolutions=len(good),
        duration_s=(last - first) / rate_hz,
        first_sample=int(np.ceil(first)),
        stop_sample=int(np.ceil(last)),
        missed=turns.missed,
        doubles=turns.doubles,
        vectors=_vectors(sums, channels, speed_hz),
        levels=_levels(sums, channels, gap_v),
        flags=(*flags, *probe),
    )


def _levels(sums: _Sums, channels: Sequence[ChannelParams], gap_v: Floats) -> tuple[ChannelLevel, ...]:
    return tuple(
        ChannelLevel(
            channel=c.name,
            gap_v=float(gap_v[i]),
            residual_sd=float(sums.fit.residual_sd[i] * abs(c.units_per_count)),
            peak_to_peak=float(sums.peak_to_peak[i] * abs(c.units_per_count)),
            ac_rms=float(sums.fit.ac_rms[i] * abs(c.units_per_count)),
        )
        for i, c in enumerate(channels)
    )


def _vectors(sums: _Sums, channels: Sequence[ChannelParams], speed_hz: float) -> tuple[OrderVector, ...]:
    """Vectors probe by probe, orders ascending, scaled and turned back by each probe's sampling delay."""
    fit = sums.fit
    parts: Complexes = (
        np.stack([p.values for p in sums.parts]) if sums.parts else np.zeros((0, *fit.values.shape))
    )
    cov = stated_covariance(fit.cov, parts if len(parts) >= FEWEST_PARTS else parts[:0])
    return tuple(
        _vector(c, order, complex(fit.values[k, i]), cov[k, i], 2 * np.pi * order * speed_hz * c.skew_s)
        for i, c in enumerate(channels)
        for k, order in enumerate(fit.orders)
    )


def _vector(channel: ChannelParams, order: int, value: complex, cov: Floats, turn_rad: float) -> OrderVector:
    """One vector in base units. A sample taken late sees a later angle, so its lag reads low: turn it up."""
    scale = channel.units_per_count
    cos, sin = np.cos(turn_rad), np.sin(turn_rad)
    turn = np.array([[cos, -sin], [sin, cos]])
    spread = turn @ cov @ turn.T * scale**2
    return OrderVector(
        channel=channel.name,
        order=order,
        value=complex(value * scale * complex(cos, sin)),
        var_re=float(spread[0, 0]),
        var_im=float(spread[1, 1]),
        cov=float(spread[0, 1]),
        noise_floor=noise_floor(spread),
    )
