"""From blocks to verdicts: keeps what judging needs, and lets the window grow until its vectors are known.

The analysis and the tests drive this one class. Source time only; bounded memory.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from config.steadiness import SteadinessLimits
from daq.signal.shapes import BlockFit, Complexes, Floats
from daq.signal.steadiness import Probe, Verdict, judge, needed, shortest, unbroken

KEEP_SHARE = 0.9
"""Of a grown window that is no longer quiet, the newest part tried instead."""
QUIET_SHARE = 0.7
"""A stretch without change proves something from this share of the thermal time constant on (REUSE.md (a):
to come after T is d / (e^(T/tau) - 1): as much again at 0.7 tau)."""
QUIET_MARKS = 64
"""So many windows of the past at most tell how long it has been quiet."""


class SteadyWatch:
    """Takes blocks in order; after each, ``verdict`` and ``used``, the blocks of the window it is about."""

    def __init__(
        self, limits: SteadinessLimits, probes: Sequence[Probe], *, longest_s: float | None = None
    ) -> None:
        """``longest_s`` bounds the window besides the limits' own longest (memory); the shortest stands."""
        self._limits = limits
        self._probes = tuple(probes)
        longest = limits.longest_window_s if longest_s is None else min(longest_s, limits.longest_window_s)
        self._longest_s = max(limits.window_s, longest)
        self._quiet = _Quiet(limits, probes)
        self.forget()

    def forget(self) -> None:
        """Nothing is judged across what comes next (a gap in the samples)."""
        self._fits: list[BlockFit] = []
        self._anchor = 0
        self.used: Sequence[BlockFit] = ()
        self.verdict: Verdict | None = None
        self._quiet.forget()

    @property
    def newest(self) -> BlockFit | None:
        return self._fits[-1] if self._fits else None

    def take(self, fit: BlockFit) -> Verdict:
        """Judge with one block more."""
        self._fits.append(fit)
        self._fits = list(unbroken(self._fits))
        self.used, verdict = self._grown()
        self._anchor = self.used[0].first_sample
        notes = self._quiet.notes(self.used, verdict)
        self.verdict = replace(verdict, notes=notes) if notes else verdict
        self._drop()
        return self.verdict

    # --- the window ----------------------------------------------------------------------------------

    def _grown(self) -> tuple[Sequence[BlockFit], Verdict]:
        """The window and its verdict: as long as it was and a block more, while that is quiet and needed."""
        fewest = len(shortest(self._fits, self._limits))
        most = sum(f.first_sample >= self._anchor for f in self._fits)
        while most > fewest and self._length_s(most) > self._longest_s:
            most -= 1
        count = max(fewest, most)
        if self._was_settled:  # then as many as before may do
            count = max(fewest, count - 1)
        verdict = self._judged(count)
        if not verdict.settled and count < most:
            count, verdict = most, self._judged(most)
        while count > fewest and not (verdict.settled or verdict.waits):
            count = max(fewest, int(KEEP_SHARE * count))
            verdict = self._judged(count)
        while count > fewest and verdict.settled and (less := self._judged(count - 1)).settled:
            count, verdict = count - 1, less
        return self._fits[-count:], self._at_the_longest(verdict, count)

    @property
    def _was_settled(self) -> bool:
        return self.verdict is not None and self.verdict.settled

    def _judged(self, count: int) -> Verdict:
        return judge(self._fits, self._limits, self._probes, window=self._fits[-count:])

    def _length_s(self, count: int) -> float:
        return self._fits[-1].t_end_s - self._fits[-count].t_start_s

    def _at_the_longest(self, verdict: Verdict, count: int) -> Verdict:
        """Say of what more averaging would put right that the longest window does not."""
        length_s = self._length_s(count)
        block_s = length_s / count
        figures = tuple(
            replace(f, longest_s=self._longest_s)
            if not f.ok and f.more_s is not None and length_s + block_s > self._longest_s
            else f
            for f in verdict.figures
        )
        return replace(verdict, figures=figures)

    def _drop(self) -> None:
        held = sum(f.first_sample < self._anchor for f in self._fits)
        del self._fits[: min(held, needed(self._fits, self._limits))]


@dataclass(frozen=True, slots=True, eq=False)
class _Mark:
    """Where the vectors were at some time in the past."""

    since_s: float
    speed_hz: float
    vectors: Complexes


class _Quiet:
    """For how long the vectors have been where they are, as far as the thermal time constant asks."""

    def __init__(self, limits: SteadinessLimits, probes: Sequence[Probe]) -> None:
        self._limits = limits
        self._floors: Floats = np.array([limits.change_floor(p.kind) for p in probes])
        self._proof_s = QUIET_SHARE * limits.thermal_time_constant_s
        self._every_s = max(limits.window_s, self._proof_s / (QUIET_MARKS - 2))
        self._marks: deque[_Mark] = deque(maxlen=QUIET_MARKS)

    def forget(self) -> None:
        self._marks.clear()

    def notes(self, window: Sequence[BlockFit], verdict: Verdict) -> tuple[str, ...]:
        """A sentence when it has been quiet for less than proves anything."""
        if self._proof_s <= 0:
            return ()
        turns = np.array([f.revolutions for f in window], np.float64)
        share = turns / turns.sum()
        now = _Mark(
            window[0].t_start_s,
            float(share @ np.array([f.speed_hz for f in window])),
            share @ np.stack([f.vectors for f in window]),
        )
        since_s = self._since(now)
        if not self._marks or now.since_s - self._marks[-1].since_s >= self._every_s:
            self._marks.append(now)
        quiet_s = window[-1].t_end_s - since_s
        if not verdict.steady or quiet_s >= self._proof_s:
            return ()
        short = f"below {self._proof_s / 60:.0f} min slow warming does not show"
        return (f"quiet for {quiet_s / 60:.1f} min only; {short}",)

    def _since(self, now: _Mark) -> float:
        """Since when the vectors and the speed have been within what is allowed of now."""
        allowed = np.maximum(self._limits.change_pct / 100 * np.abs(now.vectors), self._floors)
        since_s = now.since_s
        for mark in reversed(self._marks):
            faster = abs(mark.speed_hz - now.speed_hz) > self._limits.speed_band_pct / 100 * now.speed_hz
            if faster or (np.abs(mark.vectors - now.vectors) > allowed).any():
                break
            since_s = mark.since_s
        return since_s
