"""Run-ups and coast-downs against closed forms: straight ramps of known angle, and the simulated machine."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator, Sequence
from typing import Any
from uuid import uuid4

import numpy as np
import pytest
from numpy.typing import NDArray

from config.stand import load_stand
from daq.analysis import Analysis
from daq.board import Board
from daq.drivers.base import FittedRotor, Piece
from daq.drivers.registry import make_driver
from daq.drivers.rotor import RigidRotor, response
from daq.recorder import Recorder
from daq.ring import Chunk
from daq.setup import channel_plan
from daq.signal.edges import EdgeFinder
from daq.signal.shapes import ChannelParams, PulseParams
from daq.traces import REVERSAL, STEP, StepFitter, Tracer, smoothed
from store.balance.critical import critical_speeds
from store.database import create_store
from store.history import History
from store.ledger import Ledger
from store.records import Trace

RATE = 6400.0
VOLTS, SCALE = 30.0 / 2**23, (-(2**23), 2**23 - 1)
VECTOR = 20 * np.exp(1j * np.radians(70))  # um 0-peak
PER_UM = 7.874e-3

Speed = Sequence[tuple[float, float]]
"""(second, Hz) corners of straight ramps."""


def turns_at(t: NDArray[np.float64], speed: Speed) -> NDArray[np.float64]:
    """Turns made at ``t``: straight ramps integrated exactly."""
    corners, hz = np.array(speed).T
    areas = np.concatenate(([0.0], np.cumsum(np.diff(corners) * (hz[1:] + hz[:-1]) / 2)))
    k = np.clip(np.searchsorted(corners, t, side="right") - 1, 0, len(corners) - 2)
    dt, slope = t - corners[k], (hz[k + 1] - hz[k]) / (corners[k + 1] - corners[k])
    return areas[k] + hz[k] * dt + slope * dt**2 / 2


def counts_of(
    turns: Callable[[NDArray[np.float64]], NDArray[np.float64]],
    seconds: float,
    *,
    noise_um: float = 0.0,
    skew_s: float = 0.0,
    missed: int = 0,
) -> NDArray[Any]:
    """A pulse whose falling edge passes half depth at whole turns, and one probe with 1X and half of 2X."""
    t = np.arange(int(seconds * RATE)) / RATE
    made, rng = turns(t) + 0.3, np.random.default_rng(5)
    u = (made + 0.5) % 1 - 0.5
    inside = np.clip(u / 0.02 + 0.5, 0, 1) - np.clip((u - 0.06) / 0.02 + 0.5, 0, 1)
    if missed:
        inside[np.rint(made) % missed == 0] = 0.0
    theta = 2 * np.pi * (turns(t + skew_s) + 0.3)
    x = abs(VECTOR) * np.cos(theta - np.angle(VECTOR)) + 10 * np.cos(2 * theta - 1.0)
    volts = np.column_stack([-8 - 7 * inside, -10 + PER_UM * (x + noise_um * rng.normal(size=len(t)))])
    return np.rint(volts / VOLTS).astype(np.int32)


def tracer(skew_s: float = 0.0) -> Tracer:
    probe = ChannelParams("probe 1", VOLTS, SCALE, PER_UM, skew_s=skew_s)
    return Tracer((probe,), ("um",), RATE, minimum_hz=1.0)


def fed(made: Tracer, counts: NDArray[Any], *, gap_at: int = 0, step: int = 640) -> list[Trace]:
    """All traces of a stream of counts; ``gap_at`` skips that sample's chunk."""
    finder = EdgeFinder(PulseParams(VOLTS, SCALE), RATE)
    for first in range(0, len(counts), step):
        if gap_at and first <= gap_at < first + step:
            finder.restart()
            continue
        part = counts[first : first + step]
        made.feed(Chunk(part, 0, first, RATE, 0.0, 0), finder.feed(part[:, 0], first))
    made.stop()
    return made.take(0, lambda sample: sample)


def ramp(speed: Speed, **how: Any) -> list[Trace]:
    skew = how.get("skew_s", 0.0)
    gap_at = how.pop("gap_at", 0)
    return fed(
        tracer(skew), counts_of(lambda t: turns_at(t, speed), speed[-1][0] - 0.01, **how), gap_at=gap_at
    )


