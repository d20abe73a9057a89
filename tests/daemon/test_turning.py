"""What is refused while the rotor turns or may turn, and what names nothing that is there."""

from __future__ import annotations

import pytest
from daemon_kit import MOUNT, Bay, no_traceback, until

pytestmark = pytest.mark.slow

FIT = ("weight", "fit", "3g", "--plane", "1", "--hole", "2", "--locked-out")
WEIGHTS = (
    FIT,
    ("weight", "drill", "3g", "--plane", "1", "--hole", "2", "--locked-out"),
    ("weight", "remove", "--plane", "1", "--all", "--locked-out"),
)


def refused(bay: Bay, *words: str) -> str:
    """What a refused command said, on one line."""
    done = bay.run(*words)
    assert done.code == 1, (words, done)
    assert done.out == ""
    no_traceback(done)
    return " ".join(done.err.split())


def test_weights_and_mounts_are_refused_while_turning(mounted: Bay) -> None:
    mounted.must(*FIT)
    mounted.turn()
    mounted.until_run()
    for words in WEIGHTS:
        assert "The rotor is turning (" in refused(mounted, *words)
    for words in (MOUNT, ("mount", "--none")):
        assert "The rotor is turning (" in refused(mounted, *words)
    mounted.coast()
    mounted.until_idle()
    assert len(mounted.must("weight", "list", "--json").json) == 1
    mounted.must(*WEIGHTS[2])


def test_they_are_refused_while_once_per_rev_is_lost(mounted: Bay) -> None:
    mounted.turn()
    mounted.until_readings()
    run = mounted.until_run()
    mounted.post("/v1/sim/fault", kind="missed", seconds=60.0, every=1)
    live = mounted.until_state("once-per-rev lost")
    assert live["speed_rpm"] is None
    for words in (*WEIGHTS, MOUNT, ("mount", "--none")):
        said = refused(mounted, *words)
        assert "once-per-rev signal is lost while the probes still vibrate" in said
        assert "Treat the rotor as turning" in said
    assert mounted.live()["run"] == run
    assert "once-per-rev lost" in mounted.must("status").out
    mounted.coast()  # the probes come to rest too, and then the run is over
    mounted.until_idle()
    with mounted.history() as history:
        assert [line.name for line in history.runs()] == [run]
    mounted.must(*FIT)


def test_no_pulses_is_no_proof_of_standstill(mounted: Bay) -> None:
    for words in WEIGHTS:
        said = refused(mounted, *words[:-1])
        assert "no pulses" in said
        assert "does not prove that the rotor stands still" in said
        assert "--locked-out" in said
    with mounted.history() as history:
        assert history.counts()["weight"] == 0


def test_source_lost_is_no_proof_of_standstill_either(mounted: Bay) -> None:
    mounted.post("/v1/sim/fault", kind="unplug", seconds=100.0)
    mounted.until_state("source lost")
    assert "source lost" in refused(mounted, *FIT[:-1])
    mounted.must(*FIT)


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("weight", "fit", "3g", "--plane", "1", "--hole", "25", "--locked-out"), "24"),
        (("weight", "fit", "3g", "--plane", "3", "--hole", "1", "--locked-out"), "plane 3"),
        (("weight", "remove", "--plane", "1", "--hole", "7", "--locked-out"), "hole 7"),
        (("weight", "remove", "--plane", "2", "--all", "--locked-out"), "plane 2"),
        (("mount", "F-999", *MOUNT[2:]), "F-999"),
        (("mount", "F-204", "--job", "1", "--rotation", "clockwise from left", "--clean"), "left"),
        ((*FIT, "--after", "0142/9"), "0142/9"),
        (("run", "show", "0142/9"), "0142/9"),
        (("run", "void", "0142/9", "why"), "0142/9"),
        (("run", "assign", "U/1", "0142"), "U/1"),
        (("job", "show", "0999"), "0999"),
        (("machine", "show", "F-999"), "F-999"),
        (("correction",), "O"),
    ],
)  # fmt: skip
def test_what_is_not_there_is_named(mounted: Bay, words: tuple[str, ...], said: str) -> None:
    assert said in refused(mounted, *words)
    with mounted.history() as history:
        assert history.counts()["weight"] == 0
        assert len(history.jobs()) == 1


def test_a_weight_with_nothing_mounted_is_refused(bay: Bay) -> None:
    assert "mounted" in refused(bay, *FIT)


def test_with_nothing_mounted_a_run_is_stored_as_unassigned(bay: Bay) -> None:
    bay.turn()
    assert bay.until_run() == "U/1"
    bay.until_readings()
    bay.coast()
    bay.until_idle()
    (line,) = bay.must("run", "list", "--json").json
    assert (line["run"], line["job"], line["machine"]) == ("U/1", None, None)
    bay.set_up()
    assert "U/1 is now run 0142/1" in bay.must("run", "assign", "U/1", "0142").out
    assert bay.must("mark", "O", "--last").out.startswith("O is run 0142/1")
    until(lambda: bay.must("run", "show", "U/1").out, "it to answer to its old name")
