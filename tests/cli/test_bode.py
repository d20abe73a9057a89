"""``revmark plot bode``, traces in ``run show``, and ``--minus-slow-roll``: what is drawn, said and refused.

The store holds traces of a Jeffcott rotor (METHODS 7.1), critical at 3000 r/min, on METHODS 9's slow roll.
"""

from __future__ import annotations

import cmath
import importlib.util
import json
import math
import sys
from collections.abc import Iterator
from dataclasses import replace
from datetime import UTC
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest

from cli.main import main
from cli.plots import bode as plots
from config.units import parse_display
from store import consult
from store.casework_bode import BodePicture
from store.database import create_store
from store.records import Label, Trace, TracePoint

UM_PP = parse_display("um pp", "displacement")


def _kit() -> ModuleType:
    """The builders of the store's tests, by their file: test folders are no packages."""
    file = Path(__file__).parent.parent / "store" / "store_kit.py"
    spec = importlib.util.spec_from_file_location("bode_store_kit", file)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["bode_store_kit"] = module
    spec.loader.exec_module(module)
    return module


kit = _kit()
SET_UP = replace(
    kit.SET_UP,
    channels=(
        *kit.SET_UP.channels[:1],
        replace(kit.SET_UP.channels[1], name="seismo", kind="velocity", unit="mm/s", gap_low_v=None),
    ),
)
RUNOUT = cmath.rect(0.8, math.radians(200))
ZETA, CRITICAL_HZ, ECCENTRIC_UM = 0.05, 50.0, 3.0


