"""The daemon of one stand: one process, four threads (driver, analysis, writer, control), each supervised.

``serve`` runs it in the foreground until a signal and returns the exit code: 0 stopped, 1 refused,
75 try again (a part failed; nothing acknowledged is lost), 78 the configuration must be mended first.
"""

from __future__ import annotations

import logging
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from types import FrameType

from config.errors import DriverError, RevmarkError, StandFileError, StoreError
from config.places import runtime_folder_for_daemon
from config.stand import Stand
from config.version import __version__
from daq.analysis import Analysis
from daq.board import Board
from daq.clock import Clock, SystemClock
from daq.clockwatch import ClockWatch, step_text
from daq.control import Identity, application, loopback_socket, serve_control
from daq.drivers.registry import AnyDriver, make_driver
from daq.interface import acts, questions, shows
from daq.notify import Notifier
from daq.pump import Pump
from daq.recorder import Recorder
from daq.runtime import Access, Runtime, access_of, closed_to_group, give
from daq.setup import channel_plan
from daq.supervise import Body, Part, Supervisor
from daq.writer import Writer
from store.database import create_store
from store.history import History
from store.ledger import Ledger
from store.trouble import in_our_words

OK, REFUSED, TRY_AGAIN, CONFIGURATION = 0, 1, 75, 78
WATCH_EVERY_S = 0.5
SWITCH_INTERVAL_S = 0.0005
"""Cuts what a Python loop elsewhere in the process costs the reader (STORE.md section 5)."""
ENDS_WITHIN_S = {"control": 10.0, "driver": 10.0, "analysis": 20.0, "writer": 30.0}
"""How long a part may take to stop, in the order in which they are stopped."""
HANGS_AFTER_S = {"writer": 60.0, "driver": 30.0, "analysis": 60.0, "control": 30.0}
"""A part whose heartbeat is older than this hangs."""
CONFIGURATION_TROUBLE = ("newer", "older", "network", "corrupt", "missing", "read_only", "refused")

log = logging.getLogger("revmark.daemon")


def serve(stand: Stand, clock: Clock | None = None, ready: Callable[[str], None] = lambda _: None) -> int:
    """Serve ``stand`` until SIGTERM or SIGINT; ``ready`` is told, in a line, when marks are taken."""
    clock = clock or SystemClock()
    sys.setswitchinterval(SWITCH_INTERVAL_S)
    try:
        access = access_of(stand.access.group)
        os.umask(0o077 if access.gid is None else 0o007)
        driver = make_driver(
            stand.source.driver, stand.source.options, channel_plan(stand), clock=clock, folder=stand.folder
        )
        with _ledger(stand, clock, access) as ledger:
            return Daemon(stand, ledger, driver, access, clock).run(ready)
    except (StandFileError, DriverError) as error:
        log.error("%s", error)
        return CONFIGURATION
    except StoreError as error:
        log.error("%s", error)
        return _code_of(error)
    except RevmarkError as error:
        log.error("%s", error)
        return REFUSED


def _code_of(error: StoreError) -> int:
    if error.kind in CONFIGURATION_TROUBLE:
        return CONFIGURATION
    return REFUSED if error.kind == "locked" else TRY_AGAIN


@contextmanager
def _ledger(stand: Stand, clock: Clock, access: Access) -> Iterator[Ledger]:
    path = stand.store_path
    with in_our_words(path):
        is_there = path.exists()
    if not is_there:
        create_store(path, clock=clock, software=__version__)
        log.info("new, empty store %s", path)
    ledger = Ledger.open(path, clock=clock, software=__version__)
    try:
        _give_store(path, access)
        for run in ledger.recover():
            log.warning("run %s was open when the daemon ended; closed as interrupted", run.name)
        yield ledger
    finally:
        ledger.close()


def _give_store(path: Path, access: Access) -> None:
    """The store's files to the group of operators; what belongs to somebody else is left as it is."""
    for file in (path, *(path.with_name(path.name + end) for end in ("-wal", "-shm", ".lock"))):
        if file.exists() and (not hasattr(os, "getuid") or file.stat().st_uid == os.getuid()):
            give(file, access.store_mode, access.gid)
    closed = closed_to_group(path.parent, access)
    if closed is not None:
        log.warning("%s", closed)


