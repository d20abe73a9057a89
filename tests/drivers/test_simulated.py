"""The simulated stream against the closed form of METHODS 7.2 and the geometry of METHODS 6."""

from dataclasses import replace

import numpy as np
import pytest

from config.errors import DriverError, Refusal
from daq.drivers.base import Block, ChannelPlan, DriverState, FittedRotor, Piece, ProbePlan, PulsePlan
from daq.drivers.registry import make_driver

RATE = 12800
# the rotor of METHODS 7.2, made to stand alone: no runout, scatter, hunting, unbalance of its own; noise of
# half a count, with which quantisation averages out (METHODS 8.5)
BARE = {
    "rotor": {
        "mass_kg": 25.0,
        "transverse_kg_m2": 0.8,
        "polar_kg_m2": 0.2,
        "bearing_z_mm": [-300.0, 250.0],
        "stiffness_n_per_m": [2.0e6, 2.6e6],
        "damping_ns_per_m": [900.0, 1100.0],
        "plane_z_mm": [-220.0, 180.0],
    },
    "probe_z_mm": [-300.0, 250.0],
    "initial_times": [0.0, 0.0],
    "sister_scatter": 0.0,
    "run_scatter": 0.0,
    "hunting": 0.0,
    "runout_um": [0.0],
    "noise_mv": 0.5,
    "run_up_rpm_per_s": 3000.0,
    "coast_down_rpm_per_s": 3000.0,
}
# METHODS 7.2, 1800 r/min: U1 80 g.mm @ 40 and U2 55 @ 200 give these (um 0-peak, lag)
UNBALANCE = FittedRotor("F-1", (Piece(1, 80.0, 40.0), Piece(2, 55.0, 200.0)))
EXPECTED = [(1.21350764553, 48.7558423805), (0.518761097564, 194.0481677875)]


@pytest.fixture
def make(plan, clock):
    made = []

    def build(channels=plan, **options):
        driver = make_driver("simulated", options, channels, clock=clock)
        made.append(driver)
        driver.open()
        return driver

    yield build
    for driver in made:
        driver.close()


def blocks(driver, seconds):
    found = []
    while sum(len(b.counts) for b in found) < round(seconds * RATE):
        got = driver.read()
        if got is not None:
            found.append(got)
    return found


def volts(driver, seconds):
    return np.concatenate([b.counts for b in blocks(driver, seconds)]) * (30 / 32768)


def crossings(pulse, level=-11.5, sign=1):
    """Sample positions where the pulse falls (rises, for sign -1) through the level, by straight lines."""
    over = sign * (pulse - level)
    at = np.flatnonzero((over[:-1] > 0) & (over[1:] <= 0))
    return at + over[at] / (over[at] - over[at + 1])


def vectors(data, scale=(7.874e-3, 7.874e-3), **how):
    """1X of each probe by least squares at the angles between the pulses; independent of daq.signal."""
    edges = crossings(data[:, 0], **how)
    n = np.arange(int(np.ceil(edges[0])), int(edges[-1]))
    angle = 2 * np.pi * np.interp(n, edges, np.arange(len(edges)))
    basis = np.column_stack([np.cos(angle), np.sin(angle), np.ones_like(angle)])
    fit = np.linalg.lstsq(basis, data[n, 1:] / np.array(scale), rcond=None)[0]
    return fit[0] + 1j * fit[1]


def dwell(driver, rpm=1800, rotor=UNBALANCE, seconds=2.0):
    """Volts of a dwell after the run-up."""
    driver.act("start", rpm=rpm, rotor=rotor)
    blocks(driver, rpm / 3000 + 0.2)
    return volts(driver, seconds)


def check(found, expected):
    # METHODS 8.2 and 8.5: noise of half a count (0.058 um) and a count's own (0.034 um) leave
    # sqrt(2 / 25,600) * 0.067 um = 0.0006 um; 5 times that
    for value, (amp, lag) in zip(found, expected, strict=True):
        assert abs(value) == pytest.approx(amp, abs=0.003)
        assert (np.degrees(np.angle(value)) - lag + 180) % 360 - 180 == pytest.approx(0, abs=0.3)


