"""The analysis thread: ring -> turns -> live vectors -> steadiness -> readings, in source time.

Nothing here reads a clock to decide anything: what the samples say is the same at any pace. The vectors
of a reading are made by ``daq.signal.measure`` from the very counts that are stored with it.
"""

from __future__ import annotations

import logging
import threading
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.stand import Stand
from daq.board import Board, LiveVector, StandState
from daq.clock import Clock
from daq.drivers.base import SourceInfo
from daq.plateau import PlateauWatch, Window
from daq.ports import Incoming, Keeper, Reader
from daq.pump import Notice
from daq.raw_window import RawWindow
from daq.readings import ReadingMaker, longest_window_s
from daq.ring import Chunk
from daq.runs import Began, Ended, Hop, RunWatch
from daq.setup import signal_params
from daq.signal.blocks import BlockFitter
from daq.signal.health import LOST_PULSES, MARK_UNTOLD, ac_rms, still_vibrating
from daq.signal.shapes import CIRCLE_95, BlockFit
from daq.signal.steadiness import CHANGE_SE, Probe, block_seconds
from daq.signal.watcher import SteadyWatch
from daq.traces import Tracer
from store.records import Origin, RunDraft

HOP_S = 0.1
IDLE_HOPS, IDLE_BLOCKS = 100, 3
"""Samples kept while no block of turns is there yet: so many hops and so many blocks' worth."""
LONGEST_TURN_S = 2.5
"""Waited for at most between two pulses, or this many turns at the minimum speed where that is longer."""
READ_S = 0.25
QUIET_STEP = 4
"""Every so many samples are enough for an rms."""
QUIET_RMS_S = 1.0
"""Rms of the probes is taken over this much of the past."""

log = logging.getLogger("revmark.analysis")