def rpm(trace: Trace) -> NDArray[np.float64]:
    return np.array([p.speed_hz * 60 for p in trace.points])


def value(trace: Trace) -> NDArray[np.complex128]:
    return np.array([p.vectors[0] for p in trace.points])


UP_AND_DOWN = [(0.0, 5.0), (10.0, 55.0), (12.0, 55.0), (22.0, 5.0)]


@pytest.fixture(scope="module")
def both() -> list[Trace]:
    return ramp(UP_AND_DOWN)


def test_up_and_down_are_traced_apart(both: list[Trace]) -> None:
    up, down = both
    assert (up.direction, down.direction) == ("up", "down")
    assert rpm(up)[0] < 420
    assert rpm(up)[-1] == pytest.approx(3300, rel=1e-4)
    assert rpm(down)[0] > 3250
    assert rpm(down)[-1] < 420
    assert (np.diff(rpm(up)) > 0).all()
    assert (np.diff(rpm(down)) < 0).all()


def test_the_vector_of_every_step_is_the_true_one(both: list[Trace]) -> None:
    """1X constant at 20 um, 70 deg by construction, without noise: within 0.002 um (0.01 %, 0.006 deg) also
    on single turns whose speed changes by 15 % (5 Hz/s at 7 Hz)."""
    for trace in both:
        assert np.abs(value(trace) - VECTOR).max() < 0.002
        assert np.array([p.gap_v[0] for p in trace.points]) == pytest.approx(-10.0, abs=0.001)


def test_steps_are_one_per_cent_or_one_turn(both: list[Trace]) -> None:
    for trace in both:
        for p, q in zip(trace.points, trace.points[1:], strict=False):
            apart = abs(q.speed_hz - p.speed_hz) / p.speed_hz
            one_turn = min(p.revolutions, q.revolutions) == 1
            assert apart <= STEP * 1.01 or one_turn
        # 5 Hz/s is 1 % a turn at 22.4 Hz: slower, a turn is coarser
        assert {p.revolutions for p in trace.points if p.speed_hz < 21} == {1}


def test_the_stated_error_covers_the_noise() -> None:
    """1 um of white noise: |error|^2 / (2 se^2) has a mean of 1 (two components of variance se^2)."""
    (up,) = ramp([(0.0, 25.0), (20.0, 75.0)], noise_um=1.0)
    se = np.array([p.se[0] for p in up.points])
    assert len(se) > 90
    assert np.mean(np.abs(value(up) - VECTOR) ** 2 / (2 * se**2)) == pytest.approx(1.0, abs=0.3)


def test_no_vector_is_made_while_the_speed_holds(monkeypatch: pytest.MonkeyPatch) -> None:
    asked = []
    monkeypatch.setattr(StepFitter, "steps", lambda _self, spans, _mended: asked.extend(spans) or [])
    hunting = 0.4 * REVERSAL  # either way
    swing = lambda t: 25 * (t - hunting / (2 * np.pi) * np.cos(2 * np.pi * t))  # noqa: E731
    assert fed(tracer(), counts_of(swing, 20.0)) == []
    assert asked == []


def test_a_long_dwell_ends_the_stretch_and_memory_stays_bounded() -> None:
    made = tracer()
    speed = [(0.0, 5.0), (5.0, 30.0), (60.0, 30.0), (65.0, 60.0)]
    traces = fed(made, counts_of(lambda t: turns_at(t, speed), 64.9))
    assert [t.direction for t in traces] == ["up", "up"]
    assert rpm(traces[0])[-1] == pytest.approx(1800, rel=1e-3)
    assert rpm(traces[1])[0] == pytest.approx(1800, rel=0.01)
    assert traces[1].started_us > 55 * RATE
    assert sum(len(c) for _, c in made._measure._chunks) < 3 * RATE
    assert len(made._starts) < 200


def test_a_slow_ramp_is_measured_over_two_seconds_a_step() -> None:
    """0.25 % of 25 Hz a second: a step each 4 to 4.5 s, its last two measured: 50 to 56 turns."""
    (up,) = ramp([(0.0, 25.0), (40.0, 27.5)])
    assert {p.revolutions for p in up.points[1:-1]} <= set(range(48, 60))
    assert np.diff([p.t_s for p in up.points[1:-1]]) == pytest.approx(4.3, abs=0.4)
    assert np.abs(value(up) - VECTOR).max() < 0.01


