"""Every template passes the check with its driver's real options, and says what the issue wants of it."""

from __future__ import annotations

import json
import wave
from pathlib import Path

import pytest

from config.stand import Stand, check_stand
from config.templates import FOLDER, template_names, template_text
from daq.drivers.registry import driver_names, options_problems

RECORDINGS = Path(__file__).parents[1] / "recordings"


def stand_of(name: str) -> Stand:
    return check_stand(FOLDER / f"{name}.toml", options_problems)


def test_a_template_is_named_after_its_driver() -> None:
    """``daqmx-usb``: driver and device; a driver may have several."""
    drivers = {name: stand_of(name).source.driver for name in template_names()}
    assert all(name.partition("-")[0] == driver for name, driver in drivers.items())
    assert {"replay", "simulated", "daqmx"} <= set(drivers.values()) <= set(driver_names())


@pytest.mark.parametrize("name", ["replay", "simulated"])
def test_a_stand_without_a_device_is_quick_and_has_a_store_of_its_own(name: str) -> None:
    stand = stand_of(name)
    assert stand.steadiness_keys.preset == "small"
    assert "pace" in stand.source.options
    assert stand.store_path.name == f"{name}-{name}.sqlite"


@pytest.mark.parametrize("name", template_names())
def test_a_template_is_right_and_commented(name: str) -> None:
    stand = stand_of(name)
    assert stand.channels
    text = template_text(name)
    keys = [line for line in text.splitlines() if " = " in line and not line.startswith("#")]
    assert sum("#" in line for line in keys) > len(keys) / 2
    assert max(map(len, text.splitlines())) <= 110


def test_an_unknown_template_is_no_file_name() -> None:
    with pytest.raises(KeyError):
        template_text("../templates/replay")


def test_the_simulated_stand_has_two_probes_and_a_pace() -> None:
    stand = stand_of("simulated")
    assert [c.name for c in stand.channels] == ["probe 1", "probe 2"]
    assert stand.source.options["pace"] == "real"


def test_the_replay_template_fits_the_recordings() -> None:
    """Against the recordings themselves and truth.json, both made by a maker that shares no code with us."""
    stand = stand_of("replay")
    truth = json.loads((RECORDINGS / "truth.json").read_text())
    files = {run["file"]: run for run in truth["runs"]}
    assert set(stand.source.options["files"]) == set(files)
    assert "half depth, -11.5 V" in truth["convention"]
    assert stand.pulse.level_v == -11.5
    assert stand.pulse.edge == "falling"
    for name, run in files.items():
        with wave.open(str(RECORDINGS / name)) as sound:
            assert sound.getnchannels() == 1 + len(stand.channels)
            assert sound.getframerate() == run["fs"] == stand.source.options["rate_hz"]
            assert sound.getsampwidth() * 8 == stand.source.options["bits"]
        assert stand.source.options["full_scale"] == f"{run['fullscale_v']:.0f} V"
        for channel, gap_v in zip(stand.channels, run["gap_v"], strict=True):
            assert channel.volts_per_unit == pytest.approx(run["mv_per_um"] / 1000, rel=1e-5)
            assert channel.gap_limits_v is not None
            assert channel.gap_limits_v[0] < gap_v < channel.gap_limits_v[1]
    slow = files["fan-slow-roll.wav"]["rpm"] / 60
    assert stand.run.minimum_speed_hz < slow < stand.run.slow_roll_limit_hz < files["fan-O.wav"]["rpm"] / 60
