"""How ``revmark stand check --live`` is printed."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

from cli.output import clean, finite, print_json, say, table

if TYPE_CHECKING:
    from config.stand import Stand
    from daq.livecheck import LiveReport


def print_live(stand: Stand, seconds: float, *, as_json: bool) -> int:
    """Look at the stand's source and print what is there; exit code 1 when something is wrong."""
    from daq.clock import SystemClock
    from daq.drivers.registry import make_driver
    from daq.livecheck import look
    from daq.setup import channel_plan

    clock = SystemClock()
    driver = make_driver(
        stand.source.driver, stand.source.options, channel_plan(stand), clock=clock, folder=stand.folder
    )
    found = look(driver, stand, clock, seconds)
    if as_json:
        print_json(found.to_dict())
    else:
        say(*_lines(found))
    return 1 if found.trouble else 0


def _lines(found: LiveReport) -> Iterator[str]:
    yield f"{clean(found.source)}: {found.rate_hz:.6g} samples/s, looked at for {found.seconds:.1f} s"
    yield ""
    yield _pulse(found)
    yield ""
    yield _channels(found)
    yield ""
    yield from (f"wrong: {clean(sentence)}" for sentence in found.trouble)
    if not found.trouble:
        yield "nothing is wrong"


def _pulse(found: LiveReport) -> str:
    p = found.pulse
    if p.stamped:
        rows = [
            ("input", f"{p.input}: hardware edge stamps"),
            ("pulses a minute", f"{p.pulses_per_minute:.1f}"),
            ("missed, double", f"{p.missed}, {p.doubles}"),
            ("samples a turn", finite(p.samples_per_turn, ".1f")),
        ]
        return table(rows, [p.channel, ""])
    rows = [
        ("input", p.input),
        ("volts", f"{finite(p.lowest_v, '.2f')} to {finite(p.highest_v, '.2f')}"),
        ("pulses a minute", f"{p.pulses_per_minute:.1f}"),
        ("level chosen", f"{finite(p.level_v, '.2f')} V, pulse height {finite(p.height_v, '.2f')} V"),
        ("pulse width", f"{finite(p.width_deg, '.1f')} deg"),
        ("missed, double", f"{p.missed}, {p.doubles}"),
        ("samples a turn", finite(p.samples_per_turn, ".1f")),
        ("samples on an edge", finite(p.samples_on_edge, ".0f")),
    ]
    return table(rows, [p.channel, ""])


def _channels(found: LiveReport) -> str:
    rows = [
        (
            c.channel,
            c.input,
            f"{c.lowest_v:.2f} to {c.highest_v:.2f}",
            f"{c.range_high_v:.1f}",
            f"{c.gap_v:.2f}",
            f"{finite(c.gap_low_v)} to {finite(c.gap_high_v)}",
            f"{c.noise:.3f} {c.unit}",
            f"{c.skew_us:.1f}",
        )
        for c in found.channels
    ]
    headers = ["channel", "input", "volts", "range", "gap V", "limits V", "noise", "skew us"]
    return table(rows, headers, "lllrrlrr")
