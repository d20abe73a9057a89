"""What an operator reads: what to add, in which unit, by which angle, in which time. Figures by hand."""

from __future__ import annotations

import cmath
import importlib.util
import json
import math
import re
import sys
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from cli.client import _read_runtime
from cli.correction import advice_lines
from cli.main import main
from cli.output import ANGLES, COLUMNS, figures, local, shown, times, wrapped
from cli.place import Manner, manner, manner_of
from cli.status import status_lines
from config.stand import load_stand
from daq.interface import shows
from store.casework import correction_for
from store.casework_polar import polar_picture
from store.database import create_store
from store.records import Label, PieceDraft

TESTS = Path(__file__).parent.parent


def _module(name: str, file: Path) -> ModuleType:
    """By its file: test folders are no packages."""
    spec = importlib.util.spec_from_file_location(name, file)
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module  # dataclasses look their module up
    spec.loader.exec_module(module)
    return module


kit = _module("words_store_kit", TESTS / "store" / "store_kit.py")
stories = _module("words_stories", TESTS / "balance" / "conftest.py")
TRUTH = json.loads((TESTS / "recordings" / "truth.json").read_text())


def phasor(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


# --- the correction ------------------------------------------------------------------------------------


def kept_trial(grade: float) -> Any:
    """One plane, one probe, 30 um at 0 deg, 0.02 um per g.mm: 1500 g.mm too much at 0 deg. A trial weight of
    5 g at 140 mm (700 g.mm) stays on in hole 13 (180 deg): 800 g.mm are left to add."""
    machine = stories.make_machine(model=stories.make_model(planes=1), grade_mm_s=grade)
    book = stories.Book(machine=machine, set_up=stories.make_set_up(probes=1))
    book.mount()
    book.run(Label.O, 30 + 0j)
    book.fit(1, 5.0, hole=13)
    book.run(Label.O_T, 16 + 0j)
    return book


def test_with_a_weight_kept_the_correction_is_said_to_be_added() -> None:
    """800 g.mm / 140 mm = 5.714 g: 5.7 g leave 2 g.mm; instead 1500 / 140 = 10.714 g: 10.7 g leave 2 g.mm.
    Force 798 g.mm (2 pi 39.895 Hz)^2 = 50.1 N. Permissible 2.5 mm/s x 40 kg / 250.67 1/s = 398.9 g.mm.
    Spread: add = -w V1/(V1 - V0), w = -700, sd of V0 hypot(0.9, 0.5), of V1 hypot(0.48, 0.5):
    hypot(700 x 30/196 x 0.6931, 700 x 16/196 x 1.0296) = 94.7."""
    lines = list(advice_lines(correction_for(kept_trial(2.5).story()).to_dict()))
    assert lines[:4] == [
        "Correction of job 0142: F-204 (KR-22), 2394 r/min",
        "from O, run 0142/1 reading 1",
        "ADD to what is fitted now, and leave it on: plane 1: 5 g in hole 13",
        "",
    ]
    assert lines[4].splitlines()[2].split() == ["1", "13", "180.0", "5.7", "140", "5"]
    assert lines[5:12] == [
        ANGLES,
        "",
        "plane 1: add 800.0 g.mm at 180.0 deg, force 50.1 N",
        "  left by rounding to holes 2.0 g.mm; spread +- 94.7 (one sd per component); permissible 398.9",
        "  INSTEAD, with all that is fitted there taken off: 10.7 g in hole 13",
        "    (left by rounding to holes 2.0 g.mm)",
        "",
    ]


def test_with_nothing_fitted_nothing_is_said_to_stay() -> None:
    book = kept_trial(2.5)
    book.remove(book.weights[0])
    told = "\n".join(advice_lines(correction_for(book.story()).to_dict()))
    assert "ADD" not in told
    assert "INSTEAD" not in told


def test_there_now_is_all_that_sits_in_the_hole() -> None:
    """5 g and, typed by its angle, 1 g; 2 g drilled: 560 g.mm less than nothing is needed no more."""
    book = kept_trial(2.5)
    book.fit(1, 1.0, angle_deg=180.2)
    book.fit(1, 2.0, hole=13, act="drilled")
    lines = list(advice_lines(correction_for(book.story()).to_dict()))
    assert lines[2] == (
        "ADD to what is fitted now, and leave it on: "
        "plane 1: 5 g in hole 13, 1 g at 180.2 deg, drilled 2 g in hole 13"
    )
    assert lines[4].splitlines()[2].split()[-3:] == ["6,", "drilled", "2"]


def test_what_is_in_tolerance_already_is_said_first() -> None:
    """Permissible 6.3 mm/s x 40 kg / 250.67 1/s = 1005.3 g.mm; 800 are 8 times the 94.7 that can be told."""
    assert correction_for(kept_trial(6.3).story()).notes[0] == (
        "Already in tolerance by prediction, for the weights changed since "
        "(residual 800.0 of 1005.3 g.mm in plane 1)."
    )
    book = kept_trial(6.3)
    book.fit(1, 5.7, hole=13)
    book.run(Label.CHECK, 0.1 + 0j)
    first, *others = correction_for(book.story()).notes
    assert first.startswith("Already in tolerance (residual ")
    assert first.endswith(
        " of 1005.3 g.mm in plane 1); what is left is below what these coefficients can tell."
    )
    assert not any("tolerance" in n for n in others)
    assert not any("tolerance" in n for n in correction_for(kept_trial(2.5).story()).notes)


def test_the_unbalance_of_a_plane_not_asked_for_stays() -> None:
    """Plane 1 would have been given the correction of truth.json; its heavy spot lies opposite."""
    book = stories.Book()
    book.mount()
    rotor = stories.Rotor(
        tuple(tuple(phasor(a["amp"], a["deg"]) for a in r) for r in TRUTH["coefficients_um_pk_per_gmm"]),
        tuple(phasor(u["gmm"], u["deg"]) for u in TRUTH["unbalance_gmm"]),
        tuple(phasor(r["um"], r["deg"]) for r in TRUTH["runout_um_pk"]),
    )
    book.run(Label.O, *rotor.reads(book))
    for plane, hole in ((1, 16), (2, 7)):
        tried = book.fit(plane, 1.5, hole=hole)
        book.run(Label.O_T, *rotor.reads(book))
        book.remove(tried)
    told = TRUTH["correction_from_raw_vectors"][0]
    spot = (told["deg_against_rotation"] + 180) % 360
    assert (
        f"plane 1 is left out: not asked for (--plane); its unbalance stays, {told['gmm']:.1f} g.mm, "
        f"heavy spot at {spot:.1f} deg"
    ) in list(advice_lines(correction_for(book.story(), planes=(2,)).to_dict()))


def test_a_plane_that_no_run_tells_apart_keeps_an_unknown_unbalance() -> None:
    book = stories.Book()
    book.mount()
    book.run(Label.O, 30 + 0j, 20 + 0j)
    book.fit(1, 5.0, hole=13)
    book.run(Label.O_T, 16 + 0j, 13 + 0j)
    (line,) = [t for t in advice_lines(correction_for(book.story()).to_dict()) if t.startswith("plane 2")]
    assert line == (
        "plane 2 is left out: no run tells the effect of its weights apart; --reuse may know it; "
        "its unbalance stays, how much is not known"
    )


# --- units ---------------------------------------------------------------------------------------------


def test_amplitudes_are_shown_as_the_stand_file_says() -> None:
    """1 mil = 25.4 um, so 12.7 um 0-peak is 1 mil peak to peak."""
    vector = {"channel": "probe 1", "unit": "um", "amplitude_pk": 12.7, "lag_deg": 359.96}
    assert shown(vector) == ("25.400", "um pp", "0.0")
    assert shown(vector, {"probe 1": "mil pp"}) == ("1.0000", "mil pp", "0.0")
    assert shown(vector, {"probe 2": "mil pp"}) == ("25.400", "um pp", "0.0")
    assert shown({**vector, "lag_deg": None})[2] == "below noise"


def test_a_channel_that_measured_something_else_then_is_not_shown_in_todays_unit() -> None:
    vector = {"channel": "probe 1", "unit": "mm/s", "amplitude_pk": math.sqrt(2), "lag_deg": 1.0}
    assert shown(vector, {"probe 1": "mil pp"}) == ("1.000", "mm/s rms", "1.0")


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.0004149, "0.000415"), (0.00356, "0.00356"), (1.2345, "1.23"), (161.74, "162"), (0.0, "0")],
)
def test_an_error_has_three_figures_and_no_exponent(value: float, text: str) -> None:
    assert figures(value) == text


