"""``revmark run``: runs and their readings, by job and date."""

from __future__ import annotations

import click

from cli.client import Client, find, new_key
from cli.output import (
    clean,
    finite,
    json_option,
    local,
    operator_option,
    print_json,
    say,
    stand_option,
    table,
    times,
)
from cli.recompute import recompute, revise
from cli.runshow import show


@click.group(help="Runs and their readings.")
def group() -> None: ...


group.add_command(show)
group.add_command(recompute)
group.add_command(revise)


@group.command(name="list", context_settings={"max_content_width": 80})
@stand_option
@click.option("--job", metavar="NUMBER", help="Only this job.")
@click.option("--machine", metavar="SERIAL", help="Only this machine.")
@click.option(
    "--limit", type=click.IntRange(1, 100_000), default=30, show_default=True, help="At most so many."
)
@json_option
def list_(stand: str | None, job: str | None, machine: str | None, limit: int, *, as_json: bool) -> None:
    """The newest runs."""
    from cli.place import manner, reading
    from store import asjson

    with reading(stand) as history:
        lines = [asjson.run_line_json(r) for r in history.runs(job, machine, limit)]
    if as_json:
        print_json(lines)
        return
    zone = manner(stand).zone
    rows = [
        (r["run"], r["machine"] or "-", local(r["started_utc"], zone)[:16],
         finite(r["speed_rpm"], ".0f"), r["readings"], ", ".join(r["labels"]) or "-",
         "void" if r["void"] else r["state"])
        for r in lines
    ]  # fmt: skip
    headers = ["run", "machine", "started", "r/min", "readings", "labels", "state"]
    say(table(rows, headers, "lllrrll"), times(zone))


@group.command()
@click.argument("run")
@click.argument("why")
@stand_option
@operator_option
@json_option
def void(run: str, why: str, stand: str | None, operator: str, *, as_json: bool) -> None:
    """Take a run out of all arithmetic, saying WHY. It stays in the store."""
    answer = Client(find(stand)).post(
        "/v1/run/void", {"key": new_key(), "who": operator, "run": run, "why": why}
    )
    print_json(answer) if as_json else say(f"Run {clean(answer['run'])} no longer counts: {clean(why)}")


@group.command()
@click.argument("run")
@click.argument("job")
@stand_option
@operator_option
@json_option
def assign(run: str, job: str, stand: str | None, operator: str, *, as_json: bool) -> None:
    """Give a run to a job. It answers to its old name too."""
    answer = Client(find(stand)).post(
        "/v1/run/assign", {"key": new_key(), "who": operator, "run": run, "job": job}
    )
    print_json(answer) if as_json else say(f"{clean(run)} is now run {clean(answer['run'])}.")