def turned(by):
    return [(amp, lag + by) for amp, lag in EXPECTED]


def probes(**change):
    return tuple(ProbePlan(f"probe {i}", str(i), **change) for i in (1, 2))


def test_stream_gives_the_vectors_of_methods_7_2(make):
    check(vectors(dwell(make(**BARE, full_scale_v=30.0))), EXPECTED)


def test_3000_rpm_too(make):
    # METHODS 7.2: 4.25731332413@59.2684838440, 1.60813440722@178.1910998690
    found = vectors(dwell(make(**BARE), rpm=3000))
    check(found, [(4.25731332413, 59.2684838440), (1.60813440722, 178.1910998690)])


def test_a_moved_rotor_mark_renumbers_the_weights_only(make):
    # METHODS 6.1: the mark 30 deg further from hole 1 is 30 deg nearer to every weight
    check(vectors(dwell(make(**BARE, mark_from_hole1_deg=30.0))), turned(-30))
    check(vectors(dwell(make(**BARE, marks_deg={"F-1": 50.0}))), turned(-50))


@pytest.mark.parametrize(
    ("probe_deg", "sensor_deg", "rotation", "by"),
    [
        # METHODS 6.1: probe moved d with rotation +d, sensor -d; stand angles are clockwise
        (90.0, 0.0, "clockwise", 90.0),
        (0.0, 90.0, "clockwise", -90.0),
        (90.0, 0.0, "counterclockwise", -90.0),
        (20.0, 70.0, "counterclockwise", 50.0),
    ],
)
def test_probe_and_sensor_angles(make, probe_deg, sensor_deg, rotation, by):
    plan = ChannelPlan(PulsePlan("t", "0", angle_deg=sensor_deg), probes(angle_deg=probe_deg))
    fitted = replace(UNBALANCE, clockwise=rotation == "clockwise")
    check(vectors(dwell(make(plan, **BARE, rotation=rotation), rotor=fitted)), turned(by))


def test_pieces_numbered_for_the_other_rotation_lie_mirrored(make):
    mirrored = FittedRotor("F-1", (Piece(1, 80.0, -40.0), Piece(2, 55.0, -200.0)), clockwise=False)
    check(vectors(dwell(make(**BARE), rotor=mirrored)), EXPECTED)


def test_drilled_pieces_count_the_other_way(make):
    both = (*UNBALANCE.pieces, *UNBALANCE.pieces, Piece(1, -80.0, 40.0), Piece(2, -55.0, 200.0))
    check(vectors(dwell(make(**BARE), rotor=FittedRotor("F-1", both))), EXPECTED)


def test_polarity_and_edge(make):
    # METHODS 6.1: polarity inverted +180; here the stand file says so too, so the volts turn, not the vector
    inverted = ChannelPlan(PulsePlan("t", "0"), probes(positive=-1))
    check(vectors(dwell(make(inverted, **BARE))), turned(180))
    rising = ChannelPlan(PulsePlan("t", "0", edge="rising"), probes())
    check(vectors(dwell(make(rising, **BARE)), level=-4.5, sign=-1), EXPECTED)


@pytest.mark.parametrize(
    ("kind", "volts_per_unit", "lag", "factor"),
    [
        # METHODS 6.1: displacement -> velocity -90, acceleration -180
        # hand: 1800 r/min is w = 188.4956 rad/s; 1 um is 0.1884956 mm/s and 0.03553058 m/s2
        ("velocity", 4.0, -90, 0.1884956),
        ("acceleration", 20.0, -180, 0.03553058),
    ],
)
def test_other_kinds_of_probe(make, kind, volts_per_unit, lag, factor):
    plan = ChannelPlan(PulsePlan("t", "0"), probes(kind=kind, volts_per_unit=volts_per_unit))
    data = dwell(make(plan, **BARE))
    found = vectors(data, scale=(volts_per_unit,) * 2)
    for value, (amp, base) in zip(found, turned(lag), strict=True):
        assert abs(value) == pytest.approx(amp * factor, rel=0.005)
        assert (np.degrees(np.angle(value)) - base + 180) % 360 - 180 == pytest.approx(0, abs=0.3)
    assert np.abs(data[:, 1:].mean(axis=0)).max() < 0.01  # no gap voltage


