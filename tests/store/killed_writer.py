"""Started by test_kill in a process of its own: forks writers and kills each with SIGKILL while it writes.

Prints, line by line, what the writers acknowledged. Usage: STORE KILLS SEED. Opens no store before a fork.
"""

from __future__ import annotations

import os
import random
import signal
import sys
import threading
from pathlib import Path
from typing import NoReturn, TextIO

sys.path.insert(0, str(Path(__file__).parent))

from store_kit import FakeClock, Stand, reading, samples

from store.records import Label


def write(path: Path, prefix: str, out: TextIO) -> NoReturn:
    """Mark, run, reading, end, again and again; each said once it is committed."""
    stand = Stand(path, FakeClock())
    stand.ledger.recover()
    pending = stand.history.pending_mark()
    if pending is not None:
        stand.ledger.cancel_mark(pending.key)
    if stand.history.current_mount() is None:
        stand.mount()
    n = 0
    while True:
        n += 1
        key = f"{prefix}-{n}"
        stand.ledger.ask_mark(key, Label.CHECK, "ana", choose="next")
        print("asked", key, file=out, flush=True)
        run = stand.begin()
        print("run", run.id, file=out, flush=True)
        found, _ = stand.ledger.add_reading(run.id, reading(raw=samples(n, 2000)))
        print("labelled", key, found.id, file=out, flush=True)
        stand.end(run.id)
        print("closed", run.id, file=out, flush=True)
        if n % 3 == 0:
            stand.ledger.checkpoint()


def killed(path: Path, prefix: str, lines: int, delay_s: float) -> None:
    """Fork a writer, let it say ``lines`` lines, wait a random moment, kill it; pass on what it said."""
    read_end, write_end = os.pipe()
    child = os.fork()
    if child == 0:
        os.close(read_end)
        try:
            write(path, prefix, os.fdopen(write_end, "w"))
        finally:
            os._exit(3)
    os.close(write_end)
    with os.fdopen(read_end) as said:
        heard = [said.readline() for _ in range(lines)]
        timer = threading.Timer(delay_s, os.kill, (child, signal.SIGKILL))
        timer.start()
        heard += said.readlines()
        timer.join()
    _, status = os.waitpid(child, 0)
    assert os.waitstatus_to_exitcode(status) == -signal.SIGKILL, heard
    # a line cut short by the kill was not said
    sys.stdout.write("".join(line for line in heard if line.endswith("\n")))


if __name__ == "__main__":
    store, kills, seed = Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3])
    dice = random.Random(seed)
    for kill in range(kills):
        killed(store, f"k{kill}", dice.randint(1, 20), dice.uniform(0.0, 0.02))