class Analysis:
    """One thread's state. ``want_fresh`` alone may be called by another thread."""

    def __init__(self, stand: Stand, pump: Incoming, recorder: Keeper, board: Board, clock: Clock) -> None:
        self._stand = stand
        self._pump = pump
        self._recorder = recorder
        self._board = board
        self._clock = clock
        self._limits = stand.steadiness
        self._plateaus = PlateauWatch(self._limits.speed_band_pct)
        self._watch = RunWatch(stand.run.minimum_speed_hz, stand.run.minimum_duration_s)
        self._raw = RawWindow()
        self._origin_sample = 0
        """Added to the source's sample index, so that indices grow over re-openings of the source."""
        self._segment = -1
        self._run_from = 0
        """Sample from which the open run counts."""
        self._taken = 0
        self._speed_hz: float | None = None
        self._shown: tuple[BlockFit, tuple[LiveVector, ...]] | None = None

    def want_fresh(self, from_sample: int) -> None:
        """Take a reading whose samples all lie at or after ``from_sample``, as soon as it is steady."""
        self._plateaus.want_fresh(from_sample)

    def run(self, stop: threading.Event, beat: Callable[[], None]) -> None:
        """The thread's body: until ``stop`` is set and the ring is read empty."""
        while not self._pump.opened.wait(READ_S):
            beat()
            if stop.is_set():
                return
        if self._pump.info is None or self._pump.reader is None:
            return
        self._begin(self._pump.info)
        reason = "the analysis failed"
        try:
            while True:
                beat()
                more = self._step(self._pump.reader)
                if stop.is_set() and not more:
                    break
            reason = "daemon stopped"
        finally:
            self._close(self._watch.source_lost(reason), uses_up_mark=False)

    # --- one step ------------------------------------------------------------------------------------

    def _begin(self, info: SourceInfo) -> None:
        pulse, channels = signal_params(self._stand, info)
        self._fitter = BlockFitter(
            pulse,
            channels,
            info.rate_hz,
            block_s=block_seconds(self._limits),
            min_signal_to_noise=self._limits.min_signal_to_noise,
            longest_turn_s=max(LONGEST_TURN_S, LONGEST_TURN_S / self._stand.run.minimum_speed_hz),
        )
        self._maker = ReadingMaker(self._stand, info, pulse, channels, self._clock)
        self._tracer = Tracer(
            channels,
            tuple(c.unit for c in self._stand.channels),
            info.rate_hz,
            minimum_hz=self._stand.run.minimum_speed_hz,
        )
        self._hop = max(1, int(HOP_S * info.rate_hz))
        self._units = tuple(c.units_per_count for c in channels)
        self._steady = SteadyWatch(
            self._limits,
            [Probe(c.name, c.kind) for c in self._stand.channels],
            longest_s=longest_window_s(self._stand, info),
        )
        self._floors = np.array([self._limits.change_floor(c.kind) for c in self._stand.channels])
        self._past: deque[NDArray[Any]] = deque(maxlen=max(1, round(QUIET_RMS_S / HOP_S)))
        """Of each hop every ``QUIET_STEP``-th sample of the probes; once asked for, their rms instead."""
        self._turning_rms = self._turning_noise = np.zeros(len(channels))
        """Of the newest block while it turned; kept across a gap, after which it may have stopped or not."""
        self._recorder.set_up(info)
        self._origin = Origin(info.origin)
        self._board.post(state=self._watch.state)

    def _step(self, reader: Reader) -> bool:
        """Take one chunk or notice; False when there was neither."""
        if self._heed_until(reader.position):
            return True
        room = self._room(reader)
        chunk = reader.read(room, READ_S, fewest=room, whole=True)  # so that no pace changes a result
        if chunk is None:
            return bool(self._pump.notices)
        self._heed_until(reader.position - len(chunk.counts))  # what came while we waited for the chunk
        self._feed(replace(chunk, first_sample=chunk.first_sample + self._origin_sample))
        return True

    def _room(self, reader: Reader) -> int:
        """Frames to read at most: a hop, but not past the next notice."""
        if not self._pump.notices:
            return self._hop
        return max(1, min(self._hop, self._pump.notices[0].position - reader.position))

    def _heed_until(self, position: int) -> bool:
        """Heed the notices due at a ring counter; False when there was none."""
        heeded = False
        while self._pump.notices and self._pump.notices[0].position <= position:
            self._heed(self._pump.notices.popleft())
            heeded = True
        return heeded

    def _heed(self, notice: Notice) -> None:
        if notice.kind == "remark":
            self._recorder.event("source_remark", notice.text)
            return
        if notice.kind == "ended":
            self._close(self._watch.source_ended(notice.text))
        elif notice.kind == "broken":
            self._close(self._watch.source_ended(notice.text, "interrupted"))
            self._recorder.event("source_broken", notice.text)
        elif notice.kind == "lost":
            self._close(self._watch.source_lost(f"source lost: {notice.text}"))
            self._recorder.event("source_lost", notice.text)
        else:
            self._origin_sample = self._taken
            self._recorder.event("source_back", notice.text)
        self._forget()
        self._board.post(state=self._watch.state, detail="", speed_hz=None, vectors=(), steady=False)

    def _feed(self, chunk: Chunk) -> None:
        if chunk.lost or chunk.segment != self._segment:
            self._new_segment(chunk)
        self._taken = chunk.next_sample
        self._raw.add(chunk)
        fits = self._fitter.feed(chunk.counts, chunk.first_sample, chunk.segment)
        self._tracer.feed(chunk, self._fitter.newest_edges)
        vibrating = self._vibrating(chunk)
        moved = self._watch.step(self._hop_of(chunk, vibrating=vibrating), chunk.segment)
        if isinstance(moved, Began):
            self._open(moved)
        for fit in fits:
            self._take_fit(fit)
        if isinstance(moved, Ended):
            self._close(moved)
        elif self._watch.open:
            self._keep_traces()
        self._trim()
        self._post()

    def _new_segment(self, chunk: Chunk) -> None:
        dropped = max(0, chunk.first_sample - self._taken - chunk.lost)
        if chunk.lost:
            self._recorder.event("overrun", f"{chunk.lost} samples were not analysed in time and are lost")
        if dropped:
            self._recorder.event("dropout", f"the source lost {dropped} samples")
        if chunk.lost or dropped:
            self._board.post(lost_samples=self._board.read().lost_samples + chunk.lost + dropped)
        self._segment = chunk.segment
        self._forget()

    def _forget(self) -> None:
        """Nothing is computed across a gap."""
        self._tracer.restart()
        self._raw.clear()
        self._past.clear()
        self._steady.forget()

    def _hop_of(self, chunk: Chunk, *, vibrating: bool) -> Hop:
        turning = self._fitter.clock
        self._speed_hz = turning.speed_hz
        return Hop(
            chunk.next_sample / chunk.rate_hz,
            chunk.first_sample,
            turning.since_edge_s,
            turning.patience_s,
            self._speed_hz,
            vibrating,
        )

    def _vibrating(self, chunk: Chunk) -> bool:
        """Whether the probes move as they did while it turned; nobody asks while pulses come."""
        self._past.append(chunk.counts[::QUIET_STEP, 1:])
        newest, turning = self._steady.newest, self._fitter.clock
        if newest is not None and self._watch.state is StandState.TURNING:
            self._turning_rms, self._turning_noise = newest.ac_rms, newest.residual_sd
        if turning.since_edge_s <= turning.patience_s:
            return True
        for i, counts in enumerate(self._past):
            if counts.ndim == 2:
                self._past[i] = ac_rms(counts) * np.abs(self._units)
        now = np.sqrt(np.mean(np.square(np.stack(self._past)), axis=0))
        return still_vibrating(now, self._turning_rms, self._turning_noise)

    # --- runs and readings ---------------------------------------------------------------------------

    def _open(self, began: Began) -> None:
        self._plateaus.new_run()
        self._run_from = began.sample
        mono_s = self._raw.mono_of(began.sample)
        draft = RunDraft(
            self._recorder.set_up_id,
            self._origin,
            "",
            self._maker.utc_of(mono_s),
            mono_s,
            began.sample,
            began.segment,
        )
        self._recorder.began(draft)

    def _close(self, ended: Ended | None, *, uses_up_mark: bool = True) -> None:
        if ended is not None:
            self._tracer.stop()
            self._keep_traces()
            now_us, why = self._clock.now_us(), self._why_no_reading()
            self._recorder.ended(ended, now_us, why, uses_up_mark=uses_up_mark)

    def _keep_traces(self) -> None:
        """Hand over the run-ups and coast-downs of the run that have ended."""
        for trace in self._tracer.take(self._run_from, lambda s: self._maker.utc_of(self._raw.mono_of(s))):
            self._recorder.trace(trace)

    def _why_no_reading(self) -> str:
        if self._plateaus.speeds_hz:
            speeds = ", ".join(f"{s * 60:.0f}" for s in dict.fromkeys(self._plateaus.speeds_hz))
            return f"it was steady only at {speeds} r/min."
        verdict = self._steady.verdict
        return verdict.sentence if verdict is not None else "it was too short to be judged."

    def _take_fit(self, fit: BlockFit) -> None:
        verdict, used = self._steady.take(fit), self._steady.used
        if not (self._watch.open and verdict.steady):
            return
        if self._plateaus.takes(self._window(used)):
            self._recorder.reading(self._maker.make(self._raw, used, verdict))

    def _window(self, used: Sequence[BlockFit]) -> Window:
        turns = np.array([f.revolutions for f in used], np.float64)
        share = turns / turns.sum()
        vectors = share @ np.stack([f.vectors for f in used])
        se = np.sqrt(share**2 @ np.stack([f.se for f in used]) ** 2)
        allowed = np.maximum(self._limits.change_pct / 100 * np.abs(vectors), self._floors)
        speed_hz = float(share @ np.array([f.speed_hz for f in used]))
        return Window(
            used[0].first_sample, used[-1].t_end_s, speed_hz, vectors, np.maximum(allowed, CHANGE_SE * se)
        )

    def _trim(self) -> None:
        """Let go of what no window will ask for again; samples before the first block wait for one."""
        used = self._steady.used
        if used:
            self._raw.trim(used[0].first_sample - self._maker.margin(used[0]))
        else:
            blocks = round(IDLE_BLOCKS * block_seconds(self._limits) / HOP_S)
            self._raw.trim(self._taken - self._hop * (IDLE_HOPS + blocks))

    def _post(self) -> None:
        turning = self._watch.state is StandState.TURNING
        newest = self._steady.newest if turning else None
        verdict = self._steady.verdict if self._watch.open else None
        self._board.post(
            state=self._watch.state,
            detail="",
            speed_hz=self._speed_hz if turning else None,
            sample=self._taken,
            segment=self._segment,
            steady=bool(verdict and verdict.steady),
            still_out="" if verdict is None or verdict.steady else verdict.sentence,
            steadiness_notes=() if verdict is None else verdict.notes,
            vectors=self._live(newest),
            flags=self._live_flags(newest),
        )

    def _live(self, fit: BlockFit | None) -> tuple[LiveVector, ...]:
        """Vectors of the newest block, made once for each."""
        if fit is None:
            return ()
        if self._shown is None or self._shown[0] is not fit:
            self._shown = fit, self._made_live(fit)
        return self._shown[1]

    def _made_live(self, fit: BlockFit) -> tuple[LiveVector, ...]:
        size, lag = np.abs(fit.vectors), np.degrees(np.angle(fit.vectors)) % 360
        known = size > CIRCLE_95 * fit.se
        return tuple(
            LiveVector(c.name, c.unit, float(size[i]), float(lag[i]) if known[i] else None, float(fit.se[i]))
            for i, c in enumerate(self._stand.channels)
        )

    def _live_flags(self, newest: BlockFit | None) -> tuple[str, ...]:
        if self._watch.state is StandState.PULSES_LOST:
            return (LOST_PULSES,)
        if self._fitter.finder.mark_lost:
            return (MARK_UNTOLD,)
        return () if newest is None else newest.flags
