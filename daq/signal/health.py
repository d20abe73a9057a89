"""What is wrong with a window of samples: flags with a stable code and a sentence each.

A flag is ``code`` or ``code:channel`` and travels with the reading; ``sentence`` puts it into words.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.signal.shapes import ChannelParams, Floats, OrderVector

CLIP_RUN = 3
"""So many samples in a row at the end of the scale are clipped."""
CLIP_SHARE = 0.001
"""Closer than this to the end of the scale, as a share of the scale."""
FEWEST_PULSE_SAMPLES = 3
MARGINAL = 2.0
"""Dead bands, or four standard deviations of noise, that the level is clear of either side."""
WIDE_SHARE = 0.5
"""A pulse that fills more of the turn was begun at the wrong edge."""
NO_END = (-(1 << 40), 1 << 40)
"""The scale of a channel that may reach its end."""
TILE = 32
"""Frames looked at together."""
REST_TURNS, REST_FRAMES = 4, 1 << 15
"""So many turns of a window are looked at for a level that is held, and so many samples at most."""
REST_COUNTS, REST_NOISE = 2.0, 7.0
"""Width of the band at the end of a swing: in counts at least, and in standard deviations of the noise."""
REST_SHARE, REST_RATIO = 0.03, 0.8
"""A held level takes so much of the time, and so much of what a band four times as wide holds."""
FLAT_COUNTS = 2
"""A probe whose samples stay within so many counts is flat."""
HUNTING_SHARE = 0.002
"""Speed hunts when its standard deviation in the window is above this share of it: the band within which a
speed must lie near a critical one (REUSE (a)), where amplitude and phase hang on it most."""
LOST_TURNS = 3.0
"""With no pulse for so many turns at the end of a window the once-per-rev signal counts as lost."""
SINE_PEAK = 2**0.5
"""0-peak of a sine over its rms."""

NO_PULSES = "no_pulses"
LOST_PULSES = "once_per_rev_lost"
MISSED = "missed_pulses"
DOUBLES = "double_pulses"
FEW_SAMPLES = "few_samples"
SAMPLES_LOST = "samples_lost"
CLIPPED = "clipped"
SATURATED = "saturated"
FLAT = "flat"
GAP = "gap_voltage"
WEAK = "weak_1x"
LEVEL = "level_marginal"
WRONG_EDGE = "wrong_edge"
MARK_UNTOLD = "mark_untold"
NOISE = "noisy"
HUNTING = "speed_hunting"
BELOW_FLOOR = "below_floor"
SUBSYNC = "subsynchronous"
MAINS = "near_mains"
NEIGHBOUR = "near_neighbour"
RUNOUT = "mostly_runout"
PRECESSION = "backward_precession"
RAW_TOO_LARGE = "raw_not_kept"

SENTENCES: dict[str, str] = {
    NO_PULSES: "No once-per-rev pulses stand out, so there is no speed and no phase.",
    LOST_PULSES: "The once-per-rev signal is lost while the probes still vibrate.",
    MISSED: "Some once-per-rev pulses were missed; where they belong is taken from their neighbours.",
    DOUBLES: "Some once-per-rev pulses came twice; the extra ones are taken out.",
    LEVEL: "The once-per-rev level is marginal: the pulses hardly stand out, so some may be missed "
    "or doubled.",
    WRONG_EDGE: "The once-per-rev pulse fills more than half a turn, so the other edge may be meant; it "
    "shifts every phase by the width of the mark.",
    MARK_UNTOLD: "Of several once-per-rev pulses it could not always be told which one counts; compare "
    "pulses, marked and spacing of the stand file with the rotor.",
    FEW_SAMPLES: "The pulse or the turn has too few samples: the sampling rate is too low for this speed.",
    SAMPLES_LOST: "Samples were lost inside the window; nothing is computed across the gap.",
    CLIPPED: "{channel} is clipped: its voltage reaches the end of the input's range.",
    SATURATED: "{channel} rests at one end of its swing in each turn, as a saturated probe does; if so, "
    "its 1X reads low.",
    FLAT: "{channel} is flat: its signal does not move at all.",
    GAP: "{channel} has its gap voltage outside the limits of the stand file.",
    WEAK: "{channel}: its 1X is less than 3 times the noise of single samples (or the stand file's "
    "min_signal_to_noise; marine practice 3:1); the averaged vector's own +- stands beside it.",
    NOISE: "{channel} is noisy: what is left beside the harmonics is above its noise_limit.",
    HUNTING: "The speed hunts inside the window, so amplitude and phase are averages over changing speeds.",
    BELOW_FLOOR: "{channel}: its 1X is below its own 95 % noise floor, so it has no phase.",
    SUBSYNC: "{channel} shows strong vibration below running speed; where it lasts all the window "
    "it is taken out of the vector.",
    MAINS: "{channel}: mains hum lies too near 1X or a harmonic to be told apart in this window; the +- is "
    "wider for it.",
    NEIGHBOUR: "{channel}: a neighbour machine turns too near 1X or a harmonic to be told apart in this "
    "window; the +- is wider for it.",
    RUNOUT: "{channel}: its 1X is mostly runout, much like the slow-roll vector of this job.",
    PRECESSION: "{channel}: the shaft whirls against the declared rotation; check rotation, probe angles "
    "and wiring (between split critical speeds it may be real).",
    RAW_TOO_LARGE: "The samples of this reading were too many to keep (per_reading_mib), so it cannot be "
    "recomputed.",
}
"""Codes and what they mean."""
SHORT: dict[str, str] = {
    NO_PULSES: "no pulses",
    LOST_PULSES: "no pulses",
    MISSED: "missed",
    DOUBLES: "doubles",
    FEW_SAMPLES: "few",
    SAMPLES_LOST: "lost",
    CLIPPED: "clipped",
    SATURATED: "flat top",
    FLAT: "flat",
    GAP: "gap V",
    WEAK: "weak",
    LEVEL: "level",
    WRONG_EDGE: "edge?",
    MARK_UNTOLD: "mark?",
    NOISE: "noisy",
    HUNTING: "hunting",
    BELOW_FLOOR: "floor",
    SUBSYNC: "sub",
    MAINS: "mains",
    NEIGHBOUR: "neighbour",
    RUNOUT: "runout",
    PRECESSION: "backward",
    RAW_TOO_LARGE: "no raw",
}
"""One word for a column of a table."""


def flag(code: str, channel: str | None = None) -> str:
    """The flag as it is stored."""
    return code if channel is None else f"{code}:{channel}"


def sentence(flagged: str) -> str:
    """A stored flag in one sentence; an unknown code (a newer version's) is named as it is."""
    code, _, channel = flagged.partition(":")
    text = SENTENCES.get(code, f"Flag {code} of {{channel}}." if channel else f"Flag {code}.")
    return text.format(channel=channel or "a probe")


def short(flagged: str) -> str:
    """A stored flag in a word; an unknown code is the word itself."""
    code = flagged.partition(":")[0]
    return SHORT.get(code, code)


def describe(flags: Sequence[str]) -> tuple[str, ...]:
    """All flags in sentences; a code that several channels share is said once, of all of them."""
    shared: dict[str, list[str]] = {}
    for flagged in dict.fromkeys(flags):
        code, _, channel = flagged.partition(":")
        shared.setdefault(code, []).extend([channel] if channel else [])
    return tuple(_of_all(code, channels) for code, channels in shared.items())


def _of_all(code: str, channels: Sequence[str]) -> str:
    if len(channels) < 2:
        return sentence(flag(code, *channels))
    return sentence(flag(code, f"each of {', '.join(channels[:-1])} and {channels[-1]}"))


class RangeScan:
    """Extremes of counts, column by column, and whether they are clipped. Feed it blocks in order."""

    def __init__(self, full_scales: Sequence[tuple[int, int]]) -> None:
        scales = np.array(full_scales, np.int64).reshape(-1, 2)
        margin = np.floor(CLIP_SHARE * (scales[:, 1] - scales[:, 0]) / 2)
        self._lowest = scales[:, 0] + margin
        self._highest = scales[:, 1] - margin
        self.low = np.full(len(scales), np.iinfo(np.int64).max)
        self.high = np.full(len(scales), np.iinfo(np.int64).min)
        self.clipped = np.zeros(len(scales), bool)
        self._tail: NDArray[Any] | None = None

    def add(self, counts: NDArray[Any]) -> None:
        """Take (frames, columns) counts that follow the previous ones."""
        if not len(counts):
            return
        low, high = _extremes(counts)
        np.minimum(self.low, low, out=self.low)
        np.maximum(self.high, high, out=self.high)
        if ((low <= self._lowest) | (high >= self._highest)).any():
            self._look_for_clipping(counts)
        whole = counts
        if len(counts) < CLIP_RUN - 1 and self._tail is not None:
            whole = np.concatenate((self._tail, counts))
        self._tail = whole[-(CLIP_RUN - 1) :].copy()

    def combine(self, other: RangeScan) -> None:
        """Take in what another scan saw."""
        self.low = np.minimum(self.low, other.low)
        self.high = np.maximum(self.high, other.high)
        self.clipped |= other.clipped

    @property
    def flat(self) -> NDArray[np.bool_]:
        """Shape (columns,): nothing moves."""
        spread = self.high - self.low
        return np.asarray((spread >= 0) & (spread <= FLAT_COUNTS))

    def _look_for_clipping(self, counts: NDArray[Any]) -> None:
        whole = counts if self._tail is None else np.concatenate((self._tail, counts))
        for at_end in (whole >= self._highest, whole <= self._lowest):
            run = at_end[: len(whole) - CLIP_RUN + 1].copy()
            for shift in range(1, CLIP_RUN):
                run &= at_end[shift : len(whole) - CLIP_RUN + 1 + shift]
            self.clipped |= run.any(axis=0)


def _extremes(counts: NDArray[Any]) -> tuple[NDArray[Any], NDArray[Any]]:
    """Lowest and highest of each column; whole rows of memory at a time where the layout allows. The last
    rows are looked at twice rather than alone."""
    frames, columns = counts.shape
    if frames < TILE or not counts.flags.c_contiguous:
        return counts.min(axis=0), counts.max(axis=0)
    tiles = counts[: frames // TILE * TILE].reshape(-1, TILE * columns)
    rest = counts[-TILE:].reshape(-1)
    low = np.minimum(tiles.min(axis=0), rest).reshape(TILE, columns)
    high = np.maximum(tiles.max(axis=0), rest).reshape(TILE, columns)
    return low.min(axis=0), high.max(axis=0)


def full_scales(channels: Sequence[ChannelParams]) -> list[tuple[int, int]]:
    """Scales of all columns for a :class:`RangeScan`; the once-per-rev channel may reach its end."""
    return [NO_END, *(c.full_scale_counts for c in channels)]


def probe_flags(
    channels: Sequence[ChannelParams],
    scan: RangeScan,
    gap_v: Floats,
    amplitude: Floats,
    residual_sd: Floats,
    min_signal_to_noise: float,
) -> list[str]:
    """Flags of the probes; ``gap_v``, 1X ``amplitude`` (0-peak) and ``residual_sd`` have shape (probes,).
    Column 0 of ``scan`` is the once-per-rev channel."""
    found = []
    for i, c in enumerate(channels):
        out = (c.gap_low_v is not None and gap_v[i] < c.gap_low_v) or (
            c.gap_high_v is not None and gap_v[i] > c.gap_high_v
        )
        weak = not amplitude[i] >= min_signal_to_noise * residual_sd[i]
        noisy = c.noise_limit is not None and residual_sd[i] * SINE_PEAK > c.noise_limit
        tests = (
            (CLIPPED, scan.clipped[1 + i]),
            (FLAT, scan.flat[1 + i]),
            (GAP, out),
            (WEAK, weak),
            (NOISE, noisy),
        )
        found += [flag(code, c.name) for code, bad in tests if bad]
    return found


def pulse_flags(missed: int, doubles: int, pulse_samples: float, samples_per_turn: float) -> list[str]:
    """Flags of the once-per-rev channel; ``pulse_samples`` is how long the pulse lasts, the shorter side."""
    few = pulse_samples < FEWEST_PULSE_SAMPLES or samples_per_turn < 2 * FEWEST_PULSE_SAMPLES
    tests = ((MISSED, missed > 0), (DOUBLES, doubles > 0), (FEW_SAMPLES, few))
    return [code for code, bad in tests if bad]


def mark_flags(margin: float, pulse_share: float, untold: int) -> list[str]:
    """More of them: ``margin``, ``pulse_share`` and ``untold`` of a :class:`daq.signal.edges.EdgeFinder`."""
    tests = (
        (LEVEL, margin < MARGINAL),
        (WRONG_EDGE, pulse_share > WIDE_SHARE),
        (MARK_UNTOLD, untold > 0),
    )
    return [code for code, bad in tests if bad]


def speed_flags(speed_sd_hz: float, speed_hz: float) -> list[str]:
    """Whether the speed hunts; both in Hz, over the window."""
    return [HUNTING] if speed_sd_hz > HUNTING_SHARE * speed_hz else []


def floor_flags(vectors: Sequence[OrderVector]) -> list[str]:
    """Probes whose 1X is within its own 95 % uncertainty."""
    return [
        flag(BELOW_FLOOR, v.channel) for v in vectors if v.order == 1 and not abs(v.value) > v.noise_floor
    ]


def saturated_flags(channels: Sequence[ChannelParams], counts: NDArray[Any]) -> list[str]:
    """Probes that rest at an end of their swing, below the input's own range; ``counts`` (frames, probes) of
    some turns.

    Near its end a sine doubles the time spent there when the band is four times as wide, and the flattest sum
    of two harmonics adds four in ten (a fourth power); a level that is held adds next to nothing. The band is
    as wide as the noise; where noise fills the swing nothing can be told."""
    return [
        flag(SATURATED, c.name)
        for c, column in zip(channels, counts[:REST_FRAMES].T, strict=True)
        if _rests_at_an_end(column.astype(np.float64))
    ]


def _rests_at_an_end(y: Floats) -> bool:
    """``y``: (frames,) of one probe, counts."""
    if len(y) < 3:
        return False
    bend = np.abs(y[2:] - 2 * y[1:-1] + y[:-2])
    noise = float(np.median(bend)) / (0.6745 * np.sqrt(6.0))  # of white noise; quartiles at 0.6745 sd
    high, low = y.max(), y.min()
    band = max(REST_COUNTS, REST_NOISE * noise)
    if 4 * band >= (high - low) / 4:
        return False
    for beyond in (high - y, y - low):
        near, wide = beyond <= band, (beyond <= 4 * band).mean()
        rests = (near[2:] & near[1:-1] & near[:-2]).mean()  # one sample in 16 is no level
        if rests > REST_SHARE and near.mean() > REST_RATIO * wide:
            return True
    return False


def lost_flags(
    after: NDArray[Any], samples_per_turn: float, turning_rms: Floats, residual_sd: Floats
) -> list[str]:
    """Whether the probes vibrate on in ``after``, (frames, probes) counts that follow the last pulse.

    ``turning_rms`` and ``residual_sd``, shape (probes,), in counts, are of the turns before it."""
    if len(after) < LOST_TURNS * samples_per_turn:
        return []
    return [LOST_PULSES] if still_vibrating(ac_rms(after), turning_rms, residual_sd) else []


def ac_rms(counts: NDArray[Any]) -> Floats:
    """Rms about the mean of (frames, probes) counts; shape (probes,), in counts. Take a second or more."""
    found: Floats = counts.std(axis=0, dtype=np.float64)
    return found


def still_vibrating(now_rms: Floats, turning_rms: Floats, residual_sd: Floats) -> bool:
    """True when the probes move now about as they did while pulses came, so that the rotor turns still.

    All of shape (probes,) in one unit per probe: rms about the mean now and while turning, and the noise
    (residual) while turning. A probe has a vote when turning showed clearly above its noise; one that keeps
    more than a quarter of that power says yes."""
    noise = residual_sd**2
    moved = turning_rms**2 - noise
    votes = moved > 0.44 * noise  # turning rms 1.2 times the noise
    return bool(np.any(votes & (now_rms**2 - noise > 0.25 * moved)))
