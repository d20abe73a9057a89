"""Is the machine steady? Judged on the newest blocks; the answer says what is still out and by how much.

Limits and their sources: ``config.steadiness``. All amplitudes are 0-peak in the probe's base unit.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from config.steadiness import SteadinessLimits
from daq.signal.shapes import BlockFit, Complexes, Floats

MISSED_LIMIT_PCT = 0.1
"""Missed or double pulses allowed in a window, of its turns (REUSE.md (a))."""
CHANGE_SE = 3.0
"""A change within so many of its own standard errors is none."""
SWING_SE = 6.0
"""The same for the largest of all distances between two of some eight blocks, in standard errors of one:
0.3 % of pure noise goes beyond (Monte Carlo in tests/signal/test_steadiness.py)."""

UNITS: Mapping[str, str] = {"displacement": "um", "velocity": "mm/s", "acceleration": "m/s2"}

SENTENCES: Mapping[str, str] = {
    "window": "the averaging window holds {value} s of {limit} s",
    "revolutions": "the averaging window holds {value} of {limit} turns",
    "blocks": "the averaging window holds {value} of {limit} blocks",
    "hold": "the speed has been held for {value} s of {limit} s",
    "lookback": "vectors can be looked back at over {value} s of {limit} s",
    "speed_wanted": "the speed is {value} % off the one wanted, limit {limit} %",
    "speed_sd": "the speed varies by {value} % (standard deviation), limit {limit} %",
    "speed_drift": "the speed drifts {value} %/min, limit {limit} %/min",
    "missed_pulses": "{value} % of the once-per-rev pulses are missed or double, limit {limit} %",
    "change": "{channel} still drifts: {value} {unit} 0-pk of {limit} {unit} allowed",
    "swing": "{channel} still swings: {value} {unit} 0-pk of {limit} {unit} allowed",
    "scatter": "{channel} scatters: {value} {unit} 0-pk of {limit} {unit} allowed",
}
"""What each figure says when it is out."""
AT_LEAST = frozenset({"window", "revolutions", "blocks", "hold", "lookback"})
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
            value=_plain(self.value), limit=_plain(self.limit), unit=self.unit, channel=self.channel
        )


@dataclass(frozen=True, slots=True)
class Verdict:
    """Steady or not, with every figure looked at."""

    steady: bool
    figures: tuple[Figure, ...]
    segment: int | None = None
    first_sample: int = 0
    """Source sample index where the window begins; it ends before ``stop_sample``."""
    stop_sample: int = 0

    @property
    def worst(self) -> Figure | None:
        """The figure furthest out; None when none is."""
        return max((f for f in self.figures if not f.ok), key=lambda f: f.excess, default=None)

    @property
    def sentence(self) -> str:
        """``steady``, or what is still out and by how much."""
        return "steady" if self.worst is None else self.worst.sentence

    def as_dict(self) -> dict[str, Any]:
        """For the record: ``steady`` and the figures."""
        return {"steady": self.steady, "figures": [asdict(f) for f in self.figures]}


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
    wanted_hz: float | None = None,
) -> Verdict:
    """Judge the newest window of ``fits`` (in order of time, as many as there are; :func:`needed` says which
    may be dropped). ``wanted_hz`` asks for a speed within ``speed_band_pct`` of it besides."""
    history = _unbroken(fits)
    window = _window(history, limits)
    figures = list(_filled(window, limits))
    if len(window) >= 3:
        figures += _speed(window, limits, wanted_hz)
        figures += _hold(history, window, limits)
        figures += _vectors(history, window, limits, probes)
    steady = all(f.ok for f in figures)
    if not window:
        return Verdict(steady, tuple(figures))
    return Verdict(steady, tuple(figures), window[-1].segment, window[0].first_sample, window[-1].stop_sample)


def needed(fits: Sequence[BlockFit], limits: SteadinessLimits) -> int:
    """How many of the oldest fits will not be asked for again."""
    if not fits:
        return 0
    broken = len(fits) - len(_unbroken(fits))
    window = _window(fits, limits)
    reach = max(limits.hold_s, limits.lookback_s + 2 * (window[-1].t_end_s - window[0].t_start_s))
    oldest = fits[-1].t_end_s - max(reach, limits.lookback_s + 2 * limits.window_s)
    return max(broken, sum(f.t_end_s < oldest for f in fits))


# --- the window ------------------------------------------------------------------------------------------


def _unbroken(fits: Sequence[BlockFit]) -> Sequence[BlockFit]:
    """The newest fits that follow each other without a gap in the samples."""
    start = len(fits) - 1
    while start > 0 and (
        fits[start - 1].segment == fits[start].segment
        and fits[start - 1].stop_sample == fits[start].first_sample
    ):
        start -= 1
    return fits[max(0, start) :]


def _window(history: Sequence[BlockFit], limits: SteadinessLimits) -> Sequence[BlockFit]:
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


def _mean_speed(window: Sequence[BlockFit]) -> float:
    turns = sum(f.revolutions for f in window)
    return sum(f.revolutions * f.speed_hz for f in window) / turns


def _speed(window: Sequence[BlockFit], limits: SteadinessLimits, wanted_hz: float | None) -> Iterator[Figure]:
    mean = _mean_speed(window)
    speeds = np.array([f.speed_hz for f in window])
    within = np.array([f.speed_sd_hz for f in window])
    sd = np.sqrt(np.var(speeds, ddof=1) + np.mean(within**2))
    times = np.array([(f.t_start_s + f.t_end_s) / 2 for f in window])
    times -= times.mean()
    slope = np.sum(times * speeds) / np.sum(times**2)
    yield _at_most("speed_sd", None, 100 * sd / mean, limits.speed_sd_pct, "%")
    drift = abs(100 * slope * 60 / mean)
    yield _at_most("speed_drift", None, drift, limits.speed_drift_pct_per_min, "%/min")
    if wanted_hz is not None:
        off = 100 * abs(mean - wanted_hz) / wanted_hz
        yield _at_most("speed_wanted", None, off, limits.speed_band_pct, "%")
    turns = sum(f.revolutions for f in window)
    bad = sum(f.missed + f.doubles for f in window)
    yield _at_most("missed_pulses", None, 100 * bad / turns, MISSED_LIMIT_PCT, "%")


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
    """Mean vectors of some blocks, weighted by their turns."""

    vectors: Complexes
    se: Floats


def _mean(fits: Sequence[BlockFit]) -> _Mean:
    turns = np.array([f.revolutions for f in fits], np.float64)
    share = turns / turns.sum()
    vectors = np.stack([f.vectors for f in fits])
    se = np.stack([f.se for f in fits])
    return _Mean(share @ vectors, np.sqrt((share**2) @ se**2))


def _vectors(
    history: Sequence[BlockFit],
    window: Sequence[BlockFit],
    limits: SteadinessLimits,
    probes: Sequence[Probe],
) -> Iterator[Figure]:
    earlier, later, looked = _compared(history, window, limits)
    if limits.lookback_s > 0:
        yield looked
    now, one_se = _mean(window), np.stack([f.se for f in window]).mean(axis=0)
    vectors = np.stack([f.vectors for f in window])
    swing = np.abs(vectors[:, None] - vectors[None, :]).max(axis=(0, 1))
    scatter = np.sqrt(np.sum(np.abs(vectors - vectors.mean(axis=0)) ** 2, axis=0) / (2 * (len(window) - 1)))
    for i, probe in enumerate(probes):
        unit, size = UNITS[probe.kind], abs(now.vectors[i])
        allowed = max(limits.change_pct / 100 * size, limits.change_floor(probe.kind))
        if earlier is not None and later is not None:
            change = abs(later.vectors[i] - earlier.vectors[i])
            se = float(np.hypot(earlier.se[i], later.se[i]))
            yield _at_most("change", probe.name, change, max(allowed, CHANGE_SE * se), unit)
        yield _at_most("swing", probe.name, swing[i], max(allowed, SWING_SE * one_se[i]), unit)
        spread = max(limits.scatter_pct / 100 * size, limits.change_floor(probe.kind), CHANGE_SE * one_se[i])
        yield _at_most("scatter", probe.name, scatter[i], spread, unit)


def _compared(
    history: Sequence[BlockFit], window: Sequence[BlockFit], limits: SteadinessLimits
) -> tuple[_Mean | None, _Mean | None, Figure]:
    """The two means whose distance is the change: the halves of the window, or the window now and the one
    that lies ``lookback_s`` back; and how far back the vectors go."""
    reach_s = history[-1].t_end_s - history[0].t_start_s
    length_s = window[-1].t_end_s - window[0].t_start_s
    figure = _at_least("lookback", reach_s, limits.lookback_s + length_s, "s")
    if limits.lookback_s <= 0:
        half = len(window) // 2
        return _mean(window[:half]), _mean(window[-half:]), figure
    past = [f for f in history if f.t_end_s <= window[-1].t_end_s - limits.lookback_s]
    then = _window(past, limits)
    if not all(f.ok for f in _filled(then, limits)):
        return None, None, Figure("lookback", None, reach_s, figure.limit, "s", ok=False)
    return _mean(then), _mean(window), figure
