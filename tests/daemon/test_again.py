"""Readings of a real daemon measured again: in a process of their own to the last bit, and with a corrected
set-up through the daemon. Figures by hand: V = volts / sensitivity, so a sensitivity 1.1 times as large makes
every vector 1 / 1.1 of what it was."""

from __future__ import annotations

import math
import os
import sqlite3
from typing import Any

import pytest
from daemon_kit import Bay, no_traceback

from cli.client import new_key
from config.errors import Refusal

pytestmark = pytest.mark.slow

MV_PER_MIL = 200.0
"""Of both probes in the kit's stand file."""


def vectors(run: Any) -> dict[tuple[int, str, int], complex]:
    return {(r.number, v.channel, v.order): v.value for r in run.readings for v in r.vectors}


@pytest.fixture
def measured(mounted: Bay) -> Bay:
    """An O run and an O+T run of job 0142."""
    mounted.mark("O", choose="next")
    mounted.a_run()
    mounted.must("weight", "fit", "3g", "--plane", "1", "--hole", "2", "--locked-out")
    mounted.mark("O+T", choose="next", confirmed=True)
    mounted.a_run()
    return mounted


def test_another_process_gives_the_same_bits(measured: Bay) -> None:
    """A fresh start of the installed script, asked for more threads than the daemon had."""
    stand = ("--stand", os.fspath(measured.stand))
    assert measured.stop() == 0  # no daemon is needed
    with measured.history() as history:
        stored = sum(len(history.run(n).readings) for n in ("0142/1", "0142/2"))
    done = measured.real("run", "recompute", "--all", "--json", *stand, OPENBLAS_NUM_THREADS="4")
    assert (done.code, done.err) == (0, "")
    assert done.json["count"] == {"identical": stored, "within": 0, "apart": 0, "not": 0}
    assert {r["run"] for r in done.json["readings"]} == {"0142/1", "0142/2"}
    # kernels of an older processor, where the library has them: rounding, and no more
    other = measured.real("run", "recompute", "--all", "--json", *stand, OPENBLAS_CORETYPE="Nehalem").json
    assert other["count"]["identical"] + other["count"]["within"] == stored
    said = measured.must("run", "recompute", "0142/1", *stand)
    assert "run 0142/1 reading 1: identical to the last bit (6 vectors)" in said.out


def test_what_cannot_be_measured_again_is_named(measured: Bay) -> None:
    """One reading's samples let go by hand, as the raw budget does it; then another's counts changed."""
    stand = ("--stand", os.fspath(measured.stand))
    assert measured.stop() == 0
    other = sqlite3.connect(measured.store, isolation_level=None)
    (first,) = other.execute("SELECT reading_id FROM raw ORDER BY rowid LIMIT 1").fetchone()
    other.execute("INSERT INTO raw_aged VALUES (1, ?, 5, 5, 'by hand', 0)", (first,))
    other.execute("DELETE FROM raw WHERE reading_id = ?", (first,))
    other.close()
    done = measured.run("run", "recompute", "0142/1", *stand)
    assert done.code == 0
    assert "reading 1: not measured again. The raw samples of this reading were let go" in " ".join(
        done.out.split()
    )


def test_a_corrected_sensitivity(measured: Bay) -> None:
    """Probe 1 was 220 mV/mil and not 200: its vectors and its coefficient are 1 / 1.1 of what they were."""
    with measured.history() as history:
        before = {n: history.run(n) for n in ("0142/1", "0142/2")}
        coefficients = {(c.plane, c.channel): c.value for c in history.coefficients()}
        bytes_before = {n: vectors(run) for n, run in before.items()}
    words = ("run", "revise", "0142/1", "0142/2", "--sensitivity", "probe 1=220 mV/mil")
    told = measured.must(*words, "--why", "read off the other probe's sheet", "--json").json
    assert [r["run"] for r in told["runs"]] == ["0142/1", "0142/2"]
    assert {r["version"] for one in told["runs"] for r in one["readings"]} == {2}
    assert all(r["why_not"] is None for one in told["runs"] for r in one["readings"])
    assert told["left"] == []
    with measured.history() as history:
        for name, run in before.items():
            now = history.run(name)
            assert [r.label for r in now.readings] == [r.label for r in run.readings]
            for at, value in vectors(now).items():
                by = 1 / 1.1 if at[1] == "probe 1" else 1.0
                assert value == pytest.approx(by * bytes_before[name][at], rel=1e-12)
            old = history.run_as(name, 1)
            assert vectors(old) == bytes_before[name]
            set_up = history.set_up(now.set_up_id)
            # 1 mil = 25.4 um (METHODS 6.5)
            assert [c.volts_per_unit for c in set_up.channels] == pytest.approx([0.22 / 25.4, 0.2 / 25.4])
            assert history.set_up(run.set_up_id).channels[0].volts_per_unit == pytest.approx(0.2 / 25.4)
        for (plane, channel), value in coefficients.items():
            by = 1 / 1.1 if channel == "probe 1" else 1.0
            (found,) = history.coefficients(plane=plane, channel=channel)
            assert found.value == pytest.approx(by * value, rel=1e-12)
    assert measured.run("run", "recompute", "--job", "0142", "--json").json["count"]["apart"] == 0
    kept = measured.must("run", "recompute", "0142/1", "--keep")
    assert kept.out == "run 0142/1 reading 1: identical; version 2 stands\n"
    check_angle_and_sense(measured)