class Daemon:
    """Builds the parts, runs them, and takes them down in order."""

    def __init__(self, stand: Stand, ledger: Ledger, driver: AnyDriver, access: Access, clock: Clock) -> None:
        self._stand = stand
        self._ledger = ledger
        self._access = access
        self._clock = clock
        self._board = Board(clock)
        self._writer = Writer(ledger, self._board, clock)
        self._pump = Pump(driver, self._board, clock)
        self._recorder = Recorder(self._writer, self._board, stand)
        self._analysis = Analysis(stand, self._pump, self._recorder, self._board, clock)
        self._supervisor = Supervisor(clock)
        self._asked_to_stop = threading.Event()
        self._notifier = Notifier()

    def run(self, ready: Callable[[str], None]) -> int:
        runtime = Runtime(runtime_folder_for_daemon(), self._stand.store_path, self._access)
        with History.open(self._stand.store_path) as history, self._signals():
            parts = self._parts(runtime, history)
            try:
                for part in parts:
                    self._supervisor.start(part)
                    if part.name == "driver":
                        self._pump.opened.wait(5.0)
                if self._pump.fatal is None:
                    ready(f"{self._stand.name}: marks are taken; store {self._stand.store_path}")
                    self._notifier.ready()
                code = self._watch(parts)
            finally:
                self._notifier.stopping()
                runtime.withdraw()
                hung = self._take_down(parts)
            return TRY_AGAIN if hung and code == OK else code

    def _parts(self, runtime: Runtime, history: History) -> list[Part]:
        """In the order of starting; they are stopped in the reverse of the order of the samples' way."""
        runtime.make_folder()
        tcp = loopback_socket()
        unix = runtime.unix_socket()
        port = tcp.getsockname()[1]
        hosts = frozenset({f"127.0.0.1:{port}", f"localhost:{port}"})
        identity = Identity(__version__, history.info().schema, runtime.instance)
        desk = (self._stand, self._writer, history, self._board, self._pump, self._analysis, self._clock)
        app = application(identity, runtime.token, lambda: hosts, acts(*desk), questions(*desk))
        sockets = [tcp] if unix is None else [tcp, unix]
        runtime.publish(
            {
                "stand": self._stand.name,
                "stand_file": os.path.realpath(self._stand.file),
                "store": str(self._stand.store_path),
                "show": shows(self._stand),
                "time_zone": self._stand.identity.time_zone,
                "port": port,
                "started_us": self._clock.now_us(),
            },
            has_socket=unix is not None,
        )
        bodies: dict[str, Body] = {
            "writer": self._writer.run,
            "driver": self._pump.run,
            "analysis": self._analysis.run,
            "control": lambda stop, beat: serve_control(app, sockets, stop, beat),
        }
        return [Part(name, body, HANGS_AFTER_S[name]) for name, body in bodies.items()]

    def _watch(self, parts: list[Part]) -> int:
        wall = ClockWatch(self._clock)
        while not self._asked_to_stop.is_set():
            if self._pump.fatal is not None:
                log.error("%s", self._pump.fatal)
                return TRY_AGAIN if self._pump.fatal.kind == "gone" else CONFIGURATION
            trouble = self._supervisor.trouble(parts)
            if trouble is not None:
                log.error("%s The daemon ends; start it again.", trouble)
                return TRY_AGAIN
            if (step_s := wall.look()) is not None:
                self._recorder.event("clock_step", step_text(step_s))
            self._notifier.alive(self._status())
            self._clock.wait(self._supervisor.ended, WATCH_EVERY_S)
            self._clock.wait(self._asked_to_stop, WATCH_EVERY_S)
        log.info("asked to stop")
        return OK

    def _status(self) -> str:
        """One line for the service manager; a source that is opened again and again is named."""
        live = self._board.read()
        store = "" if live.store == "ok" else f"; store {live.store}"
        return f"{live.state}; {live.source}{store}"

    def _take_down(self, parts: list[Part]) -> bool:
        """Stop the parts in order; True when one hangs. One that holds the store ends us at once."""
        self._board.close()
        by_name = {part.name: part for part in parts}
        hung = [n for n, limit_s in ENDS_WITHIN_S.items() if not self._supervisor.stop(by_name[n], limit_s)]
        if "writer" in hung:
            logging.shutdown()
            os._exit(TRY_AGAIN)
        log.info("stopped")
        return bool(hung)

    @contextmanager
    def _signals(self) -> Iterator[None]:
        """The first signal asks for an orderly end, the second ends at once."""

        def asked(number: int, _frame: FrameType | None) -> None:
            if self._asked_to_stop.is_set():
                os._exit(128 + number)
            self._asked_to_stop.set()
            self._supervisor.ended.set()

        before = {n: signal.signal(n, asked) for n in (signal.SIGTERM, signal.SIGINT)}
        try:
            yield
        finally:
            for number, handler in before.items():
                signal.signal(number, handler)