# --- the runtime file ----------------------------------------------------------------------------------


def _runtime(tmp_path: Path, **more: Any) -> Path:
    file = tmp_path / "one.json"
    told = {"stand": "bay-1", "stand_file": "bay.toml", "store": "bay.sqlite", "port": 1, "token": "x"}
    file.write_text(json.dumps({**told, **more}))
    return file


def test_the_daemon_publishes_how_figures_are_shown(tmp_path: Path, stand: Any) -> None:
    told = load_stand(tmp_path / "bay.toml")
    address = _read_runtime(_runtime(tmp_path, show=shows(told), time_zone="Asia/Tokyo"))
    assert address is not None
    assert address.show == {"probe 1": "mil pp", "probe 2": "um pp"}
    assert manner_of(address) == manner(str(tmp_path / "bay.toml"))


@pytest.mark.parametrize("more", [{}, {"show": None, "time_zone": None}, {"time_zone": "No/Where"}])
def test_an_older_daemon_publishes_nothing_of_it(tmp_path: Path, more: dict[str, Any]) -> None:
    address = _read_runtime(_runtime(tmp_path, **more))
    assert address is not None
    assert manner_of(address) == Manner()


# --- status --------------------------------------------------------------------------------------------

TOKYO = ZoneInfo("Asia/Tokyo")


