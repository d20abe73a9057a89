"""``revmark run recompute`` and ``revmark run revise``: the arithmetic again, from the stored counts."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from typing import TYPE_CHECKING, Any

import click

from cli.asking import post_or_ask
from cli.client import Client, find, new_key
from cli.output import clean, count, json_option, operator_option, print_json, say, stand_option, warn
from cli.typed import OfChannel, Quantity, parse_sense_of_positive, parse_stand_angle
from config.onethread import one_thread
from config.units import BASE_UNIT, parse_sensitivity

if TYPE_CHECKING:
    from daq.recompute import Again, Difference
    from store.history import History

Json = Mapping[str, Any]
WAIT_S = 3600.0
"""For the daemon's arithmetic: long runs take about a second a reading."""
LISTED = 5
"""So many differences of a reading are listed; --json has them all."""
LARGEST = 100_000
SENSES = {1: "rising", -1: "falling"}


@click.command(context_settings={"max_content_width": 80})
@click.argument("run", nargs=-1)
@click.option("--all", "every", is_flag=True, help="Every run in the store.")
@click.option("--job", metavar="NUMBER", help="Every run of this job.")
@click.option(
    "--keep", is_flag=True, help="Keep what differs as a new version, beside the old (asks the daemon)."
)
@stand_option
@operator_option
@json_option
def recompute(
    run: tuple[str, ...], job: str | None, stand: str | None, operator: str, *, every: bool, keep: bool,
    as_json: bool,
) -> int:  # fmt: skip
    """Measure RUN again from its stored counts and say whether it gives the same.

    Nothing is changed and no daemon is needed, but with --keep. Exit code 1 when a figure is further off
    than another processor's rounding explains.
    """
    if bool(run) + every + (job is not None) != 1:
        raise click.UsageError("Name runs, or say --all, or --job NUMBER: one of the three.")
    if keep:
        if not run:
            raise click.UsageError("Name the runs whose result shall be kept.")
        return _keep(run, stand, operator, as_json=as_json)
    one_thread()
    from cli.place import reading

    with reading(stand) as history:
        names = run or tuple(reversed([r.name for r in history.runs(job, limit=LARGEST)]))
        return _report(_again(history, names), quiet=not run, as_json=as_json)


def _again(history: History, names: Iterable[str]) -> Iterator[Again]:
    from daq.recompute import again

    for name in names:
        run = history.run(name)
        for one in run.readings:
            yield again(history, run.name, one)


def _report(found: Iterable[Again], *, quiet: bool, as_json: bool) -> int:
    """Print readings as they come; with ``quiet`` only those that are not identical."""
    counts = {"identical": 0, "within": 0, "apart": 0, "not": 0}
    told = []
    for one in found:
        counts[one.same or "not"] += 1
        if as_json:
            told.append(one.to_dict())
        elif not quiet or one.same != "identical":
            say(*_lines(one))
    if as_json:
        print_json({"readings": told, "count": counts})
    else:
        say(*_summed(counts))
    return 1 if counts["apart"] else 0


def _summed(counts: Mapping[str, int]) -> Iterator[str]:
    yield (
        f"{count(sum(counts.values()), 'reading')}: {counts['identical']} identical to the last bit, "
        f"{counts['within']} within rounding, {counts['apart']} apart, {counts['not']} not measured again"
    )


def _lines(one: Again) -> Iterator[str]:
    name = f"run {clean(one.run)} reading {one.reading.number}"
    if one.same is None:
        yield f"{name}: not measured again. {clean(one.why_not)}"
        return
    said = {
        "identical": "identical to the last bit",
        "within": "not identical, but within rounding",
        "apart": "APART",
    }[one.same]
    vectors = len(one.measured.vectors) if one.measured else 0
    yield f"{name}: {said} ({vectors} vectors)"
    listed = sorted(one.differences, key=lambda d: -d.apart / max(d.tolerance, 1e-300))
    yield from (f"  {_difference(d)}" for d in listed[:LISTED])
    if len(listed) > LISTED:
        yield f"  and {len(listed) - LISTED} more, smaller (--json lists them)"
    if one.differences:
        yield from (f"  {clean(what)}" for what in one.build)
        if not one.build:
            yield "  although software, numpy and processor are the same"


def _difference(d: Difference) -> str:
    where = "" if d.channel is None else f" of {clean(d.channel)}"
    order = "" if d.order is None else f" {d.order}X"
    by = f"differs by {d.apart:.1e} (allowed {d.tolerance:.0e})"
    if d.apart == float("inf"):
        by = f"was {clean(_told(d.stored))}, is {clean(_told(d.now))}"
    return f"{d.what}{where}{order}: {by}"


def _told(value: object) -> str:
    return "not there" if value is None else f"{value:.6g}" if isinstance(value, float) else str(value)


def _keep(runs: tuple[str, ...], stand: str | None, operator: str, *, as_json: bool) -> int:
    body = {"key": new_key(), "who": operator, "runs": list(runs)}
    answer = Client(find(stand)).post("/v1/run/recompute", body, WAIT_S)
    if as_json:
        print_json(answer)
        return 0
    for one in answer["runs"]:
        for r in one["readings"]:
            say(f"run {clean(one['run'])} reading {r['reading']}: {_kept(r)}")
    return 0