def test_runout_stands_beside_the_response(make):
    # hand: with no unbalance the vector is the runout alone
    options = {**BARE, "runout_um": [1.2, 0.9], "runout_deg": [80.0, 310.0]}
    check(vectors(dwell(make(**options), rotor=FittedRotor("F-1"))), [(1.2, 80.0), (0.9, 310.0)])


# --- motion -------------------------------------------------------------------------------------------


def test_run_up_dwell_and_coast_down(make):
    driver = make(**{**BARE, "run_up_rpm_per_s": 600.0, "coast_down_rpm_per_s": 900.0})
    assert len(crossings(volts(driver, 1.0)[:, 0])) == 0
    driver.act("start", rpm=1800)
    # hand: 30 Hz at 10 Hz/s is 3 s and 45 turns; 2 s of dwell are 60 turns; down at 15 Hz/s 2 s and 30 turns
    edges = crossings(volts(driver, 5.0)[:, 0])
    assert len(edges) in (104, 105, 106)
    assert 1 / np.diff(edges[-50:]) * RATE == pytest.approx(30.0, rel=1e-4)
    driver.act("stop")
    assert len(crossings(volts(driver, 3.0)[:, 0])) in (29, 30, 31)
    assert len(crossings(volts(driver, 1.0)[:, 0])) == 0


def test_angle_is_continuous_over_blocks_and_phases(make):
    driver = make(**{**BARE, "block_s": 0.037})
    driver.act("start", rpm=2400)
    periods = np.diff(crossings(volts(driver, 3.0)[:, 0]))
    # run-up: each turn is shorter than the one before; dwell: 12800 / 40 = 320 samples a turn
    up = periods[: np.argmax(periods < 320.5)]
    assert (np.diff(up) < 0).all()
    assert periods[len(up) + 1 :] == pytest.approx(320.0, abs=0.05)


def test_speed_hunts_by_its_amplitude(make):
    driver = make(**{**BARE, "hunting": 0.0002, "hunting_period_s": 2.0})
    hz = RATE / np.diff(crossings(dwell(driver, seconds=4.0)[:, 0]))
    assert (hz.max() / 30 - 1, 1 - hz.min() / 30) == pytest.approx((0.0002, 0.0002), abs=2e-5)


def test_another_speed_while_turning_and_other_weights_refused(make):
    driver = make(**BARE)
    dwell(driver, rpm=1200)
    check(vectors(dwell(driver, rpm=1800)), EXPECTED)
    with pytest.raises(Refusal, match="is turning"):
        driver.act("start", rpm=1800, rotor=FittedRotor("F-2"))


def test_refusals_of_start(make):
    driver = make(**BARE)
    with pytest.raises(Refusal, match="too fast"):
        driver.act("start", rpm=20000)
    with pytest.raises(Refusal, match="rpm"):
        driver.act("start", rpm=-3)
    with pytest.raises(Refusal, match="has 2 planes, and a weight is in plane 3"):
        driver.act("start", rotor=FittedRotor("F-1", (Piece(3, 1.0, 0.0),)))
    assert "stands still" in driver.act("stop")["said"]


def test_probe_places_must_fit_the_stand(make):
    with pytest.raises(DriverError, match="places 3 probes, and the stand file has 2"):
        make(**{**BARE, "probe_z_mm": [1.0, 2.0, 3.0]})


# --- pace ---------------------------------------------------------------------------------------------


