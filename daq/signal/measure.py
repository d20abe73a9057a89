"""The one function that makes a stored vector: from integer counts, their scale and the set-up, nothing else.

Used live when a reading is taken and again whenever it is recomputed from its stored samples: same counts,
same set-up, same result.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal import covariance, health, lines
from daq.signal.blocks import speed_spread_hz, usable_orders
from daq.signal.edges import EdgeFinder, edges_in, unresolved_deg
from daq.signal.folding import Fold, Rows
from daq.signal.revolutions import Turns, turns_of
from daq.signal.shapes import (
    NOWHERE,
    ChannelLevel,
    ChannelParams,
    Complexes,
    Floats,
    Line,
    Measurement,
    OrderVector,
    PulseParams,
    Surroundings,
    check_columns,
    noise_floor,
)
from daq.signal.vectors import Accumulator, Fit, stretch_pieces


@dataclass(frozen=True, slots=True, eq=False)
class _Sums:
    """All that the samples of a window give; fits without the once-per-rev column."""

    turns: Turns
    cuts: list[tuple[int, int]]
    """First and stop turn of each part that could be solved."""
    fit: Fit
    parts: list[Fit]
    fold: Fold
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
    surroundings: Surroundings = NOWHERE,
    breaks: Sequence[int] = (),
) -> Measurement:
    """Vectors of all probes over the whole turns in ``counts[start:stop]``, with their uncertainty.

    ``counts`` is (frames, 1 + probes) int16 or int32, column 0 the once-per-rev channel. ``breaks`` are
    frames before which samples were lost (a window across a gap). Memory beside ``counts`` does not grow with
    the window but for some bytes a turn. Nothing is raised for a bad signal: see ``flags``."""
    check_columns(counts, channels)
    stop = len(counts) if stop is None else stop
    finder, turns = _turns(counts, pulse, rate_hz, start, stop, breaks)
    lost = [health.SAMPLES_LOST] if any(start < b < stop for b in breaks) else []
    if not turns.good.any():
        return _nothing(turns, [*lost, health.MARK_UNTOLD if finder.untold else health.NO_PULSES])
    speed_hz = turns.speed(rate_hz)
    usable = usable_orders(orders, rate_hz / speed_hz)
    sums = _sums(counts, turns, channels, usable) if 1 in usable else None
    if sums is None:
        return _nothing(turns, [*lost, health.FEW_SAMPLES])
    flags = (
        lost
        + health.pulse_flags(turns.missed, turns.doubles, finder.pulse_length, rate_hz / speed_hz)
        + health.mark_flags(finder.margin, finder.pulse_share, finder.untold)
        + health.saturated_flags(channels, counts[_beginning(turns), 1:])
        + health.lost_flags(counts[_end(turns) : stop, 1:], rate_hz / speed_hz, *_swing(sums.fit))
    )
    rows, parts = sums.fold.rows(), len(sums.parts)
    place = lines.Place(speed_hz, int(turns.good.sum()), surroundings)
    found = lines.search(rows, sums.fit, place, parts, complete=sums.fold.complete)
    if found.modelled and rows is not None:
        sums = _without_lines(sums, rows, found)
    edge_deg = unresolved_deg(finder.edge_samples, rate_hz / speed_hz)
    made = _measurement(sums, found, channels, rate_hz, edge_deg, min_signal_to_noise)
    flags += health.speed_flags(made.speed_sd_hz, speed_hz)
    more = health.floor_flags(made.vectors)
    return replace(made, flags=(*flags, *made.flags, *more), pulse_share=finder.pulse_share)


def _end(turns: Turns) -> int:
    """First sample after the last pulse."""
    return int(turns.first_samples[-1])


def _beginning(turns: Turns) -> slice:
    """The first turns of the window."""
    first = turns.first_samples
    return slice(int(first[0]), int(first[min(health.REST_TURNS, len(first) - 1)]))


def _swing(fit: Fit) -> tuple[Floats, Floats]:
    """Rms about the mean and residual of each probe while turning, counts."""
    return fit.ac_rms, fit.residual_sd


def _turns(
    counts: NDArray[Any], pulse: PulseParams, rate_hz: float, start: int, stop: int, breaks: Sequence[int]
) -> tuple[EdgeFinder, Turns]:
    finder, edges = edges_in(counts[:, 0], pulse, rate_hz, start, stop)
    return finder, turns_of(edges, [b for b in breaks if start < b < stop])


def _nothing(turns: Turns, flags: Sequence[str]) -> Measurement:
    return Measurement(0.0, 0, 0.0, 0, 0, turns.missed, turns.doubles, (), (), tuple(flags))


def _sums(
    counts: NDArray[Any], turns: Turns, channels: Sequence[ChannelParams], orders: tuple[int, ...]
) -> _Sums | None:
    """Sum up the window part by part; None when it has too few samples to solve."""
    scales = health.full_scales(channels)
    whole, scan, fold = Accumulator(orders), health.RangeScan(scales), Fold(turns, counts.shape[1])
    cuts, parts, spans = [], [], []
    for first, stop in _cuts(turns):
        sums, seen = Accumulator(orders), health.RangeScan(scales)
        for stretch, a, b in stretch_pieces(turns.part(first, stop)):
            sums.add_turns(stretch, a, [counts[a:b]])
            seen.add(counts[a:b])
            fold.add(counts[a:b], a)
        solved = sums.solve()
        if solved is not None:
            cuts.append((first, stop))
            parts.append(solved.without_first())
        spans.append((seen.high - seen.low)[1:])
        whole.combine(sums)
        scan.combine(seen)
    fit = whole.solve()
    if fit is None:
        return None
    span = np.asarray(np.median(spans, axis=0), np.float64)
    return _Sums(turns, cuts, fit.without_first(), parts, fold, scan, span)


def _cuts(turns: Turns) -> list[tuple[int, int]]:
    """The good turns cut into about equal parts: first and stop turn of each."""
    good = np.flatnonzero(turns.good)
    groups = np.array_split(good, covariance.parts_of(len(good)))
    return [(int(g[0]), int(g[-1]) + 1) for g in groups]


def _without_lines(sums: _Sums, rows: Rows, found: lines.Found) -> _Sums:
    """The same with what the lines add to offset and orders taken out, of the whole and of each part."""
    if not len(found.orders):
        return sums
    orders = sums.fit.orders
    parts = [
        _turned(fit, lines.leak(rows, orders, found, first, stop) @ found.weights)
        for (first, stop), fit in zip(sums.cuts, sums.parts, strict=True)
    ]
    extra = lines.leak(rows, orders, found, 0, len(sums.turns.good)) @ found.weights
    whole = _turned(sums.fit, extra)
    before, free = whole.residual_sd**2, whole.samples - 1 - 2 * len(orders)
    left = before * free - found.power * whole.samples
    after = np.maximum(left / (free - 3 * len(found.orders)), 0.0)
    share = np.divide(after, before, out=np.ones_like(before), where=before > 0)
    less = replace(whole, residual_sd=np.sqrt(after), cov=whole.cov * share[None, :, None, None])
    return replace(sums, fit=less, parts=parts)


def _turned(fit: Fit, extra: Floats) -> Fit:
    """``fit`` less ``extra`` (1 + 2 orders, probes) in offset and orders."""
    return replace(fit, values=fit.values - (extra[1::2] + 1j * extra[2::2]), offset=fit.offset - extra[0])


def _measurement(
    sums: _Sums,
    found: lines.Found,
    channels: Sequence[ChannelParams],
    rate_hz: float,
    edge_deg: float,
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
        vectors=_vectors(sums, found, channels, rate_hz, edge_deg),
        levels=_levels(sums, channels, gap_v),
        flags=(*probe, *_line_flags(found, np.abs(fit.value(1)), channels)),
        edge_deg=edge_deg,
        speed_sd_hz=speed_spread_hz(turns.periods[turns.good], rate_hz),
        lines=_lines(found, size, channels),
    )


def _lines(found: lines.Found, size: Floats, channels: Sequence[ChannelParams]) -> tuple[Line, ...]:
    return tuple(
        Line(c.name, float(order), float(amplitude[i] * size[i]))
        for order, amplitude in zip(found.orders, found.amplitudes, strict=True)
        for i, c in enumerate(channels)
        if amplitude[i] > 0
    )


def _line_flags(found: lines.Found, first: Floats, channels: Sequence[ChannelParams]) -> list[str]:
    """Flags of what is no order; ``first`` (probes,) is the amplitude of 1X, counts."""
    below = found.amplitudes[found.orders < 1]
    flags = []
    for i, c in enumerate(channels):
        strong = len(below) and below[:, i].max() > lines.STRONG_SHARE * first[i]
        tests = (
            (health.SUBSYNC, strong),
            (health.MAINS, found.mains),
            (health.NEIGHBOUR, i in found.neighbours),
        )
        flags += [health.flag(code, c.name) for code, bad in tests if bad]
    return flags


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


def _vectors(
    sums: _Sums, found: lines.Found, channels: Sequence[ChannelParams], rate_hz: float, edge_deg: float
) -> tuple[OrderVector, ...]:
    """Vectors probe by probe, orders ascending, scaled and turned back by each probe's sampling delay."""
    fit, speed_hz = sums.fit, sums.turns.speed(rate_hz)
    jitter = covariance.edge_jitter(sums.turns)
    orders = np.array(fit.orders, np.float64)[:, None]
    gain = covariance.amplitude_gain(orders, jitter)
    values = fit.values * gain
    cov = _scattered(sums, values, jitter * orders)
    cov += covariance.radial(values, np.abs(values) * (gain - 1) / 2)
    cov += covariance.tangent(values, np.radians(edge_deg) * orders)
    cov += covariance.radial(
        values, np.abs(values) * (np.radians(edge_deg) * orders) ** 2 / 2
    )  # along the arc
    cov += covariance.step_covariance(
        values, fit.orders.index(1), np.sqrt(2) * fit.ac_rms, fit.residual_sd, rate_hz / speed_hz
    )
    cov += found.hidden[..., None, None] ** 2 / 2 * np.eye(2)
    return tuple(
        _vector(c, order, complex(values[k, i]), cov[k, i], 2 * np.pi * order * speed_hz * c.skew_s)
        for i, c in enumerate(channels)
        for k, order in enumerate(fit.orders)
    )


def _scattered(sums: _Sums, values: Complexes, jitter: Floats) -> Floats:
    """Covariance (orders, probes, 2, 2) of ``values`` in counts from all that varies within the window;
    ``jitter`` (orders, 1) of an edge in rad of each order."""
    parts = np.stack([p.values for p in sums.parts]) if sums.parts else np.zeros((0, *values.shape), complex)
    a_turn = covariance.tangent(values, jitter)
    return covariance.stated_covariance(sums.fit.cov, parts, a_turn, int(sums.turns.good.sum()))


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
