"""``revmark job``: one visit of one machine to the stand, from its O run to its verdict."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from datetime import tzinfo
from typing import Any

import click

from cli.marked import NAME, print_verdict, words
from cli.output import (
    ANGLES,
    Show,
    clean,
    cut,
    json_option,
    local,
    print_json,
    say,
    shown_short,
    stand_option,
    table,
    times,
)
from cli.weight import place

Json = Mapping[str, Any]
FLAGS = 14
"""Most columns of a channel's flags in the list of runs; ``run show`` has them in sentences."""


@click.group(help="Jobs: one visit of one machine to the stand.")
def group() -> None: ...


@group.command(name="list")
@stand_option
@click.option("--machine", metavar="SERIAL", help="Only this machine.")
@json_option
def list_(stand: str | None, machine: str | None, *, as_json: bool) -> None:
    """The jobs, newest first."""
    from cli.place import manner, reading
    from store import asjson

    with reading(stand) as history:
        if machine is not None:
            history.machine(machine)  # a typo is not an empty list
        jobs = [asjson.job_json(j) for j in history.jobs(machine)]
    if as_json:
        print_json(jobs)
        return
    zone = manner(stand).zone
    rows = [
        (j["job"], j["machine"], local(j["opened_utc"], zone)[:16],
         ", ".join(f"{s:.0f}" for s in j["speeds_rpm"]))
        for j in jobs
    ]  # fmt: skip
    say(table(rows, ["job", "machine", "opened", "balancing r/min"], "lllr"), times(zone))


@group.command(context_settings={"max_content_width": 80})
@click.argument("job")
@stand_option
@json_option
def show(job: str, stand: str | None, *, as_json: bool) -> None:
    """One job: its mounts, runs, weights, and the verdict of its newest check."""
    from cli.place import manner, reading
    from store import consult

    with reading(stand) as history:
        told = consult.job_json(history, job)
    if as_json:
        print_json(told)
        return
    how = manner(stand)
    say(*_lines(told, how.show, how.zone))
    if told["verdict"]:
        print_verdict(told["verdict"], how.show)


def _lines(told: Json, show: Show, zone: tzinfo) -> Iterator[str]:
    speeds = ", ".join(f"{s:.0f}" for s in told["speeds_rpm"])
    yield f"job {clean(told['job'])}: {clean(told['machine'])}, balancing speed {speeds} r/min"
    for mount in told["mounts"]:
        marks = ", ".join(f"plane {m['plane']} {m['from_hole1_deg']:g} deg" for m in mount["marks"])
        yield f"mounted {local(mount['at_utc'], zone)[:16]}, turning {clean(mount['rotation'])}"
        if marks:
            yield f"  rotor mark from hole 1: {marks} ({clean(mount['mark_how'] or 'how is not recorded')})"
    yield ""
    yield _runs(told["runs"], show)
    if told["weights"]:
        yield ""
        yield table(
            [(w["act"], place(w), w["after_run"] or "the mount", w["who"]) for w in told["weights"]],
            ["weight", "where", "after", "who"],
        )
        if not told["verdict"] and any(w["hole"] is None for w in told["weights"]):
            yield ANGLES
    yield times(zone)


def _runs(runs: list[Json], show: Show) -> str:
    rows = []
    for run in runs:
        for reading in run["readings"]:
            for vector in reading["vectors"]:
                if vector["order"] == 1:
                    size, unit, lag = shown_short(vector, show)
                    flags = words(vector["flags"], FLAGS)
                    what = reading["label"] or "-"
                    rows.append(
                        (run["run"], reading["number"], what, f"{reading['speed_rpm']:.1f}",
                         cut(vector["channel"], NAME), size, unit, lag, flags)
                    )  # fmt: skip
        if not run["readings"]:
            rows.append((run["run"], "-", "no reading", "-", "-", "-", "-", "-", ""))
    headers = ["run", "no", "label", "r/min", "channel", "1X", "unit", "lag deg", "flags"]
    return table(rows, headers, "lrlrlrlrl")
