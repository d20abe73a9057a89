"""Is the machine steady? Judged on the newest blocks; the answer says what is still out and by how much.

Limits and their sources: ``config.steadiness``. All amplitudes are 0-peak in the probe's base unit. What is
judged against its own uncertainty, and what noise may still hide: DEVELOPERS.md, decisions.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from config.steadiness import SteadinessLimits
from daq.signal.averaging import colour, widening
from daq.signal.revolutions import REPAIR_LIMIT_PCT
from daq.signal.shapes import BlockFit, Complexes, Floats
from daq.signal.slow import Swing, swing, told_over_block_se, trend

FEWEST_PULSE_SAMPLES = 3.0
"""A once-per-rev pulse lasts so many samples at least."""
CHANGE_SE = 3.0
"""A change within so many of its own standard errors is none."""
PLANE_SE = 4.0
"""The same for the drift of a vector, which has two components and is asked often: chance 0.03 %."""
SWING_SE = 7.0
"""The same for the largest of all distances between two of some blocks, in standard errors of one: noise
alone goes beyond in one of 10,000 windows of 8 blocks (Monte Carlo in tests/signal/test_steadiness.py)."""
BEAT_SE2 = 22.0
"""A fitted swing that takes away less than so many variances of noise is none (chi square of 4: 0.05 %)."""
TOLD_SD = 5.2
"""Noise hides no swing of so many of its standard errors: chi square of 4 with so many squared besides is
beyond BEAT_SE2 in 97 % of windows."""
MARGIN_SE = 2.0
"""A slow change counts from so many of its standard errors below the limit: chance shall not pass it."""
DRIFT_TOLD_SE = 4.2
"""A drift's standard error must be this part of the limit, so that its own uncertainty excuses none."""
HUNTING_SE = 4.0
"""The same for the amplitude of a sine through the blocks' speeds."""
SLOWEST = 2.0
"""The slowest swing looked for, in shortest windows."""

UNITS: Mapping[str, str] = {"displacement": "um", "velocity": "mm/s", "acceleration": "m/s2"}

SENTENCES: Mapping[str, str] = {
    "window": "the averaging window holds {value} s of {limit} s",
    "revolutions": "the averaging window holds {value} of {limit} turns",
    "blocks": "the averaging window holds {value} of {limit} blocks",
    "hold": "the speed has been held for {value} s of {limit} s",
    "lookback": "vectors can be looked back at over {value} s of {limit} s",
    "speed_sd": "the speed varies by {value} % (standard deviation), limit {limit} %",
    "speed_drift": "the speed drifts {value} %/min, limit {limit} %/min",
    "hunting": "the speed hunts by {value} % (standard deviation), limit {limit} %",
    "missed_pulses": "{value} % of the once-per-rev pulses are missed, limit {limit} %",
    "double_pulses": "{value} % of the once-per-rev pulses are double, limit {limit} %",
    "edge": "the once-per-rev edge is placed to {value} deg only, phase target {limit} deg: sample faster or "
    "relax phase_target",
    "pulse": "the once-per-rev pulse lasts {value} samples of {limit}: sample faster or widen the mark",
    "change": "{channel} still drifts: {value} {unit} 0-pk of {limit} {unit} allowed",
    "swing": "{channel} still swings: {value} {unit} 0-pk of {limit} {unit} allowed",
    "scatter": "{channel} scatters: {value} {unit} 0-pk of {limit} {unit} allowed",
    "drift": "{channel} drifts: {value} {unit} 0-pk a window of {limit} {unit} allowed",
    "beat": "{channel} beats: travels {value} {unit} 0-pk of {limit} {unit} allowed",
    "told": "{channel}: noise may hide a slow change of {value} {unit} of {limit}{more}",
    "averaged": "{channel}: averaged to {value} {unit} of {limit} {unit}{more}",
    "phase": "{channel}: phase averaged to {value} of {limit} deg{more}",
}
"""What each figure says when it is out."""
RELAX: Mapping[str, str] = {"told": "change", "averaged": "amplitude_target", "phase": "phase_target"}
"""Setting of the stand file to relax when the longest window does not do."""
WAITS = frozenset({"window", "revolutions", "blocks", "hold", "lookback", *RELAX})
"""Figures that time alone may put right."""
AT_LEAST = frozenset({"window", "revolutions", "blocks", "hold", "lookback", "pulse"})
"""Figures that must reach their limit; the others must stay within it."""