def test_pace_and_stamps(make, clock):
    driver = make(pace=20)
    begin_s = clock.monotonic()
    found = blocks(driver, 2.0)
    assert clock.monotonic() - begin_s == pytest.approx(0.1)
    assert [b.mono_s - begin_s for b in found] == pytest.approx([0.005 * (i + 1) for i in range(20)])


def test_a_reader_far_behind_loses_an_exact_number(make, clock):
    driver = make()
    first = blocks(driver, 0.1)[0]
    clock.sleep(20.0)
    late = blocks(driver, 0.1)[0]
    assert late.segment == first.segment + 1
    # 20 s after the first block's end the next was due 19.9 s ago
    assert late.first_sample - len(first.counts) == driver.counters.lost_samples == round(19.9 * RATE)
    clock.sleep(5.0)
    assert {b.segment for b in blocks(driver, 5.0)} == {late.segment}


# --- noise, gap, determinism --------------------------------------------------------------------------


def test_stands_still_with_gap_and_noise(make):
    data = volts(make(), 4.0)
    assert data.mean(axis=0)[1:] == pytest.approx([-10.0, -9.4], abs=0.005)
    # 2 mV of noise and a count of 0.9155 mV: sqrt(4 + 0.9155**2 / 12) = 2.017 mV
    assert data.std(axis=0) * 1e3 == pytest.approx([2.017] * 3, rel=0.02)


def test_same_seed_same_counts(make):
    def stream(seed):
        driver = make(seed=seed)
        driver.act("start", rotor=FittedRotor("F-9"))
        return np.concatenate([b.counts for b in blocks(driver, 2.0)])

    assert np.array_equal(stream(7), stream(7))
    assert not np.array_equal(stream(7), stream(8))


def test_counts_do_not_depend_on_when_they_are_read(make, clock):
    early, late = make(seed=3), make(seed=3)
    first = np.concatenate([b.counts for b in blocks(early, 1.0)])
    clock.sleep(3.0)
    assert np.array_equal(first, np.concatenate([b.counts for b in blocks(late, 1.0)]))


# --- faults -------------------------------------------------------------------------------------------


def test_dropout_loses_an_exact_number_at_an_exact_place(make):
    driver = make(**BARE, faults=[{"kind": "dropout", "at_s": 1.03, "seconds": 0.25}])
    driver.act("start", rpm=1800, rotor=UNBALANCE)
    found = blocks(driver, 3.0)
    before = [b for b in found if b.segment == found[0].segment]
    after = found[len(before)]
    assert before[-1].first_sample + len(before[-1].counts) == 13184  # 1.03 s at 12,800 samples a second
    assert after.first_sample == 13184 + 3200  # 0.25 s
    assert after.segment == before[-1].segment + 1
    assert driver.counters.lost_samples == 3200
    rest = np.concatenate([b.counts for b in found if b.segment == after.segment]) * (30 / 32768)
    check(vectors(rest[1280:]), EXPECTED)


def test_dropout_takes_its_time(make, clock):
    driver = make()
    blocks(driver, 0.1)
    driver.act("fault", kind="dropout", seconds=2.0)
    begin_s = clock.monotonic()
    after = blocks(driver, 0.1)[0]
    assert clock.monotonic() - begin_s == pytest.approx(2.1)
    assert after.mono_s == pytest.approx(begin_s + 2.1)


def test_a_clipped_probe_sits_at_the_end_of_its_range(make):
    driver = make(**BARE)
    dwell(driver)
    driver.act("fault", kind="clip", channel="probe 2", seconds=0.35)
    counts = np.concatenate([b.counts for b in blocks(driver, 1.0)])
    clipped = counts == -32768
    assert not clipped[:, :2].any()
    assert 0.3 < clipped[:4480, 2].mean() < 0.7  # 0.35 s at 12,800 samples a second; half of each swing
    assert not clipped[4480:].any()
    with pytest.raises(Refusal, match="no probe 'tacho'"):
        driver.act("fault", kind="clip", channel="tacho")


