"""Marks against a real daemon: waited for, given up, outliving a restart, refused, missed."""

from __future__ import annotations

import re
import signal
import sqlite3
from collections.abc import Callable
from contextlib import closing

import pytest
from daemon_kit import MOUNT, Bay, Process, no_traceback, until

from cli.client import new_key
from config.errors import Refusal
from store.records import MarkState

pytestmark = pytest.mark.slow


def waiting(bay: Bay, *words: str, patch: str = "") -> Process:
    """A ``revmark mark`` that waits, and whose mark is pending."""
    process = bay.fork("mark", *words, patch=patch)
    until(lambda: bay.status()["pending"] is not None, "the mark to be pending")
    if "--json" not in words:
        until(lambda: "waiting: " in process.err, "the command to wait")
    return process


def newest(bay: Bay) -> MarkState:
    with bay.history() as history:
        mark = history.last_mark()
    assert mark is not None
    return mark.state


@pytest.fixture
def patient(make_bay: Callable[..., Bay]) -> Bay:
    """A mounted stand whose window is longer than any run here: nothing ever becomes steady."""
    made = make_bay(window="60 s")
    made.start()
    made.set_up()
    return made


# --- waiting


def test_mark_waits_through_run_up_and_prints_run_and_vectors(mounted: Bay) -> None:
    process = waiting(mounted, "O")
    mounted.turn()
    done = process.done()
    assert done.code == 0, done.err
    assert done.out.startswith("O is run 0142/1, reading 1: 1500.0 r/min")
    assert re.search(r"^probe 1 +[0-9.]+ ", done.out, re.M)
    assert re.search(r"^probe 2 +[0-9.]+ ", done.out, re.M)
    with mounted.history() as history:
        (reading,) = history.run("0142/1").readings
    assert reading.label == "O"


def test_no_wait_leaves_it_pending_and_wait_ends_with_it(mounted: Bay) -> None:
    done = mounted.must("mark", "O", "--no-wait")
    assert done.out == "O of job 0142: pending; it takes the next fitting reading.\n"
    assert "mark     O pending since" in mounted.must("status").out
    assert mounted.status()["pending"]["label"] == "O"
    mounted.turn()
    told = mounted.must("mark", "--wait", "--json").json
    assert (told["mark"]["state"], told["mark"]["run"]) == ("labelled", "0142/1")
    assert mounted.status()["pending"] is None


def test_a_speed_that_no_reading_fits_is_named_while_it_waits(mounted: Bay) -> None:
    """The bay's job balances at 1500 r/min; what is steady at 1200 is never taken (REUSE (a): 0.5 %)."""
    process = waiting(mounted, "O")
    mounted.turn(1200.0)
    why = r"another speed: 1\d\d\d r/min is not within 0.5 % of the balancing speed \(1500.0 r/min\)"
    until(lambda: re.search("waiting: " + why, " ".join(process.err.split())), "the speed to be named")
    assert "it waits for another speed: 1200 r/min" in mounted.must("status").out
    mounted.turn()
    assert process.done().out.startswith("O is run 0142/1, reading 2: 1500.0 r/min")


def test_cancel_labels_nothing(mounted: Bay) -> None:
    mounted.must("mark", "O", "--no-wait")
    assert mounted.must("mark", "--cancel").out == "O of job 0142: cancelled; nothing was labelled.\n"
    mounted.a_run()
    with mounted.history() as history:
        assert [r.label for r in history.run("0142/1").readings] == [None]
    done = mounted.run("mark", "--cancel")
    assert (done.code, done.err) == (
        1,
        "revmark: No mark is pending. Mark a run with: revmark mark LABEL\n",
    )


def test_timeout_cancels(mounted: Bay) -> None:
    done = mounted.run("mark", "O", "--timeout", "0.3")
    assert done.code == 1
    assert "The mark was cancelled. Nothing was labelled" in done.err
    assert newest(mounted) is MarkState.CANCELLED


def test_ctrl_c_cancels(mounted: Bay) -> None:
    process = waiting(mounted, "O")
    process.signal(signal.SIGINT)
    done = process.done()
    assert done.code == 1
    assert "The mark was cancelled." in done.err
    no_traceback(done)
    assert newest(mounted) is MarkState.CANCELLED


def test_ctrl_c_after_the_label_prints_it(mounted: Bay) -> None:
    """The command is held while the mark ends; Ctrl-C then finds it labelled, and that is said."""
    process = waiting(mounted, "O")
    process.signal(signal.SIGSTOP)
    mounted.turn()
    until(lambda: newest(mounted) is MarkState.LABELLED, "the label")
    process.signal(signal.SIGINT)
    process.signal(signal.SIGCONT)
    done = process.done()
    assert done.code == 0, done.err
    assert done.out.startswith("O is run 0142/1, reading 1")


