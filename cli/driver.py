"""``revmark driver``: which drivers there are, what is connected, and whether a driver keeps the rules."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from cli.output import clean, json_option, print_json, say, table

if TYPE_CHECKING:
    from daq.drivers.conformance import Finding

NEVER_SILENT = "The source always has samples ready, so that a time-out cannot be seen."


@click.group("driver")
def group() -> None:
    """Drivers of sources, and what is connected."""


@group.command("list")
@json_option
def list_(*, as_json: bool) -> None:
    """Show the drivers and the sources found on this PC. Nothing is opened."""
    from daq.drivers.registry import driver_names

    found = [_look(name) for name in driver_names()]
    if as_json:
        print_json(found)
        return
    say(table([(d["name"], "no" if d["problem"] else "yes") for d in found], ("driver", "usable")))
    for driver in found:
        if driver["problem"]:
            say("", f"{driver['name']}: {clean(driver['problem'])}")
    rows = [(d["name"], c["source"], c["says"]) for d in found for c in d["connected"]]
    say("", table(rows, ("driver", "for the stand file", "says of itself")) if rows else "No source is seen.")
    if any(name == "serial" for name, _, _ in rows):
        say("A serial port is listed whether or not a digitizer is on it.")


def _look(name: str) -> dict[str, Any]:
    """One driver: whether it can be used and what is connected."""
    from config.errors import DriverError
    from daq.drivers.registry import driver_class

    try:
        connected = driver_class(name).connected()
    except DriverError as error:
        return {"name": name, "problem": str(error), "connected": []}
    listed = [{"source": source, "says": says} for source, says in connected]
    return {"name": name, "problem": "", "connected": listed}


@group.command("check")
@click.argument("name")
@click.option(
    "--stand", "file", envvar="REVMARK_STAND", metavar="FILE", required=True, type=click.Path(path_type=Path),
    help="A stand file with this driver and a source to open; the daemon must not be using it.",
)  # fmt: skip
@click.option("--never-silent", is_flag=True, help=NEVER_SILENT)
@json_option
def check(name: str, *, file: Path, never_silent: bool, as_json: bool) -> int:
    """Try every rule of the contributors' guide on the driver NAME.

    The source is opened, read and closed once for each rule. A loss is provoked only where the driver can be
    asked for one (the verb fault); else losses that come by themselves are looked at. "not seen": the rule
    had nothing to check. Ends with 1 when a rule is broken.
    """
    from config.stand import check_stand
    from daq.clock import SystemClock
    from daq.drivercheck import check_driver
    from daq.drivers.registry import options_problems

    stand = check_stand(file, options_problems)
    found = check_driver(name, stand, SystemClock(), falls_silent=not never_silent)
    broken = sum(not finding.kept for finding in found)
    if as_json:
        rows = [{"rule": f.rule, "kept": f.kept, "problem": f.problem, "note": f.note} for f in found]
        print_json({"driver": name, "ok": not broken, "rules": rows})
    else:
        say(*(_line(finding) for finding in found), "")
        said = f"breaks {broken} of {len(found)} rules" if broken else "keeps every rule that could be tried"
        say(f"{clean(name)} {said}.")
    return 1 if broken else 0


def _line(finding: Finding) -> str:
    words = finding.rule.replace("_", " ")
    if not finding.kept:
        return f"BROKEN  {words}: {clean(finding.problem)}"
    return f"not seen  {words}: {clean(finding.note)}" if finding.note else f"kept  {words}"
