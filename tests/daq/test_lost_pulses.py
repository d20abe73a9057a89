"""Once-per-rev lost while the probes vibrate, told from a rotor at rest, also across a gap in the samples.

Samples from closed forms: a pulse of 8 % of a turn, one probe with 1X and white noise.
"""

from __future__ import annotations

import threading
from collections import deque
from pathlib import Path
from typing import Any, cast

import numpy as np
import pytest

from config.stand import Stand, load_stand
from config.templates import template_text
from daq.analysis import Analysis
from daq.board import Board
from daq.drivers.base import SourceInfo
from daq.recording import Collector, FileTime
from daq.ring import Chunk
from daq.runs import Ended

RATE_HZ, SCALE_V = 5120.0, 30 / 2**23
UM = 0.007874
"""Volts per um, 200 mV/mil."""


class Kept(Collector):
    """Also keeps how runs ended."""

    def __init__(self) -> None:
        super().__init__(lambda _: None)
        self.ends: list[Ended] = []

    def ended(self, ended: Ended, ended_us: int, still_out: str, *, uses_up_mark: bool = True) -> None:
        del ended_us, still_out, uses_up_mark
        self.ends.append(ended)


class Source:
    """Stretches of counts, each a segment of its own."""

    def __init__(self, stop: threading.Event, stretches: list[Any]) -> None:
        self.opened = threading.Event()
        self.opened.set()
        top = 2**23
        self.info = SourceInfo(RATE_HZ, "int32", (SCALE_V,) * 3, (-top, top - 1), "simulated", "closed forms")
        self.notices: deque[Any] = deque()
        self.position = 0
        self._stop, self._stretches = stop, stretches
        self._segment, self._within, self._first = 0, 0, 0

    @property
    def reader(self) -> Source:
        return self

    def read(self, max_frames: int, timeout_s: float, *, fewest: int = 1, whole: bool = False) -> Any:
        del timeout_s, fewest, whole
        while self._segment < len(self._stretches):
            counts = self._stretches[self._segment][self._within : self._within + max_frames]
            if len(counts):
                break
            self._segment, self._within, self._first = self._segment + 1, 0, self._first + 5000
        else:
            self._stop.set()
            return None
        first = self._first
        self._within, self._first = self._within + len(counts), self._first + len(counts)
        self.position += len(counts)
        return Chunk(counts, self._segment, first, RATE_HZ, first / RATE_HZ, 0)


def stretch(seconds: float, speed_hz: float, um: float, *, pulses: bool = True) -> Any:
    """Counts of a steady speed (0 = at rest): pulse, probe, and a second probe like the first."""
    rng = np.random.default_rng(int(100 * speed_hz + um))
    turns = np.arange(int(seconds * RATE_HZ)) / RATE_HZ * speed_hz
    u = (turns + 0.5) % 1 - 0.5  # turns from the middle of the falling edge, which takes 2 % of a turn
    depth = np.clip(u / 0.02 + 0.5, 0, 1) - np.clip((u - 0.08) / 0.02 + 0.5, 0, 1)
    pulse_v = -8.0 - 7.0 * depth * (pulses and speed_hz > 0)
    volts = [pulse_v]
    for _ in range(2):
        volts.append(-10 + UM * (um * np.cos(2 * np.pi * turns) + rng.normal(0, 0.15, len(turns))))
    return np.rint(np.column_stack(volts) / SCALE_V).astype(np.int32)


@pytest.fixture
def stand(tmp_path: Path) -> Stand:
    (tmp_path / "bay.toml").write_text(template_text("simulated"))
    return load_stand(tmp_path / "bay.toml")


def after(stand: Stand, stretches: list[Any]) -> tuple[Board, Kept]:
    """The board at the end of the stretches, before the source is said to have ended."""
    stop, kept, clock = threading.Event(), Kept(), FileTime()
    board = Board(clock)
    analysis = Analysis(stand, cast("Any", Source(stop, stretches)), kept, board, clock)
    analysis.run(stop, lambda: None)
    return board, kept


FAST, SLOW, REST = (25.0, 18.0), (3.4, 0.3), (0.0, 0.0)


def test_a_rotor_at_rest_after_a_gap_has_not_lost_its_pulses(stand: Stand) -> None:
    """The probes show 0.3 um of runout over 0.15 um of noise at 200 r/min; at rest only the noise is left."""
    _, kept = after(stand, [np.vstack((stretch(4, *FAST), stretch(4, *SLOW))), stretch(6, *REST)])
    assert [(e.state, e.reason) for e in kept.ends] == [("complete", "pulses ended")]


def test_a_second_run_s_gap_is_judged_by_that_run(stand: Stand) -> None:
    whole = np.vstack((stretch(4, *FAST), stretch(3, *SLOW), stretch(4, *REST), stretch(4, *FAST)))
    _, kept = after(stand, [np.vstack((whole, stretch(3, *SLOW))), stretch(6, *REST)])
    assert [e.reason for e in kept.ends] == ["pulses ended"] * 2


def test_vibration_without_pulses_after_a_gap_keeps_the_run_open(stand: Stand) -> None:
    board, kept = after(stand, [stretch(5, *FAST), stretch(6, *FAST, pulses=False)])
    assert board.read().flags == ("once_per_rev_lost",)
    assert [(e.state, e.reason) for e in kept.ends] == [("interrupted", "daemon stopped")]


def test_vibration_without_pulses_keeps_the_run_open(stand: Stand) -> None:
    board, kept = after(stand, [np.vstack((stretch(5, *FAST), stretch(6, *FAST, pulses=False)))])
    assert board.read().flags == ("once_per_rev_lost",)
    assert board.read().vectors == ()
    assert kept.ends[0].state == "interrupted"