@pytest.mark.parametrize(("every", "missing"), [(1, 30), (5, 6)])
def test_missed_pulses(make, every, missing):
    driver = make(**BARE)
    dwell(driver)
    driver.act("fault", kind="missed", every=every, seconds=1.0)
    # 1800 r/min: 30 pulses in the second of the fault, 30 in the one after
    found = crossings(volts(driver, 2.0)[:, 0])
    assert len(found) == pytest.approx(60 - missing, abs=1)
    assert (found > RATE).sum() == pytest.approx(30, abs=1)


@pytest.mark.parametrize(("every", "extra"), [(1, 30), (5, 6)])
def test_double_pulses(make, every, extra):
    driver = make(**BARE)
    dwell(driver)
    driver.act("fault", kind="double", every=every, seconds=1.0)
    found = crossings(volts(driver, 2.0)[:, 0])
    assert len(found) == pytest.approx(60 + extra, abs=1)
    assert (found > RATE).sum() == pytest.approx(30, abs=1)


def test_edges_as_sharp_as_asked_for(make):
    """Samples between the rest and the bottom of the notch, -8 V and -15 V, at each falling edge."""
    for asked in (0.0, 10.0):
        driver = make(**BARE, edge_samples=asked)
        dwell(driver)
        pulse = volts(driver, 1.0)[:, 0]
        on_edge = ((pulse < -8.1) & (pulse > -14.9)).sum() / (2 * len(crossings(pulse)))
        assert on_edge == pytest.approx(asked * 6.8 / 7, abs=0.35)  # a step takes 1e-4 of a turn


@pytest.mark.parametrize(
    ("told", "gaps"),
    [
        ({"pulses": 3, "marked": "long"}, [120, 120, 120]),
        ({"pulses": 4, "spacing_deg": (80.0, 90.0, 100.0, 90.0)}, [80, 90, 100, 90]),
    ],
)
def test_several_pulses_a_turn(make, told, gaps):
    plan = ChannelPlan(PulsePlan("t", "0", **told), probes())
    driver = make(plan, **BARE)
    dwell(driver)
    pulse = volts(driver, 1.0)[:, 0]
    found = crossings(pulse)
    assert len(found) == pytest.approx(30 * len(gaps), abs=1)
    turn = np.round(np.diff(found) * 360 * 30 / RATE).astype(int).tolist()[:12]
    assert any(turn == (gaps[k:] + gaps[:k]) * (12 // len(gaps)) for k in range(len(gaps)))
    if "marked" in told:
        low = np.add.reduceat((pulse < -11.5).astype(int), found.astype(int))[:-1]
        assert low.max() / np.median(low) == pytest.approx(1.6, rel=0.1)


def test_unplug_and_replug(make, clock):
    driver = make(**BARE)
    dwell(driver)
    driver.act("fault", kind="unplug", seconds=3.0)
    with pytest.raises(DriverError, match="unplugged") as caught:
        driver.read()
    assert (caught.value.kind, driver.state) == ("gone", DriverState.LOST)
    driver.close()
    with pytest.raises(DriverError, match="is unplugged"):
        driver.open()
    clock.sleep(3.0)
    driver.open()
    data = volts(driver, 1.0)
    assert isinstance(driver.read(), Block)
    check(vectors(data), EXPECTED)  # it went on turning


def test_the_rotor_turns_on_while_unplugged(make, clock):
    driver = make(**BARE)
    dwell(driver)
    driver.act("stop")
    driver.act("fault", kind="unplug", seconds=5.0)
    with pytest.raises(DriverError):
        driver.read()
    driver.close()
    clock.sleep(5.0)
    driver.open()
    assert len(crossings(volts(driver, 1.0)[:, 0])) == 0


@pytest.mark.parametrize(
    "bad", [{"kind": "fire"}, {"kind": "clip", "channel": "none"}, {"kind": "dropout", "seconds": 0}]
)
def test_unknown_faults_are_refused(make, bad):
    with pytest.raises(Refusal):
        make().act("fault", **bad)
    with pytest.raises(DriverError):
        make(faults=[bad])
