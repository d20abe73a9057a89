"""``revmark status``: what the stand does now."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import click

from cli.client import Client, find
from cli.output import clean, json_option, print_json, say, stand_option, table

Json = Mapping[str, Any]


@click.command()
@stand_option
@json_option
def command(stand: str | None, *, as_json: bool) -> None:
    """What the stand does now, what is mounted, what waits and what is still unsteady."""
    answer = Client(find(stand)).get("/v1/status")
    if as_json:
        print_json(answer)
        return
    say(*_lines(answer))
    if answer["live"]["vectors"]:
        say(_live_table(answer["live"]["vectors"]))


def _lines(answer: Json) -> list[str]:
    live, mount, pending = answer["live"], answer["mount"], answer["pending"]
    speed = f", {live['speed_rpm']:.1f} r/min" if live["speed_rpm"] is not None else ""
    lines = [f"stand    {clean(answer['stand'])}: {live['state']}{speed}"]
    if live["detail"]:
        lines.append(f"         {clean(live['detail'])}")
    lines.append(f"source   {clean(live['source'])}")
    lines.append(f"store    {clean(answer['store'])}: {clean(live['store'])}")
    if live["held_records"]:
        lines.append(f"         held in memory until it writes again: {live['held_records']} records")
    if mount:
        lines.append(
            f"mounted  {clean(mount['machine'])} (model {clean(mount['model'])}), job {clean(mount['job'])}"
        )
    else:
        lines.append("mounted  nothing; runs are stored as unassigned")
    if live["run"]:
        lines.append(f"run      {clean(live['run'])}, {'steady' if live['steady'] else 'not steady'}")
    if live["still_out"]:
        lines.append(f"         {clean(live['still_out'])}")
    if pending:
        lines.append(f"mark     {pending['label']} pending since {pending['asked_utc']}")
    if live["lost_samples"] or live["dropped_readings"]:
        lines.append(
            f"lost     {live['lost_samples']} samples, {live['dropped_readings']} readings not stored"
        )
    return lines


def _live_table(vectors: list[Json]) -> str:
    rows = [
        (v["channel"], f"{v['amplitude_pk']:.3f}", f"{v['unit']} pk", f"{v['lag_deg']:.1f}") for v in vectors
    ]
    return table(rows, ["channel", "1X now", "unit", "lag deg"], "lrlr")
