"""How a mark's answer is printed: the run, its vectors, and for a check the verdict."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from cli.flagged import flag_lines
from cli.output import (
    ANGLES,
    COLUMNS,
    NO_LAG,
    Show,
    angle,
    clean,
    cut,
    plus_minus_deg,
    say,
    shown,
    shown_error,
    shown_short,
    table,
    warn,
)

Json = Mapping[str, Any]

NAME = 14
"""Longest name of a channel in a line of these tables; a longer one is cut, and whole in --json."""
PLUS_MINUS = "+-: 95 %; a lag is given only above the amplitude's own noise floor"


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
    say(vector_table([v for v in reading["vectors"] if v["order"] == 1], answer.get("show")), PLUS_MINUS)
    for text in reading.get("steadiness", {}).get("notes", []):
        warn(f"note: {clean(text)}")
    for text in answer.get("flag_texts", []):
        warn(f"flag: {clean(text)}")
    for text in answer.get("warnings", []):
        warn(f"warning: {clean(text)}")
    if answer.get("verdict"):
        print_verdict(answer["verdict"], answer.get("show"))


def vector_table(vectors: list[Json], show: Show | None = None) -> str:
    """The 1X vectors by channel: amplitude and lag, each with what holds 95 %, and the flags in a word."""
    headers, rows = ["channel", "1X", "+-", "unit", "lag deg", "+-"], []
    for vector in vectors:
        size, unit, lag = shown(vector, show)
        error = shown_error(vector, vector["plus_minus_95_pk"], show)
        lag_error = plus_minus_deg(vector["lag_plus_minus_95_deg"])
        rows.append([cut(vector["channel"], NAME), size, error, unit, lag, lag_error])
    widths = [max(map(len, column)) for column in zip(headers, *rows, strict=True)]
    room = COLUMNS - sum(widths) - 2 * len(widths)
    told = [[*row, words(v["flags"], room)] for row, v in zip(rows, vectors, strict=True)]
    return table(told, [*headers, "flags"], "lrrlrrl")


def words(flags: list[str], room: int) -> str:
    """A channel's flags in a word each, its own first: as many as fit, and how many more there are."""
    from daq.signal.health import short

    own_first = sorted(flags, key=lambda f: ":" not in f)
    told = list(dict.fromkeys(map(short, own_first)))
    for kept in range(len(told), 0, -1):
        more = len(told) - kept
        text = ", ".join(told[:kept]) + (f" +{more}" if more else "")
        if len(text) <= room or kept == 1:
            return text
    return ""


def print_verdict(verdict: Json, show: Show | None = None) -> None:
    """Measured beside predicted, residual unbalance beside its tolerance, and the verdict."""
    say("", _beside(verdict["channels"], show), *_no_lag(verdict["channels"]))
    say("", _residuals(verdict["planes"]), ANGLES)
    say(*_verdict_lines(verdict), *flag_lines(verdict["flags"]))
    for text in verdict["warnings"]:
        warn(f"warning: {clean(text)}")


def _beside(channels: list[Json], show: Show | None) -> str:
    rows = []
    for channel in channels:
        name = {"channel": channel["channel"]}
        size, unit, lag = shown_short({**name, **channel["measured"]}, show)
        if channel["predicted"] is None:
            rows.append((channel["channel"], unit, size, lag, "-", "-", "-"))
            continue
        foreseen, _, foreseen_lag = shown_short({**name, **channel["predicted"]}, show)
        far = {**name, **channel["predicted"], "amplitude_pk": channel["difference_pk"]}
        apart, _, _ = shown_short(far, show)
        rows.append((channel["channel"], unit, size, lag, foreseen, foreseen_lag, apart))
    headers = ["channel", "unit", "measured", "lag deg", "predicted", "lag deg", "apart"]
    return table(rows, headers, "llrrrrr")


def _no_lag(channels: list[Json]) -> list[str]:
    told = [v for c in channels for v in (c["measured"], c["predicted"]) if v is not None]
    return [NO_LAG] if any(v["lag_deg"] is None for v in told) else []


def _residuals(planes: list[Json]) -> str:
    rows = []
    for plane in planes:
        left, share = plane["residual"], plane["permissible_share_gmm"]
        verdict = {True: "in", False: "OUT", None: "not judged"}[plane["in_tolerance"]]
        rows.append(
            (
                plane["plane"],
                "-" if left is None else f"{left['gmm']:.1f}",
                "-" if left is None else f"{plane['residual_sd_per_component_gmm']:.1f}",
                "-" if left is None else angle(left["against_rotation_deg"]),
                "-" if share is None else f"{share:.1f}",
                verdict,
            )
        )
    headers = ["plane", "residual g.mm", "+-", "heavy spot deg", "permissible", "tolerance"]
    return table(rows, headers, "rrrrrl")


def _verdict_lines(verdict: Json) -> Iterator[str]:
    said = {True: "IN TOLERANCE", False: "OUT OF TOLERANCE", None: "NOT JUDGED"}[verdict["in_tolerance"]]
    runout = "runout included" if verdict["runout_included"] else f"less slow roll {verdict['slow_roll_run']}"
    yield f"verdict of {verdict['label']} {clean(verdict['run'])}: {said} ({clean(runout)})"
    yield f"  {clean(verdict['tolerance'])}"
    for plane in verdict["planes"]:
        if plane["why_not_judged"]:
            yield f"  plane {plane['plane']} is not judged: {clean(plane['why_not_judged'])}"
        if plane["slow_roll_bound_gmm"] is not None:
            yield (
                f"  plane {plane['plane']}: up to {plane['slow_roll_bound_gmm']:.1f} g.mm may be the "
                "slow roll's own unbalance response"
            )
    vibration = verdict["vibration"]
    if vibration:
        state = "within" if vibration["within"] else "ABOVE"
        yield (
            f"  1X of {clean(vibration['channel'])} {vibration['largest_1x_um_pk']:.2f} um pk is {state} "
            f"the limit of {vibration['limit_um_pk']:.2f} um pk (judged apart)"
        )
    yield from (f"  {clean(note)}" for note in verdict["notes"])
