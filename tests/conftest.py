"""What holds for every test: no thread left behind, no skip unseen."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Generator

import pytest

ALLOWED = "allowed:"
"""In CI a skip whose reason does not start with this word counts as a failure."""
THREAD_DEADLINE_S = 2.0


@pytest.fixture(autouse=True)
def no_thread_left() -> Generator[None, None, None]:
    """Fails a test after which a new non-daemon thread still runs."""
    before = set(threading.enumerate())
    yield
    deadline = time.monotonic() + THREAD_DEADLINE_S
    left = [t for t in threading.enumerate() if t not in before and not t.daemon]
    for thread in left:
        thread.join(max(0.0, deadline - time.monotonic()))
    names = [t.name for t in left if t.is_alive()]
    assert not names, f"threads left running: {', '.join(names)}"


def _reason(report: pytest.TestReport | pytest.CollectReport) -> str:
    text = report.longrepr[2] if isinstance(report.longrepr, tuple) else str(report.longrepr)
    return text.removeprefix("Skipped: ")


def _judge(report: pytest.TestReport | pytest.CollectReport) -> None:
    """A skip that nobody allowed hides a hole: in CI it fails."""
    if not os.environ.get("CI") or report.outcome != "skipped" or hasattr(report, "wasxfail"):
        return
    reason = _reason(report)
    if not reason.startswith(ALLOWED):
        report.outcome = "failed"
        report.longrepr = (
            f"skipped in CI without leave: {reason} (leave is a reason that starts with {ALLOWED!r})"
        )


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport() -> Generator[None, pytest.TestReport, pytest.TestReport]:
    report = yield
    _judge(report)
    return report


@pytest.hookimpl(wrapper=True)
def pytest_make_collect_report() -> Generator[None, pytest.CollectReport, pytest.CollectReport]:
    report = yield
    _judge(report)
    return report


def pytest_terminal_summary(terminalreporter: pytest.TerminalReporter) -> None:
    skipped = terminalreporter.stats.get("skipped", [])
    allowed = sum(_reason(report).startswith(ALLOWED) for report in skipped)
    terminalreporter.write_line(f"skips: {len(skipped)}, of which allowed: {allowed}")
