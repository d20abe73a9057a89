"""From a steady window to a reading's draft: the counts that are stored, and the vectors made from them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from config.stand import Stand
from daq.build import this_build
from daq.clock import Clock
from daq.drivers.base import SourceInfo
from daq.raw_window import RawWindow
from daq.setup import surroundings
from daq.signal.health import RAW_TOO_LARGE
from daq.signal.setting import Setting
from daq.signal.shapes import BlockFit, ChannelParams, Measurement, PulseParams
from daq.signal.steadiness import Verdict
from store.records import Level, Measured, RawSamples, ReadingDraft, Vector

MARGIN_TURNS = 0.5
"""Part of a turn kept on either side of the window, so that the edges that bound it lie inside."""
MIB = 1024 * 1024


def longest_window_s(stand: Stand, info: SourceInfo) -> float:
    """How long a window may grow within the raw samples kept of one reading."""
    per_s = info.rate_hz * len(info.volts_per_count) * np.dtype(info.dtype).itemsize
    return stand.raw.per_reading_mib * MIB / per_s


class ReadingMaker:
    """Makes drafts for one opened source."""

    def __init__(
        self,
        stand: Stand,
        info: SourceInfo,
        pulse: PulseParams,
        channels: tuple[ChannelParams, ...],
        clock: Clock,
    ) -> None:
        self._stand = stand
        self._info = info
        self._clock = clock
        self._setting = Setting(
            pulse,
            channels,
            info.rate_hz,
            min_signal_to_noise=stand.steadiness.min_signal_to_noise,
            surroundings=surroundings(stand),
        )
        self._units = {c.name: c.unit for c in stand.channels}

    def margin(self, fit: BlockFit) -> int:
        """Samples kept before a window that begins with ``fit``."""
        return int(MARGIN_TURNS * self._info.rate_hz / max(fit.speed_hz, 0.1)) + 1

    def utc_of(self, mono_s: float) -> int:
        """UTC in microseconds of a monotonic time, by the two clocks as they stand now: a label."""
        return self._clock.now_us() - round((self._clock.monotonic() - mono_s) * 1e6)

    def make(self, raw: RawWindow, used: Sequence[BlockFit], verdict: Verdict) -> ReadingDraft:
        """The reading of the window covered by ``used``, measured from the counts that go with it."""
        margin = self.margin(used[0])
        counts, first = raw.cut(used[0].first_sample - margin, used[-1].stop_sample + margin)
        made = self._setting.measured(counts)
        mono_s = raw.mono_of(used[0].first_sample)
        kept = counts.nbytes <= self._stand.raw.per_reading_mib * MIB
        flags = made.flags if kept else (*made.flags, RAW_TOO_LARGE)
        return ReadingDraft(
            at_us=self.utc_of(mono_s),
            duration_s=made.duration_s,
            speed_hz=made.speed_hz,
            revolutions=made.revolutions,
            segment=used[0].segment,
            first_sample=used[0].first_sample,
            mono_s=mono_s,
            steadiness={
                **verdict.as_dict(),
                "limits": self._stand.steadiness.to_dict(),
            },
            flags=flags,
            vectors=vectors_of(made, self._units),
            raw=RawSamples(counts, self._info.volts_per_count, self._info.rate_hz, first) if kept else None,
            measured=measured_record(made, self._setting, self._units, "live", flags),
        )


def measured_record(
    made: Measurement, setting: Setting, units: Mapping[str, str], why: str, flags: tuple[str, ...]
) -> Measured:
    """A measurement as it is recorded: with its setting and the build that made it."""
    build = this_build()
    return Measured(
        why=why,
        set_up_id=None,
        speed_hz=made.speed_hz,
        revolutions=made.revolutions,
        duration_s=made.duration_s,
        flags=flags,
        figures=made.figures,
        setting=setting.to_json(),
        software=build.software,
        numpy=build.numpy,
        processor=build.processor,
        vectors=vectors_of(made, units),
        levels=tuple(
            Level(v.channel, v.gap_v, v.residual_sd, v.peak_to_peak, v.ac_rms, units[v.channel])
            for v in made.levels
        ),
    )


def vectors_of(made: Measurement, units: Mapping[str, str]) -> tuple[Vector, ...]:
    """The vectors as records; ``units`` by channel."""
    return tuple(
        Vector(v.channel, v.order, v.value, v.var_re, v.var_im, v.cov, v.noise_floor, units[v.channel])
        for v in made.vectors
    )
