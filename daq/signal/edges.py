"""Once-per-rev edges: where the pulse crosses its level, to a fraction of a sample.

Edges are found by a level with a dead band and placed between samples by linear interpolation; positions are
float64 sample indices. The level is given or automatic: the middle of the pulse, followed as it moves. A slot
that rings gives one edge, the first; of several pulses a turn only the one that counts gives edges.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from statistics import NormalDist
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.pulses import MarkTeller
from daq.signal.shapes import Floats, PulseParams, median

LEVEL_STEP_S = 0.25
"""The automatic level is looked at again after this time."""
LEVEL_MEMORY_S = 4.0
"""... over this much of the past: two turns at 30 r/min."""
LEVEL_TAIL = 0.004
"""Share of the samples beyond the low and the high level: half of the shortest pulse, 0.8 % of a turn."""
BAND_SHARE = 0.1
"""Half of the dead band as a share of the pulse: 20 % in all (REUSE.md section 6); half of the way to the
nearer side for a given level that is closer to it."""
NOISE_RATIO = 12.0
"""A pulse lower than this many standard deviations of the noise is no pulse; noise alone shows 5.3."""
HISTOGRAM_BINS = 4096
NOISE_SAMPLES = 4096
NOISE_STEP = 0.31863936396437514 * 1.4142135623730951
"""Lower quartile of the size of the difference of two normal values of sd 1."""
DRIFT_SHARE = 0.02
"""A window's level is followed when it moves by more than this share of the pulse."""
MARGIN_NOISE = 4.0
"""Standard deviations of noise that the level should be clear of either side, if the dead band is less."""
PIECE = 1 << 16
"""Samples of a window looked at together."""
RING_SHARE = 0.05
"""A rest between two pulses shorter than this share of those around it: the pulse before it still rings."""
RING_MEMORY = 16
"""Rests looked at for that: the second longest of them (a standstill is longer than any) ..."""
RING_FIRST = 6
"""... but the longest of all before so many have been seen."""
NEWEST = 64
"""Pulses whose width, spacing and slope are remembered."""
ON_EDGE = 1.9
"""A pulse whose edge takes fewer samples than about two is not interpolated (METHODS 8.3); the line drawn for
an edge stamped by hardware takes two, and its crossing is exact."""


