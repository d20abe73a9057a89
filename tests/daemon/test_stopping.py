"""How a daemon ends: by a signal, in order; by a second one, at once."""

from __future__ import annotations

import signal
import sqlite3
import threading
import time
from collections.abc import Callable

import pytest
from daemon_kit import Bay, until

from store.records import RunState

pytestmark = pytest.mark.slow


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_a_signal_closes_the_run_and_leaves_a_clean_store(mounted: Bay, number: int) -> None:
    mounted.mark("O", choose="next")
    mounted.turn()
    mounted.until_readings()
    assert mounted.daemon is not None
    mounted.daemon.signal(number)
    assert mounted.daemon.wait(10.0) == 0, mounted.log
    with sqlite3.connect(mounted.store) as raw:
        assert raw.execute("pragma integrity_check").fetchall() == [("ok",)]
    raw.close()
    log = mounted.store.with_name("bay.sqlite-wal")
    assert not log.exists() or log.stat().st_size == 0
    with mounted.history() as history:
        (line,) = history.runs()
        run = history.run(line.name)
    assert (run.state, run.reason) == (RunState.INTERRUPTED, "daemon stopped")
    assert len(run.readings) >= 1
    assert list(mounted.runtime.iterdir()) == []
    assert "Traceback" not in mounted.log


def test_a_mark_that_waits_outlives_an_orderly_stop(make_bay: Callable[..., Bay]) -> None:
    """The run is cut short by the stop, not by the operator: the mark is not used up."""
    bay = make_bay(window="60 s")
    bay.start()
    bay.set_up()
    key = bay.mark("O", choose="next")["mark"]["key"]
    bay.turn()
    bay.until_run()
    assert bay.stop() == 0
    bay.start()
    assert bay.client().get(f"/v1/mark/state/{key}")["mark"]["state"] == "pending"
    with bay.history() as history:
        assert [line.state for line in history.runs()] == [RunState.INTERRUPTED]


def test_a_second_signal_ends_at_once(mounted: Bay) -> None:
    """With a part that does not stop in time."""
    daemon = mounted.daemon
    assert daemon is not None
    assert mounted.stop() == 0
    mounted.start(patch=STUBBORN)
    daemon = mounted.daemon
    assert daemon is not None
    daemon.signal(signal.SIGTERM)
    until(lambda: "asked to stop" in daemon.err, "the first signal to be heeded")
    assert daemon.wait(0.5) is None
    daemon.signal(signal.SIGINT)
    assert daemon.wait(2.0) == 128 + signal.SIGINT
    mounted.start()  # the next daemon finds nothing in its way
    assert mounted.stop() == 0


STUBBORN = """
from daq.drivers.simulated import SimulatedDriver
import time

def read(self, timeout_s):
    time.sleep(30)

SimulatedDriver._read = read
"""


def test_a_stop_while_nothing_turns_leaves_no_run(bay: Bay) -> None:
    assert bay.stop() == 0
    with bay.history() as history:
        assert history.runs() == ()


def test_a_client_that_waits_does_not_hold_the_stop(mounted: Bay) -> None:
    key = mounted.mark("O", choose="next")["mark"]["key"]
    client = mounted.client()
    told: list[str] = []

    def wait() -> None:
        told.append(client.get(f"/v1/mark/state/{key}?wait_s=30", 30)["mark"]["state"])

    thread = threading.Thread(target=wait)
    thread.start()
    time.sleep(0.3)  # so that it waits inside the daemon
    begin = time.monotonic()
    assert mounted.stop() == 0
    assert time.monotonic() - begin < 5.0
    thread.join(5.0)
    assert told == ["pending"]
    assert "Traceback" not in mounted.log


def test_a_driver_that_hangs_does_not_hold_the_stop(mounted: Bay) -> None:
    """It is left behind; the store is clean all the same, and the exit code says that something failed."""
    assert mounted.stop() == 0
    mounted.start(patch="import daq.daemon\ndaq.daemon.ENDS_WITHIN_S['driver'] = 0.5\n" + STUBBORN)
    mounted.mark("O", choose="next")
    assert mounted.stop() == 75
    assert "the driver thread did not end" in mounted.log
    log = mounted.store.with_name("bay.sqlite-wal")
    assert not log.exists() or log.stat().st_size == 0
    mounted.start()
    assert mounted.status()["pending"]["label"] == "O"
