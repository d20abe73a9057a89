"""The live check on samples of known make: numbers are those the samples were made with."""

from __future__ import annotations

import numpy as np
import pytest

from config.stand import load_stand
from config.templates import template_text
from daq.drivers.base import SourceInfo
from daq.livecheck import report

RATE, SCALE = 12_800.0, 30.0 / 32768
INFO = SourceInfo(RATE, "int16", (SCALE,) * 3, (-32768, 32767), "simulated", "made for the test")


@pytest.fixture
def stand(tmp_path):
    file = tmp_path / "bay.toml"
    file.write_text(template_text("simulated"))
    return load_stand(file)


def samples(hz=25.0, seconds=4.0, gap=(-10.0, -9.4), amplitude=(10.0, 20.0), width_deg=12.0, ramp=4.0):
    """Volts of a notch of 7 V under -8 V with edges of ``ramp`` samples, and two probes at 7.874 mV/um."""
    rng = np.random.default_rng(2)
    n = np.arange(int(seconds * RATE))
    turn = (n * hz / RATE) % 1.0
    per_turn = RATE / hz
    depth = np.minimum(turn * per_turn, (width_deg / 360 - turn) * per_turn)
    volts = np.empty((len(n), 3))
    volts[:, 0] = -8 - 7 * np.clip(depth / ramp, 0, 1)
    for k in (0, 1):
        um = amplitude[k] * np.cos(2 * np.pi * turn - k) + rng.normal(0, 0.25, len(n))
        volts[:, 1 + k] = gap[k] + 0.007874 * um
    return np.round(volts / SCALE).clip(-32768, 32767).astype(np.int16)


def test_a_sound_stand_has_nothing_wrong(stand):
    found = report(samples(), stand, INFO, 0)
    assert found.trouble == ()
    assert found.pulse.pulses_per_minute == pytest.approx(1500, rel=1e-3)
    assert found.pulse.level_v == pytest.approx(-11.5, abs=0.02)
    # at half depth the notch is 12 deg less two half edges of 2 samples (0.703 deg each): 9.2 deg
    assert found.pulse.width_deg == pytest.approx(9.2, abs=1.0)
    assert found.pulse.samples_per_turn == pytest.approx(512.0, rel=1e-3)
    assert 3 <= found.pulse.samples_on_edge <= 5
    assert [c.gap_v for c in found.channels] == pytest.approx([-10.0, -9.4], abs=0.002)
    assert [c.noise for c in found.channels] == pytest.approx([0.25, 0.25], rel=0.1)
    assert found.channels[0].range_high_v == pytest.approx(30.0, abs=0.01)


def test_a_rotor_that_does_not_turn_is_said(stand):
    still = samples()
    still[:, 0] = still[3000, 0]
    found = report(still, stand, INFO, 0)
    assert "shows no pulses" in found.trouble[0]
    assert found.pulse.level_v is None


@pytest.mark.parametrize(
    ("word", "change"),
    [
        ("is clipped", {"gap": (-29.95, -9.4), "amplitude": (30.0, 20.0)}),
        ("has a gap of -17.00 V", {"gap": (-17.0, -9.4)}),
        ("deg of the turn", {"width_deg": 252.0}),
        ("samples on the edge", {"ramp": 0.5}),
        ("samples a turn", {"hz": 800.0, "width_deg": 120.0, "ramp": 2.0}),
    ],
)
def test_each_fault_is_named(stand, word, change):
    found = report(samples(**change), stand, INFO, 0)
    assert any(word in sentence for sentence in found.trouble), found.trouble


def test_a_flat_probe_and_lost_samples_are_named(stand):
    counts = samples()
    counts[:, 2] = 0
    found = report(counts, stand, INFO, 512)
    assert any("probe 2 is flat" in t for t in found.trouble)
    assert any("512 samples were lost" in t for t in found.trouble)