def test_status_of_a_daemon_that_tells_less() -> None:
    assert status_lines({}, {}, TOKYO) == [
        "stand    not told: not told",
        "source   not told",
        "store    not told: not told",
        "mounted  nothing; runs are stored as unassigned",
    ]
    some = status_lines({"live": {"state": "turning"}, "pending": {"label": "O"}, "mount": {}}, {}, TOKYO)
    assert some[-1] == "mark     O pending since -; times: Asia/Tokyo"


def test_status_in_the_stands_unit_and_time() -> None:
    vector = {"channel": "probe 1", "unit": "um", "amplitude_pk": 12.7, "lag_deg": 30.0}
    answer = {
        "stand": "bay-1",
        "live": {"state": "turning", "speed_rpm": 1500.0, "vectors": [vector], "run": "0142/1"},
        "mount": {"machine": "F-204", "model": "KR-22", "job": "0142"},
        "pending": {"label": "check", "asked_utc": "2023-11-14T22:13:20.000000Z"},
        "stand_file_changed": True,
    }
    *lines, table = status_lines(answer, {"probe 1": "mil pp"}, TOKYO)
    assert lines[0] == "stand    bay-1: turning, 1500.0 r/min"
    assert lines[-1] == "mark     check pending since 2023-11-15 07:13:20; times: Asia/Tokyo"
    assert "         the stand file has changed since the daemon read it; a restart takes it up" in lines
    assert table.splitlines()[-1].split() == ["probe", "1", "1.0000", "mil", "pp", "30.0"]


def test_a_zone_that_is_not_known_is_named_utc() -> None:
    assert times(Manner().zone) == "times: UTC"
    assert local("2023-11-14T22:13:20.000000Z", Manner().zone) == "2023-11-14 22:13:20"
    assert local(None, TOKYO) == "-"


