"""A recording measured in place: the daemon's own analysis, without a daemon, a store or a thread.

The driver's blocks go through the ring into ``daq.analysis.Analysis`` just as they do in the daemon, so the
same file gives the same readings, to the last bit.
"""

from __future__ import annotations

import os
import threading
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import Any
from uuid import UUID

from config.errors import DriverError, Refusal
from config.stand import Stand
from daq.analysis import Analysis
from daq.board import Board
from daq.clock import SystemClock
from daq.drivers.base import EndOfSource, SourceInfo
from daq.drivers.registry import AnyDriver, make_driver
from daq.pump import Notice
from daq.ring import Chunk, Ring
from daq.runs import Ended
from daq.setup import channel_plan, set_up_draft
from store.records import Reading, ReadingDraft, RunDraft, SetUp, Trace

RING_S = 4.0
"""Room for one hop of the analysis and the driver's longest block."""
READ_S = 5.0
NOBODY = UUID(int=0)

Took = Callable[["Plateau"], None]


@dataclass(frozen=True, slots=True)
class Plateau:
    """A steady plateau of a recording."""

    run: int
    """Run of the recording, from 1."""
    number: int
    """Within the run, from 1."""
    begins_s: float
    """From the start of the recording."""
    draft: ReadingDraft
    """Without its samples."""


@dataclass(slots=True)
class Found:
    """What a recording held."""

    source: str = ""
    plateaus: list[Plateau] = field(default_factory=list)
    traces: list[Trace] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    """What went wrong, and why a run gave no plateau."""
    runs: int = 0
    seconds: float = 0.0


class FileTime(SystemClock):
    """Times of what is measured count from the start of the recording."""

    def monotonic(self) -> float:
        return 0.0

    def now_us(self) -> int:
        return 0


class Recording:
    """A driver as the analysis reads it: blocks are fetched when it asks for frames."""

    def __init__(self, driver: AnyDriver, stop: threading.Event) -> None:
        self._driver = driver
        self._stop = stop
        self.opened = threading.Event()
        self.info: SourceInfo = driver.open()
        self.opened.set()
        self.notices: deque[Notice] = deque()
        self._ring = Ring(int(RING_S * self.info.rate_hz), len(self.info.volts_per_count), self.info.dtype)
        self._taken = self._ring.reader("recording")

    @property
    def reader(self) -> Recording:
        return self

    @property
    def position(self) -> int:
        return self._taken.position

    @property
    def seconds(self) -> float:
        return self._ring.written / self.info.rate_hz

    def read(
        self, max_frames: int, timeout_s: float, *, fewest: int = 1, whole: bool = False
    ) -> Chunk | None:
        """As ``daq.ring.RingReader.read``; ``timeout_s`` is not waited for. Raises DriverError."""
        del timeout_s, whole
        while self._taken.backlog < fewest and not self._stop.is_set():
            self._fetch()
        return self._taken.read(max_frames, 0.0)

    def _fetch(self) -> None:
        came = self._driver.read(READ_S)
        if isinstance(came, EndOfSource):
            kind = "ended" if came.error is None else "broken"
            self.notices.append(Notice(self._ring.written, kind, came.reason))
            self._stop.set()
        elif came is None:
            raise DriverError("The recording gives no samples.", "Look at the file.", kind="timeout")
        else:
            end_s = (came.first_sample + len(came.counts)) / came.rate_hz
            self._ring.write(replace(came, mono_s=end_s))


class Collector:
    """What the analysis found, kept in memory without the samples."""

    set_up_id = NOBODY

    def __init__(self, took: Took) -> None:
        self.found = Found()
        self._took = took
        self._of_run = 0

    def set_up(self, info: SourceInfo) -> None:
        """Nothing is recorded; the set-up is the stand file's."""

    def began(self, draft: RunDraft) -> None:
        del draft
        self.found.runs += 1
        self._of_run = 0

    def reading(self, draft: ReadingDraft) -> None:
        self._of_run += 1
        plateau = Plateau(self.found.runs, self._of_run, draft.mono_s, replace(draft, raw=None))
        self.found.plateaus.append(plateau)
        self._took(plateau)

    def trace(self, draft: Trace) -> None:
        self.found.traces.append(draft)

    def ended(self, ended: Ended, ended_us: int, still_out: str, *, uses_up_mark: bool = True) -> None:
        del ended, ended_us, uses_up_mark
        if not self._of_run:
            self.found.notes.append(f"No steady plateau in run {self.found.runs}: {still_out}")

    def event(self, kind: str, text: str) -> None:
        del kind
        self.found.notes.append(text)


def replay(stand: Stand, file: Path, options: Mapping[str, Any], took: Took = lambda _: None) -> Found:
    """Measure a recording; ``took`` is told each plateau as it is found.

    ``options``: of the replay driver (see ``driver_options``). Raises DriverError: the file cannot be read,
    or does not fit the stand file's channels."""
    driver = make_driver("replay", options, channel_plan(stand), clock=SystemClock(), folder=Path.cwd())
    stop, keeper, clock = threading.Event(), Collector(took), FileTime()
    try:
        recording = Recording(driver, stop)
        driver.act("next", file=os.fspath(file))
        keeper.found.source = f"{file.name}: {recording.info.rate_hz:.6g} samples/s"
        Analysis(stand, recording, keeper, Board(clock), clock).run(stop, lambda: None)
        keeper.found.seconds = recording.seconds
    finally:
        driver.close()
    if not keeper.found.runs:
        keeper.found.notes.append("No run: the rotor never passed the minimum speed for the minimum time.")
    return keeper.found


def driver_options(
    stand: Stand, file: Path, full_scale: str | None, columns: Mapping[str, int]
) -> dict[str, Any]:
    """The replay driver's options for one file: those of a stand file that replays, else what is given here.

    Raises Refusal when nothing says which voltage the highest count means, or for a column of no input."""
    own = dict(stand.source.options) if stand.source.driver == "replay" else {}
    if full_scale is not None:
        own["full_scale"] = full_scale
    if "full_scale" not in own:
        raise Refusal(
            f"The stand file reads from {stand.source.driver}, so nothing says which voltage the highest "
            f"number in {file.name} means.",
            'Say it: --full-scale "30 V".',
        )
    known = (stand.pulse.input, *(c.input for c in stand.channels))
    strange = next((c for c in columns if c not in known), None)
    if strange is not None:
        raise Refusal(
            f"--column names the input {strange!r}, and no channel of {stand.file.name} has it.",
            f"Its inputs are {', '.join(known)}.",
        )
    if columns:
        own["columns"] = {**own.get("columns", {}), **columns}
    return {**own, "files": [os.fspath(file)], "pace": "fast"}


def as_reading(plateau: Plateau) -> Reading:
    """The plateau as a record, for whatever shows readings; it has no identity and its time is the file's."""
    draft, made = plateau.draft, plateau.draft.measured
    return Reading(
        id=NOBODY,
        run_id=NOBODY,
        number=plateau.number,
        at_us=draft.at_us,
        duration_s=draft.duration_s,
        speed_hz=draft.speed_hz,
        revolutions=draft.revolutions,
        steadiness=draft.steadiness,
        flags=draft.flags,
        vectors=draft.vectors,
        levels=made.levels if made else (),
        figures=made.figures if made else {},
    )


def as_set_up(stand: Stand) -> SetUp:
    """The stand file's set-up as a record, for where probes point."""
    draft = set_up_draft(stand, 1.0)
    return SetUp(id=NOBODY, revision=0, **{f.name: getattr(draft, f.name) for f in fields(draft)})
