"""Once-per-rev edges: where the pulse crosses its level, to a fraction of a sample.

Edges are found by a level with a dead band and placed between samples by linear interpolation; positions are
float64 sample indices. The level is given or automatic: the middle of the pulse, followed as it moves.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.shapes import Floats, PulseParams, median

LEVEL_STEP_S = 0.25
"""The automatic level is looked at again after this time."""
LEVEL_MEMORY_S = 4.0
"""... over this much of the past: two turns at 30 r/min."""
LEVEL_TAIL = 0.004
"""Share of the samples beyond the low and the high level: half of the shortest pulse, 0.8 % of a turn."""
BAND_SHARE = 0.1
"""Half of the dead band as a share of the pulse: 20 % in all (REUSE.md section 6)."""
NOISE_RATIO = 12.0
"""A pulse lower than this many standard deviations of the noise is no pulse; noise alone shows 5.3."""
HISTOGRAM_BINS = 4096
NOISE_SAMPLES = 4096
NOISE_STEP = 0.31863936396437514 * 1.4142135623730951
"""Lower quartile of the size of the difference of two normal values of sd 1."""


# --- the level -------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Trigger:
    """A level and the half width of its dead band, in counts."""

    level: float
    band: float
    height: float
    """Of the pulse; nan when it is not known."""


class PulseHistogram:
    """How often each size of count occurs: gives the low and the high level in bounded memory."""

    def __init__(self, full_scale_counts: tuple[int, int]) -> None:
        low, high = full_scale_counts
        self._low = low
        self._shift = max(0, int(high - low).bit_length() - (HISTOGRAM_BINS - 1).bit_length())
        self.bins = np.zeros(((high - low) >> self._shift) + 1, np.int64)

    def count(self, pulse: NDArray[Any]) -> NDArray[np.int64]:
        """The histogram of ``pulse`` (counts, 1-D) alone."""
        at = pulse.astype(np.int64)
        at -= self._low
        at >>= self._shift
        np.maximum(at, 0, out=at)
        np.minimum(at, len(self.bins) - 1, out=at)
        return np.bincount(at, minlength=len(self.bins))

    def add(self, counted: NDArray[np.int64]) -> None:
        self.bins += counted

    def levels(self) -> tuple[float, float]:
        """The low and the high level, in counts (middle of their bins)."""
        total = np.cumsum(self.bins)
        low, high = np.searchsorted(total, [LEVEL_TAIL * total[-1], (1 - LEVEL_TAIL) * total[-1]])
        half = ((1 << self._shift) - 1) / 2
        return (
            float((int(low) << self._shift) + self._low + half),
            float((int(high) << self._shift) + self._low + half),
        )


def noise_sd(pulse: NDArray[Any]) -> float:
    """Noise of a signal that stands still for half of the time, counts: from the smaller of the steps between
    the first few thousand samples."""
    values = pulse[:NOISE_SAMPLES].astype(np.float64)
    if len(values) < 2:
        return 0.0
    steps = np.abs(values[1:] - values[:-1])
    quarter = len(steps) // 4
    return float(np.partition(steps, quarter)[quarter]) / NOISE_STEP


def choose_trigger(params: PulseParams, low: float, high: float, noise: float) -> Trigger | None:
    """The trigger for a pulse between ``low`` and ``high`` (counts); None when that is no pulse."""
    scale = params.volts_per_count
    height = high - low
    if height * abs(scale) < params.min_height_v or height < NOISE_RATIO * noise:
        return None
    level = (low + high) / 2 if params.level_v is None else params.level_v / scale
    band = BAND_SHARE * height if params.hysteresis_v is None else abs(params.hysteresis_v / scale)
    return Trigger(level, band, height)


def trigger_of(pulse: NDArray[Any], params: PulseParams) -> Trigger | None:
    """One trigger for a whole window (counts, 1-D); None when it holds no pulses that stand out."""
    histogram = PulseHistogram(params.full_scale_counts)
    noise = []
    for start in range(0, len(pulse), 1 << 16):
        piece = pulse[start : start + (1 << 16)]
        histogram.add(histogram.count(piece))
        noise.append(noise_sd(piece))
    if not noise:
        return None
    return choose_trigger(params, *histogram.levels(), median(noise))


class TriggerFollower:
    """The trigger over the recent past, renewed at fixed sample counts: chunking changes nothing."""

    def __init__(self, params: PulseParams, rate_hz: float) -> None:
        self.step = max(16, round(LEVEL_STEP_S * rate_hz))
        self.trigger: Trigger | None = None
        self._params = params
        self._sum = PulseHistogram(params.full_scale_counts)
        self._past: deque[NDArray[np.int64]] = deque()
        self._part: list[NDArray[Any]] = []
        self._filled = 0

    @property
    def room(self) -> int:
        """Samples until the trigger is looked at again."""
        return self.step - self._filled

    def feed(self, pulse: NDArray[Any]) -> None:
        """Take at most ``room`` samples."""
        self._part.append(pulse.copy())
        self._filled += len(pulse)
        if self._filled < self.step:
            return
        piece = np.concatenate(self._part)
        counted = self._sum.count(piece)
        noise = noise_sd(piece)
        if self.trigger is None:
            self._start_anew(counted, noise)
        self._sum.add(counted)
        self._past.append(counted)
        if len(self._past) > LEVEL_MEMORY_S / LEVEL_STEP_S:
            self._sum.add(-self._past.popleft())
        self.trigger = choose_trigger(self._params, *self._sum.levels(), noise)
        self._part, self._filled = [], 0

    def _start_anew(self, counted: NDArray[np.int64], noise: float) -> None:
        """When pulses come after a time without any, forget that time: it would hide how low they go."""
        alone = PulseHistogram(self._params.full_scale_counts)
        alone.add(counted)
        if choose_trigger(self._params, *alone.levels(), noise) is not None:
            self._past.clear()
            self._sum.bins[:] = 0


# --- edges -----------------------------------------------------------------------------------------------


class EdgeFinder:
    """Once-per-rev edges of a stream: ``feed`` it in any chunks, the edges are those of one piece.

    Pass ``trigger`` to hold it fixed; otherwise it follows the pulse as ``params`` say. An edge is where the
    signal crosses the level on its way from one side of the dead band to the other; of several crossings
    (noise on a slow edge) the middle between first and last, which no side is favoured by.
    """

    def __init__(self, params: PulseParams, rate_hz: float, trigger: Trigger | None = None) -> None:
        self._sign = 1.0 if params.edge == "falling" else -1.0
        self._fixed = trigger
        self._follower = None if trigger else TriggerFollower(params, rate_hz)
        self._lengths: dict[bool, deque[int]] = {s: deque(maxlen=64) for s in (False, True)}
        self.restart()

    @property
    def trigger(self) -> Trigger | None:
        """What is used now; None while there are no pulses that stand out."""
        return self._fixed or (self._follower.trigger if self._follower else None)

    @property
    def pulse_length(self) -> float:
        """Median number of samples that the newest pulses lasted, the shorter side; inf when not known."""
        sides = [median(lengths) for lengths in self._lengths.values() if lengths]
        return min(sides, default=float("inf"))

    def restart(self) -> None:
        """Forget the signal (a gap in the samples); the trigger stays."""
        self._armed = False
        self._since: int | None = None
        self._last: float | None = None
        self._first_cross = self._last_cross = np.nan

    def feed(self, pulse: NDArray[Any], first_index: int) -> Floats:
        """Edges in ``pulse`` (counts, 1-D), whose first sample has index ``first_index``; float64 indices."""
        found = []
        at = 0
        while at < len(pulse):
            stop = len(pulse) if self._follower is None else min(len(pulse), at + self._follower.room)
            piece = pulse[at:stop]
            found.append(self._scan(piece, first_index + at))
            if self._follower is not None:
                self._follower.feed(piece)
            at = stop
        return np.concatenate(found) if found else np.empty(0)

    def _scan(self, piece: NDArray[Any], first_index: int) -> Floats:
        trigger = self.trigger
        y = piece.astype(np.float64) * self._sign
        if trigger is None:
            self.restart()
        if trigger is None or self._quiet(y, trigger):
            self._last = float(y[-1])
            return np.empty(0)
        crossings = self._crossings(y, trigger.level * self._sign, first_index)
        side, where = _sides(y, trigger.level * self._sign, trigger.band, first_index)
        self._last = float(y[-1])
        edges = self._edges(side, where, crossings)
        self._carry(side, where, crossings)
        return edges

    def _quiet(self, y: Floats, trigger: Trigger) -> bool:
        """True when the whole piece stays on the side where the signal was last seen: nothing to find."""
        level = trigger.level * self._sign
        if not self._armed:
            return bool(y.max() < level - trigger.band) and self._since is not None
        stays = bool(y.min() > level + trigger.band)
        if stays:
            self._first_cross = self._last_cross = np.nan
        return stays and self._since is not None

    def _crossings(self, y: Floats, level: float, first_index: int) -> Floats:
        """Positions where ``y`` falls through ``level``, the step from the previous piece included."""
        high = y >= level
        at = np.flatnonzero(high[:-1] > high[1:])
        upper = y[at]
        position: Floats = (first_index + at) + (upper - level) / (upper - y[at + 1])
        before = self._last
        if before is not None and before >= level > y[0]:
            border = (first_index - 1) + (before - level) / (before - y[0])
            position = np.concatenate(([border], position))
        return position

    def _edges(self, side: NDArray[np.bool_], where: NDArray[np.int64], crossings: Floats) -> Floats:
        """Edges confirmed in this piece: ``side`` (True above the dead band) changes at ``where``."""
        previous = np.concatenate(([self._armed], side[:-1])) if len(side) else side
        confirm = np.flatnonzero(previous & ~side)
        if not len(confirm):
            return np.empty(0)
        opened = np.concatenate(([np.iinfo(np.int64).min], where[:-1]))[confirm]
        low = np.searchsorted(crossings, opened, side="left")
        high = np.searchsorted(crossings, where[confirm], side="right") - 1
        edges = np.full(len(confirm), np.nan)
        inside = high >= low
        edges[inside] = (crossings[low[inside]] + crossings[high[inside]]) / 2
        if confirm[0] == 0:  # armed in an earlier piece: its crossings may lie there
            edges[0] = self._joined(crossings[: high[0] + 1])
        found: Floats = edges[~np.isnan(edges)]
        return found

    def _joined(self, crossings: Floats) -> float:
        """The edge that began in an earlier piece and is confirmed in this one."""
        every = np.concatenate(([self._first_cross, self._last_cross], crossings))
        every = every[~np.isnan(every)]
        return float((every.min() + every.max()) / 2) if len(every) else np.nan

    def _carry(self, side: NDArray[np.bool_], where: NDArray[np.int64], crossings: Floats) -> None:
        """Remember what an edge confirmed later will need, and the pulse lengths seen."""
        if len(side):
            self._note_lengths(side, where)
            self._armed = bool(side[-1])
            self._first_cross = self._last_cross = np.nan
            crossings = crossings[np.searchsorted(crossings, where[-1]) :]
        if self._armed and len(crossings):
            self._first_cross = np.fmin(self._first_cross, crossings[0])
            self._last_cross = crossings[-1]

    def _note_lengths(self, side: NDArray[np.bool_], where: NDArray[np.int64]) -> None:
        """Book how long the signal stayed on each side of the dead band (True above)."""
        previous = np.concatenate(([self._armed], side[:-1]))
        change = np.flatnonzero(previous != side)
        for sample, from_above in zip(where[change].tolist(), previous[change].tolist(), strict=True):
            if self._since is not None:
                self._lengths[from_above].append(sample - self._since)
            self._since = sample


def _sides(
    y: Floats, level: float, band: float, first_index: int
) -> tuple[NDArray[np.bool_], NDArray[np.int64]]:
    """The first and the last sample of each run above and of each run below the dead band, in order.

    Returns (True where above, absolute indices)."""
    state = (y > level + band).view(np.int8) - (y < level - band).view(np.int8)
    change = np.flatnonzero(state[1:] != state[:-1])
    at = np.empty(2 * len(change) + 2, np.int64)
    at[0], at[-1] = 0, len(y) - 1
    at[1:-1:2], at[2::2] = change, change + 1
    seen = state[at]
    outside = np.flatnonzero(seen)
    side: NDArray[np.bool_] = seen[outside] > 0
    return side, at[outside] + first_index


def find_edges(pulse: NDArray[Any], params: PulseParams, trigger: Trigger | None = None) -> Floats:
    """Edges of a whole window (counts, 1-D) with one trigger; empty when there are no pulses."""
    trigger = trigger or trigger_of(pulse, params)
    if trigger is None:
        return np.empty(0)
    finder = EdgeFinder(params, 1.0, trigger)
    pieces = [finder.feed(pulse[i : i + (1 << 16)], i) for i in range(0, len(pulse), 1 << 16)]
    return np.concatenate(pieces) if pieces else np.empty(0)
