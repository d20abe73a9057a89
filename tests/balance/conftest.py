"""A small book-keeper that writes job stories as a technician would live them, for the tests here."""

from __future__ import annotations

import json
from dataclasses import dataclass, field, replace
from pathlib import Path
from types import SimpleNamespace
from typing import Any
from uuid import UUID

import pytest

from store.balance.angles import polar
from store.records import (
    ChannelSetUp,
    Job,
    JobStory,
    Label,
    Machine,
    MarkPosition,
    Model,
    Mount,
    Origin,
    PulseSetUp,
    Reading,
    Run,
    RunState,
    Sense,
    SetUp,
    Vector,
    WeightEvent,
    WeightPlane,
)

TRUTH = Path(__file__).parent.parent / "recordings" / "truth.json"
ENDS = ("drive", "free")
CLOCKWISE = Sense("clockwise", "drive")
AGAINST = Sense("counterclockwise", "drive")


def make_id(kind: int, n: int) -> UUID:
    return UUID(int=kind * 2**64 + n)


def make_model(planes: int = 2, first_critical_hz: float | None = None, code: str = "KR-22") -> Model:
    made = tuple(WeightPlane(n + 1, 140.0, 24, AGAINST, 100.0 * n) for n in range(planes))
    return Model(make_id(1, 1), code, 1, made, first_critical_hz)


def make_machine(serial: str = "F-204", model: Model | None = None, **changes: Any) -> Machine:
    made = Machine(make_id(2, hash(serial) % 10**9), serial, 1, model or make_model(), 40.0, 2393.7 / 60, 6.3)
    return replace(made, **changes)


def make_set_up(n: int = 1, probes: int = 2, sensor_deg: float = 0.0, **changes: Any) -> SetUp:
    channels = tuple(
        ChannelSetUp(f"probe {i + 1}", "displacement", "um", str(i + 1), 7.874e-3, 1, 0.0)
        for i in range(probes)
    )
    pulse = PulseSetUp("tacho", "0", "falling", -11.5, sensor_deg)
    made = SetUp(make_id(3, n), n, "bay-1", ENDS, "drive", "top", channels, pulse, 12800.0, "replay")
    return replace(made, **changes)


@dataclass
class Book:
    """Runs, weights and mounts in the order in which they happen; ``story()`` at any time."""

    machine: Machine = field(default_factory=make_machine)
    number: str = "0142"
    set_up: SetUp = field(default_factory=make_set_up)
    speed_hz: float = 2393.7 / 60
    origin: Origin = Origin.LIVE
    mounts: list[Mount] = field(default_factory=list)
    runs: list[Run] = field(default_factory=list)
    weights: list[WeightEvent] = field(default_factory=list)
    set_ups: dict[UUID, SetUp] = field(default_factory=dict)
    clock_us: int = 1_700_000_000_000_000

    def tick(self) -> int:
        self.clock_us += 60_000_000
        return self.clock_us

    def _base(self) -> int:
        return int.from_bytes(self.number.encode(), "big") % 10**6 * 1000

    def mount(
        self, mark_deg: float = 0.0, how: str | None = "measured", rotation: Sense = CLOCKWISE, **changes: Any
    ) -> Mount:
        marks = tuple(MarkPosition(p.number, mark_deg) for p in self.machine.model.planes)
        made = Mount(
            make_id(4, self._base() + len(self.mounts)),
            make_id(5, self._base()),
            self.machine,
            rotation,
            marks,
            how,
            3.0,
            "pedestals",
            "solo",
            self.tick(),
        )
        self.mounts.append(replace(made, **changes))
        return self.mounts[-1]

    def run(
        self,
        label: Label | None,
        *vectors: complex,
        sd: float = 0.0,
        speed_hz: float | None = None,
        **changes: Any,
    ) -> Run:
        """One run with one reading; vectors in set-up order."""
        n = len(self.runs) + 1
        run_id, at = make_id(6, self._base() + n), self.tick()
        made = tuple(
            Vector(c.name, 1, v, sd**2, sd**2, 0.0, 0.0, c.unit)
            for c, v in zip(self.set_up.channels, vectors, strict=True)
        )
        reading = Reading(
            make_id(7, self._base() + n),
            run_id,
            1,
            at,
            8.0,
            self.speed_hz if speed_hz is None else speed_hz,
            300,
            {},
            (),
            made,
            label,
        )
        run = Run(
            run_id,
            self.number,
            n,
            None,
            self.mounts[-1].id,
            self.set_up.id,
            self.origin,
            "ana",
            {},
            "1",
            at,
            at + 9_000_000,
            RunState.COMPLETE,
            "pulses ended",
            None,
            (reading,),
        )
        self.set_ups[self.set_up.id] = self.set_up
        self.runs.append(replace(run, **changes))
        return self.runs[-1]

    def fit(
        self,
        plane: int,
        mass_g: float,
        hole: int | None = None,
        angle_deg: float | None = None,
        **changes: Any,
    ) -> WeightEvent:
        radius = next(p.radius_mm for p in self.machine.model.planes if p.number == plane)
        event = WeightEvent(
            make_id(8, self._base() + len(self.weights)),
            self.mounts[-1].id,
            len(self.weights),
            self.runs[-1].id if self.runs else None,
            False,
            "fitted",
            plane,
            mass_g,
            radius,
            hole,
            angle_deg,
            None,
            self.tick(),
            "ana",
        )
        self.weights.append(replace(event, **changes))
        return self.weights[-1]

    def remove(self, event: WeightEvent) -> WeightEvent:
        return self.fit(
            event.plane, event.mass_g, event.hole, event.angle_deg, act="removed", removes_id=event.id
        )

    def story(self) -> JobStory:
        job = Job(make_id(5, self._base()), self.number, self.machine.serial, (self.speed_hz,), 0)
        return JobStory(job, tuple(self.mounts), tuple(self.runs), tuple(self.weights), dict(self.set_ups))