# --- what is read from a store -------------------------------------------------------------------------


@pytest.fixture
def stand(tmp_path: Path) -> Iterator[Any]:
    """A store with the machine F-204 of a stand in Tokyo that shows probe 1 in mil."""
    file = tmp_path / "bay.toml"
    assert typed("stand", "new", str(file), "--like", "replay") == 0
    text = re.sub(r'(?m)^time_zone = "[^"]*"', 'time_zone = "Asia/Tokyo"', file.read_text())
    text = re.sub(r'(?m)^show = "um pp"', 'show = "mil pp"', text, count=1)
    assert text.count("Asia/Tokyo") == text.count("mil pp") == 1
    file.write_text(text + '\n[store]\npath = "bay.sqlite"\n')
    create_store(tmp_path / "bay.sqlite", clock=kit.FakeClock(), software="revmark test")
    made = kit.Stand(tmp_path / "bay.sqlite", kit.FakeClock())
    yield made
    made.close()


def typed(*words: str) -> int:
    try:
        main(list(words))
    except SystemExit as ended:
        return int(ended.code or 0)
    return 0


@pytest.fixture
def printed(stand: Any, capsys: pytest.CaptureFixture[str]) -> Any:
    """Types a command and hands back its lines, none of them longer than 80 columns."""

    def type_it(*words: str) -> list[str]:
        capsys.readouterr()
        assert typed(*words, "--stand", str(stand.path.with_name("bay.toml"))) == 0
        lines = capsys.readouterr().out.splitlines()
        assert [t for t in lines if len(t) > COLUMNS] == []
        return lines

    return type_it


def rows(lines: list[str], begins: str) -> list[list[str]]:
    """The blank-parted words of every line that begins so."""
    return [t.split() for t in lines if t.lstrip().startswith(begins)]


def a_job(stand: Any) -> None:
    """O with 12.7 um 0-peak (1 mil pp), a trial weight of 3 g in hole 16 that stays, a check."""
    stand.mount()
    stand.run(Label.O, 12.7 + 0j, flags=("weak_1x:probe 2",))
    stand.fit()
    stand.run(Label.O_T, 2.54 + 0j, flags=())
    stand.run(Label.CHECK, 2.54 + 0j, flags=("missed_pulses",))


def test_a_job_in_the_stands_unit_with_flags_where_they_belong(stand: Any, printed: Any) -> None:
    a_job(stand)
    lines = printed("job", "show", "0142")
    assert rows(lines, "0142/1") == [
        ["0142/1", "1", "O", "1500.0", "probe", "1", "1.0000", "mil", "pp", "0.0"],
        ["0142/1", "1", "O", "1500.0", "probe", "2", "25.400", "um", "pp", "0.0", "weak"],
    ]
    assert [words[-1] for words in rows(lines, "0142/3")] == ["missed", "missed"]
    assert "mounted 2023-11-15 07:13, turning counterclockwise seen from drive" in lines
    assert lines.count("times: Asia/Tokyo") == lines.count(ANGLES) == 1
    assert any("heavy spot deg" in t for t in lines)
    assert rows(lines, "probe 1")[0][:5] == ["probe", "1", "mil", "pp", "0.2000"]


def test_a_job_s_runs_are_flagged_by_its_slow_roll(stand: Any, printed: Any) -> None:
    """12.7 um against a slow roll of 11 um: 1.7 apart, a third is 4.2. Against 5 um: 7.7 apart."""
    stand.mount()
    stand.run(Label.SLOW_ROLL, 11 + 0j, speed_hz=4.0, flags=())
    stand.run(Label.O, 12.7 + 0j, flags=())
    lines = printed("job", "show", "0142")
    assert [words[-1] for words in rows(lines, "0142/2")] == ["runout", "runout"]
    assert [words[-1] for words in rows(lines, "0142/1")] == ["0.0", "0.0"]
    said = " ".join(" ".join(printed("run", "show", "0142/2")).split())
    assert "flag: each of probe 1 and probe 2: its 1X is mostly runout" in said
    stand.run(Label.SLOW_ROLL, 5 + 0j, speed_hz=4.0, flags=())
    assert [words[-1] for words in rows(printed("job", "show", "0142"), "0142/2")] == ["0.0", "0.0"]