def test_nothing_is_joined_across_lost_samples() -> None:
    first, second = ramp([(0.0, 5.0), (10.0, 55.0)], gap_at=int(5 * RATE))
    assert rpm(first)[-1] < 1810
    assert rpm(second)[0] > 1800
    assert (first.direction, second.direction) == ("up", "up")


@pytest.mark.parametrize("missed", [10, 17])
def test_missed_pulses_cut_no_stretch(missed: int) -> None:
    up, down = ramp(UP_AND_DOWN, missed=missed)
    assert rpm(up)[-1] > 3250
    assert rpm(down)[-1] < 400
    assert np.abs(value(up) - VECTOR).max() < 0.05


def test_skew_is_taken_out() -> None:
    """A probe sampled 1 ms late at 55 Hz reads 19.8 deg less lag: 360 f t (METHODS 8.4)."""
    up, _ = ramp(UP_AND_DOWN, skew_s=1e-3)
    assert np.abs(value(up) - VECTOR).max() < 0.05


def test_smoothing_keeps_a_ramp_and_drops_a_wild_turn() -> None:
    rising = np.arange(10.0, 20.0)
    assert smoothed(rising, 1).tolist() == rising.tolist()
    wild = rising.copy()
    wild[5] = 40.0
    assert smoothed(wild, 1).tolist()[:4] == [10.0, 11.0, 12.0, 13.0]
    assert smoothed(wild, 1).max() == 19.0


# --- the whole analysis on the simulated machine ------------------------------------------------------------


STAND = """
[stand]
name = "bay-1"
time_zone = "UTC"
ends = ["drive", "free"]
angles_seen_from = "drive"
zero = "top"
[source]
driver = "simulated"
[source.options]
seed = 1
rate_hz = 6400
hunting = 0.0
noise_mv = 2.0
pulse_width_deg = 30.0
probe_z_mm = [-300.0, 250.0]
initial_times = [0.0, 0.0]
sister_scatter = 0.0
run_scatter = 0.0
runout_um = [0.0]
run_up_rpm_per_s = 300.0
coast_down_rpm_per_s = 300.0
[source.options.rotor]
mass_kg = 25.0
transverse_kg_m2 = 0.8
polar_kg_m2 = 0.2
bearing_z_mm = [-300.0, 250.0]
stiffness_n_per_m = [2.0e6, 2.6e6]
damping_ns_per_m = [900.0, 1100.0]
plane_z_mm = [-220.0, 180.0]
[once_per_rev]
input = "0"
edge = "falling"
angle = "0 deg"
[[channel]]
name = "probe 1"
input = "1"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "0 deg"
[[channel]]
name = "probe 2"
input = "2"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "0 deg"
[steadiness]
preset = "small"
[run]
minimum_speed = "120 rpm"
minimum_duration = "2 s"
slow_roll_limit = "300 rpm"
"""


class AtOnce:
    """A writer without a thread: each record is written in place."""

    def __init__(self, ledger: Ledger) -> None:
        self._ledger = ledger

    def ask(self, act: Callable[[Ledger], Any]) -> Any:
        return act(self._ledger)

    def record(self, act: Callable[[Ledger], None], *, droppable: bool) -> None:
        del droppable
        act(self._ledger)


class Clock:
    """Moves when somebody waits."""

    def __init__(self) -> None:
        self.now_s = 1000.0

    def monotonic(self) -> float:
        return self.now_s

    def now_us(self) -> int:
        return 1_700_000_000_000_000 + round(self.now_s * 1e6)

    def sleep(self, seconds: float) -> None:
        self.now_s += seconds

    def wait(self, event: threading.Event, seconds: float) -> bool:
        self.now_s += 0.0 if event.is_set() else seconds
        return event.is_set()


UNBALANCE = ((1, 800.0, 40.0), (2, 550.0, 200.0))
"""Plane, g.mm, angle: ten times the example of METHODS 7.2."""
TOP_RPM = 5100.0