# --- the level -------------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True)
class Trigger:
    """A level and the half width of its dead band, in counts."""

    level: float
    band: float
    height: float
    """Of the pulse; nan when it is not known."""
    low: float = float("nan")
    """Lower side of the pulse; nan = the level is its middle."""
    noise: float = 0.0
    """Standard deviation of the noise."""

    @property
    def margin(self) -> float:
        """How far the nearer side is away from the level, over the dead band's half width, a tenth of the
        pulse or four sd of the noise, whichever is most."""
        half = self.height / 2
        near = half if np.isnan(self.low) else half - abs(self.level - self.low - half)
        unit = max(abs(self.band), BAND_SHARE * self.height, MARGIN_NOISE * self.noise, 1e-9)
        return float(near / unit)


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

    def levels(self, noise: float = 0.0) -> tuple[float, float]:
        """The low and the high level, in counts (middle of their bins), without what ``noise`` (sd, counts)
        adds to the tails that tell them. The stream's own trigger leaves it in: it need not be that exact."""
        total = np.cumsum(self.bins)
        low, high = np.searchsorted(total, [LEVEL_TAIL * total[-1], (1 - LEVEL_TAIL) * total[-1]])
        below = float(total[(low + high) // 2] / max(1, total[-1]))
        half = ((1 << self._shift) - 1) / 2
        return (
            float((int(low) << self._shift) + self._low + half) + noise * _reach(below),
            float((int(high) << self._shift) + self._low + half) - noise * _reach(1 - below),
        )


def _reach(share: float) -> float:
    """How many sd a normal value lies out that ``LEVEL_TAIL`` of all samples are beyond, when ``share`` of
    them scatter about that level."""
    if not share > LEVEL_TAIL:
        return 0.0
    return -NormalDist().inv_cdf(min(LEVEL_TAIL / share, 0.999))


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
    if params.hysteresis_v is None:
        near = min(level - low, high - level)
        band = min(BAND_SHARE * height, near / 2) if near > 0 else BAND_SHARE * height
    else:
        band = abs(params.hysteresis_v / scale)
    return Trigger(level, band, height, low, noise)


def unresolved_deg(edge_samples: float, samples_per_turn: float) -> float:
    """What sharp edges leave open in every phase, degrees: half a sample when an edge takes fewer than about
    two samples, else 0. It does not average down (METHODS 8.3)."""
    if not edge_samples < ON_EDGE or not samples_per_turn > 0:
        return 0.0
    return 180.0 / samples_per_turn


def trigger_of(pulse: NDArray[Any], params: PulseParams) -> Trigger | None:
    """One trigger for a whole window (counts, 1-D); None when it holds no pulses that stand out."""
    histogram = PulseHistogram(params.full_scale_counts)
    noise = []
    for start in range(0, len(pulse), PIECE):
        piece = pulse[start : start + PIECE]
        histogram.add(histogram.count(piece))
        noise.append(noise_sd(piece))
    if not noise:
        return None
    return choose_trigger(params, *histogram.levels(median(noise)), median(noise))


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


@dataclass(frozen=True, slots=True, eq=False)
class _Pulses:
    """Pulses begun in a piece, shape (n,) each."""

    edges: Floats
    """Where the level was crossed."""
    begun: NDArray[np.int64]
    """First sample beyond the dead band."""
    rest: NDArray[np.int64]
    """Samples for which the signal had been on the other side."""
    slope: Floats
    """Step between the samples about the crossing, counts."""

    def only(self, kept: NDArray[np.bool_]) -> _Pulses:
        if kept.all():
            return self
        return _Pulses(self.edges[kept], self.begun[kept], self.rest[kept], self.slope[kept])


_NONE = _Pulses(np.empty(0), np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0))


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
        self._pulses = max(1, params.pulses)
        self._teller = MarkTeller(params) if params.pulses > 1 else None
        self._ring_share = RING_SHARE * params.evenness
        self._widths = self._spans = self._ramps = np.empty(0)
        self.restart()

    @property
    def trigger(self) -> Trigger | None:
        """What is used now; None while there are no pulses that stand out."""
        return self._fixed or (self._follower.trigger if self._follower else None)

    @property
    def pulse_length(self) -> float:
        """Median number of samples that the newest pulses lasted, the shorter side; inf when not known."""
        if not len(self._widths):
            return float("inf")
        return min(median(self._widths), median(self._spans - self._widths))

    @property
    def pulse_share(self) -> float:
        """Share of a turn for which the side lasts that the counted edge begins; 0 when not known."""
        if not len(self._widths):
            return 0.0
        return median(self._widths) / (self._pulses * median(self._spans))

    @property
    def edge_samples(self) -> float:
        """Median number of samples that the newest edges took at the slope they had where they crossed the
        level, from 1 (a step) upward; inf when not known."""
        return median(self._ramps) if len(self._ramps) else float("inf")

    @property
    def margin(self) -> float:
        """``Trigger.margin``: 5 when automatic and free of noise, marginal below 2; 0 without pulses."""
        return self.trigger.margin if self.trigger is not None else 0.0

    @property
    def untold(self) -> int:
        """Pulses so far of which nobody could tell whether they are the one that counts."""
        return self._teller.untold if self._teller is not None else 0

    @property
    def mark_lost(self) -> bool:
        """True while pulses come, and none can be told to be the one that counts."""
        return self._teller is not None and self._teller.in_a_row > 2 * self._pulses

    @property
    def undecided(self) -> float | None:
        """The oldest pulse of which it is not decided yet whether it counts; None when there is none."""
        return self._teller.undecided if self._teller is not None else None

    def hold(self, trigger: Trigger) -> None:
        """Use another fixed trigger from the next sample on."""
        self._fixed = trigger

    def restart(self) -> None:
        """Forget the signal (a gap in the samples); the trigger stays."""
        self._armed = False
        self._since: int | None = None
        self._last: float | None = None
        self._first_cross = self._last_cross = self._slope = np.nan
        self._rests = np.zeros(RING_MEMORY - 1, np.int64)
        self._begun: int | None = None
        if self._teller is not None:
            self._teller.restart()

    def feed(self, pulse: NDArray[Any], first_index: int) -> Floats:
        """Edges in ``pulse`` (counts, 1-D), whose first sample has index ``first_index``; float64 indices."""
        found = []
        at = 0
        while at < len(pulse):
            stop = len(pulse) if self._follower is None else min(len(pulse), at + self._follower.room)
            piece = pulse[at:stop]
            found.append(self._scan(piece, first_index + at))
            if self._follower is not None:
                before = self._follower.trigger
                self._follower.feed(piece)
                self._mind_jump(before, self._follower.trigger)
            at = stop
        return np.concatenate(found) if found else np.empty(0)

    def _mind_jump(self, before: Trigger | None, now: Trigger | None) -> None:
        """The level may jump across a signal that stands still: the mark's edge has stopped under the sensor,
        and the pulses before are forgotten. That is no edge."""
        if before is not None and now is not None and abs(now.level - before.level) > before.band:
            self._armed, self._since = False, None
            self._first_cross = self._last_cross = self._slope = np.nan

    def finish(self) -> Floats:
        """Edges that what has come so far decides when nothing follows: with several pulses a turn."""
        return self._teller.finish() if self._teller is not None else np.empty(0)

    def _scan(self, piece: NDArray[Any], first_index: int) -> Floats:
        trigger = self.trigger
        y = piece.astype(np.float64) * self._sign
        if trigger is None and self._since is not None:
            self.restart()
        if trigger is None or self._quiet(y, trigger):
            self._last = float(y[-1])
            return np.empty(0)
        crossings, slopes = self._crossings(y, trigger.level * self._sign, first_index)
        side, where = _sides(y, trigger.level * self._sign, trigger.band, first_index)
        self._last = float(y[-1])
        pulses = self._begin(side, where, crossings, slopes)
        self._carry(side, where, crossings, slopes)
        return self._counted(pulses, abs(trigger.height))

    def _quiet(self, y: Floats, trigger: Trigger) -> bool:
        """True when the whole piece stays on the side where the signal was last seen: nothing to find."""
        level = trigger.level * self._sign
        if not self._armed:
            return bool(y.max() < level - trigger.band) and self._since is not None
        stays = bool(y.min() > level + trigger.band)
        if stays:
            self._first_cross = self._last_cross = np.nan
        return stays and self._since is not None

    def _crossings(self, y: Floats, level: float, first_index: int) -> tuple[Floats, Floats]:
        """Positions where ``y`` falls through ``level``, the step from the previous piece included, and how
        far it fell from sample to sample there."""
        high = y >= level
        at = np.flatnonzero(high[:-1] > high[1:])
        upper = y[at]
        slope: Floats = upper - y[at + 1]
        position: Floats = (first_index + at) + (upper - level) / slope
        before = self._last
        if before is not None and before >= level > y[0]:
            border = (first_index - 1) + (before - level) / (before - y[0])
            position = np.concatenate(([border], position))
            slope = np.concatenate(([before - y[0]], slope))
        return position, slope

    def _begin(
        self, side: NDArray[np.bool_], where: NDArray[np.int64], crossings: Floats, slopes: Floats
    ) -> _Pulses:
        """Pulses that begin in this piece: ``side`` (True above the dead band) changes at ``where``."""
        if not len(side):
            return _NONE
        change = np.flatnonzero(np.concatenate(([self._armed], side[:-1])) != side)
        since, self._since = self._since, int(where[change[-1]]) if len(change) else self._since
        confirm = change[~side[change]]
        if not len(confirm):
            return _NONE
        begun = where[confirm]
        opened = np.concatenate(([np.iinfo(np.int64).min], where[:-1]))[confirm]
        low = np.searchsorted(crossings, opened, side="left")
        high = np.searchsorted(crossings, begun, side="right") - 1
        edges, slope = np.full(len(confirm), np.nan), np.full(len(confirm), np.nan)
        inside = high >= low
        edges[inside] = (crossings[low[inside]] + crossings[high[inside]]) / 2
        slope[inside] = slopes[low[inside]]
        if confirm[0] == 0:  # armed in an earlier piece: its crossings may lie there
            edges[0], slope[0] = self._joined(crossings[: high[0] + 1], slopes)
        turned = np.concatenate(([begun[0] if since is None else since], where[change]))
        rest = begun - turned[np.flatnonzero(~side[change])]
        return _Pulses(edges, begun, rest, slope).only(~np.isnan(edges))

    def _joined(self, crossings: Floats, slopes: Floats) -> tuple[float, float]:
        """The edge that began in an earlier piece and is confirmed in this one, and its slope."""
        every = np.concatenate(([self._first_cross, self._last_cross], crossings))
        every = every[~np.isnan(every)]
        if not len(every):
            return np.nan, np.nan
        slope = slopes[0] if np.isnan(self._first_cross) else self._slope
        return float((every.min() + every.max()) / 2), float(slope)

    def _carry(
        self, side: NDArray[np.bool_], where: NDArray[np.int64], crossings: Floats, slopes: Floats
    ) -> None:
        """Remember what an edge confirmed later will need."""
        if len(side):
            self._armed = bool(side[-1])
            self._first_cross = self._last_cross = np.nan
            later = int(np.searchsorted(crossings, where[-1]))
            crossings, slopes = crossings[later:], slopes[later:]
        if self._armed and len(crossings):
            if np.isnan(self._first_cross):
                self._first_cross, self._slope = float(crossings[0]), float(slopes[0])
            self._last_cross = float(crossings[-1])

    def _counted(self, pulses: _Pulses, height: float) -> Floats:
        """Edges that count, one of a slot that rings and one of a turn; books what the pulses look like."""
        if not len(pulses.edges):
            return pulses.edges
        pulses = pulses.only(self._no_ringing(pulses.rest))
        if not len(pulses.edges):
            return pulses.edges
        spans = np.empty(len(pulses.begun))
        spans[0] = 0 if self._begun is None else pulses.begun[0] - self._begun
        np.subtract(pulses.begun[1:], pulses.begun[:-1], out=spans[1:])
        widths = spans - pulses.rest
        known = slice(1 if self._begun is None else 0, None)
        self._begun = int(pulses.begun[-1])
        self._ramps = _newest(self._ramps, height / pulses.slope)
        self._spans = _newest(self._spans, spans[known])
        self._widths = _newest(self._widths, widths[known])
        return pulses.edges if self._teller is None else self._teller.feed(pulses.edges, widths)

    def _no_ringing(self, rest: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Shape (n,): the pulse begins after a rest, not while the one before it rings."""
        every = np.concatenate((self._rests, rest))
        self._rests = every[len(every) - (RING_MEMORY - 1) :]
        if every.min() >= self._ring_share * every.max() > 0:
            return np.ones(len(rest), bool)
        around = np.lib.stride_tricks.sliding_window_view(every, RING_MEMORY)
        second, longest = np.partition(around, (RING_MEMORY - 2, RING_MEMORY - 1), axis=1)[:, -2:].T
        early = around[:, RING_MEMORY - RING_FIRST] == 0
        return np.asarray(rest >= self._ring_share * np.where(early, longest, second))


def _newest(held: Floats, added: Floats) -> Floats:
    """The newest values of both, at most ``NEWEST``."""
    return np.concatenate((held, added))[-NEWEST:] if len(added) else held


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


# --- windows ---------------------------------------------------------------------------------------------


def edges_in(
    column: NDArray[Any], params: PulseParams, rate_hz: float, start: int = 0, stop: int | None = None
) -> tuple[EdgeFinder, Floats]:
    """The finder and the edges of ``column[start:stop]`` (counts, 1-D), as absolute indices.

    One trigger for all of it; when the pulse drifts by more than ``DRIFT_SHARE`` of its height, one for each
    ``LEVEL_STEP_S`` from the ``LEVEL_MEMORY_S`` about it, so that the level does not lag."""
    stop = len(column) if stop is None else stop
    trigger = trigger_of(column[start:stop], params)
    finder = EdgeFinder(params, rate_hz, trigger)
    if trigger is None:
        return finder, np.empty(0)
    found = []
    for first, last, at in _held(column, params, rate_hz, start, stop, trigger):
        finder.hold(at)
        found.append(finder.feed(column[first:last], first))
    found.append(finder.finish())
    return finder, np.concatenate(found)


def _held(
    column: NDArray[Any], params: PulseParams, rate_hz: float, start: int, stop: int, whole: Trigger
) -> Iterator[tuple[int, int, Trigger]]:
    """Pieces of a window, each with the trigger to use in it."""
    if params.level_v is not None or not _drifts(column[start:stop], params, rate_hz, whole):
        yield from ((a, min(a + PIECE, stop), whole) for a in range(start, stop, PIECE))
        return
    step = max(16, round(LEVEL_STEP_S * rate_hz))
    reach = round(LEVEL_MEMORY_S / LEVEL_STEP_S / 2)
    firsts = range(start, stop, step)
    around, past = PulseHistogram(params.full_scale_counts), deque[NDArray[np.int64]]()
    trigger, noise = whole, whole.noise
    for k in range(-reach, len(firsts)):
        if k + reach < len(firsts):
            ahead = column[firsts[k + reach] : min(firsts[k + reach] + step, stop)]
            past.append(around.count(ahead))
            around.add(past[-1])
        if len(past) > 2 * reach + 1 or k + reach >= len(firsts) > 2 * reach:
            around.add(-past.popleft())
        if k >= 0:
            trigger = choose_trigger(params, *around.levels(noise), noise) or trigger
            yield firsts[k], min(firsts[k] + step, stop), trigger


def _drifts(column: NDArray[Any], params: PulseParams, rate_hz: float, whole: Trigger) -> bool:
    """True when the middle of the pulse moves within the window."""
    step = max(16, round(LEVEL_MEMORY_S * rate_hz))
    levels = []
    for a in range(0, max(1, len(column) - step // 2), step):
        part = PulseHistogram(params.full_scale_counts)
        part.add(part.count(column[a : a + step]))
        found = choose_trigger(params, *part.levels(whole.noise), whole.noise)
        levels += [found] if found is not None else []
    if len(levels) < 2:
        return False
    middles = [t.level for t in levels]
    return max(middles) - min(middles) > DRIFT_SHARE * median([t.height for t in levels])


def find_edges(pulse: NDArray[Any], params: PulseParams, trigger: Trigger | None = None) -> Floats:
    """Edges of a whole window (counts, 1-D) with one trigger; empty when there are no pulses."""
    trigger = trigger or trigger_of(pulse, params)
    if trigger is None:
        return np.empty(0)
    finder = EdgeFinder(params, 1.0, trigger)
    pieces = [finder.feed(pulse[i : i + PIECE], i) for i in range(0, len(pulse), PIECE)]
    return np.concatenate((*pieces, finder.finish()))
