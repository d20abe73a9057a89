"""What every driver must do, checked by running it: for our tests and for people who write drivers.

``run(subject, clock)`` returns one Finding per rule of ``RULES``. What a driver cannot show is declared
in its Subject, never skipped quietly: the finding then says so in ``note``.
"""

from __future__ import annotations

import inspect
import itertools
import statistics
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any

from config.errors import DriverError, Refusal
from daq.clock import Clock
from daq.drivers.base import Block, Driver, DriverState, EndOfSource

AnyDriver = Driver[Any]

TIMEOUT_S = 0.05
LATE_S = 0.25
"""A read may come back this much after its time-out."""
STOP_S = 2.0
"""``close`` is done within this."""
BLOCKS = 5
"""Blocks looked at by each rule."""
BLOCKS_WITHIN_S = 20.0
"""Those blocks must come within this, by the clock."""
SHORT_S = 0.01
"""A time-out well below any block, so that a source that streams is found with nothing ready."""
TYPICAL_S = 0.04
"""Half of all reads of ``SHORT_S`` come back within this."""
LIMIT_S = 3.0
"""How long a rule looks out for a silence, or for a loss that comes by itself, by the clock."""
READS = 4000
"""A rule also gives up after so many reads, should the clock stand still."""


@dataclass(frozen=True, slots=True)
class Subject:
    """A driver under test and what it can show."""

    make: Callable[[], AnyDriver]
    """A new, closed driver."""
    start: tuple[str, Mapping[str, Any]] | None = None
    """The verb that makes samples come; None = they come from ``open`` on."""
    lose: Callable[[AnyDriver], int] | None = None
    """Provoke one loss the driver can count, soon to be read; returns how many samples of each channel.
    None = it cannot be provoked; then losses that come by themselves are looked at."""
    falls_silent: bool = True
    """A read of ``SHORT_S`` finds nothing now and then. False = a block is always ready, so the time-out
    shows nothing."""


@dataclass(frozen=True, slots=True)
class Finding:
    rule: str
    problem: str = ""
    """Empty = kept."""
    note: str = ""
    """Why a rule had nothing to check."""

    @property
    def kept(self) -> bool:
        """Nothing is wrong; with a ``note``, nothing was seen either."""
        return not self.problem


class Broken(Exception):
    """A rule is broken; the text says how."""


class NothingToCheck(Exception):
    """The subject declares that it cannot show this."""


@dataclass(slots=True)
class Bench:
    """One driver, opened and driven by a rule; always closed at the end."""

    subject: Subject
    clock: Clock
    driver: AnyDriver = field(init=False)

    def __post_init__(self) -> None:
        self.driver = self.subject.make()

    def start(self) -> None:
        if self.subject.start is not None:
            verb, args = self.subject.start
            self.driver.act(verb, **args)

    def blocks(self, n: int = BLOCKS) -> list[Block]:
        """The next ``n`` blocks."""
        found: list[Block] = []
        for _ in self.reads(BLOCKS_WITHIN_S):
            got = self.driver.read(TIMEOUT_S)
            if isinstance(got, EndOfSource):
                raise Broken(f"the source ended after {len(found)} blocks; {n} are needed to check it")
            if got is not None:
                found.append(got)
            if len(found) == n:
                return found
        raise Broken(f"only {len(found)} blocks came within {BLOCKS_WITHIN_S:g} s")

    def reads(self, limit_s: float) -> Iterator[int]:
        """A number for each read until ``limit_s`` have passed."""
        begin_s = self.clock.monotonic()
        for n in range(READS):
            if self.clock.monotonic() - begin_s > limit_s:
                return
            yield n

    def playing(self, n: int = BLOCKS) -> list[Block]:
        """Open, start, and the first ``n`` blocks."""
        self.driver.open()
        self.start()
        return self.blocks(n)


Rule = Callable[[Bench], None]


