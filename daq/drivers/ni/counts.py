"""Volts as the library delivers them, to whole counts and back.

A count is a 2^23rd of the input's range: the step of a 24-bit converter over the same range, and 128 steps
to one of a 16-bit converter. Rounding to it adds a 24-bit converter's own rounding at most. What lies
beyond the range is held at its end, so that it counts as clipped.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from config.errors import DriverError

FULL = 1 << 23
FULL_SCALE_COUNTS = (-FULL, FULL - 1)


class Scale:
    """``ranges_v`` by column, at the inputs; ``dividers`` says how much larger the sensors' volts are."""

    def __init__(self, ranges_v: Sequence[float], dividers: Sequence[float]) -> None:
        self.volts_per_count = tuple(r / FULL * d for r, d in zip(ranges_v, dividers, strict=True))
        """At the sensors."""
        self._counts_per_volt = FULL / np.array(ranges_v, np.float64)
        self._work: NDArray[np.float64] = np.empty((0, len(ranges_v)))

    def counts(self, volts: NDArray[np.float64]) -> NDArray[np.int32]:
        """(columns, frames) volts at the inputs as (frames, columns) counts, in memory of their own."""
        frames = volts.shape[1]
        if len(self._work) != frames:
            self._work = np.empty((frames, len(volts)))
        work = np.multiply(volts.T, self._counts_per_volt, out=self._work)
        np.rint(work, out=work)
        np.clip(work, *FULL_SCALE_COUNTS, out=work)
        if np.isnan(work).any():
            raise DriverError(
                "The device delivered values that are no numbers.",
                "It is started again by itself.",
                kind="protocol",
            )
        return work.astype(np.int32)
