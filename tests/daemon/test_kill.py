"""kill -9 of the daemon at random moments, under marks, weights and runs (STORE.md sections 1.2 and 8).

What was acknowledged is there once; what was not is there once after its retry; a run that was open is
closed as interrupted with its readings whole.
"""

from __future__ import annotations

import os
import random
import signal
import sqlite3
import threading
import time
from collections import Counter
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass, field

import pytest
from daemon_kit import Bay, Json, until

from cli.client import Client, new_key
from config.errors import DaemonError
from store.records import MarkState, RunState

pytestmark = [pytest.mark.slow, pytest.mark.timeout(170)]

KILLS = int(os.environ.get("REVMARK_TEST_KILLS", "50"))
LATEST_S = 0.9
"""A run with its mark and weight takes about so long here."""
SOON_S = 0.012
"""Where answers get lost: a quarter of the kills comes this soon after a question was sent, a quarter at the
moment when what was asked can be read in the store."""
MODES = ("any time", "after asking", "any time", "at commit")
VECTORS = 6
"""Two probes, 1X to 3X."""


@dataclass
class Act:
    """Something asked under a key, sent again under it until it is acknowledged."""

    path: str
    body: Json


@dataclass
class Worker:
    """Marks, runs and weights, one after the other; keeps what was acknowledged."""

    random: random.Random
    weights: int = 0
    asked: dict[str, str] = field(default_factory=dict)
    """Key -> path, of everything acknowledged."""
    labelled: dict[str, tuple[str, int]] = field(default_factory=dict)
    """Key of a mark -> run and reading, as answered."""
    runs: set[str] = field(default_factory=set)
    """Runs that an answer named."""
    in_flight: Act | None = None
    waits_for: str | None = None
    kill_soon: threading.Event = field(default_factory=threading.Event)

    def work(self, client: Client) -> None:
        """Until the daemon is gone."""
        try:
            while True:
                self._cycle(client)
        except DaemonError:
            return

    def _cycle(self, client: Client) -> None:
        if self.in_flight is not None:
            self.send(client, self.in_flight)
        if self.waits_for is None:
            self.send(client, self._mark())
        client.post("/v1/sim/start", {"key": new_key(), "speed_hz": 25.0})
        until(lambda: self._see(client)["state"] == "turning", "the rotor to turn")
        self._wait_for_label(client)
        client.post("/v1/sim/stop", {"key": new_key()})
        self._until_idle(client)
        self.send(client, self._weight())

    def _mark(self) -> Act:
        return Act("/v1/mark", {"key": new_key(), "label": "O", "choose": "next", "confirmed": True})

    def _weight(self) -> Act:
        """Each of a mass of its own, so that a second one would show."""
        self.weights += 1
        piece = {"plane": 1, "mass_g": self.weights / 1000, "hole": 1 + self.weights % 24}
        body = {
            "piece": piece,
            "locked_out": True,
            "confirmed": self.weights > 24,
        }  # a second one in the hole
        return Act("/v1/weight", {"key": new_key(), **body})

    def send(self, client: Client, act: Act) -> None:
        self.in_flight = act
        self.kill_soon.set()
        client.post(act.path, act.body)
        self.in_flight = None
        self.asked[act.body["key"]] = act.path
        if act.path == "/v1/mark":
            self.waits_for = act.body["key"]

    def _wait_for_label(self, client: Client) -> None:
        while self.waits_for is not None:
            told = client.get(f"/v1/mark/state/{self.waits_for}?wait_s=0.1", 0.1)["mark"]
            assert told["state"] in ("pending", "labelled"), told
            self._see(client)
            if told["state"] == "labelled":
                self.labelled[self.waits_for] = (told["run"], told["reading"])
                self.waits_for = None

    def _until_idle(self, client: Client) -> None:
        until(lambda: self._see(client)["state"] == "no pulses", "the rotor to coast down")

    def _see(self, client: Client) -> Json:
        live: Json = client.get("/v1/status")["live"]
        if live["run"]:
            self.runs.add(live["run"])
        return live


@dataclass
class Tally:
    """What the kills met."""

    open_runs: int = 0
    readings_in_them: int = 0
    stored_unacknowledged: int = 0
    open_s: list[float] = field(default_factory=list)
    ready_s: list[float] = field(default_factory=list)


def kill_in(bay: Bay, worker: Worker, mode: str) -> threading.Thread:
    """A thread that kills the daemon after a time, or once the next question was sent or committed."""
    assert bay.daemon is not None
    pid = bay.daemon.pid

    def kill() -> None:
        time.sleep(worker.random.uniform(0, LATEST_S))
        if mode != "any time":
            worker.kill_soon.clear()
            worker.kill_soon.wait(3.0)
        if mode == "after asking":
            time.sleep(worker.random.uniform(0, SOON_S))
        if mode == "at commit":
            until_stored(bay, worker)
        os.kill(pid, signal.SIGKILL)

    thread = threading.Thread(target=kill)
    thread.start()
    return thread


