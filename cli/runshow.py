"""``revmark run show``: one run with its readings, and all that its probes told."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from datetime import tzinfo
from typing import Any

import click

from cli.marked import NAME, PLUS_MINUS, vector_table
from cli.output import (
    Show,
    angle,
    clean,
    cut,
    display_of,
    json_option,
    local,
    plus_minus_deg,
    print_json,
    say,
    shown,
    shown_error,
    shown_size,
    stand_option,
    table,
    times,
)
from cli.traced import minus_slow_roll_option, slow_roll_lines, trace_lines

Json = Mapping[str, Any]

SIDE_BY_SIDE = 2
"""So many orders above 1X fit beside each other."""


@click.command(context_settings={"max_content_width": 80})
@click.argument("run")
@stand_option
@minus_slow_roll_option
@click.option("--version", type=click.IntRange(min=1), help="As it was measured then: 1 = live.")
@json_option
def show(run: str, stand: str | None, version: int | None, *, slow: bool, as_json: bool) -> None:
    """One run with its readings: 1X, harmonics, overall, residual, gap, XY pairs, flags; its traces."""
    from cli.place import manner, reading
    from store import consult

    with reading(stand) as history:
        told = consult.run_json(history, run, minus_slow_roll=slow, version=version)
    if as_json:
        print_json(told)
        return
    how = manner(stand)
    say(*_described(told, how.zone))
    say(*(slow_roll_lines(told["slow_roll"]) if slow else ()))
    for one in told["readings"]:
        say("", *reading_lines(one, how.show, told["zero"]))
    say(*trace_lines(told["traces"], how.show, less=slow))


def _described(run: Json, zone: tzinfo) -> list[str]:
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


def reading_lines(one: Json, show: Show, zero: str = "the stand's zero") -> Iterator[str]:
    """A reading in lines that fit 80 columns, from its JSON."""
    from daq.signal.health import describe

    label = f" {one['label']}" if one["label"] else ""
    yield (
        f"reading {one['number']}{label}: {one['speed_rpm']:.1f} r/min, {one['revolutions']} revolutions "
        f"in {one['duration_s']:.1f} s"
    )
    yield from _versions(one)
    vectors = one["vectors"]
    yield vector_table([v for v in vectors if v["order"] == 1], show)
    if one.get("less_slow_roll"):
        yield from ("", "less slow roll:", vector_table(one["less_slow_roll"], show))
    yield PLUS_MINUS
    yield from _above(vectors, show)
    if one["levels"]:
        yield from ("", _levels(one["levels"], show))
    yield from _pairs([o for o in one["orbits"] if o["order"] == 1], show, zero)
    quiet = (f"note: {clean(text)}" for text in one["steadiness"].get("notes", ()))
    notes = [*_figures(one, show), *quiet, *(f"flag: {clean(f)}" for f in describe(_flags(one)))]
    yield from ("", *notes) if notes else ()


def _versions(one: Json) -> Iterator[str]:
    """Which version of a reading's arithmetic it is, where there are several."""
    told = {v["version"]: v for v in one.get("versions", ())}
    newest = max(told, default=1)
    if newest > 1:
        why = told.get(one["version"], {"why": "live"})["why"]
        yield f"version {one['version']} of {newest} of its arithmetic: {clean(why)}"
    if "scaled" in one["figures"]:
        yield f"scaled, not measured from its samples: {clean(one['figures']['scaled']['why'])}"


def _flags(one: Json) -> list[str]:
    return [*one["flags"], *one["derived_flags"]]


def _above(vectors: Sequence[Json], show: Show) -> Iterator[str]:
    """The orders above 1X, some side by side."""
    orders = sorted({v["order"] for v in vectors} - {1})
    for i in range(0, len(orders), SIDE_BY_SIDE):
        yield from ("", _orders(vectors, orders[i : i + SIDE_BY_SIDE], show))


def _orders(vectors: Sequence[Json], orders: Sequence[int], show: Show) -> str:
    found = {(v["channel"], v["order"]): v for v in vectors}
    rows = []
    for channel in dict.fromkeys(v["channel"] for v in vectors):
        row = [cut(channel, NAME)]
        for order in orders:
            row += _amplitude_and_lag(found.get((channel, order)), show)
        rows.append(row)
    headers = ["channel", *(h for order in orders for h in (f"{order}X", "+-", "lag", "+-"))]
    return table(rows, headers, "l" + "rrrr" * len(orders))


