"""Readings measured again from their stored counts and setting, one at a time: does this build give the same?

Nothing is written here, and no daemon is needed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import asdict, dataclass
from math import inf
from typing import Any, Literal

from config.errors import RevmarkError
from daq.build import Build, this_build
from daq.readings import measured_record
from daq.signal import health
from daq.signal.setting import Setting
from store.history import History
from store.records import Measured, RawSamples, Reading, Vector

VECTOR_TOLERANCE = 1e-12
"""Between builds: of a vector, and of speed and duration; relative to the channel's largest amplitude."""
SPREAD_TOLERANCE = 1e-6
"""Between builds: of variances, noise and the like, which are small differences of large sums."""
NOT_OF_COUNTS = frozenset(
    {health.RAW_TOO_LARGE, health.HUNTING, health.RUNOUT, health.PRECESSION, health.LOST_PULSES}
)
"""Flags that may come from beside the counts (the run's other readings, the mount) and stay as they are."""
NOT_RECORDED = "How it was measured is not in the store: it is older than that record."

Same = Literal["identical", "within", "apart"]


@dataclass(frozen=True, slots=True)
class Difference:
    """One figure that came out otherwise."""

    what: str
    channel: str | None
    order: int | None
    apart: float
    """Relative: see the tolerances; inf where it cannot be said (a flag, another number of vectors)."""
    tolerance: float
    stored: Any = None
    """The figure as it is stored; None where there is none."""
    now: Any = None

    def to_dict(self) -> dict[str, Any]:
        """JSON has no inf, so what cannot be said is null; a vector is [re, im]."""
        told = {"stored": _plain(self.stored), "now": _plain(self.now)}
        return {**asdict(self), **told, "apart": None if self.apart == inf else self.apart}


def _plain(value: Any) -> Any:
    return [value.real, value.imag] if isinstance(value, complex) else value


@dataclass(frozen=True, slots=True)
class Again:
    """A reading measured again."""

    run: str
    reading: Reading
    beside: int
    """Newest version in the store; 0 = not recorded how it was measured."""
    why_not: str
    """Why it could not be measured again; empty = it was."""
    measured: Measured | None
    differences: tuple[Difference, ...]
    build: tuple[str, ...]
    """What differs between the build that measured it and this one."""

    @property
    def same(self) -> Same | None:
        if self.why_not:
            return None
        if not self.differences:
            return "identical"
        return "within" if all(d.apart <= d.tolerance for d in self.differences) else "apart"

    def to_dict(self) -> dict[str, Any]:
        """For ``--json``."""
        return {
            "run": self.run,
            "reading": self.reading.number,
            "version": self.beside,
            "result": self.same,
            "why_not": self.why_not or None,
            "differences": [d.to_dict() for d in self.differences],
            "build": list(self.build),
        }


def again(
    history: History,
    run: str,
    reading: Reading,
    change: Callable[[Setting], Setting] = lambda setting: setting,
    why: str = "recompute",
) -> Again:
    """Measure a reading again as it was measured last, or with its setting changed.

    Raises StoreError when the store cannot be read."""
    stored = next(iter(reversed(history.measured(reading.id))), None)
    if stored is None:
        return Again(run, reading, 0, NOT_RECORDED, None, (), ())
    build = this_build().other_than(Build(stored.software, stored.numpy, stored.processor))
    try:
        made = remeasured(history.reading_raw(reading.id), change(_setting(stored)), stored, why)
    except RevmarkError as error:
        return Again(run, reading, stored.version, error.cause, None, (), build)
    return Again(run, reading, stored.version, "", made, tuple(differences(stored, made)), build)


def _setting(stored: Measured) -> Setting:
    try:
        return Setting.from_json(stored.setting)
    except (KeyError, TypeError, ValueError) as error:
        raise RevmarkError(
            NOT_RECORDED if not stored.setting else f"Its setting is not known to this version ({error})."
        ) from error