def _plain(value: float) -> str:
    """Three digits for people, never with an exponent above one."""
    return f"{value:.3g}" if abs(value) < 1000 else f"{value:.0f}"


@dataclass(frozen=True, slots=True)
class Figure:
    """One number of the judgement beside its limit."""

    name: str
    channel: str | None
    value: float
    limit: float
    unit: str
    ok: bool
    more_s: float | None = None
    """For what averaging puts right: about how much longer it takes."""
    longest_s: float | None = None
    """Set when the longest window, of this length, does not do."""

    def as_dict(self) -> dict[str, Any]:
        """For the record, without what does not apply."""
        return {k: v for k, v in asdict(self).items() if v is not None or k == "channel"}

    @property
    def waits(self) -> bool:
        """Time alone may put it right."""
        return self.name in WAITS

    @property
    def rank(self) -> int:
        """Which is said first: speed and pulses, vectors, what must be reached, averaging."""
        if self.waits:
            return 3 if self.name in RELAX else 2
        return 0 if self.channel is None else 1

    @property
    def excess(self) -> float:
        """How far out it is: above 1 = out. For figures that must be reached, limit over value."""
        over, under = (self.limit, self.value) if self.name in AT_LEAST else (self.value, self.limit)
        if under > 0:
            return over / under
        return float("inf") if over > 0 else 0.0

    @property
    def sentence(self) -> str:
        return SENTENCES[self.name].format(
            value=_plain(self.value),
            limit=_plain(self.limit),
            unit=self.unit,
            channel=self.channel,
            more=self._more,
        )

    @property
    def _more(self) -> str:
        if self.ok or self.more_s is None:
            return ""
        if self.longest_s is not None:
            return f" in {_plain(self.longest_s)} s, the longest window; relax {RELAX[self.name]}"
        return f"; about {max(1.0, self.more_s):.0f} s more"


@dataclass(frozen=True, slots=True)
class Verdict:
    """Steady or not, with every figure looked at."""

    steady: bool
    figures: tuple[Figure, ...]
    segment: int | None = None
    first_sample: int = 0
    """Source sample index where the window begins; it ends before ``stop_sample``."""
    stop_sample: int = 0
    notes: tuple[str, ...] = ()
    """What a person should know of it that refuses nothing: a sentence each."""

    @property
    def worst(self) -> Figure | None:
        """The figure furthest out: of the speed (its drift before its scatter, which is large with it), else
        of the vectors, else what waits, and averaging last; None when none is."""
        out = (f for f in self.figures if not f.ok)
        return max(out, key=lambda f: (-f.rank, f.name == "speed_drift", f.excess), default=None)

    @property
    def settled(self) -> bool:
        """Steady, but for the times it must have been so."""
        return all(f.ok or f.name in ("hold", "lookback") for f in self.figures)

    @property
    def waits(self) -> bool:
        """Not steady, and nothing but time is missing."""
        return not self.steady and all(f.ok or f.waits for f in self.figures)

    @property
    def sentence(self) -> str:
        """``steady``, or what is still out and by how much."""
        return "steady" if self.worst is None else self.worst.sentence

    def as_dict(self) -> dict[str, Any]:
        """For the record: ``steady``, the figures and the notes."""
        figures = [
            {k: v for k, v in asdict(f).items() if v is not None or k == "channel"} for f in self.figures
        ]
        return {"steady": self.steady, "figures": figures, "notes": list(self.notes)}


