"""What goes into the signal arithmetic and what comes out: small frozen dataclasses, no store, no driver.

A window of samples is integer counts of shape (frames, 1 + probes): column 0 is the once-per-rev channel.
A vector is ``A e^{+j lag}``, 0-peak, in the probe's base unit (um, mm/s or m/s2).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Counts = NDArray[np.int16] | NDArray[np.int32]

CIRCLE_95 = 2.447746830681
"""Radius of the circle that holds 95 % of a circular 2-D normal, in its sd per component (METHODS 10.4)."""


@dataclass(frozen=True, slots=True)
class PulseParams:
    """The once-per-rev channel: what its counts are worth and which edge is angle zero."""

    volts_per_count: float
    full_scale_counts: tuple[int, int]
    """Lowest and highest count of the converter."""
    edge: Literal["falling", "rising"] = "falling"
    level_v: float | None = None
    """Trigger level; None = the middle of the pulse, followed as it moves."""
    hysteresis_v: float | None = None
    """Half width of the dead band about the level; None = a tenth of the pulse."""
    min_height_v: float = 1.0
    """A pulse lower than this is no pulse."""
    name: str = "once-per-rev"
    pulses: int = 1
    """Pulses a turn, of which one counts."""
    marked: Literal["long"] | None = None
    """"long": the pulse that lasts longest counts."""
    spacing_deg: tuple[float, ...] = ()
    """Angles from the pulse that counts to the next, from that to the one after, ...: one for each pulse."""

    @property
    def evenness(self) -> float:
        """Narrowest over widest spacing of its pulses."""
        return min(self.spacing_deg) / max(self.spacing_deg) if self.spacing_deg else 1.0


@dataclass(frozen=True, slots=True)
class ChannelParams:
    """One probe: what its counts are worth."""

    name: str
    volts_per_count: float
    full_scale_counts: tuple[int, int]
    volts_per_unit: float
    """Volts per um, mm/s or m/s2."""
    positive: int = 1
    """+1 when a rising voltage is positive x, -1 when a falling one is."""
    gap_low_v: float | None = None
    gap_high_v: float | None = None
    skew_s: float = 0.0
    """How much later than the once-per-rev channel this one is sampled."""
    noise_limit: float | None = None
    """What may be left beside the orders, as the 0-peak of a sine of the same rms, base units; None = any."""

    @property
    def units_per_count(self) -> float:
        """Base units per count, with the sense of positive."""
        return self.volts_per_count / self.volts_per_unit * self.positive


@dataclass(frozen=True, slots=True)
class Surroundings:
    """What else vibrates near the machine at frequencies known beforehand."""

    mains_hz: float | None = None
    """Frequency of the supply, whose multiples hum; None = not watched."""
    neighbours_hz: tuple[float, ...] = ()
    """Running speeds of machines nearby."""


NOWHERE = Surroundings()
"""Nothing known."""


@dataclass(frozen=True, slots=True)
class Line:
    """A line that is no multiple of the speed, found in one probe and modelled beside the orders."""

    channel: str
    order: float
    """Its frequency over the speed."""
    amplitude: float
    """0-peak, base units."""


@dataclass(frozen=True, slots=True, eq=False)
class BlockFit:
    """1X of all probes over a few whole turns, made live; what steadiness is judged on."""

    segment: int
    first_sample: int
    """Source sample index of the first sample at or after the block's first edge."""
    stop_sample: int
    """Source sample index after the block's last sample: the next block's ``first_sample``."""
    t_start_s: float
    """First edge, in seconds of the source: sample position / rate."""
    t_end_s: float
    """Last edge."""
    revolutions: int
    """Whole good turns used."""
    speed_hz: float
    speed_sd_hz: float
    """Standard deviation of the speed within the block, taken over steps of a tenth of a second or more."""
    vectors: Complexes
    """Shape (probes,): the 1X vectors in base units."""
    se: Floats
    """Shape (probes,): standard error per component of each vector, from the residuals."""
    residual_sd: Floats
    """Shape (probes,): what the model leaves, base units."""
    ac_rms: Floats
    """Shape (probes,): rms about the mean, base units."""
    gap_v: Floats
    """Shape (probes,): mean voltage."""
    missed: int = 0
    """Pulses missed since the previous block."""
    doubles: int = 0
    flags: tuple[str, ...] = ()
    """As in ``daq.signal.health``."""
    edge_deg: float = 0.0
    """What a once-per-rev edge of fewer than two samples leaves open in every phase, degrees."""
    pulse_samples: float = 0.0
    """Samples for which the once-per-rev pulse lasts, the shorter side; 0 = not looked at."""