def remeasured(raw: RawSamples, setting: Setting, stored: Measured, why: str) -> Measured:
    """The arithmetic of counts with a setting; flags that do not come from the counts are kept."""
    made = setting.measured(raw.counts)
    units = {v.channel: v.unit for v in stored.vectors} | {v.channel: v.unit for v in stored.levels}
    beside = tuple(f for f in stored.flags if _code(f) in NOT_OF_COUNTS and f not in made.flags)
    return measured_record(made, setting, units, why, (*made.flags, *beside))


def _code(flag: str) -> str:
    return flag.partition(":")[0]


# --- differences ---------------------------------------------------------------------------------------


def differences(then: Measured, now: Measured) -> Iterator[Difference]:
    """Everything that is not the same to the last bit."""
    for what, a, b in (("speed", then.speed_hz, now.speed_hz), ("duration", then.duration_s, now.duration_s)):
        yield from _apart(what, None, None, a, b, abs(a), VECTOR_TOLERANCE)
    yield from _unlike("revolutions", then.revolutions, now.revolutions)
    yield from _of_vectors(then.vectors, now.vectors)
    yield from _of_levels(then, now)
    for flag in sorted(set(then.flags) ^ set(now.flags)):
        had, has = flag in then.flags, flag in now.flags
        yield Difference(f"flag {_code(flag)}", flag.partition(":")[2] or None, None, inf, 0.0, had, has)
    yield from _of_figures("", then.figures, now.figures)


def _unlike(what: str, a: object, b: object) -> Iterator[Difference]:
    if a != b:
        yield Difference(what, None, None, inf, 0.0, a, b)


def _apart(
    what: str, channel: str | None, order: int | None, a: complex, b: complex, size: float, tolerance: float
) -> Iterator[Difference]:
    if a != b:
        yield Difference(what, channel, order, abs(a - b) / size if size else inf, tolerance, a, b)


def _of_vectors(then: tuple[Vector, ...], now: tuple[Vector, ...]) -> Iterator[Difference]:
    old, new = ({(v.channel, v.order): v for v in vectors} for vectors in (then, now))
    for channel, order in sorted(old.keys() ^ new.keys()):
        yield Difference("vector", channel, order, inf, 0.0)
    for at in (k for k in old if k in new):
        a, b = old[at], new[at]
        size = max(abs(v.value) for v in then if v.channel == a.channel)
        yield from _apart("vector", *at, a.value, b.value, size, VECTOR_TOLERANCE)
        spread = max(a.var_re, a.var_im)
        for name in ("var_re", "var_im", "cov"):
            yield from _apart(name, *at, getattr(a, name), getattr(b, name), spread, SPREAD_TOLERANCE)
        yield from _apart(
            "noise_floor", *at, a.noise_floor, b.noise_floor, abs(a.noise_floor), SPREAD_TOLERANCE
        )


def _of_levels(then: Measured, now: Measured) -> Iterator[Difference]:
    old, new = ({v.channel: v for v in of.levels} for of in (then, now))
    for channel in sorted(old.keys() ^ new.keys()):
        yield Difference("level", channel, None, inf, 0.0)
    for channel in (c for c in old if c in new):
        for name in ("gap_v", "residual_sd", "peak_to_peak", "ac_rms"):
            a, b = getattr(old[channel], name), getattr(new[channel], name)
            yield from _apart(name, channel, None, a, b, abs(a), SPREAD_TOLERANCE)


def _of_figures(at: str, then: Any, now: Any) -> Iterator[Difference]:
    """Plain JSON, leaf by leaf; text and counts must be equal."""
    if isinstance(then, Mapping) and isinstance(now, Mapping):
        for key in sorted(then.keys() | now.keys()):
            yield from _of_figures(f"{at}.{key}" if at else key, then.get(key), now.get(key))
    elif isinstance(then, list | tuple) and isinstance(now, list | tuple) and len(then) == len(now):
        for i, (a, b) in enumerate(zip(then, now, strict=True), 1):
            yield from _of_figures(f"{at}.{i}", a, b)
    elif isinstance(then, float) and isinstance(now, float):
        yield from _apart(at, None, None, then, now, abs(then), SPREAD_TOLERANCE)
    else:
        yield from _unlike(at, then, now)