def test_the_same_request_is_one_act(measured: Bay) -> None:
    key = new_key()
    channels = [{"channel": "probe 1", "volts_per_unit": 0.0087, "unit": "um"}]
    body = {"key": key, "runs": ["0142/1"], "channels": channels, "why": "mistyped"}
    first = measured.client().post("/v1/run/revise", body)
    assert measured.client().post("/v1/run/revise", body) == first
    assert first["left"] == ["0142/2"]
    with measured.history() as history:
        assert {r.version for r in history.run("0142/1").readings} == {2}
    with pytest.raises(Refusal, match="was measured with that set-up already"):
        measured.post("/v1/run/revise", **{k: v for k, v in body.items() if k != "key"})
    check_refusals(measured)


def check_refusals(measured: Bay) -> None:
    for words in ((), ("0142/1", "--all"), ("--all", "--keep")):
        assert measured.run("run", "recompute", *words).code == 2

    def said(*words: str, code: int = 1) -> str:
        done = measured.run("run", "revise", *words, "--why", "a test")
        no_traceback(done)
        assert (done.code, done.out) == (code, ""), done
        return " ".join(done.err.split())

    assert "has no channel 'probe 3'. Its channels: probe 1, probe 2." in said(
        "0142/1", "--angle", "probe 3=45 deg"
    )
    assert "a sensitivity per mm/s is none of it" in said("0142/1", "--sensitivity", "probe 1=4 mV/(mm/s)")
    assert "There is no run 0142/9" in said("0142/9", "--angle", "probe 1=45 deg")
    assert "A run is named twice." in said("0142/1", "0142/1", "--angle", "probe 1=45 deg")
    assert "Nothing is said to be corrected." in said("0142/1")
    assert "has no unit" in said("0142/1", "--angle", "probe 1=45", code=2)
    assert "must be above zero" in said("0142/1", "--sensitivity", "probe 1=-7.9 mV/um", code=2)
    assert "must be at most 360 deg" in said("0142/1", "--angle", "probe 1=400 deg", code=2)
    assert "names no channel" in said("0142/1", "--angle", "45 deg", code=2)
    assert "neither rising nor falling" in said("0142/1", "--positive", "probe 1=up", code=2)
    measured.turn()
    run = measured.until_run()
    assert f"Run {run} is still open." in said(run, "--angle", "probe 1=45 deg")


def check_angle_and_sense(measured: Bay) -> None:
    """An angle changes no vector, a sense of positive turns it by half a turn."""
    with measured.history() as history:
        before = vectors(history.run("0142/1"))
    measured.must("run", "revise", "0142/1", "--angle", "probe 1=45 deg", "--sensor-angle", "90 deg",
                  "--why", "typed from the drawing")  # fmt: skip
    with measured.history() as history:
        now = history.run("0142/1")
        assert vectors(now) == before
        set_up = history.set_up(now.set_up_id)
        assert [c.angle_deg for c in set_up.channels] == [45.0, 0.0]
        assert set_up.pulse.angle_deg == 90.0
    measured.must("run", "revise", "0142/1", "--positive", "probe 1=falling", "--why", "wired the other way")
    with measured.history() as history:
        turned = vectors(history.run("0142/1"))
    for at, value in turned.items():
        assert value == pytest.approx(-before[at] if at[1] == "probe 1" else before[at], rel=1e-12)
        assert math.isfinite(abs(value))
