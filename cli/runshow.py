"""``revmark run show``: one run with its readings, and all that its probes told."""

from __future__ import annotations

from datetime import tzinfo
from typing import Any

import click

from cli.marked import vector_table
from cli.output import clean, json_option, local, print_json, say, stand_option, times


@click.command(context_settings={"max_content_width": 80})
@click.argument("run")
@stand_option
@json_option
def show(run: str, stand: str | None, *, as_json: bool) -> None:
    """One run with its readings and vectors."""
    from cli.place import manner, reading
    from daq.signal.health import sentence
    from store import asjson

    with reading(stand) as history:
        told = asjson.run_json(history.run(run))
    if as_json:
        print_json(told)
        return
    how = manner(stand)
    say(*_described(told, how.zone))
    for one in told["readings"]:
        label = f" {one['label']}" if one["label"] else ""
        say(
            "",
            f"reading {one['number']}{label}: {one['speed_rpm']:.1f} r/min, {one['revolutions']} revolutions "
            f"in {one['duration_s']:.1f} s",
            vector_table(one["vectors"], how.show),
            *(f"flag: {clean(sentence(f))}" for f in one["flags"]),
        )


def _described(run: dict[str, Any], zone: tzinfo) -> list[str]:
    also = f" (also {run['unassigned']})" if run["unassigned"] and run["job"] else ""
    lines = [
        f"run {clean(run['run'])}{also}: {run['origin']}, {run['state']}"
        + (f", {clean(run['reason'])}" if run["reason"] else ""),
        f"started {local(run['started_utc'], zone)}, ended {local(run['ended_utc'], zone)}; {times(zone)}",
    ]
    if run["operator"]:
        lines.append(f"operator {clean(run['operator'])}")
    if run["void"]:
        lines.append(f"VOID: {clean(run['void'])}")
    return lines
