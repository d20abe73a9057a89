"""``revmark coefficient``: how machines of a model answered to weights."""

from __future__ import annotations

import click

from cli.output import angle, json_option, print_json, say, stand_option, table
from cli.typed import Speed


@click.group(help="Influence coefficients of past jobs.")
def group() -> None: ...


@group.command(name="list", context_settings={"max_content_width": 80})
@stand_option
@click.option("--model", metavar="CODE", help="Only this model.")
@click.option("--plane", type=click.IntRange(1, 99), help="Only this weight plane.")
@click.option("--channel", metavar="NAME", help="Only this channel.")
@click.option("--rpm", "speed_hz", type=Speed(), metavar="SPEED", help="Only within 0.5 % of this speed.")
@json_option
def list_(
    stand: str | None,
    model: str | None,
    plane: int | None,
    channel: str | None,
    speed_hz: float | None,
    *,
    as_json: bool,
) -> None:
    """Coefficients of past jobs: 0-peak per g.mm, lag against rotation."""
    from cli.place import reading
    from store import asjson

    with reading(stand) as history:
        if model is not None:
            history.model(model)  # a typo is not an empty list
        known = history.coefficients(model, plane, channel, speed_hz)
        set_ups = {one: history.set_up(one) for one in {c.set_up_id for c in known}}
    probes = [set_ups[c.set_up_id].channel(c.channel) for c in known]
    found = [
        {**asjson.coefficient_json(c), "unit": probe.unit if probe else None}
        for c, probe in zip(known, probes, strict=True)
    ]
    if as_json:
        print_json(found)
        return
    rows = [
        (c["model"], c["machine"], c["job"], c["plane"], c["channel"], f"{c['speed_rpm']:.0f}",
         f"{c['amplitude_pk_per_gmm']:.4g}", f"{c['unit'] or '?'} pk/g.mm", angle(c["lag_deg"]),
         f"{100 * c['se_pk_per_gmm'] / c['amplitude_pk_per_gmm']:.1f}")
        for c in found
    ]  # fmt: skip
    headers = ["model", "machine", "job", "plane", "channel", "r/min", "effect", "unit", "lag", "+- %"]
    say(table(rows, headers, "lllrlrrlrr"))
