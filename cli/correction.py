"""``revmark correction``: the weights that take the unbalance out, in real holes, and what they leave."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import click

from cli.flagged import flag_lines
from cli.output import (
    ANGLES,
    NO_LAG,
    Show,
    angle,
    clean,
    json_option,
    print_json,
    say,
    shown_short,
    stand_option,
    table,
    warn,
)
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
    from cli.place import manner, newest_job, reading
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
    say(*advice_lines(advice, manner(stand).show))
    for line in CORRECTION:
        warn(f"caution: {line}")


def advice_lines(advice: Json, show: Show | None = None) -> Iterator[str]:
    """The advice in lines that fit 80 columns, from its JSON."""
    base = advice["base"]
    slow = f", less slow roll {clean(advice['slow_roll_run'])}" if advice["slow_roll_run"] else ""
    yield (
        f"Correction of job {clean(advice['job'])}: {clean(advice['machine'])} ({clean(advice['model'])}), "
        f"{advice['speed_hz'] * 60:.0f} r/min"
    )
    yield f"from {base['label']}, run {clean(base['run'])} reading {base['reading']}{slow}"
    if advice["fitted_now"]:
        yield f"ADD to what is fitted now, and leave it on: {_fitted(advice['fitted_now'])}"
    yield ""
    yield _pieces(advice["planes"])
    yield ANGLES
    yield ""
    for plane in advice["planes"]:
        yield from _plane_lines(plane)
    for left in advice["left_out"]:
        yield f"plane {left['plane']} is left out: {clean(left['why'])}; {_stays(left)}"
    yield ""
    yield _outlook(advice["channels"], show)
    if any(c[key]["lag_deg"] is None for c in advice["channels"] for key in ("base", "predicted")):
        yield NO_LAG
    yield from _words(advice)


def _fitted(pieces: list[Json]) -> str:
    """``plane 1: 10 g in hole 5; plane 2: 3 g in hole 2, drilled 1 g in hole 7``."""
    by_plane: dict[int, list[str]] = {}
    for piece in pieces:
        drilled = "drilled " if piece["drilled"] else ""
        by_plane.setdefault(piece["plane"], []).append(f"{drilled}{piece['mass_g']:g} g {_where(piece)}")
    return "; ".join(f"plane {plane}: {', '.join(told)}" for plane, told in by_plane.items())


def _where(piece: Json) -> str:
    if piece["hole"] is not None:
        return f"in hole {piece['hole']}"
    degrees = piece["against_rotation_deg"]
    return "at an angle not known" if degrees is None else f"at {angle(degrees)} deg"


def _stays(left: Json) -> str:
    stays = left["unbalance_that_stays"]
    if stays is None:
        return "its unbalance stays, how much is not known"
    spot = angle(stays["against_rotation_deg"])
    return f"its unbalance stays, {stays['gmm']:.1f} g.mm, heavy spot at {spot} deg"


def _pieces(planes: list[Json]) -> str:
    rows = []
    for plane in planes:
        for piece in plane["pieces"]:
            hole = piece["hole"] if piece["hole"] is not None else "-"
            rows.append(
                (plane["plane"], hole, angle(piece["against_rotation_deg"]), f"{piece['mass_g']:.1f}",
                 f"{piece['radius_mm']:g}", _there(piece))
            )  # fmt: skip
        if not plane["pieces"]:
            rows.append((plane["plane"], "-", "-", "nothing", "-", "-"))
    headers = ["plane", "hole", "angle deg", "fit g", "radius mm", "there now g"]
    return table(rows, headers, "rrrrrr")


def _there(piece: Json) -> str:
    """What sits already where a piece goes."""
    fitted, drilled = piece["there_now_g"], piece["drilled_there_g"]
    told = [f"{fitted:g}"] if fitted else []
    return ", ".join([*told, *([f"drilled {drilled:g}"] if drilled else [])]) or "-"


def _plane_lines(plane: Json) -> Iterator[str]:
    add, left, share = plane["add"], plane["left_by_rounding"], plane["permissible_share_gmm"]
    yield (
        f"plane {plane['plane']}: add {add['gmm']:.1f} g.mm at {angle(add['against_rotation_deg'])} deg, "
        f"force {plane['force_n']:.1f} N"
    )
    limit = f"permissible {share:.1f}" if share is not None else "no tolerance on record"
    spread = f"+- {plane['add_sd_per_component_gmm']:.1f} (one sd per component)"
    yield f"  left by rounding to holes {left['gmm']:.1f} g.mm; spread {spread}; {limit}"
    if plane["instead_of_what_is_fitted"]:
        told = ", ".join(_piece(p) for p in plane["instead_of_what_is_fitted"])
        rounding = plane["left_by_rounding_instead"]["gmm"]
        yield f"  INSTEAD, with all that is fitted there taken off: {told}"
        yield f"    (left by rounding to holes {rounding:.1f} g.mm)"


def _piece(piece: Json) -> str:
    return f"{piece['mass_g']:.1f} g {_where(piece)}"


def _outlook(channels: list[Json], show: Show | None) -> str:
    rows = []
    for channel in channels:
        name, foreseen = {"channel": channel["channel"]}, channel["predicted"]
        base, unit, base_lag = shown_short({**name, **channel["base"]}, show)
        size, _, lag = shown_short({**name, **foreseen}, show)
        wide, _, _ = shown_short({**name, **foreseen, "amplitude_pk": channel["predicted_p90_pk"]}, show)
        middle, _, _ = shown_short({**name, **foreseen, "amplitude_pk": channel["predicted_median_pk"]}, show)
        rows.append((channel["channel"], unit, base, base_lag, size, lag, middle, wide))
    headers = ["channel", "unit", "base", "lag", "predicted", "lag", "median", "9 of 10 below"]
    return table(rows, headers, "llrrrrrr")


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
    yield from flag_lines(advice["flags"])
    yield from (f"note: {clean(n)}" for n in advice["notes"])
    yield from (f"warning: {clean(w)}" for w in advice["warnings"])
