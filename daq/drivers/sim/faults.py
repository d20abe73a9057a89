"""What is to go wrong, by sample number of the stream."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from config.errors import Refusal
from daq.drivers.sim.options import FaultKind, FaultOptions


@dataclass(frozen=True, slots=True)
class Fault:
    """From sample ``begin`` up to, not with, ``end``."""

    kind: FaultKind
    begin: int
    end: int
    column: int
    """Of the channel it clips."""
    every: int

    def covers(self, first: int, n: int) -> NDArray[np.bool_]:
        """Which of ``n`` samples from ``first`` it touches, shape (n,)."""
        at = np.arange(first, first + n)
        return (at >= self.begin) & (at < self.end)


def fault_from(options: FaultOptions, now: int, rate_hz: float, names: tuple[str, ...]) -> Fault:
    """``now``: the next sample, where a fault without a time begins; ``names`` of the columns.

    Raises Refusal when no probe has the channel's name.
    """
    channel = names[1] if options.channel is None else options.channel
    if channel not in names[1:]:
        raise Refusal(f"There is no probe {channel!r}.", f"The stand has {', '.join(names[1:])}.")
    begin = now if options.at_s is None else round(options.at_s * rate_hz)
    length = max(1, round(options.seconds * rate_hz))
    return Fault(options.kind, begin, begin + length, names.index(channel), options.every)


class FaultList:
    """Pending and running faults."""

    _BREAKS = ("dropout", "unplug")

    def __init__(self) -> None:
        self._faults: list[Fault] = []

    def add(self, fault: Fault) -> None:
        self._faults.append(fault)
        self._faults.sort(key=lambda f: f.begin)

    def next_break(self, first: int, n: int) -> Fault | None:
        """The first dropout or unplug due before sample ``first + n``."""
        return next((f for f in self._faults if f.kind in self._BREAKS and f.begin < first + n), None)

    def done(self, fault: Fault) -> None:
        self._faults.remove(fault)

    def touching(self, first: int, n: int) -> list[Fault]:
        """Faults of the signal in these samples; those over are forgotten."""
        self._faults = [f for f in self._faults if f.kind in self._BREAKS or f.end > first]
        return [f for f in self._faults if f.kind not in self._BREAKS and f.begin < first + n]
