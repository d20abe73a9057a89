"""``revmark stand check --live`` on the two sources that need no hardware, as an operator types it."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from config.templates import template_text

RECORDINGS = Path(__file__).parents[1] / "recordings"


@pytest.mark.slow
def test_a_sound_simulated_stand_has_nothing_wrong(operator):
    text = template_text("simulated").replace('pace = "real"', "pace = 10")
    (operator.folder / "bay.toml").write_text(text)
    printed = operator.type("stand", "check", "bay.toml", "--live", "--seconds", "2")
    assert printed.rstrip().endswith("nothing is wrong")
    assert "pulses a minute" in printed
    assert max(map(len, printed.splitlines())) <= 80
    found = operator.json("stand", "check", "bay.toml", "--live", "--seconds", "2")
    assert found["pulse"]["pulses_per_minute"] == pytest.approx(1500, rel=1e-3)
    assert [c["gap_v"] for c in found["channels"]] == pytest.approx([-10.0, -9.4], abs=0.01)
    assert not list(operator.folder.glob("*.sqlite"))


@pytest.mark.slow
def test_a_clipped_probe_is_named_and_is_exit_code_1(operator):
    text = template_text("simulated").replace('pace = "real"', "pace = 10")
    fault = '[[source.options.faults]]\nkind = "clip"\nseconds = 60.0\n\n[once_per_rev]'
    (operator.folder / "bay.toml").write_text(text.replace("[once_per_rev]", fault))
    printed = operator.type("stand", "check", "bay.toml", "--live", "--seconds", "2", code=1)
    assert "wrong: probe 1 is clipped" in printed


@pytest.mark.slow
def test_a_recording_is_looked_at_too(operator):
    shutil.copy(RECORDINGS / "fan-O.wav", operator.folder)
    text = template_text("replay").replace('pace = "real"', 'pace = "fast"')
    files = text[text.index("files = [") : text.index("]", text.index("files = [")) + 1]
    (operator.folder / "fan.toml").write_text(text.replace(files, 'files = ["fan-O.wav"]'))
    found = operator.json("stand", "check", "fan.toml", "--live", "--seconds", "3")
    # tests/recordings/truth.json: 2393.7 r/min in the dwell, level at half depth -11.5 V
    assert found["pulse"]["pulses_per_minute"] == pytest.approx(2393.7, rel=1e-3)
    assert found["pulse"]["level_v"] == pytest.approx(-11.5, abs=0.01)
    assert found["trouble"] == []
