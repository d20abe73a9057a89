"""How run-ups, coast-downs and slow roll are printed beside a run's readings."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any, TypeVar

import click

from cli.output import Show, angle, clean, cut, shown, table

Json = Mapping[str, Any]
F = TypeVar("F", bound=Callable[..., Any])

NAME = 14


def minus_slow_roll_option(function: F) -> F:
    return click.option(
        "--minus-slow-roll", "slow", is_flag=True, help="Subtract the job's slow-roll vectors from shaft 1X."
    )(function)


def trace_lines(traces: list[Json], show: Show, *, less: bool) -> Iterator[str]:
    """Each trace with its critical speeds, in lines that fit 80 columns."""
    from store.casework_bode import SHIFTS

    for one in traces:
        yield ""
        yield (
            f"trace {one['number']}: {one['direction']} {one['from_rpm']:.0f}-{one['to_rpm']:.0f} r/min, "
            f"{one['steps']} steps in {one['duration_s']:.1f} s"
        )
        if one["critical_speeds"]:
            yield _criticals(one["critical_speeds"], show)
        yield from (_refused(x) for x in one["not_critical"])
    found = [x for one in traces for x in one["critical_speeds"]]
    if found:
        fastest = max(abs(x["sweep_rpm_per_s"]) for x in found)
        yield "half power: where the amplitude is 0.707 of the peak's; AF = peak speed / their distance"
        yield f"note: {SHIFTS} (here {fastest:.0f} r/min per s)"
    if traces and found and not less:
        yield "1X as measured, runout included (--minus-slow-roll takes it off)"


def _criticals(found: list[Json], show: Show) -> str:
    rows = []
    for one in found:
        size, unit, _ = shown(one, show)
        low, high = one["half_power_rpm"]
        rows.append(
            (cut(one["channel"], NAME), f"{one['speed_rpm']:.0f}", f"{one['within_rpm']:.0f}",
             f"{one['amplification']:.1f}", f"{low:.0f}-{high:.0f}", size, unit, angle(one["lag_deg"]))
        )  # fmt: skip
    headers = ["channel", "critical", "+-", "AF", "half power", "1X", "unit", "lag"]
    return table(rows, headers, "lrrrrrlr")


def _refused(one: Json) -> str:
    return (
        f"no critical speed is made of the peak of {clean(one['channel'])} at {one['speed_rpm']:.0f} r/min: "
        f"{clean(one['why'])}"
    )


def slow_roll_lines(slow: Json) -> Iterator[str]:
    """Which slow roll was taken off, of what it was not, and the cautions; vectors as measured come above."""
    yield (
        f"slow roll: run {clean(slow['run'])} reading {slow['reading']}, {slow['speed_rpm']:.0f} r/min; "
        "taken off beside the vectors as measured"
    )
    yield from (f"  {clean(text)}" for text in slow["left_raw"])
    yield from (f"caution: {clean(text)}" for text in slow["cautions"])
