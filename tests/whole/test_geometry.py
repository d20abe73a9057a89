"""Any way a stand may be built and seen from leads to the same thing: the unbalance is taken out.

The simulated machine is a closed form of its own (METHODS 7.2, geometry 6.1) and knows its true rotor mark
and direction; ledger, history and casework get only what an operator types, holes and ends included. With the
run scatter off, what is left in each plane must be no more than the rounding of masses to 0.1 g in the two
neighbouring holes leaves (the check is the sim's own unbalance, not a number of the code under test).
"""

from __future__ import annotations

import itertools
import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "bench"))

from bench_seeds import Bay

from config.templates import template_text
from daq.drivers.sim.machine import build_machine, with_pieces
from daq.drivers.sim.options import SimulatedOptions
from daq.rotor_desk import fitted_rotor
from store.records import Label, MachineDraft, MarkPosition, MountDraft, Sense, WeightPlane

SENSOR_AND_PROBES_DEG = (40, 100, 250)
FLIP = {"clockwise": "counterclockwise", "counterclockwise": "clockwise"}
ROUNDING_GMM = 0.05 * 140 * np.sqrt(2) * 1.3
"""Half a step of 0.1 g in each of two holes 15 deg apart, at 140 mm."""


class Built(Bay):
    """A bay whose geometry is given: how the rotor turns, what is seen from where, where things sit."""

    def __init__(self, folder, rotation, turn_end, numbering_end, against):
        self.rotation, self.turn_end, self.numbering_end = rotation, turn_end, numbering_end
        self.against, self.mark_deg = against, 67.5
        text = template_text("simulated")
        for angle in SENSOR_AND_PROBES_DEG:
            text = text.replace('angle = "0 deg"', f'angle = "{angle} deg"', 1)
        options = SimulatedOptions(seed=5, run_scatter=0.0, runout_um=(0.0,), rotation=rotation)
        super().__init__(folder, 5, text, options)

    def mount(self, serial, job):
        numbered_drive = FLIP[self.rotation] if self.against else self.rotation
        numbering = self.seen(numbered_drive, self.numbering_end)
        planes = tuple(WeightPlane(n, 140.0, 24, numbering, z) for n, z in ((1, -220.0), (2, 220.0)))
        self.ledger.add_machine(
            MachineDraft(serial, "KR-22", 60.0, 25.0, 2.5, planes=planes, first_critical_hz=2600 / 60), ""
        )
        # the sim counts its mark against rotation; the operator counts as the holes are numbered
        typed = self.mark_deg if self.against else -self.mark_deg
        marks = tuple(MarkPosition(p.number, typed % 360) for p in planes)
        rotation = self.seen(self.rotation, self.turn_end)
        self.ledger.mount(
            MountDraft(serial, job, rotation, marks, "edge", None, "pedestals", "belt", (), ()), ""
        )
        self.machine = build_machine(self.options, serial)

    @staticmethod
    def seen(turn_from_drive, end):
        return Sense(turn_from_drive if end == "drive" else FLIP[turn_from_drive], end)

    def unbalance(self):
        fitted = fitted_rotor(self.history, self.stand)
        total = with_pieces(self.machine.unbalance_gmm, fitted, clockwise=self.rotation == "clockwise")
        return total * np.exp(-1j * np.radians(self.mark_deg))


ENDS = ("drive", "free")
CASES = list(itertools.product(("clockwise", "counterclockwise"), ENDS, ENDS, (True, False)))


@pytest.mark.parametrize(("rotation", "turn_end", "numbering_end", "against"), CASES)
def test_the_unbalance_is_taken_out_however_it_is_seen(tmp_path, rotation, turn_end, numbering_end, against):
    bay = Built(tmp_path, rotation, turn_end, numbering_end, against)
    try:
        bay.mount("F-204", "0142")
        before = np.abs(bay.unbalance())
        bay.by_trial("0142")
        bay.correct("0142", reuse=False)
        first = np.abs(bay.unbalance())
        bay.mark_deg = 200.0  # the mark is moved on the next machine; its coefficient is the same
        bay.mount("F-204", "0150")
        bay.run(Label.O)
        bay.correct("0150", reuse=True)
        second = np.abs(bay.unbalance())
    finally:
        bay.close()
    assert (before > 1000).all()
    assert (first < 3 * ROUNDING_GMM).all()
    assert (second < 3 * ROUNDING_GMM).all()
