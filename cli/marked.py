"""How a mark's answer is printed: the run, its vectors, and for a check the verdict."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from cli.output import clean, say, shown, table, warn

Json = Mapping[str, Any]


def print_marked(answer: Json) -> None:
    mark = answer["mark"]
    if mark["state"] == "pending":
        say(f"{mark['label']} of job {clean(mark['job'])}: pending; it takes the next fitting reading.")
        return
    if mark["state"] == "cancelled":
        say(f"{mark['label']} of job {clean(mark['job'])}: cancelled; nothing was labelled.")
        return
    reading = answer["reading"]
    say(
        f"{mark['label']} is run {clean(mark['run'])}, reading {mark['reading']}: "
        f"{reading['speed_rpm']:.1f} r/min, {reading['revolutions']} revolutions "
        f"in {reading['duration_s']:.1f} s"
    )
    say(vector_table(reading["vectors"], answer.get("show")))
    for text in answer.get("flag_texts", []):
        warn(f"flag: {clean(text)}")
    for text in answer.get("warnings", []):
        warn(f"warning: {clean(text)}")
    if answer.get("verdict"):
        print_verdict(answer["verdict"])


def vector_table(vectors: list[Json], show: Mapping[str, str] | None = None) -> str:
    """1X and higher orders by channel, with the standard error of the amplitude as shown."""
    rows = []
    for vector in vectors:
        size, unit, lag = shown(vector, show)
        error, _, _ = shown({**vector, "amplitude_pk": vector["se_pk"]}, show)
        rows.append((vector["channel"], f"{vector['order']}X", size, unit, lag, error))
    return table(rows, ["channel", "order", "amplitude", "unit", "lag deg", "+-"], "llrlrr")


def print_verdict(verdict: Json) -> None:
    """The verdict of a check or trim run, as store/casework.py words it."""
    for line in verdict["lines"]:
        say(clean(line))
