"""Flags of the readings behind an answer, in lines: each sentence once, with the runs that it is said of."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from cli.output import clean

Json = Mapping[str, Any]


def flag_lines(flags: Sequence[Json]) -> Iterator[str]:
    """``flag of 0142/1 (O), 0142/2 (O+T): probe 1 is clipped: ...``"""
    if not flags:
        return
    from daq.signal.health import describe

    by_reading: dict[tuple[str, int, str], list[str]] = {}
    for told in flags:
        by_reading.setdefault((told["run"], told["reading"], told["label"]), []).append(told["flag"])
    names = [run for run, _, _ in by_reading]
    said_of: dict[str, list[str]] = {}
    for (run, reading, label), own in by_reading.items():
        number = f" reading {reading}" if names.count(run) > 1 else ""
        for text in describe(own):
            said_of.setdefault(text, []).append(f"{clean(run)}{number} ({clean(label)})")
    for text, runs in said_of.items():
        yield f"flag of {', '.join(runs)}: {clean(text)}"
