"""The daqmx templates open, against a device server that has what they ask for, and say what matters."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import pytest
from ni_kit import DeviceServer, blocks

from config.stand import Stand, check_stand
from config.templates import FOLDER, template_names, template_text
from daq.clock import SystemClock
from daq.drivers.daqmx import DaqmxDriver
from daq.drivers.ni.options import inputs_of
from daq.drivers.registry import make_driver, options_problems
from daq.setup import channel_plan, set_up_draft

Serve = Callable[..., DeviceServer]
NAMES = [name for name in template_names() if name.startswith("daqmx")]
DEVICES: dict[str, dict[str, Any]] = {
    "daqmx-module": {"Dev1": {"inputs": 4}},
    "daqmx-usb": {"Dev1": {"simultaneous": False, "couplings": 2, "timebase_hz": 256 * 100e3}},
    "daqmx-server": {
        "Rack1Mod1": {"ranges_v": [30.0], "serial": 0x1A2B3C4},
        "Rack1Mod2": {"ranges_v": [30.0], "serial": 0x1A2B3C5},
    },
}


def stand_of(name: str) -> Stand:
    return check_stand(FOLDER / f"{name}.toml", options_problems)


def test_there_are_three() -> None:
    assert set(NAMES) == set(DEVICES)


@pytest.mark.parametrize("name", NAMES)
def test_a_template_opens_and_delivers(serve: Serve, name: str) -> None:
    stand = stand_of(name)
    server = serve(about={"devices": DEVICES[name]})
    options = {**stand.source.options, "server": server.address, "settling_s": 0}
    source = make_driver("daqmx", options, channel_plan(stand), clock=SystemClock())
    info = source.open()
    block = blocks(source, 1)[0]
    source.close()
    assert block.counts.shape[1] == 1 + len(stand.channels)
    skewed = any(c.skew_s for c in set_up_draft(stand, info.rate_hz, info.skew_s).channels)
    assert skewed == (name == "daqmx-usb")


@pytest.mark.parametrize("name", NAMES)
def test_a_template_is_kept_out_of_the_simulated_stores(name: str) -> None:
    assert stand_of(name).store_path.name == f"{name}.sqlite"


@pytest.mark.parametrize("name", NAMES)
def test_a_gap_fits_the_range_as_wired(name: str) -> None:
    """A probe's supply of -24 V lies within the range, through the divider if there is one."""
    stand = stand_of(name)
    options = DaqmxDriver.Options.model_validate(stand.source.options)
    for item in inputs_of(options, channel_plan(stand)):  # type: ignore[arg-type]
        if item.sensor == "proximity probe":
            assert item.range_v * item.divider > 24.0


@pytest.mark.parametrize("name", NAMES)
def test_a_template_tells_a_technician_the_three_things(name: str) -> None:
    text = " ".join(template_text(name).replace("#", " ").split())
    assert "-10 V" in text  # the gap and the range
    assert "turn" in text  # ac coupling turns phase
    assert "ac" in text
    assert "one clock" in text or "share a clock" in text  # once-per-rev in the same task