def overrides_no_public_method(bench: Bench) -> None:
    """A driver overrides underscore methods only."""
    public = {name for name, _ in inspect.getmembers(Driver) if not name.startswith("_")}
    settable = {"name", "Options", "verbs", "silence_limit_s", "paces_itself"}
    for kind in type(bench.driver).__mro__:
        if kind.__module__ == Driver.__module__ or kind is object:
            continue
        wrong = sorted((public - settable) & set(vars(kind)))
        require(not wrong, f"{kind.__name__} overrides {', '.join(wrong)}")


def open_twice_is_refused(bench: Bench) -> None:
    """The second ``open`` is a DriverError and disturbs nothing."""
    bench.driver.open()
    refused(bench.driver.open, "open")
    bench.start()
    bench.blocks(1)


def close_twice_is_harmless(bench: Bench) -> None:
    """``close`` may be called again, and before any ``open``."""
    bench.driver.close()
    bench.driver.open()
    bench.driver.close()
    bench.driver.close()
    require(bench.driver.state is DriverState.CLOSED, f"the state is {bench.driver.state}")


def read_when_closed_is_refused(bench: Bench) -> None:
    """``read`` before ``open`` and after ``close`` is a DriverError."""
    refused(bench.driver.read, "read before open")
    bench.driver.open()
    bench.driver.close()
    refused(bench.driver.read, "read after close")


def opens_again(bench: Bench) -> None:
    """After ``close`` the same driver opens again, in a later segment and from sample 0."""
    last = bench.playing(1)[-1]
    bench.driver.close()
    first = bench.playing(1)[0]
    require(first.segment > last.segment, f"segment {first.segment} follows {last.segment}")
    require(first.first_sample == 0, f"the first sample is {first.first_sample}")


def time_out_is_kept(bench: Bench) -> None:
    """A read with nothing to give returns None in time."""
    bench.driver.open()
    if bench.subject.falls_silent is False:
        bench.start()
    waits_s: list[float] = []
    for _ in bench.reads(LIMIT_S):
        begin_s = bench.clock.monotonic()
        got = bench.driver.read(SHORT_S)
        waits_s.append(bench.clock.monotonic() - begin_s)
        require(waits_s[-1] <= SHORT_S + LATE_S, f"a read of {SHORT_S:g} s took {waits_s[-1]:.3f} s")
        if got is None:
            return
        if not bench.subject.falls_silent:
            raise NothingToCheck("a block is always ready")
    typical_s = statistics.median(waits_s)
    late = f"reads of {SHORT_S:g} s wait for a block instead of coming back empty: {typical_s:.3f} s each"
    require(typical_s <= TYPICAL_S, late)
    raise NothingToCheck(
        f"no read of {SHORT_S:g} s came back empty within {LIMIT_S:g} s; where a block is always ready, "
        "say so with --never-silent (falls_silent=False)"
    )


def blocks_are_as_announced(bench: Bench) -> None:
    """Shape, type and rate are those of SourceInfo."""
    info = bench.driver.open()
    bench.start()
    columns = len(bench.driver.channels.names)
    require(len(info.volts_per_count) == columns, f"volts_per_count has {len(info.volts_per_count)} entries")
    for block in bench.blocks():
        counts = block.counts
        sound = counts.ndim == 2 and counts.shape[1] == columns and counts.shape[0] > 0
        require(sound, f"a block has the shape {counts.shape} for {columns} channels")
        require(counts.dtype == info.dtype, f"a block is {counts.dtype}, announced was {info.dtype}")
        require(block.rate_hz == info.rate_hz, f"a block has {block.rate_hz} Hz")
        low, high = info.full_scale_counts
        require(low <= counts.min() and counts.max() <= high, "counts lie beyond the full scale")


def blocks_keep_their_own_memory(bench: Bench) -> None:
    """A block's samples do not change when later ones are read."""
    first = bench.playing(1)[0]
    copy = first.counts.copy()
    bench.blocks(2)
    require(bool((copy == first.counts).all()), "a block changed after it was handed out")