def phasor(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


def shaft(hz: float) -> complex:
    r = hz / CRITICAL_HZ
    return ECCENTRIC_UM * r**2 / (1 - r**2 - 2j * ZETA * r)


def trace(direction: str, low: float, high: float, se: float = 0.01) -> Trace:
    """Steps of 0.01 of the critical speed at 300 r/min a second; the probe sees its runout too."""
    r = np.arange(round(low * 100), round(high * 100) + 1) / 100
    speeds = r * CRITICAL_HZ if direction == "up" else r[::-1] * CRITICAL_HZ
    points = tuple(
        TracePoint(
            t_s=abs(hz - speeds[0]) / 5.0,
            speed_hz=float(hz),
            revolutions=3,
            vectors=(shaft(hz) + RUNOUT, phasor(0.2, 50)),
            se=(se, 0.01),
            gap_v=(-10.0, 0.0),
        )
        for hz in speeds
    )
    lasts = points[-1].t_s
    return Trace(direction, ("probe 1", "seismo"), ("um", "mm/s"), 1_700_000_000_000_000, lasts, points)


@pytest.fixture(scope="module")
def stand(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    """Runs of job 0142: /1 slow roll 0.8 @ 200, /2 O 2.5 @ 75 with a run-up and a coast-down through the
    critical, /3 without traces, /4 with a run-up that ends below it; U/1 of no job before them."""
    folder = tmp_path_factory.mktemp("bode")
    file = folder / "bay.toml"
    code("stand", "new", str(file), "--like", "replay")
    file.write_text(file.read_text() + '\n[store]\npath = "bay.sqlite"\n')
    create_store(folder / "bay.sqlite", clock=kit.FakeClock(), software="revmark test")
    made = kit.Stand(folder / "bay.sqlite", kit.FakeClock())
    made.set_up_id = made.ledger.set_up(SET_UP).id
    alone = made.begin()
    made.ledger.add_trace(alone.id, trace("up", 0.5, 1.5))
    made.end(alone.id)
    made.mount()
    seismo = replace(kit.vector(phasor(0.2, 50), "seismo"), unit="mm/s")
    made.run(Label.SLOW_ROLL, speed_hz=4.0, vectors=(kit.vector(RUNOUT), seismo))
    made.ask(Label.O, choose="next", confirmed=True)
    balance = made.begin()
    made.ledger.add_reading(balance.id, kit.reading(vectors=(kit.vector(phasor(2.5, 75)), seismo)),
                            slow_roll_limit_hz=5.0)  # fmt: skip
    for one in (trace("up", 0.2, 1.5), trace("down", 0.2, 1.5)):
        made.ledger.add_trace(balance.id, one)
    made.end(balance.id)
    made.run(None, vectors=(kit.vector(1 + 0j), seismo))
    short = made.begin()
    made.ledger.add_trace(short.id, trace("up", 0.5, 0.95))
    made.end(short.id)
    yield made
    made.close()


def code(*arguments: str) -> int:
    try:
        main(list(arguments))
    except SystemExit as ended:
        return int(ended.code or 0)
    return 0


def asked(stand: Any, *arguments: str) -> int:
    return code(*arguments, "--stand", str(stand.path.with_name("bay.toml")))


def picture(stand: Any, run: str = "0142/2", **how: Any) -> BodePicture:
    return consult.bode(stand.history, run, **how)


# --- run show ------------------------------------------------------------------------------------------


def test_run_show_lists_traces_and_critical_speeds(stand: Any, capsys: pytest.CaptureFixture[str]) -> None:
    """METHODS 7.1 on the 0.01 grid: AF 9.828902; the runout moves it a little, without it it is exact.
    Half power 0.9555 and 1.0572 of 3000 r/min; 10 x 3 um 0-peak is 60 um pp."""
    assert asked(stand, "run", "show", "0142/2", "--minus-slow-roll") == 0
    out = capsys.readouterr().out
    assert max(map(len, out.splitlines())) <= 80
    lines = out.splitlines()
    assert "trace 1: up 600-4500 r/min, 131 steps in 13.0 s" in lines
    assert "trace 2: down 4500-600 r/min, 131 steps in 13.0 s" in lines
    rows = [line.split() for line in lines if line.startswith("probe 1      3000")]
    assert [row[2:] for row in rows] == [["3000", "15", "9.8", "2866-3172", "60.000", "um", "pp", "90.0"]] * 2
    assert "no critical speed" not in out  # the casing sensor is flat
    assert "listed apart and never averaged (here 300 r/min per s)" in " ".join(out.split())
    assert "runout included" not in out


def test_run_show_takes_the_slow_roll_off_beside_the_raw(
    stand: Any, capsys: pytest.CaptureFixture[str]
) -> None:
    """METHODS 9: 2.5 @ 75 - 0.8 @ 200 = 3.0305619520815 @ 62.511851575603: 6.061 um pp, above the raw."""
    assert asked(stand, "run", "show", "0142/2", "--minus-slow-roll") == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "slow roll: run 0142/1 reading 1, 240 r/min; taken off beside the vectors as measured" in out
    assert "seismo is a velocity sensor on the casing, which has no runout: left as measured." in out
    raw, less = out.split("less slow roll:")
    assert "probe 1 5.000" in raw
    assert "probe 1 6.061" in less
    assert " 62.5 " in less
    assert "seismo 0.141" not in less.split("+-: 95 %")[0]  # only the raw table has it
    assert "caution: near a critical speed a residual bow is amplified" in out
    # of the reading, not of the trace's top: (240/1500)^2 = 2.56 %
    assert "holds 2.6 % of the unbalance response at 1500 r/min itself" in out


def test_the_same_as_json(stand: Any, capsys: pytest.CaptureFixture[str]) -> None:
    assert asked(stand, "run", "show", "0142/2", "--json") == 0
    raw = json.loads(capsys.readouterr().out)
    assert "slow_roll" not in raw
    assert "less_slow_roll" not in raw["readings"][0]
    assert asked(stand, "run", "show", "0142/2", "--json", "--minus-slow-roll") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["slow_roll"]["run"] == "0142/1"
    assert told["readings"][0]["vectors"] == raw["readings"][0]["vectors"]  # raw always kept
    (less,) = told["readings"][0]["less_slow_roll"]
    assert less["channel"] == "probe 1"
    assert less["amplitude_pk"] == pytest.approx(3.0305619520815)
    assert less["lag_deg"] == pytest.approx(62.511851575603)
    up, down = told["traces"]
    assert (up["direction"], up["steps"], up["from_rpm"], up["to_rpm"]) == ("up", 131, 600.0, 4500.0)
    (critical,) = up["critical_speeds"]
    assert critical["amplification"] == pytest.approx(9.828902, abs=1e-6)
    assert critical["speed_rpm"] == pytest.approx(3000.0)
    assert critical["half_power_rpm"] == pytest.approx([2866.43, 3171.65], abs=0.01)
    assert critical["sweep_rpm_per_s"] == pytest.approx(300.0)
    assert down["critical_speeds"][0]["sweep_rpm_per_s"] == pytest.approx(-300.0)
    assert up["not_critical"] == []
    assert raw["traces"][0]["critical_speeds"][0]["amplification"] != pytest.approx(9.828902, abs=1e-3)


def test_the_slow_roll_itself_stays_as_measured(stand: Any, capsys: pytest.CaptureFixture[str]) -> None:
    assert asked(stand, "run", "show", "0142/1", "--json", "--minus-slow-roll") == 0
    told = json.loads(capsys.readouterr().out)
    assert told["readings"][0]["less_slow_roll"] == []


# --- the picture ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("form", ["png", "svg", "pdf"])
def test_a_picture_is_drawn(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str], form: str
) -> None:
    file = tmp_path / f"a.{form}"
    assert asked(stand, "plot", "bode", "0142/2", "-o", str(file)) == 0
    assert file.read_bytes()[:4] in (b"\x89PNG", b"<?xm", b"%PDF")
    said = capsys.readouterr().out
    told = " ".join(said.split())
    assert told.endswith(f"a.{form}: run 0142/2, probe 1, seismo, up 600-4500, down 4500-600 r/min")


def test_curves_lie_where_their_figures_are(stand: Any) -> None:
    shown = picture(stand, minus_slow_roll=True)
    drawing = plots.draw(shown, {"probe 1": UM_PP, "seismo": parse_display("mm/s rms", "velocity")}, UTC)
    panel = drawing.panels[0]
    drawn = [line for line in drawing.page._axes.get_lines() if len(line.get_xdata()) == 131]
    assert [line.get_linestyle() for line in drawn[::2]] == ["-", "--"] * 2  # up solid, down broken
    at = panel.amplitude.at(3000.0, 60.0)
    for line in (drawn[0], drawn[2]):
        xs, ys = line.get_data()
        k = int(np.argmax(ys))
        assert (xs[k], ys[k]) == pytest.approx(at, abs=1e-6)
    texts = [t.get_text() for t in drawing.page._axes.texts]
    assert "Run 0142/2: F-204 (KR-22), 1X against speed" in texts
    assert texts.count("3000 r/min, AF 9.8") == 2
    assert any("critical 3000 +- 15 r/min, AF 9.8 (2866 to 3172), 60.0 um pp at 90.0 deg" in t for t in texts)
    assert any(t.startswith("Less the slow roll of run 0142/1 reading 1, 240 r/min.") for t in texts)
    assert "probe at 135 deg on the stand; as measured" in texts  # the casing sensor


def test_lag_is_unwrapped_and_drawn_above_the_noise_only(stand: Any) -> None:
    """Runout of 0.8 hides what is below it; with an error of 1 um only what is above 2.45 um has a lag.
    3 um r^2/(1 - r^2) is 2.45 at r = 0.67: below no lag is drawn."""
    of = picture(stand, minus_slow_roll=True).channels[0]
    noisy = [replace(c, se=np.full(131, 1.0)) for c in of.curves]
    up, down = plots.lags_of(noisy)
    speeds = noisy[0].speed_hz / CRITICAL_HZ
    assert np.isnan(up[speeds < 0.66]).all()
    assert not np.isnan(up[speeds > 0.68]).any()
    assert up[80] == pytest.approx(90.0, abs=0.01)  # r = 1.00
    assert down[50] == pytest.approx(90.0, abs=0.01)
    assert (np.diff(up[~np.isnan(up)]) > 0).all()


def test_a_lag_that_crosses_zero_is_drawn_through() -> None:
    """From 300 deg over 0 to 120 deg: 300 to 480, in steps of 30 or 45."""
    values = np.exp(1j * np.radians(np.linspace(300.0, 480.0, 50)))
    speeds = np.linspace(10.0, 60.0, 50)
    curve = plots.Curve(1, "up", 0, 1.0, speeds, speeds, values, np.full(50, 1e-3), (), ())
    back = replace(curve, direction="down", speed_hz=speeds[::-1], values=values[::-1])
    up, down = plots.lags_of([curve, back])
    assert up[[0, -1]] == pytest.approx([300.0, 480.0])
    assert down[[0, -1]] == pytest.approx([480.0, 300.0])
    scale = plots.lag_scale([up, down])
    assert (scale.low, scale.high, scale.step) == (300.0, 480.0, 30)
    assert plots.lag_scale([np.full(3, np.nan)]) == plots.Scale(0.0, 90.0, 4)


def test_one_trace_and_one_channel(stand: Any) -> None:
    shown = picture(stand, channels=("seismo",), trace=2)
    assert [(c.channel, [k.trace for k in c.curves]) for c in shown.channels] == [("seismo", [2])]


def test_a_run_of_no_job_can_be_drawn(stand: Any) -> None:
    drawing = plots.draw(picture(stand, "U/1", channels=("probe 1",)), {"probe 1": UM_PP}, UTC)
    assert "Run U/1: no job, 1X against speed" in [t.get_text() for t in drawing.page._axes.texts]


# --- refused -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("words", "why"),
    [
        (("plot", "bode", "0142/3"), "Run 0142/3 has no run-up or coast-down on record."),
        (("plot", "bode", "0142/2", "--trace", "3"), "Run 0142/2 has no trace 3. It has 1 up, 2 down."),
        (("plot", "bode", "0142/2", "--channel", "probe 9"), "no trace of a channel 'probe 9'"),
        (("plot", "bode", "0142/9"), "There is no run 0142/9 in the store."),
        (("plot", "bode", "U/1", "--minus-slow-roll"), "Run U/1 belongs to no job"),
    ],
)
def test_what_cannot_be_drawn_is_said(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str], words: tuple[str, ...], why: str
) -> None:
    file = tmp_path / "a.png"
    assert asked(stand, *words, "-o", str(file)) == 1
    assert why in " ".join(capsys.readouterr().err.split())
    assert not file.exists()


