"""A few seconds of a source, looked at channel by channel: is each one wired, ranged and alive?

Works for every driver: the source is opened as the daemon would open it, read, and closed. Nothing is stored.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from config.errors import DriverError
from config.stand import Stand
from daq.clock import Clock
from daq.drivers.base import Block, EndOfSource, SourceInfo
from daq.drivers.registry import AnyDriver
from daq.setup import signal_params
from daq.signal.edges import EdgeFinder, Trigger, trigger_of
from daq.signal.health import RangeScan, full_scales
from daq.signal.measure import measure
from daq.signal.revolutions import turns_of
from daq.signal.shapes import ChannelParams, Floats, Measurement, PulseParams

READ_S = 0.2
FIRST_BLOCK_S = 10.0
"""A source that delivers nothing for this long is called silent."""
FEWEST_PER_TURN, FEWEST_ON_EDGE = 20.0, 2.0
"""METHODS 8.3: interpolation on an edge needs two samples; 20 a turn is this project's judgement."""
NARROW_SHARE, WIDE_SHARE = 0.002, 0.5
"""A pulse shorter than this share of a turn is easily missed; one longer is perhaps the other edge's."""


@dataclass(frozen=True, slots=True)
class ChannelLook:
    """What one probe's samples look like."""

    channel: str
    input: str
    lowest_v: float
    highest_v: float
    range_low_v: float
    range_high_v: float
    gap_v: float
    gap_low_v: float | None
    gap_high_v: float | None
    noise: float
    """Standard deviation of what offset and orders leave while turning, else of all of it; base unit."""
    unit: str
    skew_us: float
    trouble: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class PulseLook:
    """What the once-per-rev channel looks like."""

    channel: str
    input: str
    stamped: bool
    """Edges stamped by hardware: volts, level, height, width and edge of the pulse are None then."""
    lowest_v: float | None
    highest_v: float | None
    pulses_per_minute: float
    level_v: float | None
    height_v: float | None
    width_deg: float | None
    missed: int
    doubles: int
    samples_per_turn: float | None
    samples_on_edge: float | None
    trouble: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class LiveReport:
    source: str
    rate_hz: float
    seconds: float
    lost_samples: int
    left_out: int
    """Of these: what the source left out itself."""
    remarks: tuple[str, ...]
    """What the driver found wrong with what came."""
    pulse: PulseLook
    channels: tuple[ChannelLook, ...]

    @property
    def trouble(self) -> tuple[str, ...]:
        """Everything that is wrong, a sentence each with what to do."""
        found = [*self.remarks, *self.pulse.trouble, *(t for c in self.channels for t in c.trouble)]
        if lost := self.lost_samples - self.left_out:
            found.append(f"{lost} samples were lost while looking. Lower the rate or free the PC.")
        if self.left_out:
            found.append(
                f"The source itself left out {self.left_out} samples while looking: its buffer was full. "
                "Lower its rate, or give it a faster line."
            )
        return tuple(found)

    def to_dict(self) -> dict[str, Any]:
        return {**asdict(self), "trouble": list(self.trouble)}


def look(driver: AnyDriver, stand: Stand, clock: Clock, seconds: float) -> LiveReport:
    """Open the source, read ``seconds`` of it, and say what is there. Raises DriverError.

    A simulated rotor is started first and a replayed recording played, so that there is something to see.
    """
    info = driver.open()
    try:
        wait_s = _set_going(driver)
        blocks = _longest_stretch(_read(driver, clock, wait_s + seconds), seconds * info.rate_hz)
        count, remarks = driver.counters, driver.remarks()
    finally:
        driver.close()
    counts = np.concatenate([b.counts for b in blocks])
    return report(counts, stand, info, count.lost_samples, count.left_out, remarks)


def _set_going(driver: AnyDriver) -> float:
    """Start what can be started from here (never a real rotor); seconds until it is worth a look."""
    if "next" in driver.verbs:
        driver.act("next")
        return LEAD_S
    if "start" in driver.verbs:
        driver.act("start")
        return RUN_UP_S
    return 0.0


LEAD_S = 3.0
"""Of a recording, which may begin at crawl speed."""
RUN_UP_S = 6.0
"""Of the simulated rotor with its default acceleration; its pace shortens the wait for samples, not this."""