@dataclass(frozen=True, slots=True)
class Probe:
    """A probe as steadiness sees it."""

    name: str
    kind: str
    """displacement, velocity or acceleration."""


def block_seconds(limits: SteadinessLimits) -> float:
    """How long the blocks of a :class:`daq.signal.blocks.BlockFitter` should be for these limits."""
    return limits.window_s / limits.blocks


def judge(
    fits: Sequence[BlockFit],
    limits: SteadinessLimits,
    probes: Sequence[Probe],
    *,
    window: Sequence[BlockFit] | None = None,
) -> Verdict:
    """Judge ``window``, the newest of ``fits`` (in order of time, as many as there are; :func:`needed` says
    which may be dropped); left out = the shortest window that the limits allow."""
    history = unbroken(fits)
    if window is None:
        window = shortest(history, limits)
    figures = list(_filled(window, limits))
    if len(window) >= 3:
        blocks = _Blocks(window)
        figures += _speed(window, blocks, limits)
        figures += _hold(history, window, limits)
        figures += _vectors(history, blocks, limits, probes)
        if len(window) >= limits.blocks and all(f.ok or f.waits for f in figures):  # else nobody asks
            figures += _slow(blocks, limits, probes)
        figures += _averaged(blocks, limits, probes)
    steady = all(f.ok for f in figures)
    if not window:
        return Verdict(steady, tuple(figures))
    return Verdict(steady, tuple(figures), window[-1].segment, window[0].first_sample, window[-1].stop_sample)


def needed(fits: Sequence[BlockFit], limits: SteadinessLimits) -> int:
    """How many of the oldest fits will not be asked for again, beside those of the window."""
    if not fits:
        return 0
    broken = len(fits) - len(unbroken(fits))
    window = shortest(fits, limits)
    reach = max(limits.hold_s, limits.lookback_s + 2 * (window[-1].t_end_s - window[0].t_start_s))
    oldest = fits[-1].t_end_s - max(reach, limits.lookback_s + 2 * limits.window_s)
    return max(broken, sum(f.t_end_s < oldest for f in fits))


# --- the window ------------------------------------------------------------------------------------------


def unbroken(fits: Sequence[BlockFit]) -> Sequence[BlockFit]:
    """The newest fits that follow each other without a gap in the samples."""
    start = len(fits) - 1
    while start > 0 and (
        fits[start - 1].segment == fits[start].segment
        and fits[start - 1].stop_sample == fits[start].first_sample
    ):
        start -= 1
    return fits[max(0, start) :]


def shortest(history: Sequence[BlockFit], limits: SteadinessLimits) -> Sequence[BlockFit]:
    """The fewest newest fits that fill a window; all of them when they do not."""
    turns = 0
    for n in range(1, len(history) + 1):
        turns += history[-n].revolutions
        long = history[-1].t_end_s - history[-n].t_start_s >= limits.window_s
        if n >= limits.blocks and turns >= limits.min_revolutions and long:
            return history[-n:]
    return history


def _filled(window: Sequence[BlockFit], limits: SteadinessLimits) -> Iterator[Figure]:
    length_s = window[-1].t_end_s - window[0].t_start_s if window else 0.0
    yield _at_least("window", length_s, limits.window_s, "s")
    yield _at_least("revolutions", sum(f.revolutions for f in window), limits.min_revolutions, "")
    yield _at_least("blocks", len(window), limits.blocks, "")


def _at_least(name: str, value: float, limit: float, unit: str) -> Figure:
    return Figure(name, None, float(value), float(limit), unit, bool(value >= limit))


def _at_most(name: str, channel: str | None, value: float, limit: float, unit: str) -> Figure:
    return Figure(name, channel, float(value), float(limit), unit, bool(value <= limit))


# --- speed -----------------------------------------------------------------------------------------------