def samples_follow_each_other(bench: Bench) -> None:
    """Within a segment each block begins where the one before ended, and stamps never fall."""
    blocks = bench.playing()
    for before, after in itertools.pairwise(blocks):
        expected = before.first_sample + len(before.counts)
        joined = after.segment > before.segment or after.first_sample == expected
        require(joined, f"a block begins at {after.first_sample}, expected was {expected}")
        require(after.mono_s >= before.mono_s, "a block is stamped earlier than the one before")


def loss_is_counted(bench: Bench) -> None:
    """A loss starts a segment, and the sample numbers jump by exactly what was lost."""
    before = bench.playing(1)[-1]
    if bench.subject.lose is None:
        own_loss_is_counted(bench, before)
        return
    held = bench.driver.counters.lost_samples
    lost = bench.subject.lose(bench.driver)
    for after in bench.blocks():
        if after.segment > before.segment:
            jump = jumped(before, after)
            require(jump == lost, f"the sample numbers jump by {jump} where {lost} samples were lost")
            counted = bench.driver.counters.lost_samples - held
            require(counted == lost, f"the counters hold {counted} where {lost} samples were lost")
            return
        before = after
    raise Broken("the loss started no segment")


def own_loss_is_counted(bench: Bench, before: Block) -> None:
    """The first loss that comes by itself: segment, sample numbers and counters say the same."""
    for _ in bench.reads(LIMIT_S):
        held = bench.driver.counters.lost_samples
        after = bench.driver.read(TIMEOUT_S)
        if isinstance(after, EndOfSource):
            break
        if after is None:
            continue
        counted = bench.driver.counters.lost_samples - held
        jump = jumped(before, after)
        require(jump == counted, f"the sample numbers jump by {jump} where the counters grow by {counted}")
        if jump:
            require(after.segment > before.segment, f"a loss of {jump} samples started no segment")
            return
        before = after
    raise NothingToCheck(f"a loss cannot be provoked, and none came by itself within {LIMIT_S:g} s")


def jumped(before: Block, after: Block) -> int:
    """Samples missing between two blocks."""
    return after.first_sample - (before.first_sample + len(before.counts))


def stops_in_time(bench: Bench) -> None:
    """``close`` comes back soon, in the middle of samples."""
    bench.playing(1)
    begin_s = bench.clock.monotonic()
    bench.driver.close()
    took_s = bench.clock.monotonic() - begin_s
    require(took_s <= STOP_S, f"close took {took_s:.2f} s")


def unknown_verb_is_refused(bench: Bench) -> None:
    """``act`` refuses what the driver does not list, and the source goes on."""
    bench.driver.open()
    try:
        bench.driver.act("no such verb")
    except Refusal:
        bench.start()
        bench.blocks(1)
        return
    raise Broken("an unknown verb was accepted")


RULES: tuple[Rule, ...] = (
    overrides_no_public_method,
    open_twice_is_refused,
    close_twice_is_harmless,
    read_when_closed_is_refused,
    opens_again,
    time_out_is_kept,
    blocks_are_as_announced,
    blocks_keep_their_own_memory,
    samples_follow_each_other,
    loss_is_counted,
    stops_in_time,
    unknown_verb_is_refused,
)


def run(subject: Subject, clock: Clock) -> list[Finding]:
    """Check every rule; a driver that raises breaks only the rule at hand."""
    return [check(rule, subject, clock) for rule in RULES]


def check(rule: Rule, subject: Subject, clock: Clock) -> Finding:
    """Check one rule on a driver of its own."""
    name = rule.__name__
    bench = Bench(subject, clock)
    try:
        rule(bench)
    except NothingToCheck as why:
        return Finding(name, note=str(why))
    except Exception as error:
        how = str(error) if isinstance(error, Broken) else f"{type(error).__name__}: {error}"
        return Finding(name, problem=how)
    finally:
        bench.driver.close()
    return Finding(name)


def require(good: bool, otherwise: str) -> None:  # noqa: FBT001
    """Raise Broken unless ``good``."""
    if not good:
        raise Broken(otherwise)


def refused(call: Callable[[], object], what: str) -> None:
    """Raise Broken unless ``call`` raises DriverError."""
    try:
        call()
    except DriverError:
        return
    raise Broken(f"{what} was not refused")
