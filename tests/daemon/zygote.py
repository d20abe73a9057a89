"""A process with revmark's modules loaded that forks commands on request: a start costs no imports.

Run as a script; speaks JSON lines. ``{"argv": [...], "cwd": ..., "env": {...}, "out": FILE, "err": FILE}``
forks ``revmark ARGV`` and answers its pid; ``uid``, ``gid`` and ``groups`` change the user first, ``patch``
(Python text) is executed before the command. ``{"wait": PID, "limit_s": S}`` answers the exit code
(minus the signal's number), or null when it still runs. Each command is a process of its own: it can be
killed, and it ends as ``revmark`` does.
"""

from __future__ import annotations

import gc
import json
import os
import signal
import sys
import threading
import time
import traceback
from typing import Any, NoReturn

PRELOAD = (
    "cli.serve", "cli.mark", "cli.run", "cli.sim", "cli.status", "cli.weight", "cli.mount", "cli.machine",
    "cli.correction", "cli.job", "daq.daemon", "daq.drivers.simulated", "daq.drivers.replay", "store.history",
    "store.consult", "store.schema", "alembic.command", "alembic.runtime.migration", "tabulate",
)  # fmt: skip


def exit_code(pid: int, limit_s: float) -> int | None:
    until = time.monotonic() + limit_s
    while True:
        done, status = os.waitpid(pid, os.WNOHANG)
        if done:
            return os.waitstatus_to_exitcode(status)
        if time.monotonic() > until:
            return None
        time.sleep(0.002)


def become(asked: dict[str, Any]) -> None:
    """In the child: its own streams, folder, environment and user."""
    for name, stream in (("out", 1), ("err", 2)):
        opened = os.open(asked[name], os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o666)
        os.dup2(opened, stream)
        os.close(opened)
    nothing = os.open(os.devnull, os.O_RDONLY)
    os.dup2(nothing, 0)
    os.close(nothing)
    os.chdir(asked["cwd"])
    os.environ.clear()
    os.environ.update(asked["env"])
    signal.signal(signal.SIGINT, signal.default_int_handler)
    if asked.get("uid") is not None:
        os.setgroups(asked["groups"])
        os.setgid(asked["gid"])
        os.setuid(asked["uid"])


def main() -> list[str]:
    """Serve requests; returns in the child, with the command it shall be."""
    import importlib

    for module in PRELOAD:
        importlib.import_module(module)
    gc.freeze()  # the children's collections then leave the shared pages alone
    print(json.dumps("ready"), flush=True)
    for line in sys.stdin:
        asked = json.loads(line)
        if "wait" in asked:
            print(json.dumps(exit_code(asked["wait"], asked["limit_s"])), flush=True)
            continue
        pid = os.fork()
        if pid == 0:
            become(asked)
            exec(asked.get("patch", ""), {})
            return list(asked["argv"])
        print(json.dumps(pid), flush=True)
    sys.exit(0)


def leave(code: int) -> NoReturn:
    """As the interpreter leaves, without taking some hundred modules apart (0.3 s)."""
    for thread in threading.enumerate():
        if thread is not threading.main_thread() and not thread.daemon:
            thread.join()
    sys.stdout.flush()
    sys.stderr.flush()
    os._exit(code)


if __name__ == "__main__":
    words = main()
    from cli.main import main as revmark

    try:
        revmark(words)
    except SystemExit as end:
        leave(end.code if isinstance(end.code, int) else int(end.code is not None))
    except BaseException:
        traceback.print_exc()
        leave(1)