class _Blocks:
    """A window's blocks as arrays, in order of time."""

    def __init__(self, window: Sequence[BlockFit]) -> None:
        self.window = window
        told = np.array([(f.revolutions, f.t_start_s, f.t_end_s, f.speed_hz, f.speed_sd_hz) for f in window])
        self.share: Floats = told[:, 0] / told[:, 0].sum()
        self.times_s: Floats = (told[:, 1] + told[:, 2]) / 2
        self.speeds: Floats = told[:, 3]
        self.speed_sd: Floats = told[:, 4]
        self.speed_hz = float(self.share @ self.speeds)
        self.length_s = window[-1].t_end_s - window[0].t_start_s
        self.block_s = self.length_s / len(window)
        self.vectors: Complexes = np.array([f.vectors for f in window])
        self.mean: Complexes = self.share @ self.vectors
        self.size: Floats = np.abs(self.mean)
        self.se2: Floats = np.array([f.se for f in window]) ** 2
        self.block_se2: Floats = self.se2.mean(axis=0)
        """White, of one block."""
        self.widening: Floats = widening(self.vectors, self.block_se2)
        self.se: Floats = np.sqrt(self.share**2 @ self.se2 * self.widening)
        """Of the mean, coloured noise included."""
        away = self.times_s - self.times_s.mean()
        self.spread_s = math.sqrt(float(away @ away))

    def shortest_s(self, limits: SteadinessLimits) -> float:
        """Length of the shortest window at this speed."""
        return max(limits.window_s, limits.min_revolutions / self.speed_hz)


def _mean_speed(window: Sequence[BlockFit]) -> float:
    turns = sum(f.revolutions for f in window)
    return sum(f.revolutions * f.speed_hz for f in window) / turns


def _speed(window: Sequence[BlockFit], blocks: _Blocks, limits: SteadinessLimits) -> Iterator[Figure]:
    mean, count = blocks.speed_hz, len(window)
    sd = np.sqrt(np.var(blocks.speeds, ddof=1) + np.mean(blocks.speed_sd**2))
    line = trend(blocks.times_s, blocks.speeds[:, None])
    slope = float(line.rate[0].real)
    left = blocks.speeds - mean - slope * (blocks.times_s - blocks.times_s.mean())
    se = np.sqrt(np.sum(left**2) / (count - 2)) / line.spread_s
    yield _at_most("speed_sd", None, 100 * sd / mean, limits.speed_sd_pct, "%")
    to_pct_min = 100 * 60 / mean
    excused = min(CHANGE_SE * se * to_pct_min, 60 * np.sqrt(12) * limits.speed_sd_pct / blocks.length_s)
    drift_limit = max(limits.speed_drift_pct_per_min, excused)  # a line beyond the second is out by its sd
    yield _at_most("speed_drift", None, abs(slope) * to_pct_min, drift_limit, "%/min")
    yield from _pulses(window, limits)


def _pulses(window: Sequence[BlockFit], limits: SteadinessLimits) -> Iterator[Figure]:
    """What was repaired of the once-per-rev pulses, and how sharp they are."""
    turns = sum(f.revolutions for f in window)
    for name, bad in (
        ("missed_pulses", [f.missed for f in window]),
        ("double_pulses", [f.doubles for f in window]),
    ):
        yield _at_most(name, None, 100 * sum(bad) / turns, REPAIR_LIMIT_PCT, "%")
    edge_deg = max(f.edge_deg for f in window)
    if edge_deg > 0:
        yield _at_most("edge", None, edge_deg, limits.phase_target_deg, "deg")
    lasted = min(f.pulse_samples for f in window)
    if 0 < lasted < FEWEST_PULSE_SAMPLES:
        yield _at_least("pulse", lasted, FEWEST_PULSE_SAMPLES, "")