def _kept(told: Json) -> str:
    if told["why_not"]:
        return f"not measured again. {clean(told['why_not'])}"
    if not told["kept"]:
        return f"identical; version {told['version']} stands"
    return f"kept as version {told['version']}, beside what was there"


# --- a corrected set-up ----------------------------------------------------------------------------------


@click.command(context_settings={"max_content_width": 80})
@click.argument("run", nargs=-1, required=True)
@click.option("--sensitivity", "sensitivities", multiple=True, metavar="CHANNEL=VALUE",
              type=OfChannel("sensitivity", parse_sensitivity, "probe 1=200 mV/mil"),
              help='What a probe\'s sensitivity really was: "probe 1=200 mV/mil".')  # fmt: skip
@click.option("--angle", "angles", multiple=True, metavar="CHANNEL=ANGLE",
              type=OfChannel("angle", parse_stand_angle, "probe 1=45 deg"),
              help='Where a probe really was: "probe 1=45 deg", a stand angle.')  # fmt: skip
@click.option("--positive", "senses", multiple=True, metavar="CHANNEL=SENSE",
              type=OfChannel("sense", parse_sense_of_positive, "probe 1=falling"),
              help='How its voltage goes for positive motion: "probe 1=rising" or falling.')  # fmt: skip
@click.option("--sensor-angle", type=Quantity("angle"), metavar="ANGLE",
              help='Where the once-per-rev sensor really was: "90 deg", a stand angle.')  # fmt: skip
@click.option("--why", required=True, metavar="TEXT", help="Why; it stays with the runs.")
@click.option("--yes", "confirmed", is_flag=True, help="A sensitivity many times another is meant.")
@stand_option
@operator_option
@json_option
def revise(
    run: tuple[str, ...], sensitivities: tuple[Any, ...], angles: tuple[Any, ...], senses: tuple[Any, ...],
    sensor_angle: float | None, why: str, stand: str | None, operator: str, *, confirmed: bool, as_json: bool,
) -> None:  # fmt: skip
    """Give runs the set-up they were really measured with, and measure them again.

    What was there stays: revmark run show RUN --version 1. Name every run of a job that was measured
    wrongly: runs with different sensitivities are not computed with one another.
    """
    channels: dict[str, dict[str, Any]] = {}
    _set(channels, "sensitivity", [(c, {"volts_per_unit": s.volts_per_unit, "unit": BASE_UNIT[s.kind]})
                                   for c, s in sensitivities])  # fmt: skip
    _set(channels, "angle", [(c, {"angle_deg": a}) for c, a in angles])
    _set(channels, "positive", [(c, {"positive": s}) for c, s in senses])
    body = {
        "key": new_key(),
        "who": operator,
        "runs": list(run),
        "channels": [{"channel": name, **told} for name, told in channels.items()],
        "sensor_angle_deg": None if sensor_angle is None else sensor_angle % 360.0,
        "why": why,
        "confirmed": confirmed,
    }
    if not why.strip():
        raise click.UsageError("--why is empty; say why the set-up was another.")
    client = Client(find(stand))
    answer = post_or_ask(lambda b: client.post("/v1/run/revise", b, WAIT_S), body, as_json=as_json)
    print_json(answer) if as_json else _print_revised(answer)


def _set(channels: dict[str, dict[str, Any]], what: str, told: list[tuple[str, dict[str, Any]]]) -> None:
    """Enter what is told of channels; the same thing twice of one is a typing mistake."""
    names = [name for name, _ in told]
    twice = next((n for n in names if names.count(n) > 1), None)
    if twice is not None:
        raise click.UsageError(f"--{what} is given twice for {twice}.")
    for name, values in told:
        channels.setdefault(name, {}).update(values)


def _change(told: Json) -> str:
    name = "once-per-rev" if told["channel"] is None else clean(told["channel"])
    was, now = told["was"], told["is"]
    if told["what"] == "volts_per_unit":
        by = f"amplitudes are {was / now:.6g} times what they were"
        return f"{name}: sensitivity {was:.6g} -> {now:.6g} V per base unit; {by}"
    if told["what"] == "positive":
        return f"{name}: positive was {SENSES[was]}, is {SENSES[now]}"
    return f"{name}: stand angle was {was:g} deg, is {now:g} deg"


def _print_revised(answer: Json) -> None:
    for one in answer["runs"]:
        again = [r for r in one["readings"] if not r["why_not"]]
        scaled = [r for r in one["readings"] if r["why_not"]]
        say(f"Run {clean(one['run'])} has the corrected set-up: {count(len(again), 'reading')} measured again"
            + (f", {len(scaled)} scaled." if scaled else "."))  # fmt: skip
        say(*(f"  {_change(c)}" for c in one.get("changes", ())))
        for r in scaled:
            say(f"  reading {r['reading']} was scaled exactly, not measured: {clean(r['why_not'])}")
    say("What was there stays: revmark run show RUN --version 1")
    if answer["left"]:
        names = ", ".join(clean(n) for n in answer["left"])
        warn(f"warning: {names} of the same job keep their set-up and are not computed with these where it "
             "differs; name them too if it was wrong for them.")  # fmt: skip
    warn("warning: the stand file is not changed; correct it there too for the runs to come.")