def _read(driver: AnyDriver, clock: Clock, seconds: float) -> Iterator[Block]:
    """Blocks until ``seconds`` of samples have come, or the source ends."""
    heard_s, got_s = clock.monotonic(), 0.0
    while got_s < seconds:
        came = driver.read(READ_S)
        if isinstance(came, EndOfSource):
            return
        if came is None:
            if clock.monotonic() - heard_s > FIRST_BLOCK_S:
                raise DriverError(
                    f"The source {driver.name} delivered nothing for {FIRST_BLOCK_S:.0f} s.",
                    "Check its power, cable and clock.",
                    kind="timeout",
                )
            continue
        heard_s = clock.monotonic()
        got_s += len(came.counts) / came.rate_hz
        yield came


def _longest_stretch(blocks: Iterator[Block], most_samples: float) -> list[Block]:
    """The newest blocks of the newest segment, about ``most_samples`` of them."""
    kept: list[Block] = []
    for block in blocks:
        if kept and kept[-1].segment != block.segment:
            kept = []
        kept.append(block)
        while sum(len(b.counts) for b in kept[1:]) >= most_samples:
            del kept[0]
    if not kept:
        raise DriverError("The source ended before anything was read.", "Try again.", kind="timeout")
    return kept


# --- what the samples say ------------------------------------------------------------------------------


def report(
    counts: NDArray[Any],
    stand: Stand,
    info: SourceInfo,
    lost: int,
    left_out: int = 0,
    remarks: tuple[str, ...] = (),
) -> LiveReport:
    """The report of samples without a gap. ``counts`` has shape (frames, 1 + probes)."""
    pulse, channels = signal_params(stand, info)
    made = measure(counts, pulse, channels, info.rate_hz)
    return LiveReport(
        info.description,
        info.rate_hz,
        len(counts) / info.rate_hz,
        lost,
        left_out,
        remarks,
        _pulse(counts[:, 0], pulse, stand, info),
        tuple(_channels(counts, channels, stand, info, made)),
    )


def _pulse(column: NDArray[Any], params: PulseParams, stand: Stand, info: SourceInfo) -> PulseLook:
    volts = info.volts_per_count[0]
    trigger = trigger_of(column, params)
    low, high = float(column.min()) * volts, float(column.max()) * volts
    name, wire = stand.pulse.name, stand.pulse.input
    if trigger is None and info.stamped:
        trouble = (
            f"{name}: no edge stamps among what came. Turn the rotor; then check the sensor's gap at the "
            "rotor mark, its supply, and the trigger level of the digitizer."
        )
        return PulseLook(
            name, wire, info.stamped, None, None, 0.0, None, None, None, 0, 0, None, None, (trouble,)
        )
    if trigger is None:
        trouble = (
            f"{name} shows no pulses between {low:.2f} V and {high:.2f} V. Turn the rotor; then check the "
            "sensor's gap at the rotor mark, its supply and its input."
        )
        return PulseLook(
            name, wire, info.stamped, low, high, 0.0, None, None, None, 0, 0, None, None, (trouble,)
        )
    finder = EdgeFinder(params, info.rate_hz, trigger)
    edges = finder.feed(column, 0)
    return _pulses(column, edges, finder, trigger, stand, info)


def _pulses(
    column: NDArray[Any],
    edges: Floats,
    finder: EdgeFinder,
    trigger: Trigger,
    stand: Stand,
    info: SourceInfo,
) -> PulseLook:
    volts, name = info.volts_per_count[0], stand.pulse.name
    turns = turns_of(edges)
    per_turn = float(np.median(turns.periods)) if len(edges) > 1 else None
    seen = not info.stamped
    width = _width_deg(column, edges, trigger, stand.pulse.edge) if seen and per_turn is not None else None
    on_edge = _samples_on_edge(column, edges, finder, trigger) if seen and len(edges) else None
    minute = 60 * info.rate_hz / per_turn if per_turn else 60 * len(edges) * info.rate_hz / len(column)
    return PulseLook(
        name,
        stand.pulse.input,
        info.stamped,
        float(column.min()) * volts if seen else None,
        float(column.max()) * volts if seen else None,
        minute,
        trigger.level * volts if seen else None,
        abs(trigger.height * volts) if seen else None,
        width,
        turns.missed,
        turns.doubles,
        per_turn,
        on_edge,
        tuple(
            _pulse_trouble(name, turns.missed, turns.doubles, per_turn, width, on_edge, stamped=info.stamped)
        ),
    )


