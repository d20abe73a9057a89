"""Steadiness: what is steady, what is not, and the sentence that says why."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from config.steadiness import PRESETS, SteadinessLimits
from daq.signal.blocks import BlockFitter
from daq.signal.shapes import BlockFit
from daq.signal.steadiness import Figure, Probe, Verdict, block_seconds, judge, needed

SMALL = PRESETS["small"]
STANDARD = PRESETS["standard"]
PROBES = (Probe("probe 1", "displacement"), Probe("probe 2", "displacement"))
TRUTH = json.loads((Path(__file__).resolve().parents[1] / "recordings" / "truth.json").read_text())


def blocks(
    vectors: NDArray[np.complex128],
    *,
    speed_hz: NDArray[np.float64] | float = 40.0,
    block_s: float = 0.375,
    se: float = 0.005,
    speed_sd_hz: float = 0.0,
) -> list[BlockFit]:
    """Blocks that follow each other; ``vectors`` (blocks, probes) in um."""
    n, probes = vectors.shape
    speeds = np.broadcast_to(np.asarray(speed_hz, np.float64), (n,))
    nothing = np.zeros(probes)
    return [
        BlockFit(
            segment=0,
            first_sample=round(k * block_s * 10_000),
            stop_sample=round((k + 1) * block_s * 10_000),
            t_start_s=k * block_s,
            t_end_s=(k + 1) * block_s,
            revolutions=max(1, round(block_s * float(speeds[k]))),
            speed_hz=float(speeds[k]),
            speed_sd_hz=speed_sd_hz,
            vectors=vectors[k],
            se=np.full(probes, se),
            residual_sd=nothing,
            ac_rms=nothing,
            gap_v=nothing,
        )
        for k in range(n)
    ]


def steady_vectors(n: int = 8) -> NDArray[np.complex128]:
    return np.tile(np.array([6.0 + 2.0j, -1.0 + 0.5j]), (n, 1))


def figure(verdict: Verdict, name: str, channel: str | None = None) -> Figure:
    return next(f for f in verdict.figures if f.name == name and f.channel == channel)


# --- the window ------------------------------------------------------------------------------------------


def test_a_quiet_window_is_steady_and_says_where_it_lies() -> None:
    fits = blocks(steady_vectors(12))
    verdict = judge(fits, SMALL, PROBES)
    assert verdict.steady
    assert verdict.sentence == "steady"
    assert verdict.worst is None
    # 3 s are 8 blocks of 0.375 s: the newest of twelve
    assert (verdict.first_sample, verdict.stop_sample) == (15_000, 45_000)
    assert all(f.ok for f in verdict.figures)
    assert verdict.as_dict()["steady"] is True
    assert json.loads(json.dumps(verdict.as_dict())) == verdict.as_dict()


@pytest.mark.parametrize(
    ("n", "speed_hz", "sentence"),
    [
        (0, 40.0, "the averaging window holds 0 s of 3 s"),
        (1, 40.0, "the averaging window holds 0.375 s of 3 s"),
        (7, 40.0, "the averaging window holds 2.62 s of 3 s"),
        (8, 2.67, "the averaging window holds 8 of 10 turns"),
    ],
)
def test_a_window_that_is_not_full(n: int, speed_hz: float, sentence: str) -> None:
    verdict = judge(blocks(steady_vectors(n), speed_hz=speed_hz), SMALL, PROBES)
    assert not verdict.steady
    assert verdict.sentence == sentence


def test_a_gap_in_the_samples_empties_the_window() -> None:
    fits = blocks(steady_vectors(20))
    assert judge(fits, SMALL, PROBES).steady
    broken = [*fits[:15], *(replace(f, first_sample=f.first_sample + 1) for f in fits[15:16]), *fits[16:]]
    assert not judge(broken, SMALL, PROBES).steady
    assert figure(judge(broken, SMALL, PROBES), "blocks").value == 5
    other = [*fits[:14], *(replace(f, segment=1) for f in fits[14:])]
    assert figure(judge(other, SMALL, PROBES), "blocks").value == 6


def test_the_window_grows_until_it_holds_its_turns() -> None:
    # 2.67 Hz: a block of 0.375 s is one turn; ten turns are ten blocks
    fits = blocks(steady_vectors(14), speed_hz=2.67)
    verdict = judge(fits, SMALL, PROBES)
    assert verdict.steady
    assert verdict.first_sample == 4 * 3750


# --- speed -----------------------------------------------------------------------------------------------


def test_a_drifting_speed_is_named_with_its_slope() -> None:
    # 40 Hz falling by 4.1 % a minute: 0.0683 %/s
    fits = blocks(steady_vectors(8), speed_hz=40 * (1 - 0.041 / 60 * (np.arange(8) * 0.375 - 1.3125)))
    verdict = judge(fits, SMALL, PROBES)
    assert not verdict.steady
    assert verdict.sentence == "the speed drifts 4.1 %/min, limit 2 %/min"


def test_hunting_between_and_within_blocks_counts_alike() -> None:
    # +-0.15 % from block to block: sd 0.15 % * sqrt(8/7) = 0.160 %
    between = blocks(steady_vectors(8), speed_hz=40 * (1 + 0.0015 * np.array([1, -1, -1, 1, 1, -1, -1, 1])))
    verdict = judge(between, SMALL, PROBES)
    assert figure(verdict, "speed_sd").value == pytest.approx(0.16036, rel=1e-3)
    assert verdict.sentence == "the speed varies by 0.16 % (standard deviation), limit 0.1 %"
    within = blocks(steady_vectors(8), speed_sd_hz=0.06)
    assert figure(judge(within, SMALL, PROBES), "speed_sd").value == pytest.approx(0.15)


@pytest.mark.parametrize(
    ("repaired", "says"),
    [
        ({"missed": 12}, "steady"),  # of 120 turns
        ({"doubles": 12}, "steady"),
        ({"missed": 13}, "10.8 % of the once-per-rev pulses are missed, limit 10 %"),
        ({"doubles": 15}, "12.5 % of the once-per-rev pulses are double, limit 10 %"),
    ],
)
def test_pulses_repaired_beyond_a_tenth_are_out(repaired: dict[str, int], says: str) -> None:
    fits = blocks(steady_vectors(8))
    fits[3] = replace(fits[3], **repaired)
    assert judge(fits, SMALL, PROBES).sentence == says


def test_sharp_edges_and_short_pulses_are_out_with_their_figure() -> None:
    """METHODS 8.3: half a sample stays. 60 samples a turn: half of 6 degrees."""
    fits = [replace(f, edge_deg=3.0, pulse_samples=2.0) for f in blocks(steady_vectors(8))]
    found = judge(fits, SMALL, PROBES)
    assert figure(found, "edge").sentence == (
        "the once-per-rev edge is placed to 3 deg only, phase target 0.3 deg: sample faster or "
        "relax phase_target"
    )
    assert figure(found, "pulse").sentence == (
        "the once-per-rev pulse lasts 2 samples of 3: sample faster or widen the mark"
    )
    assert not figure(found, "edge").ok
    assert not figure(found, "pulse").ok
    within = [replace(f, edge_deg=0.25, pulse_samples=3.0) for f in fits]
    assert judge(within, SMALL, PROBES).steady


# --- vectors ---------------------------------------------------------------------------------------------


def test_a_step_between_the_halves_is_a_drift_with_its_amount() -> None:
    v = steady_vectors(8)
    v[4:, 1] += 0.9  # |V| is about 1.1 um: 5 % of it is below the floor of 0.5 um
    verdict = judge(blocks(v), SMALL, PROBES)
    assert not verdict.steady
    assert figure(verdict, "change", "probe 2").value == pytest.approx(0.9)
    assert figure(verdict, "change", "probe 2").limit == pytest.approx(0.5)
    assert figure(verdict, "change", "probe 2").sentence == (
        "probe 2 still drifts: 0.9 um 0-pk of 0.5 um allowed"
    )
    # least squares through a step of 0.9: 0.9 * 8 * sum of |i| over 0.5 .. 3.5 / (2 * sum of i**2) = 1.371
    assert figure(verdict, "drift", "probe 2").value == pytest.approx(0.9 * 8 * 8 / 42)
    assert verdict.worst is not None
    assert verdict.worst.channel == "probe 2"


def test_a_large_vector_may_move_by_its_share() -> None:
    # 5 % of 40 um are 2 um a window: a line of 1.5 um a window passes, one of 2.1 um does not
    for drift, steady in ((1.5, True), (2.1, False)):
        v = np.full((8, 2), 40.0 + 0j)
        v[:, 0] += 1j * drift * (np.arange(8) - 3.5) / 8
        assert judge(blocks(v), SMALL, PROBES).steady is steady


def test_what_noise_explains_is_no_drift() -> None:
    # se 0.5 um of each block: halves of 4 blocks have 0.25 um each, the difference 0.354: 3 of them 1.06 um
    v = steady_vectors(8)
    v[4:, 1] += 1.0
    assert not figure(judge(blocks(v), SMALL, PROBES), "change", "probe 2").ok
    noisy = judge(blocks(v, se=0.5), SMALL, PROBES)
    assert figure(noisy, "change", "probe 2").ok
    assert figure(noisy, "change", "probe 2").limit == pytest.approx(3 * 0.5 / np.sqrt(2))
    # line through 8 blocks: se of its rise over 8 is 0.5 * 8 / sqrt(42) = 0.617, and 4 of them 2.47
    assert figure(noisy, "drift", "probe 2").limit == pytest.approx(4 * 0.5 * 8 / np.sqrt(42))
    assert not noisy.steady  # nor is it known
    assert noisy.waits


def test_units_and_floors_go_by_kind() -> None:
    probes = (Probe("casing", "velocity"), Probe("gear", "acceleration"))
    # 0.09 between the halves' middles, 4 blocks apart; floors 0.0707 mm/s and 0.02 m/s2
    v = np.full((8, 2), 0.1 + 0j) + (0.09 / 4 * (np.arange(8) - 3.5))[:, None]
    verdict = judge(blocks(v, se=1e-4), SMALL, probes)
    assert figure(verdict, "change", "casing").limit == pytest.approx(0.0707)
    assert figure(verdict, "change", "gear").limit == pytest.approx(0.02)
    assert figure(verdict, "change", "gear").value == pytest.approx(0.09)
    assert figure(verdict, "swing", "gear").value == pytest.approx(0.09 * 7 / 4)
    assert verdict.sentence == "gear drifts: 0.18 m/s2 0-pk a window of 0.0198 m/s2 allowed"


def test_lookback_compares_with_the_window_of_then() -> None:
    limits = replace(SMALL, lookback_s=6.0)
    n = 40
    v = steady_vectors(n)
    v[:, 1] += 0.1 * np.arange(n) * 0.375  # 0.1 um/s: 0.3 um over the window, 0.6 um over the lookback
    fits = blocks(v)
    assert judge(fits, SMALL, PROBES).steady
    early = judge(fits[:20], limits, PROBES)
    assert not early.steady
    assert figure(early, "lookback").sentence == "vectors can be looked back at over 7.5 s of 9 s"
    late = judge(fits, limits, PROBES)
    assert figure(late, "change", "probe 2").value == pytest.approx(0.6, rel=1e-6)
    assert not late.steady
    assert judge(blocks(steady_vectors(n)), limits, PROBES).steady


def test_the_speed_is_held_before_a_reading_counts() -> None:
    limits = replace(SMALL, hold_s=10.0)
    speed = np.where(np.arange(40) < 10, 35.0, 40.0)
    fits = blocks(steady_vectors(40), speed_hz=speed)
    verdict = judge(fits[:30], limits, PROBES)
    assert verdict.sentence == "the speed has been held for 7.5 s of 10 s"
    assert judge(fits, limits, PROBES).steady


@pytest.mark.parametrize("limits", [SMALL, replace(SMALL, lookback_s=6.0, hold_s=12.0), STANDARD])
def test_what_is_not_needed_may_be_dropped(limits: SteadinessLimits) -> None:
    fits = blocks(steady_vectors(300), block_s=block_seconds(limits))
    kept = fits[needed(fits, limits) :]
    assert len(kept) < len(fits)
    less, all_of = judge(kept, limits, PROBES), judge(fits, limits, PROBES)
    assert less.steady
    reach = ("hold", "lookback")  # how far back there is anything: the only figures that may read less
    for a, b in zip(less.figures, all_of.figures, strict=True):
        assert (a == b) or (a.name == b.name and a.name in reach and a.ok)
    assert needed([], limits) == 0


def test_noise_alone_rarely_swings_beyond_six_standard_errors() -> None:
    """Monte Carlo behind SWING_SE: the largest of 28 distances between 8 blocks of sd 1 per component."""
    rng = np.random.default_rng(1)
    v = rng.normal(size=(50_000, 8)) + 1j * rng.normal(size=(50_000, 8))
    largest = np.abs(v[:, :, None] - v[:, None, :]).max(axis=(1, 2))
    assert 0.0005 < np.mean(largest > 6.0) < 0.004


# --- forty of each -----------------------------------------------------------------------------------------

NOISE_UM = 0.02


def course(kind: str, k: int, n: int) -> tuple[NDArray[np.complex128], NDArray[np.float64]]:
    """Vectors (n blocks, 2) and speeds of an unsteady machine, the k-th of ten of its kind."""
    rng = np.random.default_rng(k)
    t = (np.arange(n) + 0.5) * 0.375
    v = np.array([6 * np.exp(1j * k), 3 * np.exp(-2j * k)]) * np.ones((n, 1))
    speed = np.full(n, 40.0)
    if kind == "ramp":  # 3 to 30 %/min, up and down
        speed = speed * (1 + (-1) ** k * 0.03 * (k + 1) * t / 60)
    elif kind == "hunting":  # 0.25 % to 1 % of amplitude, period 1.1 to 4 s
        speed = speed * (1 + (0.0025 + 0.0008 * k) * np.sin(2 * np.pi * t / (1.1 + 0.3 * k) + k))
    elif kind == "warm-up":  # one probe creeps at 0.4 um/s or more in any direction
        v[:, k % 2] += (0.4 + 0.1 * k) * t * np.exp(2.3j * k)
    elif (
        kind == "beat"
    ):  # a neighbour's line: depth 1.5 times the limit or more, period 0.6 to 6 s (two windows)
        depth = 0.75 + 0.1 * k
        v[:, k % 2] += depth * np.exp(1j * (2 * np.pi * t / (0.8 + 0.57 * k) + k))
    v = v + NOISE_UM * (rng.normal(size=v.shape) + 1j * rng.normal(size=v.shape))
    return v, speed


@pytest.mark.parametrize("kind", ["ramp", "hunting", "warm-up", "beat"])
def test_ten_unsteady_machines_of_a_kind_are_never_steady(kind: str) -> None:
    for k in range(10):
        v, speed = course(kind, k, 60)
        fits = blocks(v, speed_hz=speed, se=NOISE_UM)
        tagged = [n for n in range(1, 61) if judge(fits[:n], SMALL, PROBES).steady]
        assert tagged == [], f"{kind} {k}"


def test_forty_steady_machines_are_steady_as_soon_as_the_window_is_full() -> None:
    """Noise up to what a signal-to-noise of 4 leaves in blocks of 0.375 s at 12.8 kS/s (METHODS 8.2: se of a
    component sqrt(2/N) sd, N = 4800, sd = A/4 of 6 um: 0.03 um), hunting of 0.02 %, slow change within a
    third of the limit."""
    for k in range(40):
        rng = np.random.default_rng(100 + k)
        n, se = 14, 0.002 + 0.03 * k / 39
        t = (np.arange(n) + 0.5) * 0.375
        v = np.array([6 * np.exp(1j * k), 0.4 * np.exp(-2j * k)]) * np.ones((n, 1))
        v = v + 0.05 * t[:, None] * np.exp(1j * k)
        v = v + se * (rng.normal(size=v.shape) + 1j * rng.normal(size=v.shape))
        speed = 40 * (1 + 0.0002 * np.sin(2 * np.pi * t / 2.9 + k))
        verdicts = [judge(blocks(v, speed_hz=speed, se=se)[:m], SMALL, PROBES) for m in range(8, n + 1)]
        assert all(x.steady for x in verdicts), f"{k}: {[x.sentence for x in verdicts]}"


# --- through samples ---------------------------------------------------------------------------------------


def verdicts_of(counts: NDArray[Any], r: Any, limits: SteadinessLimits) -> list[tuple[float, Verdict]]:
    """(end of the newest block in s, verdict) for each block of a stream fed in tenths of a second."""
    fitter = BlockFitter(r.pulse, r.channels, r.rate_hz, block_s=block_seconds(limits))
    probes = [Probe(c.name, "displacement") for c in r.channels]
    step = int(r.rate_hz / 10)
    fits: list[BlockFit] = []
    found = []
    for i in range(0, len(counts), step):
        for fit in fitter.feed(counts[i : i + step], i):
            fits.append(fit)
            found.append((fit.t_end_s, judge(fits, limits, probes)))
    return found


@pytest.mark.parametrize("truth", TRUTH["runs"], ids=lambda t: t["run"])
def test_recordings_are_steady_in_their_dwell_and_not_before(
    truth: dict[str, Any], recording: Callable[..., Any]
) -> None:
    r = recording(truth)
    found = verdicts_of(r.counts, r, SMALL)
    tagged = [(at, v) for at, v in found if v.steady]
    assert tagged
    for _, v in tagged:
        # the run-up ends gently: in its last 0.1 s of 2.5 s, a raised cosine, it is within 0.4 % of the speed
        assert v.first_sample >= (truth["dwell_from_s"] - 0.1) * r.rate_hz
    # steady within the window and a turn or two of block ends, and steady from then on
    assert tagged[0][0] < truth["dwell_from_s"] + 3.0 + 1.6
    assert all(v.steady for at, v in found if tagged[0][0] <= at <= truth["dwell_to_s"])
    if truth["run"] != "fan-slow-roll":
        during_run_up = [v.sentence for at, v in found if 1.8 < at < 2.7]
        assert during_run_up
        assert all("speed drifts" in text for text in during_run_up)


def test_a_slow_ramp_in_samples_is_not_steady(signal: Callable[..., Any]) -> None:
    s = signal(ramp=0.002, seconds=8.0, noise_um=0.25)  # 12 %/min
    found = verdicts_of(s.counts(), s, SMALL)
    assert len(found) > 10
    assert not any(v.steady for _, v in found)
    assert "the speed drifts 1" in found[-1][1].sentence


def test_a_beat_in_samples_is_not_steady_and_its_absence_is(signal: Callable[..., Any]) -> None:
    s = signal(seconds=9.0, noise_um=0.25)
    counts = s.counts()
    assert any(v.steady for _, v in verdicts_of(counts, s, SMALL))
    t = np.arange(len(counts)) / s.rate_hz
    neighbour = 1.0 * np.cos(2 * np.pi * (41.7 + 1 / 5.0) * t)  # 1 um at a beat of 5 s, window 3 s
    counts[:, 1] += np.rint(neighbour * 0.007874 / s.volts_per_count).astype(np.int32)
    found = verdicts_of(counts, s, SMALL)
    assert not any(v.steady for _, v in found)
    assert found[-1][1].sentence.startswith("probe 1 ")


def test_at_a_signal_to_noise_of_four_a_steady_record_is_steady(signal: Callable[..., Any]) -> None:
    s = signal(seconds=7.0, noise_um=1.5)  # 6 um over 1.5 um
    found = verdicts_of(s.counts(), s, SMALL)
    assert any(v.steady for _, v in found)
    assert found[-1][1].steady