def _hold(
    history: Sequence[BlockFit], window: Sequence[BlockFit], limits: SteadinessLimits
) -> Iterator[Figure]:
    """Time for which the speed has been within its band about the window's mean."""
    if limits.hold_s <= 0:
        return
    mean = _mean_speed(window)
    start = history[-1].t_end_s
    for fit in reversed(history):
        if abs(fit.speed_hz - mean) > limits.speed_band_pct / 100 * mean:
            break
        start = fit.t_start_s
    yield _at_least("hold", history[-1].t_end_s - start, limits.hold_s, "s")


# --- vectors ---------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, eq=False)
class _Mean:
    """Mean vectors of some blocks, weighted by their turns; their errors as of white noise."""

    vectors: Complexes
    se: Floats


def _mean(blocks: _Blocks, part: slice = slice(None)) -> _Mean:
    share = blocks.share[part] / blocks.share[part].sum()
    return _Mean(share @ blocks.vectors[part], np.sqrt(share**2 @ blocks.se2[part]))


def _allowed(blocks: _Blocks, limits: SteadinessLimits, probes: Sequence[Probe]) -> Floats:
    """Change allowed of each probe's vector."""
    floors = np.array([limits.change_floor(p.kind) for p in probes])
    found: Floats = np.maximum(limits.change_pct / 100 * blocks.size, floors)
    return found


def _vectors(
    history: Sequence[BlockFit], blocks: _Blocks, limits: SteadinessLimits, probes: Sequence[Probe]
) -> Iterator[Figure]:
    earlier, later, looked = _compared(history, blocks, limits)
    if limits.lookback_s > 0:
        yield looked
    one_se, vectors = np.sqrt(blocks.block_se2), blocks.vectors
    swing_seen = np.abs(vectors[:, None] - vectors[None, :]).max(axis=(0, 1))
    scatter = np.sqrt(np.sum(np.abs(vectors - vectors.mean(axis=0)) ** 2, axis=0) / (2 * (len(vectors) - 1)))
    allowed = _allowed(blocks, limits, probes)
    if earlier is not None and later is not None:
        change = np.abs(later.vectors - earlier.vectors)
        se = np.hypot(earlier.se, later.se) * np.sqrt(blocks.widening)
        yield from _each("change", probes, change, np.maximum(allowed, CHANGE_SE * se))
    yield from _each("swing", probes, swing_seen, np.maximum(allowed, SWING_SE * one_se))
    drift = np.abs(trend(blocks.times_s, vectors).rate) * blocks.shortest_s(limits)
    se = _drift_se(blocks, limits)
    yield from _each("drift", probes, drift, np.maximum(allowed - MARGIN_SE * se, PLANE_SE * se))
    floors = np.array([limits.change_floor(p.kind) for p in probes])
    spread = np.maximum(np.maximum(limits.scatter_pct / 100 * blocks.size, floors), CHANGE_SE * one_se)
    yield from _each("scatter", probes, scatter, spread)


def _each(name: str, probes: Sequence[Probe], values: Floats, most: Floats) -> Iterator[Figure]:
    """A figure of each probe."""
    for probe, value, limit in zip(probes, values.tolist(), most.tolist(), strict=True):
        yield Figure(name, probe.name, value, limit, UNITS[probe.kind], value <= limit)


def _drift_se(blocks: _Blocks, limits: SteadinessLimits) -> Floats:
    """Standard error per component of what the trend makes of the vectors from one window to the next."""
    scale = blocks.shortest_s(limits) / blocks.spread_s
    found: Floats = np.sqrt(blocks.block_se2 * blocks.widening) * scale
    return found