def test_an_existing_file_is_not_replaced(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "a.svg"
    file.write_text("mine")
    assert asked(stand, "plot", "bode", "0142/2", "-o", str(file)) == 1
    assert "exists already" in capsys.readouterr().err
    assert file.read_text() == "mine"
    assert asked(stand, "plot", "bode", "0142/2", "-o", str(file), "--force", "--json") == 0
    told = json.loads(capsys.readouterr().out)
    up = told["channels"][0]["traces"][0]
    assert len(up["speed_rpm"]) == len(up["amplitude_pk"]) == len(up["lag_deg"]) == 131
    assert told["slow_roll"] is None


def test_a_half_power_point_outside_the_trace_is_said(stand: Any, capsys: pytest.CaptureFixture[str]) -> None:
    assert asked(stand, "run", "show", "0142/4") == 0
    out = " ".join(capsys.readouterr().out.split())
    assert "no critical speed is made of the peak of probe 1 at 2850 r/min: the amplitude is highest" in out
    assert "half power:" not in out


def test_polar_less_slow_roll(stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The O vector is METHODS 9's difference; the casing sensor's stays, and the picture says so."""
    words = ("plot", "polar", "0142", "--json", "--minus-slow-roll", "-o")
    assert asked(stand, *words, str(tmp_path / "a.png")) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["slow_roll_subtracted"] == "0142/1"
    probe, seismo = told["channels"]
    assert [v["role"] for v in probe["vectors"]] == ["O"]
    assert probe["vectors"][0]["amplitude_pk"] == pytest.approx(3.0305619520815)
    assert probe["vectors"][0]["lag_deg"] == pytest.approx(62.511851575603)
    assert seismo["vectors"][0]["amplitude_pk"] == pytest.approx(0.2)
    assert told["left_raw"] == [
        "seismo is a velocity sensor on the casing, which has no runout: left as measured."
    ]
    assert asked(stand, "plot", "polar", "0142", "--json", "-o", str(tmp_path / "b.png")) == 0
    raw = json.loads(capsys.readouterr().out)
    assert raw["slow_roll_subtracted"] is None
    assert {v["role"] for v in raw["channels"][0]["vectors"]} == {"O", "slow-roll"}


def test_polar_of_a_casing_sensor_alone_is_refused(
    stand: Any, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ("plot", "polar", "0142", "--minus-slow-roll", "--channel", "seismo", "-o")
    assert asked(stand, *words, str(tmp_path / "a.png")) == 1
    assert "seismo is a velocity sensor on the casing" in " ".join(capsys.readouterr().err.split())
