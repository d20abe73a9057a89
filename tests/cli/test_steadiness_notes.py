"""What is to be known of a reading's steadiness is said in a line by status, mark and run show."""

from __future__ import annotations

from datetime import UTC
from typing import Any

import pytest

from cli.marked import print_marked
from cli.runshow import reading_lines
from cli.status import status_lines

NOTE = "quiet for 6.0 min only; below 21 min slow warming does not show"


def reading() -> dict[str, Any]:
    return {
        "number": 1, "label": "O", "speed_rpm": 1500.0, "revolutions": 1500, "duration_s": 60.0, "flags": [],
        "derived_flags": [], "vectors": [], "levels": [], "orbits": [], "figures": {}, "version": 1,
        "steadiness": {"steady": True, "figures": [], "notes": [NOTE]},
    }  # fmt: skip


def test_status_says_it_below_the_run() -> None:
    lines = status_lines({"live": {"run": "0142/1", "steady": True, "steadiness_notes": [NOTE]}}, {}, UTC)
    at = lines.index("run      0142/1, steady")
    assert lines[at + 1] == "         " + NOTE
    assert all(len(line) <= 80 for line in lines)


def test_run_show_says_it_with_the_reading() -> None:
    assert f"note: {NOTE}" in list(reading_lines(reading(), {}))
    unsaid = reading()
    del unsaid["steadiness"]["notes"]  # stored before there were any
    assert not any(line.startswith("note:") for line in reading_lines(unsaid, {}))


def test_mark_says_it(capsys: pytest.CaptureFixture[str]) -> None:
    mark = {"state": "labelled", "label": "O", "job": "0142", "run": "0142/1", "reading": 1}
    print_marked({"mark": mark, "reading": reading(), "show": {}})
    assert capsys.readouterr().err == f"note: {NOTE}\n"