def test_a_run_in_the_stands_unit_and_time(stand: Any, printed: Any) -> None:
    """Along a lag of 0 the variance is 0.0004 um^2: 1.96 x 0.02 um is 0.00309 mil pp. Across it 0.0005:
    1.96 x 0.02236 / 12.7 rad is 0.198 deg."""
    a_job(stand)
    lines = printed("run", "show", "0142/1")
    assert lines[1].startswith("started 2023-11-15 07:13:2")
    assert lines[1].endswith("; times: Asia/Tokyo")
    assert rows(lines, "probe 1")[0] == ["probe", "1", "1.0000", "0.00309", "mil", "pp", "0.0", "0.2"]
    told = " ".join(" ".join(lines).split())
    assert "flag: probe 2: its 1X is less than 3 times the noise of single samples" in told
    assert "the averaged vector's own +- stands beside it." in told
    assert printed("run", "list")[-1] == printed("job", "list")[-1] == "times: Asia/Tokyo"
    assert rows(printed("run", "list"), "0142/1")[0][2:4] == ["2023-11-15", "07:13"]


def test_json_stays_in_base_units_and_utc(stand: Any, capsys: pytest.CaptureFixture[str]) -> None:
    a_job(stand)
    capsys.readouterr()
    assert typed("run", "show", "0142/1", "--json", "--stand", str(stand.path.with_name("bay.toml"))) == 0
    run = json.loads(capsys.readouterr().out)
    first = run["readings"][0]["vectors"][0]
    assert (first["amplitude_pk"], first["unit"]) == (12.7, "um")
    assert run["started_utc"].startswith("2023-11-14T22:13:2")


def test_a_flag_marks_its_own_channel_in_the_picture(stand: Any) -> None:
    a_job(stand)
    picture = polar_picture(stand.history.job_story("0142"), [])
    assert [[v.flagged for v in c.vectors] for c in picture.channels] == [
        [False, False, True],
        [True, False, True],
    ]


def test_fitted_pieces_are_listed_with_their_angle(stand: Any, printed: Any) -> None:
    """Mark 30 deg from hole 1 in the numbering's sense (clockwise), rotor counterclockwise, both seen from
    drive: hole n is at 15 (n - 1) - 30 deg clockwise, which is against rotation. Hole 16: 195 deg."""
    stand.mount()
    stand.fit()
    stand.ledger.fit(PieceDraft(2, 2.0, None, 72.5), "ana", None)
    lines = printed("weight", "list")
    assert rows(lines, "1 ") == [["1", "fitted", "16", "195.0", "3", "140", "ana"]]
    assert rows(lines, "2 ") == [["2", "fitted", "-", "72.5", "2", "120", "ana"]]
    assert lines[-1] == ANGLES


def test_coefficients_name_their_unit(stand: Any, printed: Any) -> None:
    """10.16 um less for 420 g.mm: 0.02419 um pk per g.mm."""
    a_job(stand)
    (first, _) = rows(printed("coefficient", "list"), "KR-22")
    assert first[6:10] == ["1500", "0.02419", "um", "pk/g.mm"]


def test_a_long_line_is_folded_at_80_columns() -> None:
    line = "  left by rounding to holes 12.3 g.mm; spread +- 442.0 (one sd per component); permissible 477.5"
    assert wrapped(line).splitlines() == [
        "  left by rounding to holes 12.3 g.mm; spread +- 442.0 (one sd per component);",
        "    permissible 477.5",
    ]