@dataclass
class Rotor:
    """A linear rotor, V = R + A (U + W), with angles against rotation from hole 1 of plane 1."""

    A: tuple[tuple[complex, ...], ...]
    unbalance: tuple[complex, ...]
    runout: tuple[complex, ...] = (0j, 0j)

    def reads(
        self, book: Book, mark_deg: float = 0.0, sensor_with_rotation_deg: float = 0.0
    ) -> list[complex]:
        """What the probes read now (marks of Book.mount are counted against rotation)."""
        gone = {e.removes_id for e in book.weights}
        w = list(self.unbalance)
        for e in book.weights:
            if e.mount_id == book.mounts[-1].id and e.act == "fitted" and e.id not in gone:
                at = (e.hole - 1) * 15.0 if e.hole is not None else e.angle_deg + mark_deg
                w[e.plane - 1] += polar(e.mass_g * e.radius_mm, at)
        read = [
            r + sum(a * u for a, u in zip(row, w, strict=True))
            for r, row in zip(self.runout, self.A, strict=True)
        ]
        return [v * polar(1.0, -mark_deg - sensor_with_rotation_deg) for v in read]


@pytest.fixture(scope="session")
def truth() -> dict[str, Any]:
    return json.loads(TRUTH.read_text())


@pytest.fixture
def book() -> Book:
    return Book()


@pytest.fixture(scope="session")
def kit() -> Any:
    """Everything above by name, for tests that build more than one story."""
    return SimpleNamespace(
        Book=Book,
        Rotor=Rotor,
        machine=make_machine,
        model=make_model,
        set_up=make_set_up,
        CLOCKWISE=CLOCKWISE,
        AGAINST=AGAINST,
        ENDS=ENDS,
    )


@pytest.fixture(scope="session")
def rotor() -> Rotor:
    """The fan of the recordings (truth.json: coefficients, unbalance, runout)."""
    t = json.loads(TRUTH.read_text())
    A = tuple(tuple(polar(a["amp"], a["deg"]) for a in row) for row in t["coefficients_um_pk_per_gmm"])
    U = tuple(polar(u["gmm"], u["deg"]) for u in t["unbalance_gmm"])
    R = tuple(polar(r["um"], r["deg"]) for r in t["runout_um_pk"])
    return Rotor(A, U, R)
