"""How many of N seeds of the demo end inside tolerance, by trial weights and by reuse.

Run it:  python tests/bench/bench_seeds.py [SEEDS]

Each seed is the demo's two jobs with the demo's own arithmetic: the machines of the simulated source (closed
form, run scatter and all), readings with the standard error the daemon measures, the real ledger, history,
trial advice, correction in real holes and verdict. Only the samples are left out: a reading is its vector.
Printed beside: the true residual against the tolerance, which the stand itself does not know.
"""

from __future__ import annotations

import sys
import tempfile
from itertools import count
from pathlib import Path

import numpy as np

from config.stand import check_stand
from config.templates import template_text
from daq.clock import SystemClock
from daq.daemon import __version__
from daq.drivers.registry import options_problems
from daq.drivers.sim.machine import ProbeView, build_machine, run_factors, with_pieces
from daq.drivers.sim.options import SimulatedOptions
from daq.rotor_desk import fitted_rotor
from daq.setup import channel_plan, set_up_draft
from store import consult
from store.database import create_store
from store.history import History
from store.ledger import Ledger
from store.records import (
    Label,
    MachineDraft,
    MarkPosition,
    MountDraft,
    Origin,
    PieceDraft,
    ReadingDraft,
    RunDraft,
    RunState,
    Sense,
    Vector,
    WeightPlane,
)

SPEED_HZ, READING_SE_UM = 25.0, 0.0025
NUMBERED = Sense("counterclockwise", "drive")
PLANES = tuple(WeightPlane(n, 140.0, 24, NUMBERED, z) for n, z in ((1, -220.0), (2, 220.0)))


class Bay:
    """The demo's bay for one seed, without samples."""

    def __init__(
        self, folder: Path, seed: int, text: str | None = None, options: SimulatedOptions | None = None
    ) -> None:
        file = folder / f"bay-{seed}.toml"
        file.write_text(text or template_text("simulated"))
        self.stand = check_stand(file, options_problems)
        self.options = options or SimulatedOptions(seed=seed)
        self.view = ProbeView(self.options, channel_plan(self.stand))
        create_store(self.stand.store_path, clock=SystemClock(), software=__version__)
        self.ledger = Ledger.open(self.stand.store_path, clock=SystemClock(), software=__version__)
        self.history = History.open(self.stand.store_path)
        self.set_up = self.ledger.set_up(set_up_draft(self.stand, 12800.0))
        self.noise = np.random.default_rng(seed)
        self.starts, self.keys = count(1), count(1)

    def close(self) -> None:
        self.history.close()
        self.ledger.close()

    def mount(self, serial: str, job: str) -> None:
        self.ledger.add_machine(
            MachineDraft(serial, "KR-22", 60.0, SPEED_HZ, 2.5, planes=PLANES, first_critical_hz=2600 / 60), ""
        )
        marks = tuple(MarkPosition(p.number, 0.0) for p in PLANES)
        self.ledger.mount(
            MountDraft(
                serial, job, Sense("clockwise", "drive"), marks, "edge", None, "pedestals", "belt", (), ()
            ),
            "",
        )
        self.machine = build_machine(self.options, serial)

    def unbalance(self) -> np.ndarray:
        rotor = fitted_rotor(self.history, self.stand)
        return with_pieces(self.machine.unbalance_gmm, rotor, clockwise=True)

    def run(self, label: Label):  # type: ignore[no-untyped-def]
        """One run with one reading, labelled; returns the reading."""
        factors = run_factors(self.options, self.machine.serial, next(self.starts), 2)
        values = self.view.vectors(self.machine.rotor, self.unbalance(), factors, np.array([SPEED_HZ]))[0]
        values = values + READING_SE_UM * (self.noise.normal(size=2) + 1j * self.noise.normal(size=2))
        variance = READING_SE_UM**2
        vectors = tuple(
            Vector(c.name, 1, complex(v), variance, variance, 0.0, 0.006, "um")
            for c, v in zip(self.stand.channels, values, strict=True)
        )
        key = f"key-{next(self.keys):08d}"
        self.ledger.ask_mark(key, label, "")
        now = SystemClock().now_us()
        run = self.ledger.open_run(RunDraft(self.set_up.id, Origin.SIMULATED, "", now, 0.0, 0, 0))
        draft = ReadingDraft(now, 3.2, SPEED_HZ, 80, 0, 0, 0.0, {}, (), vectors, None)
        reading, mark = self.ledger.add_reading(run.id, draft)
        assert mark is not None, "the mark takes the run's only reading"
        self.ledger.close_run(run.id, RunState.COMPLETE, "pulses ended", now, fast_enough=True)
        return reading

    def by_trial(self, job: str) -> None:
        self.run(Label.O)
        for plane in (1, 2):
            advice = consult.trial(self.history, job, plane)
            self.ledger.fit(PieceDraft(plane, round(advice.mass_g, 1), advice.hole or 1), "")
            self.run(Label.O_T)
            self.ledger.remove(plane, "", every=True)

    def correct(self, job: str, *, reuse: bool):  # type: ignore[no-untyped-def]
        """(verdict, true residual over each plane's share) after one correction."""
        for plane in consult.correction(self.history, job, reuse=reuse).planes:
            for piece in plane.pieces:
                self.ledger.fit(PieceDraft(piece.plane, round(piece.mass_g, 1), piece.hole), "")
        reading = self.run(Label.CHECK)
        verdict = consult.verdict(self.history, job, reading.id)
        shares = [p.share_gmm for p in verdict.planes]
        return verdict, float(np.max(np.abs(self.unbalance()) / shares))


def main(seeds: int) -> None:
    rows = []
    with tempfile.TemporaryDirectory() as name:
        for seed in range(seeds):
            bay = Bay(Path(name), seed)
            bay.mount("F-204", "0142")
            bay.by_trial("0142")
            trial, trial_true = bay.correct("0142", reuse=False)
            bay.mount("F-211", "0143")
            bay.run(Label.O)
            reuse, reuse_true = bay.correct("0143", reuse=True)
            bay.close()
            rows.append((trial.in_tolerance, trial_true, reuse.in_tolerance, reuse_true))
    for title, at in (("trial weights", 0), ("reuse", 2)):
        judged = sum(row[at] is True for row in rows)
        true = np.array([row[at + 1] for row in rows])
        print(
            f"{title}: {judged} of {seeds} seeds judged inside, {np.sum(true <= 1)} truly inside; true "
            f"residual over its share, worst plane: median {np.median(true):.2f}, "
            f"p90 {np.quantile(true, 0.9):.2f}, max {true.max():.2f}"
        )
    both = sum(row[0] is True and row[2] is True for row in rows)
    print(f"both machines inside (the demo's exit 0): {both} of {seeds}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 200)
