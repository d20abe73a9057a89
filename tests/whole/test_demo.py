"""``revmark demo`` and README: what is shown is what runs."""

from __future__ import annotations

import re
import sys
import time
from pathlib import Path
from types import SimpleNamespace

import pytest

sys.path.insert(0, str(Path(__file__).parent))

import walkthrough

from cli.demo import _folded, _summary
from store.history import History

LIMIT_S = 90.0


@pytest.mark.slow
def test_the_demo_balances_both_machines_and_readme_shows_it(operator):
    begin = time.monotonic()
    printed = operator.type("demo", "--keep", "--folder", "demo")
    assert time.monotonic() - begin < LIMIT_S
    assert printed.rstrip().endswith(f"kept: {operator.folder / 'demo'}")
    assert printed.count("in tolerance") == 4
    assert "OUT OF TOLERANCE" not in printed
    for job in ("0142", "0143"):
        assert (operator.folder / "demo" / f"job-{job}.png").stat().st_size > 10_000
    assert (operator.folder / "demo" / "bode-0142-1.png").stat().st_size > 10_000
    assert "6 readings: 6 identical to the last bit" in printed
    assert [line for line in printed.splitlines() if len(line) > 80 and "/" not in line] == []
    readme = walkthrough.README.read_text()
    assert walkthrough.words(walkthrough.filled(readme, printed)) == walkthrough.words(readme)
    _views_are_named(readme, operator.folder / "demo" / "bay-simulated.sqlite")


def _views_are_named(readme, store):
    import sqlite3

    with History.open(store) as history:
        assert history.counts()["run"] == 6
    link = sqlite3.connect(f"file:{store}?mode=ro", uri=True)
    names = {n for (n,) in link.execute("select name from sqlite_master where type = 'view'")}
    link.close()
    assert set(re.findall(r"`(v_[a-z_]+)`", readme)) == {n for n in names if n.startswith("v_")}


def verdict(*in_tolerance):
    planes = [
        SimpleNamespace(plane=n, residual=300j, share_gmm=477.5, in_tolerance=said)
        for n, said in enumerate(in_tolerance, 1)
    ]
    said = all(in_tolerance)
    return SimpleNamespace(machine_serial="F-1", job_number="1", planes=planes, in_tolerance=said)


def test_a_machine_out_of_tolerance_is_exit_code_1(capsys):
    assert _summary([verdict(True, True), verdict(True, False)]) == 1
    assert _summary([verdict(True, True), verdict(True, True)]) == 0
    assert "OUT OF tolerance" in capsys.readouterr().out


def test_a_folder_that_exists_is_refused(operator):
    (operator.folder / "mine").mkdir()
    assert operator.type("demo", "--folder", "mine", code=1) == ""
    assert list((operator.folder / "mine").iterdir()) == []


def test_commands_are_folded_between_words_only():
    assert _folded(["revmark", "mark", "O"]) == "revmark mark O"
    long = _folded(["revmark", "mount", *["x y" * 9] * 4])
    assert all(len(line) <= 80 for line in long.splitlines())
    assert long.replace(" \\\n    ", " ") == "revmark mount " + " ".join(["'" + "x y" * 9 + "'"] * 4)
