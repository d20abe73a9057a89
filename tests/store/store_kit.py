"""Builders for the store's tests: drafts with every field filled, a stand in a few calls."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any
from uuid import UUID

import numpy as np

from store.again import Remeasured, RunAgain
from store.history import History
from store.ledger import Ledger
from store.records import (
    ChannelSetUp,
    Label,
    Level,
    MachineDraft,
    Mark,
    MarkPosition,
    Measured,
    Mount,
    MountDraft,
    Origin,
    PieceDraft,
    PulseSetUp,
    RawSamples,
    Reading,
    ReadingDraft,
    Run,
    RunDraft,
    RunState,
    Sense,
    SetUpDraft,
    Vector,
    WeightPlane,
)


class FakeClock:
    """Rises by one millisecond of wall time and of monotonic time with each look; may be set."""

    def __init__(self, us: int = 1_700_000_000_000_000) -> None:
        self.us = us
        self.mono = 100.0

    def now_us(self) -> int:
        self.us += 1000
        return self.us

    def monotonic(self) -> float:
        self.mono += 0.001
        return self.mono


CLOCKWISE = Sense("clockwise", "drive")

SET_UP = SetUpDraft(
    stand="bay-1",
    ends=("drive", "free"),
    angles_seen_from="drive",
    zero="top dead centre",
    channels=(
        ChannelSetUp(
            "probe 1", "displacement", "um", "1", 7874.0, -1, 45.0, gap_low_v=-16.0, gap_high_v=-4.0
        ),
        ChannelSetUp("probe 2", "displacement", "um", "2", 7874.0, -1, 135.0),
    ),
    pulse=PulseSetUp("tacho", "0", "falling", -11.5, 0.0),
    rate_hz=25_600.0,
    driver="simulated",
)

MACHINE = MachineDraft(
    serial="F-204",
    model_code="KR-22",
    rotor_mass_kg=40.0,
    service_hz=25.0,
    grade_mm_s=2.5,
    bearing_loads_kg=(20.0, 20.0),
    planes=(
        WeightPlane(1, 140.0, 24, CLOCKWISE, 100.0),
        WeightPlane(2, 120.0, 0, CLOCKWISE, 400.0),
    ),
    first_critical_hz=61.0,
)

MOUNT = MountDraft(
    serial="F-204",
    job_number="0142",
    rotation=Sense("counterclockwise", "drive"),
    marks=(MarkPosition(1, 30.0),),
    mark_how="degree wheel",
    mark_width_deg=4.0,
    support="hard bearings",
    coupling="belt",
    fitted=(),
    speeds_hz=(),
)


def vector(value: complex, channel: str = "probe 1", order: int = 1) -> Vector:
    return Vector(channel, order, value, 0.0004, 0.0005, 0.00001, 0.02, "um")


def reading(value: complex = 10 + 0j, speed_hz: float = 25.0, **other: Any) -> ReadingDraft:
    """A plateau with the same vector on both probes and a little of 2X."""
    draft = ReadingDraft(
        at_us=1_700_000_100_000_000,
        duration_s=4.0,
        speed_hz=speed_hz,
        revolutions=100,
        segment=0,
        first_sample=51_200,
        mono_s=130.0,
        steadiness={"speed": 0.0001, "drift": 0.02},
        flags=("near gap limit",),
        vectors=(vector(value), vector(value, "probe 2"), vector(0.1j, order=2)),
        raw=None,
    )
    return replace(draft, **other)


def measured(value: complex = 10 + 0j, **other: Any) -> Measured:
    """How such a reading was measured, with a level for each probe."""
    draft = Measured(
        why="live",
        set_up_id=None,
        speed_hz=25.0,
        revolutions=100,
        duration_s=4.0,
        flags=("near gap limit",),
        figures={"missed": 0},
        setting={"rate_hz": 25_600.0},
        software="revmark test",
        numpy="2.4.6",
        processor="x86_64",
        vectors=(vector(value), vector(value, "probe 2"), vector(0.1j, order=2)),
        levels=(Level("probe 1", -9.8, 0.4, 25.0, 7.1, "um"), Level("probe 2", -10.1, 0.3, 24.0, 7.0, "um")),
    )
    return replace(draft, **other)


def samples(seed: int = 1, frames: int = 200) -> RawSamples:
    counts = np.random.default_rng(seed).integers(-20_000, 20_000, size=(frames, 3), dtype=np.int16)
    return RawSamples(counts, (0.001, 0.002, 0.003), 25_600.0, 51_200)


class Stand:
    """A store in use: ledger, history, and the short ways tests need."""

    def __init__(self, path: Path, clock: FakeClock) -> None:
        self.path = path
        self.clock = clock
        self.ledger = Ledger.open(path, clock=clock, software="revmark test")
        self.history = History.open(path)
        self.set_up_id = self.ledger.set_up(SET_UP).id
        self.ledger.add_machine(MACHINE, "ana")
        self.keys = 0

    def close(self) -> None:
        self.history.close()
        self.ledger.close()

    def mount(self, **other: Any) -> Mount:
        return self.ledger.mount(replace(MOUNT, **other), "ana")

    def begin(self, origin: Origin = Origin.LIVE) -> Run:
        return self.ledger.open_run(
            RunDraft(self.set_up_id, origin, "ana", self.clock.now_us(), 120.0, 1000, 0, {"load": "none"})
        )

    def end(self, run_id: UUID, detail: str = "") -> tuple[Run, Mark | None]:
        return self.ledger.close_run(
            run_id, RunState.COMPLETE, "no pulses", self.clock.now_us(), detail, fast_enough=True
        )

    def key(self) -> str:
        self.keys += 1
        return f"key-{self.keys}"

    def ask(self, label: Label = Label.O, **other: Any) -> Mark:
        return self.ledger.ask_mark(self.key(), label, "ana", **{"slow_roll_limit_hz": 5.0, **other})

    def run(
        self, label: Label | None, value: complex = 10 + 0j, speed_hz: float = 25.0, **other: Any
    ) -> tuple[Run, Reading]:
        """A whole run: mark asked, pulses begin, one plateau, pulses end."""
        if label is not None:
            self.ask(label, choose="next", confirmed=True)
        run = self.begin()
        found, _ = self.ledger.add_reading(run.id, reading(value, speed_hz, **other), slow_roll_limit_hz=5.0)
        return self.end(run.id)[0], found

    def again(
        self, name: str, value: complex, set_up: SetUpDraft | None = None, why: str = "read again"
    ) -> Run:
        """Every reading of a run measured again, each probe with that vector."""
        of = self.history.run(name)
        readings = tuple(
            Remeasured(
                r.id,
                max((m.version for m in self.history.measured(r.id)), default=0),
                measured(value, why=why),
            )
            for r in of.readings
        )
        (kept,) = self.ledger.keep_again([RunAgain(of.id, of.set_up_id, set_up, readings)], why, "ana")
        return kept

    def fit(self, mass_g: float = 3.0, hole: int = 16, after_run: str | None = None) -> None:
        self.ledger.fit(PieceDraft(1, mass_g, hole), "ana", after_run)
