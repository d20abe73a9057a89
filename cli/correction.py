"""``revmark correction``: the weights that take the unbalance out, in real holes, and what they leave."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import click

from cli.output import angle, clean, json_option, print_json, say, shown, stand_option, table, warn
from cli.typed import Quantity, Speed

Json = Mapping[str, Any]


@click.command(context_settings={"max_content_width": 80})
@stand_option
@click.option("--job", metavar="NUMBER", help="Default: the job of the mounted machine, else the newest.")
@click.option("--plane", "planes", multiple=True, type=click.IntRange(1, 99), help="Only this plane.")
@click.option("--reuse", is_flag=True, help="Take coefficients of the same model from history.")
@click.option("--minus-slow-roll", "slow", is_flag=True, help="Subtract the slow-roll vectors first.")
@click.option("--rpm", "speed_hz", type=Speed(), metavar="SPEED", help="Balancing speed, if several.")
@click.option("--any-origin", is_flag=True, help="Also use simulated or replayed runs; the result says so.")
@click.option("--step", "step_g", type=Quantity("mass", 1e-3), default="0.1g", show_default=True,
              help="Masses are rounded to this step.")  # fmt: skip
@json_option
def command(stand: str | None, *, as_json: bool, **told: Any) -> None:
    """The correction weights for one or two planes, in real holes, and the residual they should leave."""
    from cli.place import newest_job, reading
    from store import consult
    from store.balance.cautions import CORRECTION

    with reading(stand) as history:
        advice = consult.correction(
            history,
            told["job"] or newest_job(history),
            planes=told["planes"] or None,
            reuse=told["reuse"],
            subtract_slow_roll=told["slow"],
            speed_hz=told["speed_hz"],
            any_origin=told["any_origin"],
            step_g=told["step_g"],
        ).to_dict()
    if as_json:
        print_json(advice)
        return
    say(*advice_lines(advice))
    for line in CORRECTION:
        warn(f"caution: {line}")


def advice_lines(advice: Json) -> Iterator[str]:
    """The advice in lines that fit 80 columns, from its JSON."""
    base = advice["base"]
    slow = f", less slow roll {clean(advice['slow_roll_run'])}" if advice["slow_roll_run"] else ""
    yield (
        f"Correction of job {clean(advice['job'])}: {clean(advice['machine'])} ({clean(advice['model'])}), "
        f"{advice['speed_hz'] * 60:.0f} r/min"
    )
    yield f"from {base['label']}, run {clean(base['run'])} reading {base['reading']}{slow}"
    yield ""
    yield _pieces(advice["planes"])
    yield ""
    for plane in advice["planes"]:
        yield from _plane_lines(plane)
    for left in advice["left_out"]:
        yield f"plane {left['plane']} is left out: {clean(left['why'])}"
    yield ""
    yield _outlook(advice["channels"])
    yield from _words(advice)


def _pieces(planes: list[Json]) -> str:
    rows = []
    for plane in planes:
        for piece in plane["pieces"]:
            hole = piece["hole"] if piece["hole"] is not None else "-"
            held = plane["already_in_hole_g"].get(str(hole))
            rows.append(
                (plane["plane"], hole, angle(piece["against_rotation_deg"]), f"{piece['mass_g']:.1f}",
                 f"{piece['radius_mm']:g}", f"{held:g}" if held else "-")
            )  # fmt: skip
        if not plane["pieces"]:
            rows.append((plane["plane"], "-", "-", "nothing", "-", "-"))
    headers = ["plane", "hole", "angle deg", "fit g", "radius mm", "there now g"]
    return table(rows, headers, "rrrrrr")


def _plane_lines(plane: Json) -> Iterator[str]:
    add, left = plane["add"], plane["predicted_residual"]
    yield (
        f"plane {plane['plane']}: exact {add['gmm']:.1f} g.mm at {angle(add['against_rotation_deg'])} deg "
        f"(+- {plane['add_sd_per_component_gmm']:.1f}), force {plane['force_n']:.1f} N"
    )
    share = plane["permissible_share_gmm"]
    limit = f" of {share:.1f} permissible" if share is not None else "; no tolerance on record"
    yield f"  predicted residual {left['gmm']:.1f} g.mm{limit}"
    if plane["instead_of_what_is_fitted"]:
        told = ", ".join(_piece(p) for p in plane["instead_of_what_is_fitted"])
        yield f"  or, with all that is fitted there taken off: {told}"


def _piece(piece: Json) -> str:
    hole = piece["hole"]
    where = f"hole {hole}" if hole is not None else f"{angle(piece['against_rotation_deg'])} deg"
    return (
        f"{piece['mass_g']:.1f} g in {where}" if hole is not None else f"{piece['mass_g']:.1f} g at {where}"
    )


def _outlook(channels: list[Json]) -> str:
    rows = []
    for channel in channels:
        base, unit, base_lag = _shown(channel, channel["base"])
        size, _, lag = _shown(channel, channel["predicted"])
        wide, _, _ = _shown(channel, {**channel["predicted"], "amplitude_pk": channel["predicted_p90_pk"]})
        middle, _, _ = _shown(
            channel, {**channel["predicted"], "amplitude_pk": channel["predicted_median_pk"]}
        )
        rows.append((channel["channel"], unit, base, base_lag, size, lag, middle, wide))
    headers = ["channel", "unit", "base", "lag", "predicted", "lag", "median", "9 of 10 below"]
    return table(rows, headers, "llrrrrrr")


def _shown(channel: Json, vector: Json) -> tuple[str, str, str]:
    return shown({"channel": channel["channel"], **vector})


def _words(advice: Json) -> Iterator[str]:
    behind = {(c["source"], *c.get("runs", c.get("jobs", []))) for c in advice["coefficients"]}
    for source, *names in sorted(behind):
        where = "runs" if source == "own" else "history, jobs"
        yield f"coefficients from {where} {', '.join(clean(n) for n in names)}"
    for refused in advice["not_reused"]:
        yield (
            f"not reused: job {clean(refused['job'])} plane {refused['plane']} "
            f"{clean(refused['channel'])}: {clean(refused['why'])}"
        )
    yield from (f"note: {clean(n)}" for n in advice["notes"])
    yield from (f"warning: {clean(w)}" for w in advice["warnings"])