def until_stored(bay: Bay, worker: Worker) -> None:
    """Wait at most a second for what is being asked to appear in the store."""
    end = time.monotonic() + 1.0
    with reading(bay) as raw:
        while time.monotonic() < end and (act := worker.in_flight) is not None:
            if is_stored(raw, act):
                return


def is_stored(raw: sqlite3.Connection, act: Act) -> bool:
    table = "mark" if act.path == "/v1/mark" else "request"
    sql = f"select count(*) from {table} where key = ?"
    return bool(raw.execute(sql, (act.body["key"],)).fetchone()[0])


@contextmanager
def reading(bay: Bay) -> Iterator[sqlite3.Connection]:
    """The store past our own code."""
    with closing(sqlite3.connect(f"file:{bay.store}?mode=ro", uri=True)) as raw:
        yield raw


def look(bay: Bay, worker: Worker, tally: Tally) -> str | None:
    """The store as the kill left it: opened, timed; the name of the run left open."""
    begin = time.perf_counter()
    with bay.history() as history:
        running = history.open_run()
        tally.open_s.append(time.perf_counter() - begin)
        if worker.in_flight is not None:
            with reading(bay) as raw:
                tally.stored_unacknowledged += is_stored(raw, worker.in_flight)
    if running is not None:
        tally.open_runs += 1
        tally.readings_in_them += len(running.readings)
    return None if running is None else running.name


def check_interrupted(bay: Bay, name: str) -> None:
    """Closed as interrupted; each of its readings whole."""
    with bay.history() as history:
        run = history.run(name)
        assert run.state is RunState.INTERRUPTED
        assert run.reason == "the daemon ended without closing it"
        assert history.open_run() is None
        for reading in run.readings:
            raw = history.reading_raw(reading.id)  # raises StoreError when its CRC does not fit
            assert raw.counts.shape[1] == 3
            assert len(raw.counts) >= 0.6 * 5120
            assert len(reading.vectors) == VECTORS


def check_all(bay: Bay, worker: Worker) -> Counter[str]:
    """At the end: everything acknowledged is there, once, and nothing else is."""
    with reading(bay) as raw:
        assert raw.execute("pragma integrity_check").fetchall() == [("ok",)]
        assert raw.execute("pragma foreign_key_check").fetchall() == []
        marks = [key for (key,) in raw.execute("select key from mark")]
        masses = [round(mass * 1000) for (mass,) in raw.execute("select mass_g from weight")]
        labels = Counter(key for (key,) in raw.execute("select mark_key from label"))
    asked = {key for key, path in worker.asked.items() if path == "/v1/mark"}
    assert sorted(marks) == sorted(asked)
    assert sorted(masses) == list(range(1, worker.weights + 1))
    assert set(labels.values()) == {1}
    with bay.history() as history:
        for key, place in worker.labelled.items():
            mark = history.mark(key)
            assert mark is not None
            assert mark.state is MarkState.LABELLED
            assert (mark.run_name, mark.reading_number) == place
        lines = history.runs()
        names = {line.name for line in lines}
        assert worker.runs <= names
        assert names == {f"0142/{n}" for n in range(1, len(lines) + 1)}
        return Counter(str(line.state) for line in lines)


def test_kill_9_loses_nothing_acknowledged_and_doubles_nothing(mounted: Bay) -> None:
    seed = random.randrange(1 << 30)
    worker, tally = Worker(random.Random(seed)), Tally()
    print(f"seed {seed}")
    for number in range(KILLS):
        killer = kill_in(mounted, worker, MODES[number % len(MODES)])
        try:
            worker.work(mounted.client())
        finally:
            killer.join(5.0)
        assert mounted.daemon is not None
        assert mounted.daemon.wait(5.0) == -signal.SIGKILL, mounted.log
        left_open = look(mounted, worker, tally)
        begin = time.perf_counter()
        mounted.start()
        tally.ready_s.append(time.perf_counter() - begin)
        if left_open is not None:
            check_interrupted(mounted, left_open)
    if worker.in_flight is not None:
        worker.send(mounted.client(), worker.in_flight)
    states = check_all(mounted, worker)
    assert tally.open_runs >= KILLS // 10, "the kills met too few runs to prove anything"
    print(
        f"\n{KILLS} kills: {len(worker.asked)} acts acknowledged (marks and weights), {len(worker.labelled)} "
        f"labels, {sum(states.values())} runs {dict(states)}; 0 lost, 0 doubled; {tally.open_runs} runs open "
        f"at a kill with {tally.readings_in_them} readings, all whole; {tally.stored_unacknowledged} acts "
        "were stored and not yet acknowledged"
    )
    for what, times in (("store opened and asked", tally.open_s), ("daemon ready", tally.ready_s)):
        print(f"{what}: median {sorted(times)[KILLS // 2] * 1e3:.1f} ms, most {max(times) * 1e3:.1f} ms")
    assert max(tally.open_s) < 2.0
