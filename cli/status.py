"""``revmark status``: what the stand does now."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import tzinfo
from typing import Any

import click

from cli.client import Client, find
from cli.marked import NAME, words
from cli.output import (
    Show,
    clean,
    cut,
    json_option,
    local,
    print_json,
    say,
    shown,
    stand_option,
    table,
    times,
)

Json = Mapping[str, Any]
FLAGS = 30
"""Most columns of a channel's flags in the live table."""


@click.command()
@stand_option
@json_option
def command(stand: str | None, *, as_json: bool) -> None:
    """What the stand does now, what is mounted, what waits and what is still unsteady."""
    from cli.place import manner_of

    address = find(stand)
    answer = Client(address).get("/v1/status")
    if as_json:
        print_json(answer)
        return
    how = manner_of(address)
    say(*status_lines(answer, how.show, how.zone))


def status_lines(answer: Json, show: Show, zone: tzinfo) -> list[str]:
    """The answer in lines that fit 80 columns. An older daemon may leave out any of it."""
    live = answer.get("live", {})
    vectors, flags = live.get("vectors"), _flags(live)
    shown_now = [_live_table(vectors, flags, show)] if vectors else []
    return [*_lines(answer, zone), *shown_now, *_flag_lines(flags)]


def _lines(answer: Json, zone: tzinfo) -> list[str]:
    live, mount = answer.get("live", {}), answer.get("mount")
    speed = f", {live['speed_rpm']:.1f} r/min" if live.get("speed_rpm") is not None else ""
    lines = [f"stand    {_word(answer, 'stand')}: {_word(live, 'state')}{speed}"]
    lines += _below(live.get("detail"))
    if answer.get("stand_file_changed"):
        lines += _below("the stand file has changed since the daemon read it; a restart takes it up")
    lines.append(f"source   {_word(live, 'source')}")
    lines += [line for note in live.get("notes", ()) for line in _below(note)]
    lines.append(f"store    {_word(answer, 'store')}: {_word(live, 'store')}")
    if live.get("held_records"):
        lines += _below(f"held in memory until it writes again: {live['held_records']} records")
    if mount:
        of = f"(model {_word(mount, 'model')}), job {_word(mount, 'job')}"
        lines.append(f"mounted  {_word(mount, 'machine')} {of}")
    else:
        lines.append("mounted  nothing; runs are stored as unassigned")
    return lines + _run_lines(live) + _mark_lines(answer.get("pending"), live, zone)


def _run_lines(live: Json) -> list[str]:
    lines = []
    if live.get("run"):
        lines.append(f"run      {clean(live['run'])}, {'steady' if live.get('steady') else 'not steady'}")
    lines += _below(live.get("still_out"))
    lines += [line for note in live.get("steadiness_notes", ()) for line in _below(note)]
    samples, readings = live.get("lost_samples", 0), live.get("dropped_readings", 0)
    if samples or readings:
        lines.append(f"lost     {samples} samples, {readings} readings not stored")
    return lines


def _mark_lines(pending: Json | None, live: Json, zone: tzinfo) -> list[str]:
    if not pending:
        return []
    since = local(pending.get("asked_utc"), zone)
    waits = pending.get("waits_for")
    below = [] if not waits or waits == live.get("still_out") else _below(f"it waits for {waits}")
    return [f"mark     {_word(pending, 'label')} pending since {since}; {times(zone)}", *below]


def _word(told: Json, key: str) -> str:
    return clean(told.get(key) or "not told")


def _below(text: object) -> list[str]:
    return [f"         {clean(text)}"] if text else []


def _live_table(vectors: list[Json], flags: list[str], show: Show) -> str:
    from store.records import flags_of

    rows = []
    for vector in vectors:
        size, unit, lag = shown(vector, show)
        told = words(list(flags_of(flags, vector["channel"])), FLAGS)
        rows.append((cut(vector["channel"], NAME), size, unit, lag, told))
    return table(rows, ["channel", "1X now", "unit", "lag deg", "flags"], "lrlrl")


def _flags(live: Json) -> list[str]:
    return [*live.get("flags", ()), *live.get("derived_flags", ())]


def _flag_lines(flags: list[str]) -> list[str]:
    if not flags:
        return []
    from daq.signal.health import describe

    return [f"flag: {clean(text)}" for text in describe(flags)]
