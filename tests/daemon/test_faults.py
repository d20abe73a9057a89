"""Faults injected into the simulated source: what is flagged, what is kept, what goes on by itself."""

from __future__ import annotations

import sqlite3
from contextlib import closing

import pytest
from daemon_kit import Bay, until

from store.records import MarkState, RunState

pytestmark = pytest.mark.slow
RATE_HZ = 5120


def events(bay: Bay) -> list[tuple[str, str]]:
    with bay.history() as history:
        return [(e.kind, e.text) for e in history.events()]


def turning(bay: Bay) -> str:
    """The rotor at speed with its first reading; the run's name."""
    bay.turn()
    run = bay.until_run()
    bay.until_readings()
    return run


def finished(bay: Bay) -> None:
    bay.coast()
    bay.until_idle()


def test_a_dropout_leaves_the_run_open_and_nothing_spans_it(mounted: Bay) -> None:
    run = turning(mounted)
    mounted.post("/v1/sim/fault", kind="dropout", seconds=0.5)
    until(lambda: "dropout" in dict(events(mounted)), "the event", every_s=0.2)
    text = dict(events(mounted))["dropout"]
    assert f"{RATE_HZ // 2} samples" in text
    mounted.mark("O")
    mounted.until_readings(2)
    assert mounted.live()["run"] == run
    finished(mounted)
    with mounted.history() as history:
        assert [line.name for line in history.runs()] == [run]
        readings = history.run(run).readings
        raws = [history.reading_raw(r.id) for r in readings]
    assert [str(r.label) for r in readings[-1:]] == ["O"]
    assert all("samples_lost" not in r.flags for r in readings)
    with closing(sqlite3.connect(mounted.store)) as raw:
        places = raw.execute("select segment, first_sample from reading order by number").fetchall()
    segments = [segment for segment, _ in places]
    assert segments[-1] == segments[0] + 1
    gap_ends = next(first for segment, first in places if segment == segments[-1])
    before = [r for r, (segment, _) in zip(raws, places, strict=True) if segment == segments[0]]
    assert all(r.first_sample + len(r.counts) + RATE_HZ // 2 <= gap_ends for r in before)


def test_an_unplugged_source_interrupts_the_run_and_comes_back(mounted: Bay) -> None:
    """10 s of the stream are 1 s here; the daemon opens the source again by itself."""
    key = mounted.mark("O", choose="next")["mark"]["key"]
    run = turning(mounted)
    mounted.post("/v1/sim/fault", kind="unplug", seconds=10.0)
    live = mounted.until_state("source lost")
    assert "unplugged" in live["source"]
    assert live["speed_rpm"] is None
    until(lambda: not mounted.live()["run"], "the run to be closed")
    with mounted.history() as history:
        found, mark = history.run(run), history.mark(key)
    assert found.state is RunState.INTERRUPTED
    assert "source lost" in found.reason
    assert len(found.readings) >= 1
    assert mark is not None
    assert mark.state is MarkState.LABELLED
    until(lambda: mounted.live()["state"] != "source lost", "the source to come back", 15.0)
    until(lambda: {"source_lost", "source_back"} <= dict(events(mounted)).keys(), "the events", every_s=0.2)
    name = mounted.until_run()  # it turns still, so a new run has begun
    mounted.mark("O")
    with mounted.history() as history:
        until(lambda: (m := history.last_mark()) and m.state is MarkState.LABELLED, "the next label")
        mark = history.last_mark()
    assert mark is not None
    assert mark.run_name == name == "0142/2"
    finished(mounted)


def test_samples_before_and_after_a_lost_source_never_share_an_index(mounted: Bay) -> None:
    """``mark`` while turning compares sample indices: they must grow over re-openings."""
    turning(mounted)
    before = mounted.live()["sample"]
    mounted.post("/v1/sim/fault", kind="unplug", seconds=2.0)
    mounted.until_state("source lost")
    until(lambda: mounted.live()["state"] == "turning", "the source to come back", 15.0)
    assert mounted.live()["sample"] >= before


def test_missed_pulses_are_flagged(mounted: Bay) -> None:
    """One pulse in ten may be missed and is filled in; with one in five nothing is steady."""
    bay = mounted
    turning(bay)
    bay.post("/v1/sim/fault", kind="missed", seconds=20.0, every=5)
    until(lambda: "missed_pulses" in bay.live()["flags"], "the flag")
    until(lambda: "once-per-rev pulses are missed" in bay.live()["still_out"], "the figure that is out")
    assert bay.live()["state"] == "turning"
    bay.mark("O")
    assert bay.status()["pending"] is not None
    until(lambda: bay.status()["pending"] is None, "a reading after the fault")
    with bay.history() as history:
        run = history.open_run()
        assert run is not None
        taken = run.readings[-1]
        assert taken.figures["missed"] <= 0.1 * taken.revolutions
        assert ("missed_pulses" in taken.flags) == (taken.figures["missed"] > 0)
    finished(bay)


def test_a_clipped_probe_is_flagged_with_its_name(mounted: Bay) -> None:
    turning(mounted)
    mounted.post("/v1/sim/fault", kind="clip", seconds=60.0, channel="probe 2")
    until(lambda: "clipped:probe 2" in mounted.live()["flags"], "the flag")
    assert "clipped:probe 1" not in mounted.live()["flags"]
    done = mounted.must("mark", "O")
    assert "flag: probe 2 is clipped" in " ".join(done.err.split())
    finished(mounted)
    with mounted.history() as history:
        labelled = [r for r in history.run("0142/1").readings if r.label]
    assert [f for f in labelled[0].flags if f.startswith("clipped")] == ["clipped:probe 2"]


def test_once_per_rev_lost_leaves_the_run_open(mounted: Bay) -> None:
    run = turning(mounted)
    mounted.post("/v1/sim/fault", kind="missed", seconds=20.0, every=1)
    live = mounted.until_state("once-per-rev lost")
    assert live["run"] == run
    mounted.until_state("turning")
    assert mounted.live()["run"] == run
    mounted.mark("O")
    until(lambda: mounted.status()["pending"] is None, "a reading with pulses again")
    finished(mounted)
    with mounted.history() as history:
        assert [(line.name, str(line.state)) for line in history.runs()] == [(run, "complete")]


def test_a_fault_that_does_not_exist_is_refused(mounted: Bay) -> None:
    done = mounted.run("sim", "fault", "melt")
    assert done.code == 2
    assert "melt" in done.err
    done = mounted.run("sim", "fault", "clip", "--channel", "probe 9")
    assert done.code == 1
    assert "probe 9" in done.err
