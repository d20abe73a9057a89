"""The contributors' guide, done: its example is installed as a package of somebody else's and passes."""

from __future__ import annotations

import json
import math
import os
import subprocess
import sys
import textwrap
from pathlib import Path

import numpy as np
import pytest

from config.templates import template_text
from daq.drivers.conformance import RULES

HERE = Path(__file__).parent
PACKAGE = HERE / "example_package"
MODULE = PACKAGE / "example_driver" / "wheel.py"
GUIDE = HERE.parent.parent / "DEVELOPERS.md"
NAME = "example-wheel"
REVMARK = "import sys; from cli.main import main; main(sys.argv[1:])"


@pytest.mark.parametrize("file", [MODULE, PACKAGE / "pyproject.toml"], ids=lambda file: file.name)
def test_the_guide_shows_the_tested_text(file: Path) -> None:
    text = textwrap.indent(file.read_text(encoding="utf-8"), "    ")
    assert text in GUIDE.read_text(encoding="utf-8")


def test_the_example_shows_what_it_says(plan, clock, monkeypatch: pytest.MonkeyPatch) -> None:
    """20 um 0-peak, 30 and 90 degrees after the falling edge, by a discrete Fourier sum over whole turns."""
    monkeypatch.syspath_prepend(PACKAGE)
    from example_driver.wheel import Options, Wheel

    driver = Wheel(Options(rpm=600), plan, clock=clock)
    info = driver.open()
    blocks = []
    while len(blocks) < 10:  # 1 s: ten turns
        block = driver.read(0.2)
        blocks += [] if block is None else [block]
    driver.close()
    volts = np.concatenate([b.counts for b in blocks]) * info.volts_per_count
    falls = np.flatnonzero((volts[:-1, 0] > -10.0) & (volts[1:, 0] <= -10.0)) + 1
    assert np.diff(falls) == pytest.approx(500)
    turns = (np.arange(len(volts)) - falls[0]) / 500
    for column, lag_deg in ((1, 30), (2, 90)):
        vector = 2 * np.mean(volts[:, column] * np.exp(-2j * np.pi * turns)) / 0.007874
        assert abs(vector) == pytest.approx(20, rel=1e-3)
        assert -math.degrees(np.angle(vector)) % 360 == pytest.approx(lag_deg, abs=0.8)  # a sample is 0.72


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> dict[str, str]:
    """An environment that finds the package where pip has put it."""
    target = tmp_path_factory.mktemp("site")
    pip = (sys.executable, "-m", "pip", "install", "--quiet", "--disable-pip-version-check", "--no-deps")
    done = subprocess.run(
        [*pip, "--target", str(target), str(PACKAGE)], capture_output=True, text=True, timeout=110
    )
    assert done.returncode == 0, done.stderr
    return {**os.environ, "PYTHONPATH": str(target)}


@pytest.fixture
def stand(tmp_path: Path) -> Path:
    """As the guide says: the simulated stand with another [source], and a store named."""
    text = template_text("simulated").replace('driver = "simulated"', f'driver = "{NAME}"')
    options, rest = text.index("[source.options]"), text.index("[once_per_rev]")
    file = tmp_path / "wheel.toml"
    text = text[:options] + "[source.options]\nrpm = 900\n\n" + text[rest:]
    file.write_text(text.replace("# [store]\n", '[store]\npath = "computed.sqlite"\n'), encoding="utf-8")
    return file


def revmark(environment: dict[str, str], *words: str | Path) -> tuple[int, str]:
    """Exit code and output."""
    done = subprocess.run(
        [sys.executable, "-c", REVMARK, *map(str, words)],
        env=environment,
        cwd=GUIDE.parent,
        capture_output=True,
        text=True,
        timeout=110,
    )
    return done.returncode, done.stdout + done.stderr


@pytest.mark.slow
def test_it_is_listed(installed: dict[str, str]) -> None:
    code, said = revmark(installed, "driver", "list", "--json")
    assert code == 0, said
    assert {"name": NAME, "problem": "", "connected": []} in json.loads(said)


@pytest.mark.slow
def test_its_options_are_checked(installed: dict[str, str], stand: Path) -> None:
    code, said = revmark(installed, "stand", "check", stand)
    assert code == 0, said
    assert "computed.sqlite" in said
    stand.write_text(stand.read_text(encoding="utf-8").replace("rpm = 900", "rpm = 9000"), encoding="utf-8")
    code, said = revmark(installed, "stand", "check", stand)
    assert code == 1
    assert "source.options.rpm" in said


@pytest.mark.slow
def test_it_keeps_every_rule(installed: dict[str, str], stand: Path) -> None:
    code, said = revmark(installed, "driver", "check", NAME, "--stand", stand)
    assert code == 0, said
    assert said.count("kept  ") == len(RULES), said
    assert f"{NAME} keeps every rule that could be tried." in said