def _amplitude_and_lag(vector: Json | None, show: Show) -> list[str]:
    if vector is None:
        return ["-"] * 4
    size, _, lag = shown(vector, show)
    error = shown_error(vector, vector["plus_minus_95_pk"], show)
    if vector["lag_deg"] is None:
        return [size, error, "-", "-"]
    return [size, error, lag, plus_minus_deg(vector["lag_plus_minus_95_deg"])]


def _levels(levels: Sequence[Json], show: Show) -> str:
    rows = []
    for level in levels:
        unit = display_of(level["channel"], level["unit"], show).unit
        rows.append(
            (cut(level["channel"], NAME), shown_size(level, level["overall_pp"], show), f"{unit} pp",
             shown_size(level, level["residual_rms"], show), f"{unit} rms", f"{level['gap_v']:.2f}")
        )  # fmt: skip
    return table(rows, ["channel", "overall", "unit", "residual", "unit", "gap V"], "lrlrlr")


def _pairs(orbits: Sequence[Json], show: Show, zero: str) -> Iterator[str]:
    """The 1X orbits, one line a pair."""
    if not orbits:
        return
    rows = []
    for orbit in orbits:
        name = {"channel": orbit["x"], "unit": orbit["unit"], "lag_deg": None}

        def size(value_pk: float, name: Json = name) -> str:
            return shown({**name, "amplitude_pk": value_pk}, show)[0]

        unit = display_of(orbit["x"], orbit["unit"], show).name
        rows.append(
            (cut(orbit["pair"], NAME), size(orbit["major_axis_pk"]),
             shown_error(name, orbit["major_axis_plus_minus_95_pk"], show), _tilt(orbit),
             size(orbit["minor_axis_pk"]), size(orbit["forward"]["amplitude_pk"]),
             size(orbit["backward"]["amplitude_pk"]), unit)
        )  # fmt: skip
    headers = ["XY pair, 1X", "major axis", "+-", "tilt", "minor", "forward", "backward", "unit"]
    yield from ("", table(rows, headers, "lrrrrrrl"))
    yield from (_whirl(orbit) for orbit in orbits)
    end = clean(orbits[0]["seen_from"])
    yield f"tilt: deg clockwise from {clean(zero)}, seen from {end}"
    if any(orbit["rotation"] is None for orbit in orbits):
        yield f"forward: clockwise seen from {end}, for nothing was mounted"


def _tilt(orbit: Json) -> str:
    return "-" if orbit["tilt_deg"] is None else angle(orbit["tilt_deg"])


def _whirl(orbit: Json) -> str:
    """Which way the shaft goes round, as far as it is certain."""
    if orbit["whirl"] is None:
        return f"{clean(orbit['pair'])}: which way it whirls is not certain"
    seen = f"{orbit['whirl']} seen from {clean(orbit['seen_from'])}"
    if orbit["precession"] is None:
        return f"{clean(orbit['pair'])}: whirls {seen}; the rotation is not known"
    how = "forward" if orbit["precession"] == "forward" else "BACKWARD"
    return f"{clean(orbit['pair'])}: whirls {how}, {seen}"


def _figures(one: Json, show: Show) -> Iterator[str]:
    """What was found and repaired on the way."""
    told = one["figures"]
    missed, doubles = told.get("missed", 0), told.get("doubles", 0)
    if missed or doubles:
        yield f"once-per-rev: {missed} pulses missed, {doubles} came twice; repaired"
    if told.get("edge_deg"):
        edge = plus_minus_deg(told["edge_deg"])
        yield f"once-per-rev edge: {edge} deg of each lag's +- stays however long it averages"
    if told.get("speed_sd_hz"):
        yield f"speed: standard deviation {100 * 60 * told['speed_sd_hz'] / one['speed_rpm']:.3f} %"
    units = {v["channel"]: v["unit"] for v in one["vectors"]}
    for line in told.get("lines", ()):
        if line["channel"] in units:
            vector = {"channel": line["channel"], "unit": units[line["channel"]], "lag_deg": None}
            size, unit, _ = shown({**vector, "amplitude_pk": line["amplitude"]}, show)
            where = f"{clean(line['channel'])}: vibration at {line['order']:.4g}X"
            yield f"{where}, {size} {unit}, which is no order"