def _compared(
    history: Sequence[BlockFit], blocks: _Blocks, limits: SteadinessLimits
) -> tuple[_Mean | None, _Mean | None, Figure]:
    """The two means whose distance is the change: the halves of the window, or the window now and the one
    that lies ``lookback_s`` back; and how far back the vectors go."""
    reach_s = history[-1].t_end_s - history[0].t_start_s
    figure = _at_least("lookback", reach_s, limits.lookback_s + blocks.length_s, "s")
    if limits.lookback_s <= 0:
        half = len(blocks.window) // 2
        return _mean(blocks, slice(None, half)), _mean(blocks, slice(-half, None)), figure
    past = [f for f in history if f.t_end_s <= history[-1].t_end_s - limits.lookback_s]
    then = shortest(past, limits)
    if not all(f.ok for f in _filled(then, limits)):
        return None, None, Figure("lookback", None, reach_s, figure.limit, "s", ok=False)
    return _mean(_Blocks(then)), _mean(blocks), figure


# --- what is slow, and what is noise ----------------------------------------------------------------------


def _slow(blocks: _Blocks, limits: SteadinessLimits, probes: Sequence[Probe]) -> Iterator[Figure]:
    """Swings of a period up to two windows, of speed and vectors, of which the window may hold a half."""
    slowest_s = SLOWEST * blocks.shortest_s(limits)
    columns: Complexes = np.column_stack((blocks.speeds, blocks.vectors)).astype(np.complex128)
    speed, found = swing(blocks.times_s, columns, blocks.block_s, slowest_s).apart()
    yield _hunting(speed, blocks, limits)
    freedom = 2 * len(blocks.times_s) - 7
    noise2 = blocks.block_se2 * colour(found.left / freedom, blocks.block_se2, freedom)
    se = found.per_se * np.sqrt(noise2)
    chance = found.travel * np.sqrt(BEAT_SE2 * noise2 / np.maximum(found.explained, 1e-300))
    allowed = _allowed(blocks, limits, probes)
    told = np.sqrt(noise2) * told_over_block_se(blocks.times_s, blocks.block_s, slowest_s, TOLD_SD)
    told = np.maximum(told, DRIFT_TOLD_SE * _drift_se(blocks, limits))
    most = np.maximum(allowed - MARGIN_SE * se, np.minimum(chance, 10 * found.travel))
    yield from _each("beat", probes, found.travel, most)
    for probe, value, limit in zip(probes, told.tolist(), allowed.tolist(), strict=True):
        yield _by_averaging("told", probe.name, value, limit, UNITS[probe.kind], blocks.length_s, 1.5)


def _hunting(found: Swing, blocks: _Blocks, limits: SteadinessLimits) -> Figure:
    per_sd = 100 / blocks.speed_hz / np.sqrt(8.0)  # the standard deviation of a sine from its travel
    noise = float(np.sqrt(found.left[0] / (len(blocks.times_s) - 4)))
    limit = max(limits.speed_sd_pct, HUNTING_SE * noise * float(found.per_se[0]) * per_sd)
    return _at_most("hunting", None, float(found.travel[0]) * per_sd, limit, "%")


def _averaged(blocks: _Blocks, limits: SteadinessLimits, probes: Sequence[Probe]) -> Iterator[Figure]:
    """Whether each vector is known as well as is asked for."""
    share, phase, length_s = limits.amplitude_target_pct / 100, limits.phase_target_deg, blocks.length_s
    for probe, size, se in zip(probes, blocks.size.tolist(), blocks.se.tolist(), strict=True):
        floor, name = limits.target_floor(probe.kind), probe.name
        if share * size > floor:
            yield _by_averaging("averaged", name, 100 * se / size, 100 * share, "%", length_s)
        else:
            yield _by_averaging("averaged", name, se, floor, UNITS[probe.kind], length_s)
        if math.radians(phase) * size > floor:
            yield _by_averaging("phase", name, math.degrees(se / size), phase, "deg", length_s)


def _by_averaging(
    name: str, channel: str, value: float, limit: float, unit: str, length_s: float, power: float = 0.5
) -> Figure:
    """A figure that falls with the window's length to the ``-power``."""
    more_s = length_s * max(0.0, (value / limit) ** (1 / power) - 1)
    return Figure(name, channel, value, limit, unit, value <= limit, more_s)
