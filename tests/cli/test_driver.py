"""``revmark driver``: help, success, bad input and exit code of each command."""

from __future__ import annotations

import json
import sys
from importlib.metadata import EntryPoint
from pathlib import Path

import pytest

from cli.main import main
from config.templates import template_text
from daq.drivers import registry
from daq.drivers.conformance import RULES

LEAKY = """
import numpy as np
from daq.drivers.base import Chunk, Driver, DriverOptions, SourceInfo

class Leaky(Driver[DriverOptions]):
    "Breaks two rules: it hands out one buffer over and over, and overrides a public method."
    name = "leaky"
    Options = DriverOptions

    def _open(self):
        self.buffer = np.zeros((100, 3), "int16")
        self.read_once = False
        return SourceInfo(1000.0, "int16", (1e-3,) * 3, (-32768, 32767), "live", "made up")

    def _read(self, timeout_s):
        if self._pause(0.02) or not (flip := not self.read_once):
            self.read_once = False
            return None
        self.read_once = flip
        self.buffer += 1
        return Chunk(self.buffer)

    def _close(self):
        pass

    @property
    def counters(self):
        return self._count
"""


@pytest.fixture
def leaky(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A driver of somebody else's, and a stand file for it."""
    (tmp_path / "leaky_driver.py").write_text(LEAKY)
    monkeypatch.syspath_prepend(tmp_path)
    points = [EntryPoint("leaky", "leaky_driver:Leaky", registry.GROUP)]
    monkeypatch.setattr(registry, "entry_points", lambda group: points if group == registry.GROUP else [])
    text = template_text("simulated").replace('driver = "simulated"', 'driver = "leaky"')
    options, rest = text.index("[source.options]"), text.index("[once_per_rev]")
    file = tmp_path / "leaky.toml"
    file.write_text(text[:options] + text[rest:])
    return file


def run(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str, str]:
    """Exit code, stdout, stderr."""
    code = 0
    try:
        main(list(arguments))
    except SystemExit as ended:
        code = int(ended.code or 0)
    out = capsys.readouterr()
    return code, out.out, out.err


@pytest.mark.parametrize("words", [(), ("list",), ("check",)])
def test_help(capsys: pytest.CaptureFixture[str], words: tuple[str, ...]) -> None:
    code, out, _ = run(capsys, "driver", *words, "--help")
    assert code == 0
    assert out.startswith("Usage: revmark driver")


def test_list_names_drivers_and_ports(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    from serial.tools import list_ports, list_ports_common

    port = list_ports_common.ListPortInfo("/dev/ttyUSB7", skip_link_detection=True)
    port.description, port.serial_number = "bench\x1b[31m digitizer", "0042"
    monkeypatch.setattr(list_ports, "comports", lambda: [port])
    code, out, err = run(capsys, "driver", "list")
    assert (code, err) == (0, "")
    for name in registry.BUILT_IN:
        assert name in out
    assert "/dev/ttyUSB7" in out
    assert "serial 0042" in out
    assert "\x1b" not in out
    assert "whether or not a digitizer is on it" in out
    assert max(map(len, out.splitlines())) <= 80
    code, out, _ = run(capsys, "driver", "list", "--json")
    found = {d["name"]: d for d in json.loads(out)}
    assert found["serial"]["connected"][0]["source"] == "/dev/ttyUSB7"
    assert found["simulated"] == {"name": "simulated", "problem": "", "connected": []}


def test_list_says_what_is_missing(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    for name in [m for m in sys.modules if m.startswith(("daq.drivers.serial_", "serial"))]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setitem(sys.modules, "serial", None)
    code, out, _ = run(capsys, "driver", "list")
    assert code == 0
    assert "python -m pip install pyserial" in " ".join(out.split())


def test_list_says_when_ports_cannot_be_found_out(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    from serial.tools import list_ports

    def broken() -> None:
        raise OSError(5, "no bus")

    monkeypatch.setattr(list_ports, "comports", broken)
    code, out, _ = run(capsys, "driver", "list")
    assert code == 0
    assert "cannot be found out: OSError" in " ".join(out.split())


def test_check_names_what_is_broken(capsys: pytest.CaptureFixture[str], leaky: Path) -> None:
    code, out, _ = run(capsys, "driver", "check", "leaky", "--stand", str(leaky))
    assert code == 1
    broken = [line for line in out.splitlines() if line.startswith("BROKEN")]
    assert len(broken) == 2
    assert "Leaky overrides counters" in broken[0]
    assert "a block changed after it was handed out" in " ".join(out.split())
    assert "leaky breaks 2 of 12 rules." in out
    assert "not seen  loss is counted: a loss cannot be provoked" in out


def test_check_as_json_has_every_rule(capsys: pytest.CaptureFixture[str], leaky: Path) -> None:
    code, out, _ = run(capsys, "driver", "check", "leaky", "--stand", str(leaky), "--json")
    answer = json.loads(out)
    assert code == 1
    assert answer["ok"] is False
    assert [rule["rule"] for rule in answer["rules"]] == [rule.__name__ for rule in RULES]


def test_check_of_a_sound_driver(
    capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The simulated stand, loss and all, on the real clock."""
    file = tmp_path / "bay.toml"
    file.write_text(template_text("simulated"))
    monkeypatch.setenv("REVMARK_STAND", str(file))
    code, out, _ = run(capsys, "driver", "check", "simulated")
    assert code == 0
    assert out.count("kept  ") == len(RULES)
    assert "simulated keeps every rule that could be tried." in out


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("check",), 2, "NAME"),
        (("check", "simulated"), 2, "--stand"),
        (("check", "simulatd", "--stand", "bay.toml"), 1, "Did you mean 'simulated'?"),
        (("check", "replay", "--stand", "bay.toml"), 1, "uses the driver 'simulated', not 'replay'"),
        (("check", "simulated", "--stand", "none.toml"), 1, "There is no stand file"),
        (("check", "serial", "--stand", "usb.toml"), 1, "There is no serial port"),
        (("lst",), 2, "lst"),
    ],
)
def test_what_is_typed_wrong(
    capsys: pytest.CaptureFixture[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    arguments: tuple[str, ...],
    code: int,
    words: str,
) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("REVMARK_STAND", raising=False)
    Path("bay.toml").write_text(template_text("simulated"))
    Path("usb.toml").write_text(template_text("serial-usb"))
    ended, _, err = run(capsys, "driver", *arguments)
    assert ended == code
    assert words in err
    assert "Traceback" not in err
