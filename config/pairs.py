"""XY pairs of a stand file: which channels claim one, and what is wrong with it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from config.errors import BadQuantity
from config.fields import parse_angle
from config.problems import Problem

SLACK_DEG = 5.0
"""The probes of a pair may stand so much off 90 deg; the arithmetic takes the true angle."""

Keyed = tuple[str, Mapping[str, Any]]


def pair_problems(raw: Mapping[str, Any]) -> list[Problem]:
    """Problems of all pairs, from the raw file, so that other mistakes do not hide them."""
    channels = raw.get("channel")
    listed = channels if isinstance(channels, list) else []
    pairs: dict[str, list[Keyed]] = {}
    for number, table in enumerate(listed, 1):
        if isinstance(table, dict) and isinstance(table.get("pair"), str) and table["pair"]:
            pairs.setdefault(table["pair"], []).append((f"channel.{number}", table))
    return [problem for name, members in pairs.items() for problem in _problems(name, members)]


def _problems(name: str, members: list[Keyed]) -> Iterator[Problem]:
    key, last = members[-1]
    if len(members) == 1:
        yield f"{key}.pair", f"{name!r} has this channel only; an XY pair is two probes with one pair name."
    elif len(members) > 2:
        others = ", ".join(k for k, _ in members[:-1])
        yield f"{key}.pair", f"{name!r} is the pair of {others} already; an XY pair is two probes, no more."
    for own, table in members:
        if isinstance(kind := table.get("kind"), str) and kind != "displacement":
            yield f"{own}.pair", f"an XY pair takes displacement probes, and this channel's kind is {kind!r}."
    apart = _apart_deg(members[0][1], last) if len(members) == 2 else None
    if apart is not None and abs(apart - 90.0) > SLACK_DEG:
        what = f"{name!r}: its probes stand {apart:g} deg apart; an XY pair stands 90 deg apart"
        yield f"{key}.pair", f"{what} ({SLACK_DEG:g} deg slack). Put the angles right, or leave pair out."


def _apart_deg(a: Mapping[str, Any], b: Mapping[str, Any]) -> float | None:
    """From 0 to 180; None where an angle cannot be read."""
    try:
        between = abs(parse_angle(str(a.get("angle"))) - parse_angle(str(b.get("angle"))))
    except BadQuantity:
        return None
    return min(between, 360.0 - between)