@pytest.fixture(scope="module")
def stored(tmp_path_factory: pytest.TempPathFactory) -> Iterator[History]:
    """A run up to 5100 r/min and down again, 300 r/min a second, through the real analysis into a store."""
    folder = tmp_path_factory.mktemp("run")
    (folder / "bay.toml").write_text(STAND)
    stand, clock = load_stand(folder / "bay.toml"), Clock()
    create_store(folder / "bay.sqlite", clock=clock, software="test")
    driver = make_driver("simulated", stand.source.options, channel_plan(stand), clock=clock)
    with Ledger.open(folder / "bay.sqlite", clock=clock, software="test") as ledger:
        board = Board(clock)
        analysis = Analysis(stand, None, Recorder(AtOnce(ledger), board, stand), board, clock)
        analysis._begin(driver.open())
        driver.act("start", rpm=TOP_RPM, rotor=FittedRotor("F-1", tuple(Piece(*u) for u in UNBALANCE)))
        for seconds in (TOP_RPM / 300 + 3, TOP_RPM / 300 + 5):
            end = clock.now_s + seconds
            while clock.now_s < end:
                block = driver.read()
                if block is not None:
                    analysis._feed(Chunk(block.counts, 0, block.first_sample, RATE, block.mono_s, 0))
            driver.act("stop")
        driver.close()
    with History.open(folder / "bay.sqlite") as history:
        yield history


def truth(speed_hz: NDArray[np.float64]) -> NDArray[np.complex128]:
    """The simulated machine in closed form (METHODS 7.2, held against its table by the driver's tests)."""
    rotor = RigidRotor(25.0, 0.8, 0.2, (-0.3, 0.25), (2.0e6, 2.6e6), (900.0, 1100.0))
    u = np.array([gmm * np.exp(1j * np.radians(deg)) for _, gmm, deg in UNBALANCE])
    return response(rotor, speed_hz, [-0.3, 0.25], [-0.22, 0.18]) @ u


def test_a_run_holds_its_run_up_and_coast_down(stored: History) -> None:
    run = stored.run("U/1")
    up, down = stored.traces(run.id)
    assert [(t.number, t.direction, t.channels, t.units) for t in (up, down)] == [
        (1, "up", ("probe 1", "probe 2"), ("um", "um")),
        (2, "down", ("probe 1", "probe 2"), ("um", "um")),
    ]
    assert run.state == "complete"
    assert rpm(up)[0] < 400
    assert rpm(up)[-1] == pytest.approx(TOP_RPM, rel=1e-3)
    assert rpm(down)[0] > TOP_RPM * 0.98
    assert 120 <= rpm(down)[-1] < 400
    # 300 r/min a second, less the first turn
    assert up.duration_s == pytest.approx((TOP_RPM - rpm(up)[0]) / 300, abs=3.5)
    assert abs(up.started_us - run.started_us) < 2_000_000
    assert run.started_us < down.started_us < run.ended_us
    assert stored.traces(uuid4()) == ()


def test_traces_follow_the_closed_form_through_the_critical(stored: History) -> None:
    """At 300 r/min a second every step lies within 0.2 % of the resonance's height of the closed form."""
    for trace in stored.traces(stored.run("U/1").id):
        speed = rpm(trace) / 60
        seen = np.array([p.vectors for p in trace.points])
        true = truth(speed)
        assert (np.abs(seen - true).max(axis=0) < 0.002 * np.abs(true).max(axis=0)).all()
        assert np.abs(true[:, 0]).max() == pytest.approx(95.48, abs=0.1)  # through the resonance


def test_critical_speed_and_amplification_as_the_machine_has_them(stored: History) -> None:
    """On a fine grid the closed form peaks at probe 1 at 3937.2 r/min, half power 3470.7 to 4224.1."""
    fine = np.linspace(5.0, 85.0, 8001)
    exact = truth(fine)[:, 0]
    (true,), _ = critical_speeds(fine, exact, np.full(len(fine), 1e-6))
    assert true.speed_hz * 60 == pytest.approx(3937.2, abs=1.0)
    for trace in stored.traces(stored.run("U/1").id):
        se = np.array([p.se[0] for p in trace.points])
        (found,), _ = critical_speeds(rpm(trace) / 60, value(trace), se)
        assert abs(found.speed_hz - true.speed_hz) <= 2 * found.within_hz
        assert found.amplification == pytest.approx(true.amplification, rel=0.01)
        assert found.amplitude == pytest.approx(true.amplitude, rel=0.005)
