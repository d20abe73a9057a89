"""Each health flag raised from samples, and a signal beside it where it must not come.

Signals are closed forms (tests/signal/conftest.py); limits are named where they are used.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from daq.signal import health
from daq.signal.measure import measure
from daq.signal.shapes import ChannelParams, Measurement, Surroundings

VOLTS_PER_UM = 0.007874  # 200 mV/mil

SIX = {1: 6.0 * np.exp(1j * np.radians(70))}


def run(s: Any, counts: Any = None, **more: Any) -> Measurement:
    """The measurement of a signal, or of its counts as they were changed."""
    channels = more.pop("channels", s.channels)
    return measure(s.counts() if counts is None else counts, s.pulse, channels, s.rate_hz, **more)


def codes(m: Measurement) -> set[str]:
    return {f.partition(":")[0] for f in m.flags}


def test_a_healthy_signal_has_no_flag(signal: Callable[..., Any]) -> None:
    assert run(signal(noise_um=0.2)).flags == ()


def test_no_pulses(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2)
    counts = s.counts()
    counts[:, 0] = counts[:, 1]  # wired to a probe: no pulse stands out of 0.05 V of vibration
    m = run(s, counts)
    assert m.flags == ("no_pulses",)
    assert (m.vectors, m.speed_hz) == ((), 0.0)


def test_once_per_rev_lost_while_vibrating(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2, seconds=4.0)
    counts = s.counts()
    gone = len(counts) * 3 // 4
    counts[gone:, 0] = np.median(counts[:, 0])
    m = run(s, counts)
    assert "once_per_rev_lost" in codes(m)
    assert m.vector("probe 1") is not None  # of the turns before it
    counts[gone:, 1] = np.random.default_rng(1).normal(np.mean(counts[:, 1]), 200, len(counts) - gone)
    assert "once_per_rev_lost" not in codes(run(s, counts))  # the shaft stands: it is no loss
    whole = signal(noise_um=0.2)
    assert "once_per_rev_lost" not in codes(run(whole))


def pulses_at(s: Any, counts: Any) -> list[slice]:
    """Where each pulse (deep below -12 V) is, from a little before it to a little after."""
    deep = counts[:, 0] * s.volts_per_count < -12
    starts = np.flatnonzero(deep[1:] & ~deep[:-1])
    stops = np.flatnonzero(~deep[1:] & deep[:-1])
    pairs = zip(starts, stops[stops > starts[0]], strict=False)
    return [slice(int(a) - 12, int(b) + 12) for a, b in pairs]


def test_missed_and_double_pulses(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2)
    clean, high = s.counts(), int(-8 / s.volts_per_count)
    missed = clean.copy()
    for where in pulses_at(s, clean)[20:24:2]:
        missed[where, 0] = high
    m = run(s, missed)
    assert codes(m) == {"missed_pulses"}
    assert m.missed == 2
    double = clean.copy()
    where = pulses_at(s, clean)[30]
    double[where.start + 150 : where.stop + 150, 0] = clean[where, 0]  # half a turn later
    m = run(s, double)
    assert codes(m) == {"double_pulses"}
    assert m.doubles == 1
    assert run(s, clean).flags == ()


def test_clipped_flat_and_gap(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2, probes=(SIX,) * 3)
    counts = s.counts()
    counts[5000:5003, 1] = 2**23 - 1
    counts[:, 2] = counts[0, 2]
    counts[:, 3] += int(7 / s.volts_per_count)  # -3 V; the limits are -16 V to -4 V
    m = run(s, counts)
    assert {"clipped:probe 1", "flat:probe 2", "gap_voltage:probe 3"} <= set(m.flags)
    assert not codes(run(signal(noise_um=0.2, probes=(SIX,) * 3)))


@pytest.mark.parametrize(("noise_um", "limit_rms_um", "flagged"), [(0.5, 0.45, True), (0.5, 0.55, False)])
def test_noise_above_the_channels_limit(
    signal: Callable[..., Any], noise_um: float, limit_rms_um: float, flagged: bool
) -> None:
    s = signal(noise_um=noise_um)
    channels = tuple(replace(c, noise_limit=limit_rms_um * 2**0.5) for c in s.channels)
    assert ("noisy:probe 1" in run(s, channels=channels).flags) is flagged
    assert "noisy" not in codes(run(s))  # no limit, no flag


def test_samples_lost(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2)
    assert "samples_lost" in codes(run(s, breaks=(20_000,)))
    assert "samples_lost" not in codes(run(s, breaks=(0,)))  # before the window


def test_too_few_samples_a_pulse(signal: Callable[..., Any]) -> None:
    # a mark of 6 % of a turn lasts 3.07 samples at 250 r/s and 12.8 kS/s; of 2 %, 1.02
    assert "few_samples" in codes(run(signal(speed_hz=250.0, edge_turns=0.01, mark_turns=0.02)))
    assert "few_samples" not in codes(run(signal(speed_hz=83.0, edge_turns=0.02, mark_turns=0.06)))


def hunting(s: Any, swing: float, rate_hz: float = 2.0) -> Any:
    """The signal of a shaft whose speed swings about its mean by ``swing`` of it, so many times a second."""

    class Hunting(type(s)):  # type: ignore[misc]
        def turns_at(self, t: Any) -> Any:
            w = 2 * np.pi * rate_hz
            return self.start_turns + self.speed_hz * (t - swing / w * np.cos(w * t))

    return Hunting(**{f: getattr(s, f) for f in s.__dataclass_fields__})


@pytest.mark.parametrize(("swing", "flagged"), [(0.004, True), (0.002, False)])
def test_speed_hunting(signal: Callable[..., Any], swing: float, flagged: bool) -> None:
    """The sd of a sine is 0.707 of its swing: 0.28 % and 0.14 %, limit 0.2 %; read over tenths of a second,
    which lets 0.94 of a swing at 2 Hz through (sin(pi f T)/(pi f T))."""
    m = run(hunting(signal(noise_um=0.2, seconds=4.0), swing))
    assert m.speed_sd_hz / m.speed_hz == pytest.approx(0.94 * 0.707 * swing, rel=0.1)
    assert ("speed_hunting" in codes(m)) is flagged


def test_first_order_below_its_floor(signal: Callable[..., Any]) -> None:
    """1 um of noise over 3 s at 12.8 kS/s leaves about 0.007 um a component, a floor of about 0.018 um."""
    m = run(signal(noise_um=1.0, probes=({1: 0.002 + 0j}, {1: 0.1 + 0j})))
    floor = m.vector("probe 1").noise_floor  # type: ignore[union-attr]
    assert 0.009 < floor < 0.04
    assert {f for f in m.flags if f.startswith("below_floor")} == {"below_floor:probe 1"}


def test_mains_and_a_neighbour_near_running_speed(signal: Callable[..., Any]) -> None:
    """Within 2/T of 1X: over 3 s that is 0.67 Hz. 41.7 Hz is 0.3 Hz from a neighbour at 42.0 Hz."""
    s = signal(noise_um=0.2)
    near = run(s, surroundings=Surroundings(None, (42.0,)))
    assert "near_neighbour:probe 1" in near.flags
    assert "near_neighbour" not in codes(run(s, surroundings=Surroundings(None, (45.0,))))
    at_mains = signal(noise_um=0.2, speed_hz=49.8)
    assert "near_mains:probe 1" in run(at_mains, surroundings=Surroundings(50.0)).flags
    assert "near_mains" not in codes(run(at_mains))  # not watched
    assert "near_mains" not in codes(run(s, surroundings=Surroundings(60.0)))


def test_strong_subsynchronous(signal: Callable[..., Any]) -> None:
    s = signal(noise_um=0.2)
    counts = s.counts()
    t = np.arange(len(counts)) / s.rate_hz
    per_um = 0.007874 / s.volts_per_count
    strong = counts.copy()
    strong[:, 1] += np.rint(6.0 * per_um * np.cos(2 * np.pi * 0.43 * 41.7 * t + 1)).astype(np.int32)
    assert "subsynchronous:probe 1" in run(s, strong).flags
    assert "subsynchronous" not in codes(run(s, counts))
    above = counts.copy()
    above[:, 1] += np.rint(6.0 * per_um * np.cos(2 * np.pi * 1.43 * 41.7 * t + 1)).astype(np.int32)
    assert "subsynchronous" not in codes(run(s, above))


def test_the_other_edge_of_a_notch(signal: Callable[..., Any]) -> None:
    """A notch of a tenth of a turn: the side that its rising edge begins fills nine tenths."""
    s = signal(noise_um=0.2, mark_turns=0.1)
    wrong = measure(s.counts(), replace(s.pulse, edge="rising"), s.channels, s.rate_hz)
    assert "wrong_edge" in codes(wrong)
    assert "wrong_edge" not in codes(run(s))


def test_the_level_is_marginal(signal: Callable[..., Any]) -> None:
    """A fixed level close to the foot of the pulse (-8 V, noise 0.02 V) against one at half its depth."""
    s = signal(noise_um=0.2, pulse_noise_v=0.02)
    low = replace(s.pulse, level_v=-8.3)
    assert "level_marginal" in codes(measure(s.counts(), low, s.channels, s.rate_hz))
    good = replace(s.pulse, level_v=-11.5)
    assert "level_marginal" not in codes(measure(s.counts(), good, s.channels, s.rate_hz))


def test_limits_as_stated() -> None:
    assert health.speed_flags(0.0501, 25.0) == ["speed_hunting"]
    assert health.speed_flags(0.0499, 25.0) == []


THETA = 2 * np.pi * np.arange(32_000) / 321.3
ONE = (ChannelParams("probe 1", 30 / 32768, (-32768, 32767), VOLTS_PER_UM),)


def held(wave: Any, noise: float = 1.0, size: float = 2000.0) -> bool:
    """Whether a wave of about 1, times ``size`` counts, with noise, is taken for a saturated one."""
    rng = np.random.default_rng(3)
    counts = np.rint(size * wave + rng.normal(0, noise, len(wave))).astype(np.int16)[:, None]
    return health.saturated_flags(ONE, counts) == ["saturated:probe 1"]


@pytest.mark.parametrize("share", [0.5, 0.8, 0.9, 0.95])
@pytest.mark.parametrize("end", [1, -1])
def test_a_probe_that_saturates_below_the_inputs_range(share: float, end: int) -> None:
    assert held(end * np.minimum(np.cos(THETA), share))


@pytest.mark.parametrize("noise", [0.0, 1.0, 10.0, 300.0])
@pytest.mark.parametrize(
    "wave",
    [
        np.cos(THETA),
        np.cos(THETA) - 0.25 * np.cos(2 * THETA),  # no second derivative at its top: as flat as two orders go
        np.cos(THETA) - np.cos(3 * THETA) / 9,  # the same with the third order, at both ends
        np.cos(THETA) + np.cos(0.43 * THETA),
        np.zeros(len(THETA)),
    ],
)
def test_waves_that_are_flat_by_nature_are_not_saturated(wave: Any, noise: float) -> None:
    assert not held(wave, noise)


@pytest.mark.parametrize("samples", range(5, 40))
def test_few_samples_a_turn_are_no_held_level(samples: int) -> None:
    theta = 2 * np.pi * (np.arange(4 * samples) + 0.25) / samples
    for wave in (np.cos(theta), np.cos(theta) - 0.25 * np.cos(2 * theta)):
        assert not held(wave)


def test_a_saturated_probe_is_flagged_with_its_reading(signal: Callable[..., Any]) -> None:
    s = signal(probes=({1: 60.0 + 0j}, {1: 60.0 + 0j}), noise_um=0.1)
    counts = s.counts()
    counts[:, 1] = np.minimum(counts[:, 1], np.quantile(counts[:, 1], 0.8))
    assert run(s, counts).flags == ("saturated:probe 1",)