def _width_deg(column: NDArray[Any], edges: Floats, trigger: Trigger, edge: str) -> float:
    """How much of the turn the pulse fills: the share of whole turns spent beyond the level."""
    inside = column[int(edges[0]) : int(edges[-1])]
    beyond = inside < trigger.level if edge == "falling" else inside > trigger.level
    return 360.0 * float(beyond.mean())


def _samples_on_edge(column: NDArray[Any], edges: Floats, finder: EdgeFinder, trigger: Trigger) -> float:
    """Median number of samples between 10 % and 90 % of the pulse's height about its edges."""
    reach = int(max(2.0, min(64.0, finder.pulse_length / 2)))
    at = edges.astype(np.int64)
    at = at[(at > reach) & (at < len(column) - reach - 1)][:500]
    if not len(at):
        return float("inf")
    around = column[at[:, None] + np.arange(-reach, reach + 1)].astype(np.float64)
    on_edge = np.abs(around - trigger.level) < 0.4 * abs(trigger.height)
    return float(np.median(on_edge.sum(axis=1)))


def _pulse_trouble(
    name: str,
    missed: int,
    doubles: int,
    per_turn: float | None,
    width_deg: float | None,
    on_edge: float | None,
    *,
    stamped: bool,
) -> Iterator[str]:
    if missed or doubles:
        level = "the digitizer's trigger level" if stamped else "the level"
        yield (
            f"{name}: {missed} pulses missed, {doubles} double. Set {level} to the middle of the pulse and "
            "look for scratches or a loose sensor."
        )
    if per_turn is not None and per_turn < FEWEST_PER_TURN:
        yield f"{name}: only {per_turn:.1f} samples a turn. Raise the sampling rate."
    if width_deg is not None and width_deg > 360 * WIDE_SHARE:
        yield (
            f"{name}: the pulse fills {width_deg:.0f} deg of the turn. The other edge may be meant; it "
            "shifts every phase by the width of the mark."
        )
    if width_deg is not None and width_deg < 360 * NARROW_SHARE:
        yield f"{name}: the pulse lasts only {width_deg:.2f} deg. Raise the rate or widen the mark."
    if on_edge is not None and on_edge < FEWEST_ON_EDGE:
        yield (
            f"{name}: fewer than {FEWEST_ON_EDGE:.0f} samples on the edge, so up to half a sample of phase "
            "error that does not average down. Raise the sampling rate."
        )


def _channels(
    counts: NDArray[Any],
    params: Sequence[ChannelParams],
    stand: Stand,
    info: SourceInfo,
    made: Measurement,
) -> Iterator[ChannelLook]:
    scan = RangeScan(full_scales(params))
    scan.add(counts)
    low, high = info.full_scale_counts
    for i, (channel, given) in enumerate(zip(params, stand.channels, strict=True), 1):
        volts = channel.volts_per_count
        level = made.level(channel.name)
        gap_v = level.gap_v if level else float(counts[:, i].mean()) * volts
        spread = float(counts[:, i].std(dtype=np.float64)) * abs(channel.units_per_count)
        noise = level.residual_sd if level else spread
        yield ChannelLook(
            channel.name,
            given.input,
            float(scan.low[i]) * volts,
            float(scan.high[i]) * volts,
            low * volts,
            high * volts,
            gap_v,
            channel.gap_low_v,
            channel.gap_high_v,
            noise,
            given.unit,
            1e6 * channel.skew_s,
            tuple(_channel_trouble(channel, gap_v, clipped=bool(scan.clipped[i]), flat=bool(scan.flat[i]))),
        )


def _channel_trouble(channel: ChannelParams, gap_v: float, *, clipped: bool, flat: bool) -> Iterator[str]:
    if flat:
        yield f"{channel.name} is flat at {gap_v:.2f} V. Check the wire, the input and the supply."
    if clipped:
        yield f"{channel.name} is clipped at the end of its range. Choose a wider range, or a divider."
    low, high = channel.gap_low_v, channel.gap_high_v
    if (low is not None and gap_v < low) or (high is not None and gap_v > high):
        yield (
            f"{channel.name} has a gap of {gap_v:.2f} V, outside {low if low is not None else '-'} to "
            f"{high if high is not None else '-'} V. Set the probe's gap, or check its supply."
        )