def test_ctrl_c_before_the_answer_cancels_too(mounted: Bay) -> None:
    """The daemon is held, so that the question is sent and not answered."""
    assert mounted.daemon is not None
    mounted.daemon.signal(signal.SIGSTOP)
    process = mounted.fork("mark", "O", patch=ASKING)
    until(lambda: "asking" in process.err, "the question to be on its way")
    process.signal(signal.SIGINT)
    mounted.daemon.signal(signal.SIGCONT)
    done = process.done()
    assert done.code == 1
    no_traceback(done)
    assert mounted.status()["pending"] is None


ASKING = """
import sys
import cli.client

exchange = cli.client._exchange

def told(*args):
    print("asking", file=sys.stderr, flush=True)
    return exchange(*args)

cli.client._exchange = told
"""


# --- over a restart of the daemon


def test_a_waiting_mark_outlives_kill_9_of_the_daemon(mounted: Bay) -> None:
    process = waiting(mounted, "O")
    mounted.kill()
    mounted.start()
    assert mounted.status()["pending"]["label"] == "O"
    mounted.turn()
    done = process.done()
    assert done.code == 0, done.err
    assert done.out.startswith("O is run 0142/1")
    with mounted.history() as history:
        assert history.counts()["mark"] == 1


def test_a_daemon_that_stays_away_leaves_the_mark_pending(mounted: Bay) -> None:
    process = waiting(mounted, "O", patch="import cli.mark; cli.mark.LOST_FOR_S = 0.2")
    mounted.kill()
    done = process.done()
    assert done.code == 1
    said = " ".join(done.err.split())
    assert "A mark that it took stays pending." in said
    assert "revmark mark --wait, or --cancel" in said
    no_traceback(done)
    mounted.start()
    mounted.turn()
    assert mounted.must("mark", "--wait").out.startswith("O is run 0142/1")


def test_ctrl_c_without_a_daemon_says_that_the_mark_stays(mounted: Bay) -> None:
    process = waiting(mounted, "O")
    mounted.kill()
    process.signal(signal.SIGINT)
    done = process.done()
    assert done.code == 1
    assert "A mark that it took stays pending." in " ".join(done.err.split())
    no_traceback(done)


# --- missed


def test_a_run_too_short_uses_the_mark_up(patient: Bay) -> None:
    process = waiting(patient, "O")
    patient.turn()
    patient.until_run()
    until(lambda: "averaging window" in patient.live()["still_out"], "the figure that is out")
    patient.coast()
    done = process.done()
    assert done.code == 1
    said = " ".join(done.err.split())
    assert "The run ended without a reading that fits: the averaging window holds" in said
    assert "of 60 s. Run again" in said or "of 6 blocks. Run again" in said
    assert "Run again longer" in said
    assert newest(patient) is MarkState.MISSED
    patient.until_idle()
    again = patient.run("mark", "O", "--no-wait", "--json")
    assert (again.code, again.json["mark"]["state"]) == (0, "pending")


def test_a_run_at_the_wrong_speed_uses_the_mark_up(mounted: Bay) -> None:
    """0.5 % of 1500 r/min is 7.5 r/min: at 1510 the reading is stored and not labelled."""
    process = waiting(mounted, "O", "--json")
    mounted.a_run(1510)
    done = process.done()
    assert done.code == 1
    assert done.json["mark"]["state"] == "missed"
    assert "it was steady only at 1510 r/min" in " ".join(done.err.split())
    with mounted.history() as history:
        (reading,) = history.run("0142/1").readings
    assert (reading.label, round(reading.speed_hz * 60)) == (None, 1510)


def test_a_speed_within_half_a_per_cent_is_taken(mounted: Bay) -> None:
    mounted.must("mark", "O", "--no-wait")
    mounted.a_run(1507)
    assert newest(mounted) is MarkState.LABELLED


def test_slow_roll_is_taken_only_below_its_limit(mounted: Bay) -> None:
    """300 r/min in the stand file."""
    mounted.must("mark", "slow-roll", "--no-wait")
    mounted.a_run(310)
    assert newest(mounted) is MarkState.MISSED
    mounted.must("mark", "slow-roll", "--no-wait")
    mounted.a_run(290)
    assert newest(mounted) is MarkState.LABELLED
    mounted.a_run()
    done = mounted.run("mark", "slow-roll", "--last")
    assert done.code == 1
    assert "300" in done.err


# --- which run, which weights


def test_it_refuses_to_choose_between_the_last_run_and_the_next(mounted: Bay) -> None:
    mounted.a_run()
    done = mounted.run("mark", "O")
    assert done.code == 1
    assert "Run 0142/1 has readings and none is marked" in " ".join(done.err.split())
    assert "--last" in done.err
    assert "--next" in done.err
    assert mounted.must("mark", "O", "--last").out.startswith("O is run 0142/1, reading 1")
    mounted.a_run()
    told = mounted.must("mark", "O", "--next", "--no-wait", "--json").json
    assert told["mark"]["state"] == "pending"
    mounted.a_run()
    assert mounted.must("mark", "--wait").out.startswith("O is run 0142/3")


