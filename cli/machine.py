"""``revmark machine``: the machines and their models."""

from __future__ import annotations

from typing import Any

import click

from cli.client import Client, find, new_key
from cli.output import clean, finite, json_option, operator_option, print_json, say, stand_option, table, warn
from cli.typed import Number, PlaneType, Quantity, Speed


@click.group(help="Machines and their models.")
def group() -> None: ...


@group.command(context_settings={"max_content_width": 80})
@click.argument("serial")
@stand_option
@click.option("--model", metavar="CODE", help="The maker's code of the model.")
@click.option("--mass", type=Quantity("rotor mass", 1e-6), metavar="MASS",
              help="Rotor mass: 40kg.")  # fmt: skip
@click.option("--speed", type=Speed(), metavar="SPEED", help="Service speed: 1500rpm.")
@click.option("--grade", type=Number(), metavar="G", help="Balance grade of ISO 21940-11, such as 2.5.")
@click.option("--permissible", type=Quantity("unbalance", 1e-6), metavar="UNBALANCE",
              help="Tolerance of the whole rotor: 300g.mm.")  # fmt: skip
@click.option("--bearing-load", "loads", multiple=True, type=Quantity("rotor mass", 1e-6), metavar="MASS",
              help="Static load of a bearing; once for each, in the order of the planes.")  # fmt: skip
@click.option("--limit", type=Quantity("length", 1e-9), metavar="LENGTH",
              help="Vibration limit 0-peak, such as 0.02mm.")  # fmt: skip
@click.option("--plane", "planes", multiple=True, type=PlaneType(), metavar="PLANE",
              help='Weight plane of a new model: "1: radius 140mm, holes 24, at -220mm, '
                   'numbered clockwise from drive".')  # fmt: skip
@click.option("--first-critical", type=Speed(), metavar="SPEED", help="First critical speed, if known.")
@operator_option
@json_option
def add(serial: str, stand: str | None, operator: str, *, as_json: bool, **told: Any) -> None:
    """Add a machine, or revise what is known of it.

    A new machine needs --model, --mass and --speed, a new model its planes. Of a known machine, what is
    not typed stays as it is; a grade typed alone replaces a permissible figure.
    """
    body = {
        "key": new_key(),
        "who": operator,
        "serial": serial,
        "model": told["model"],
        "rotor_mass_kg": told["mass"],
        "service_hz": told["speed"],
        "grade_mm_s": told["grade"],
        "permissible_gmm": told["permissible"],
        "bearing_loads_kg": list(told["loads"]),
        "vibration_limit_um_pk": None if told["limit"] is None else told["limit"] * 1000,
        "planes": list(told["planes"]),
        "first_critical_hz": told["first_critical"],
    }
    answer = Client(find(stand)).post("/v1/machine", body)
    if as_json:
        print_json(answer)
    else:
        say(*_described(answer))
        for note in answer["notes"]:
            warn(f"note: {clean(note)}")


@group.command(name="list")
@stand_option
@json_option
def list_(stand: str | None, *, as_json: bool) -> None:
    """The machines known here."""
    from cli.place import reading
    from store import asjson

    with reading(stand) as history:
        machines = [asjson.machine_json(m) for m in history.machines()]
    if as_json:
        print_json(machines)
        return
    rows = [
        (
            m["machine"],
            m["model"],
            f"{m['rotor_mass_kg']:g}",
            f"{m['service_rpm']:.0f}",
            finite(m["grade_mm_s"]),
        )
        for m in machines
    ]
    say(table(rows, ["machine", "model", "rotor kg", "service r/min", "grade G"], "llrrr"))


@group.command()
@click.argument("serial")
@stand_option
@json_option
def show(serial: str, stand: str | None, *, as_json: bool) -> None:
    """One machine, with its weight planes."""
    from cli.place import reading
    from store import asjson

    with reading(stand) as history:
        machine = asjson.machine_json(history.machine(serial))
    if as_json:
        print_json(machine)
    else:
        say(*_described(machine))


def _described(machine: dict[str, Any]) -> list[str]:
    what = f"machine {clean(machine['machine'])}, model {clean(machine['model'])}"
    speed = f"service speed {machine['service_rpm']:.0f} r/min"
    lines = [f"{what}, revision {machine['revision']}: rotor {machine['rotor_mass_kg']:g} kg, {speed}"]
    if machine["grade_mm_s"] is not None:
        lines.append(f"  balance grade G {machine['grade_mm_s']:g}")
    if machine["permissible_gmm"] is not None:
        lines.append(f"  permissible residual unbalance {machine['permissible_gmm']:g} g.mm")
    if machine["first_critical_rpm"] is not None:
        lines.append(f"  first critical speed {machine['first_critical_rpm']:.0f} r/min")
    if machine["bearing_loads_kg"]:
        loads = ", ".join(f"{load:g}" for load in machine["bearing_loads_kg"])
        lines.append(f"  static load of the bearings beside the planes: {loads} kg")
    for plane in machine["planes"]:
        holes = (
            f"{plane['holes']} holes numbered {clean(plane['numbered'])}" if plane["holes"] else "any angle"
        )
        lines.append(f"  plane {plane['plane']}: radius {plane['radius_mm']:g} mm, {holes}")
    return lines
