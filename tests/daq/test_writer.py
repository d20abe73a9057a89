"""The writer thread's heartbeat: records that come as fast as they are written are no hang."""

from __future__ import annotations

import threading
from itertools import pairwise
from typing import Any, cast

from daq.board import Board
from daq.clock import SystemClock
from daq.writer import Writer

RECORDS = 50


class EmptyLedger:
    def checkpoint(self) -> None: ...


def test_the_heart_beats_between_records_however_many_wait() -> None:
    ledger = cast(Any, EmptyLedger())
    clock = SystemClock()
    writer = Writer(ledger, Board(clock), clock)
    stop, written = threading.Event(), [0]
    beats_at_record = []

    def record(_ledger: object) -> None:
        written[0] += 1
        beats_at_record.append(beats[0])
        if written[0] < RECORDS:
            writer.record(record, droppable=False)  # the next is there before this one is written
        else:
            stop.set()

    beats = [0]

    def beat() -> None:
        beats[0] += 1

    writer.record(record, droppable=False)
    writer.run(stop, beat)
    assert written[0] == RECORDS
    assert all(later > earlier for earlier, later in pairwise(beats_at_record))