@dataclass(frozen=True, slots=True)
class OrderVector:
    """One probe, one order, with its uncertainty."""

    channel: str
    order: int
    value: complex
    var_re: float
    var_im: float
    cov: float
    noise_floor: float
    """Amplitude below which no phase is worth printing: 95 % radius of the vector's own uncertainty."""

    @property
    def se(self) -> float:
        """Standard error per component."""
        return float(np.sqrt((self.var_re + self.var_im) / 2))


@dataclass(frozen=True, slots=True)
class ChannelLevel:
    """What a probe's samples look like beside the vectors."""

    channel: str
    gap_v: float
    """Mean voltage."""
    residual_sd: float
    """Noise left by offset, orders and lines, base units."""
    peak_to_peak: float
    """Overall, median over the parts of the window, base units."""
    ac_rms: float
    """Rms about the mean, base units."""


@dataclass(frozen=True, slots=True)
class Measurement:
    """The vectors of one window of samples; none when it holds no whole turns to take them over."""

    speed_hz: float
    """0 when there are no whole turns."""
    revolutions: int
    """Whole good turns used."""
    duration_s: float
    """From the first edge to the last."""
    first_sample: int
    """Index in the window of the first sample used."""
    stop_sample: int
    missed: int
    doubles: int
    vectors: tuple[OrderVector, ...]
    levels: tuple[ChannelLevel, ...]
    flags: tuple[str, ...]
    edge_deg: float = 0.0
    """Part of every phase's uncertainty that the once-per-rev sampling leaves and no averaging lessens."""
    pulse_share: float = 0.0
    """Share of a turn that the side of the pulse lasts which the triggering edge begins."""
    speed_sd_hz: float = 0.0
    """Standard deviation of the speed within the window, over steps of a tenth of a second or more."""
    lines: tuple[Line, ...] = ()

    @property
    def figures(self) -> dict[str, Any]:
        """What is kept with a reading beside vectors, levels and flags, as plain JSON."""
        return {
            "missed": self.missed,
            "doubles": self.doubles,
            "edge_deg": self.edge_deg,
            "pulse_share": self.pulse_share,
            "speed_sd_hz": self.speed_sd_hz,
            "lines": [asdict(line) for line in self.lines],
        }

    def vector(self, channel: str, order: int = 1) -> OrderVector | None:
        return next((v for v in self.vectors if v.channel == channel and v.order == order), None)

    def level(self, channel: str) -> ChannelLevel | None:
        return next((v for v in self.levels if v.channel == channel), None)


def check_columns(counts: NDArray[Any], channels: Sequence[ChannelParams]) -> None:
    """ValueError unless ``counts`` has the once-per-rev channel and one column for each of ``channels``."""
    if counts.ndim != 2 or counts.shape[1] != 1 + len(channels):
        raise ValueError(f"counts of shape {counts.shape} are not once-per-rev and {len(channels)} probes")


def median(values: Sequence[float] | NDArray[Any]) -> float:
    """The middle of ``values`` (1-D, not empty), the lower one of two; cheaper than numpy's."""
    at = (len(values) - 1) // 2
    return float(np.partition(values, at)[at])


def noise_floor(cov: NDArray[Any]) -> float:
    """Radius of the 95 % circle of a 2x2 covariance (METHODS 10.4)."""
    return CIRCLE_95 * float(np.sqrt(max(0.0, (cov[0, 0] + cov[1, 1]) / 2)))
