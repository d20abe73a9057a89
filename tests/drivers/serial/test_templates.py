"""The templates fit a digitizer as they describe it, and their figures are those of the format's page."""

import re
from pathlib import Path

import pytest
from digitizer_kit import Digitizer, Rotor

from config.stand import check_stand
from config.templates import FOLDER, template_names, template_text
from daq.clock import SystemClock
from daq.drivers import frames
from daq.drivers.frames.records import Description
from daq.drivers.registry import make_driver, options_problems
from daq.drivers.serial_driver import SerialOptions, Wanted
from daq.setup import channel_plan

NAMES = [name for name in template_names() if name.startswith("serial-")]
PAGE = (Path(frames.__file__).parent / "FORMAT.md").read_text(encoding="utf-8")

FITTING = {
    "serial-usb": Description(10_000.0, 3, 2, 16, "none", (10 / 32768,) * 3, "digitizer 0042"),
    "serial-network": Description(2000.0, 2, 2, 16, "falling", (10 / 32768,) * 2, "digitizer 0043"),
    "serial-board": Description(1000.0, 2, 2, 12, "none", (3.3 / 4096,) * 2, "board A1"),
}


def stand_of(name):
    return check_stand(FOLDER / f"{name}.toml", options_problems)


def test_there_is_a_digitizer_for_each_template():
    assert set(NAMES) == set(FITTING)


@pytest.mark.parametrize("name", NAMES)
def test_a_digitizer_as_described_is_taken(name):
    stand = stand_of(name)
    wanted = Wanted(SerialOptions.model_validate(stand.source.options), channel_plan(stand))
    assert list(wanted.problems(FITTING[name])) == []


@pytest.mark.parametrize("name", NAMES)
def test_it_says_what_a_technician_must_know(name):
    text = " ".join(template_text(name).replace("#", " ").split()).casefold()
    for words in ("own sample counter", "by-id" if name != "serial-network" else "take one connection"):
        assert words in text
    assert "arrive" in text or "arrival" in text


@pytest.mark.parametrize("name", NAMES)
def test_what_fits_on_the_wire_is_what_the_page_says(name):
    """Both are typed by hand; the page's own figures are reckoned in test_format_page."""
    column = {"serial-board": 4}.get(name, 2)
    said = re.findall(
        r"^# +(115 200|921 600|3 000 000) ((?: +\d[\d ]*?)+)(?:   .*)?$", template_text(name), re.M
    )
    assert len(said) == 3
    for baud, figures in said:
        row = next(line for line in PAGE.splitlines() if line.startswith(f"| {baud} |"))
        wanted = [int(n) for n in row.strip("| ").split(" | ")[column].split(" / ")]
        typed = [int(n.replace(" ", "")) for n in re.split(r" {2,}", figures.strip())]
        assert typed == wanted[: len(typed)]
        assert len(typed) >= 3


def test_the_usb_template_reads_a_digitizer(send):
    """But for its port: opened, and the volts are those at the probes, behind the dividers."""
    stand = stand_of("serial-usb")
    sender = send(Digitizer(Rotor(rate_hz=10_000.0), range_v=10.0))
    options = stand.source.options | {"port": sender.wire.url}
    source = make_driver("serial", options, channel_plan(stand), clock=SystemClock())
    info = source.open()
    source.close()
    assert info.volts_per_count == pytest.approx((30 / 32768,) * 3, rel=1e-7)
