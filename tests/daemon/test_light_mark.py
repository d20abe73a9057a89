"""A real mark against a real daemon imports nothing heavy: its start is felt at every run."""

from __future__ import annotations

import subprocess
import sys

import pytest
from daemon_kit import COMMAND_S, REVMARK, Bay

pytestmark = pytest.mark.slow

HEAVY = {"numpy", "scipy", "sqlalchemy", "alembic", "pydantic", "matplotlib", "nidaqmx", "serial"}
"""The issue's list."""
LISTING = (
    "import atexit, sys\n"
    "script = sys.argv.pop(1)\n"
    "sys.argv[0] = script\n"
    "atexit.register(lambda: print(*sorted(sys.modules), file=sys.stderr))\n"
    "exec(compile(open(script).read(), script, 'exec'))"
)


def packages(bay: Bay, *words: str) -> set[str]:
    """Top-level packages that the installed script has imported by its end."""
    done = subprocess.run(
        [sys.executable, "-c", LISTING, REVMARK, *words],
        cwd=bay.folder,
        env=bay.env,
        capture_output=True,
        text=True,
        timeout=COMMAND_S,
    )
    assert done.returncode == 0, done.stderr
    return {name.partition(".")[0] for name in done.stderr.splitlines()[-1].split()}


def test_a_real_mark_imports_nothing_heavy(mounted: Bay) -> None:
    for words in (("mark", "O", "--no-wait"), ("mark", "--cancel")):
        found = packages(mounted, *words)
        assert "cli" in found
        assert not found & (HEAVY | {"daq", "store"})
    with mounted.history() as history:
        mark = history.last_mark()
    assert mark is not None
    assert mark.state == "cancelled"  # so it was a real one
    mounted.mark("O", choose="next")
    mounted.turn()
    found = packages(mounted, "mark", "--wait", "--json")
    assert not found & (HEAVY | {"daq", "store"})
    assert "sqlalchemy" in packages(mounted, "run", "list")  # the listing sees it
