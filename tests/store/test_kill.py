"""kill -9 of the writer at a random moment: what was acknowledged is there, once, and whole.

Twenty kills here; the daemon's own test does fifty with the control channel in between.
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections import Counter
from pathlib import Path

import pytest
from store_kit import FakeClock

from store.copies import problems_of
from store.history import History
from store.ledger import Ledger
from store.records import MarkState, RunState

KILLS = 20
SEED = 20


@pytest.mark.skipif(os.name == "nt", reason="allowed: the writers are forked")
def test_kill_while_writing(store_path: Path) -> None:
    script = Path(__file__).with_name("killed_writer.py")
    done = subprocess.run(
        [sys.executable, str(script), str(store_path), str(KILLS), str(SEED)],
        capture_output=True,
        text=True,
        timeout=110,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
    )
    assert done.returncode == 0, done.stderr
    said = [line.split() for line in done.stdout.splitlines()]
    kinds = Counter(kind for kind, *_ in said)
    assert min(kinds[k] for k in ("asked", "run", "labelled", "closed")) > KILLS  # work was under way
    assert problems_of(store_path) == ()
    with Ledger.open(store_path, clock=FakeClock(), software="after") as ledger:
        ledger.recover()
    with History.open(store_path) as history:
        _all_acknowledged_is_there(history, said)
        _all_there_is_whole(history)


def _all_acknowledged_is_there(history: History, said: list[list[str]]) -> None:
    runs = {str(r.id): r for r in history.job_story("0142").runs}
    for kind, *what in said:
        if kind == "run":
            assert what[0] in runs
        elif kind == "closed":
            assert runs[what[0]].state is RunState.COMPLETE
        else:
            mark = history.mark(what[0])
            assert mark is not None
            if kind == "labelled":
                assert (mark.state, str(mark.reading_id)) == (MarkState.LABELLED, what[1])


def _all_there_is_whole(history: History) -> None:
    runs = history.job_story("0142").runs
    assert [r.number for r in runs] == list(range(1, len(runs) + 1))
    assert {r.state for r in runs} == {RunState.COMPLETE, RunState.INTERRUPTED}
    marked = [d.id for r in runs for d in r.readings if d.label is not None]
    counts = history.counts()
    assert counts["label"] == len(set(marked)) == len(marked)
    for run in runs:
        for reading in run.readings:
            assert len(reading.vectors) == 3
            assert history.reading_raw(reading.id).counts.shape == (2000, 3)