def test_a_weight_after_the_last_run_means_the_next(mounted: Bay) -> None:
    mounted.a_run()
    mounted.must("mark", "O", "--last")
    mounted.a_run()
    mounted.must("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
    assert mounted.must("mark", "O+T", "--no-wait", "--json").json["mark"]["state"] == "pending"


def test_o_with_other_weights_than_listed_is_questioned(mounted: Bay) -> None:
    mounted.must("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
    done = mounted.run("mark", "O", "--no-wait")
    assert done.code == 1
    assert "differ from those listed" in " ".join(done.err.split())
    assert "--yes" in done.err
    assert mounted.status()["pending"] is None
    assert mounted.must("mark", "O", "--no-wait", "--yes", "--json").json["mark"]["state"] == "pending"


def test_o_t_with_the_weights_of_o_is_questioned(mounted: Bay) -> None:
    mounted.must("mark", "O", "--no-wait")
    mounted.a_run()
    done = mounted.run("mark", "O+T", "--no-wait")
    assert done.code == 1
    assert "there is no trial weight" in " ".join(done.err.split())
    assert mounted.must("mark", "O+T", "--no-wait", "--yes", "--json").json["mark"]["state"] == "pending"


def test_while_turning_it_takes_a_fresh_reading(mounted: Bay) -> None:
    mounted.turn()
    mounted.until_readings()
    asked_at = mounted.live()["sample"]
    told = mounted.must("mark", "O", "--json").json
    assert (told["mark"]["run"], told["mark"]["reading"]) == ("0142/1", 2)
    with mounted.history() as history:
        run = history.open_run()
        assert run is not None
        assert [r.label for r in run.readings] == [None, "O"]
    with closing(sqlite3.connect(mounted.store)) as raw:
        (first,) = raw.execute("select first_sample from reading where number = 2").fetchone()
    assert first >= asked_at


# --- what is refused


def test_one_mark_waits_at_a_time(mounted: Bay) -> None:
    mounted.must("mark", "O", "--no-wait")
    done = mounted.run("mark", "check", "--no-wait")
    assert done.code == 1
    assert "one waits at a time" in " ".join(done.err.split())
    assert "revmark mark --cancel" in " ".join(done.err.split())


def test_while_a_mark_is_pending_weights_and_mounts_are_refused(mounted: Bay) -> None:
    mounted.must("weight", "fit", "3g", "--plane", "1", "--hole", "1", "--locked-out")
    mounted.must("mark", "check", "--no-wait")
    for words in (
        ("weight", "fit", "3g", "--plane", "1", "--hole", "2", "--locked-out"),
        ("weight", "drill", "3g", "--plane", "1", "--hole", "2", "--locked-out"),
        ("weight", "remove", "--plane", "1", "--all", "--locked-out"),
        MOUNT,
        ("mount", "--none"),
    ):
        done = mounted.run(*words)
        assert done.code == 1, words
        assert "check" in done.err, words
        assert "pending" in done.err, words
        assert "--cancel" in done.err, words
    mounted.must("mark", "--cancel")
    mounted.must("weight", "fit", "3g", "--plane", "1", "--hole", "2", "--locked-out")


def test_nothing_mounted_nothing_marked(bay: Bay) -> None:
    done = bay.run("mark", "O")
    assert done.code == 1
    assert "Nothing is mounted" in done.err


def test_the_same_key_twice_is_one_mark(mounted: Bay) -> None:
    key = new_key()
    body = {"key": key, "label": "O", "choose": "next"}
    first = mounted.client().post("/v1/mark", body)
    assert mounted.client().post("/v1/mark", body) == first
    with pytest.raises(Refusal, match="asked before as O, now as check"):
        mounted.client().post("/v1/mark", {**body, "label": "check"})
    mounted.a_run()
    again = mounted.client().post("/v1/mark", body)
    assert (again["mark"]["state"], again["mark"]["run"]) == ("labelled", "0142/1")
    with mounted.history() as history:
        assert history.counts()["mark"] == 1
        assert history.counts()["label"] == 1


def test_the_same_key_twice_is_one_weight(mounted: Bay) -> None:
    body = {"key": new_key(), "piece": {"plane": 1, "mass_g": 3.0, "hole": 4}, "locked_out": True}
    first = mounted.client().post("/v1/weight", body)
    mounted.turn()  # the answer came late: by now a new weight would be refused
    mounted.until_state("turning")
    assert mounted.client().post("/v1/weight", body)["weights"] == first["weights"]
    with pytest.raises(Refusal, match="key was used for another request"):
        mounted.client().post("/v1/weight", {**body, "piece": {**body["piece"], "hole": 5}})  # type: ignore[dict-item]
    with mounted.history() as history:
        assert history.counts()["weight"] == 1


@pytest.mark.parametrize(
    "words", [(), ("X",), ("O", "--cancel"), ("--cancel", "--wait"), ("O", "--wait", "--no-wait"), ("o+t",)]
)
def test_typed_wrong(mounted: Bay, words: tuple[str, ...]) -> None:
    done = mounted.run("mark", *words)
    assert done.code == 2
    assert done.out == ""
    no_traceback(done)
    assert mounted.status()["pending"] is None
