"""Differences between two measurements, what a corrected set-up does to one, and what a build is. By hand."""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "store"))

from store_kit import SET_UP, FakeClock, Stand, measured, samples, vector

from config.errors import NeedsAnswer, Refusal
from config.onethread import is_one_thread, one_thread
from daq import build
from daq.again import AgainDesk
from daq.board import Board
from daq.build import Build
from daq.recompute import NOT_RECORDED, again, differences
from daq.requests import ChannelBody, RecomputeAsked, ReviseAsked
from daq.revise import ChannelChange, Correction, corrected, revised, scaled
from daq.signal.setting import Setting
from daq.signal.shapes import ChannelParams, PulseParams, Surroundings
from store import consult
from store.database import create_store
from store.records import Label, Level

SCALE = (-32768, 32767)


class AtOnce:
    """A writer that does what it is asked in place."""

    def __init__(self, ledger):
        self._ledger = ledger

    def ask(self, act):
        return act(self._ledger)


@pytest.fixture
def stand(tmp_path):
    create_store(tmp_path / "bay.sqlite", clock=FakeClock(), software="test")
    made = Stand(tmp_path / "bay.sqlite", FakeClock())
    made.mount()
    yield made
    made.close()


@pytest.fixture
def desk(stand):
    return AgainDesk(AtOnce(stand.ledger), stand.history, Board(FakeClock()))


def turning(seconds=2.0, rate_hz=2560.0, speed_hz=16.0, amplitude=1000):
    """Counts of a pulse and two probes, 1X of ``amplitude`` counts, with noise so that no figure is zero."""
    t = np.arange(round(seconds * rate_hz)) / rate_hz
    turn = (t * speed_hz) % 1.0
    rng = np.random.default_rng(4)
    pulse = np.where((turn > 0.4) & (turn < 0.5), -9000, -1000)
    probes = [amplitude * np.cos(2 * np.pi * turn - lag) for lag in (0.5, 2.0)]
    noise = rng.normal(0, 20, (3, len(t)))
    return np.ascontiguousarray((np.stack([pulse, *probes]) + noise).T.round().astype(np.int16))


def setting(volts_per_unit=0.01):
    probes = tuple(ChannelParams(n, 0.001, SCALE, volts_per_unit, -1) for n in ("probe 1", "probe 2"))
    return Setting(PulseParams(0.001, SCALE), probes, 2560.0, surroundings=Surroundings(50.0, (24.5,)))


def a_real_reading(stand, **other):
    """A reading whose vectors come from its counts, as the daemon would have made it."""
    from daq.readings import measured_record

    counts = turning()
    made = setting().measured(counts)
    record = measured_record(made, setting(), {"probe 1": "um", "probe 2": "um"}, "live", made.flags)
    record = replace(record, **other)
    raw = replace(samples(), counts=counts, rate_hz=2560.0)
    return stand.run(None, vectors=record.vectors, flags=record.flags, speed_hz=record.speed_hz, raw=raw,
                     measured=record)[1]  # fmt: skip


# --- differences ---------------------------------------------------------------------------------------


def test_nothing_differs():
    assert list(differences(measured(), measured())) == []


def test_a_vector_is_held_against_the_largest_of_its_channel():
    """0.1 um of 2X beside 10 um of 1X: moved by 1e-12 um it is 1e-13 of the channel's amplitude apart."""
    then = measured()
    first, second, third = then.vectors
    now = replace(then, vectors=(first, second, replace(third, value=third.value + 1e-12)))
    (found,) = differences(then, now)
    assert (found.what, found.channel, found.order) == ("vector", "probe 1", 2)
    assert found.apart == pytest.approx(1e-13, rel=1e-3)
    assert found.apart <= found.tolerance


def test_what_is_not_rounding():
    then = measured()
    first, *rest = then.vectors
    cases = {
        "vector": replace(then, vectors=(replace(first, value=first.value * (1 + 1e-9)), *rest)),
        "var_re": replace(then, vectors=(replace(first, var_re=first.var_re * 1.01), *rest)),
        "revolutions": replace(then, revolutions=101),
        "speed": replace(then, speed_hz=25.0000001),
        "flag": replace(then, flags=("near gap limit", "clipped:probe 1")),
        "missed": replace(then, figures={"missed": 1}),
        "level": replace(then, levels=then.levels[:1]),
    }
    for what, now in cases.items():
        found = list(differences(then, now))
        assert [d.what.split()[0] for d in found] == [what]
        assert not any(d.apart <= d.tolerance for d in found)
    (flag,) = differences(then, cases["flag"])
    assert (flag.channel, flag.stored, flag.now) == ("probe 1", False, True)
    (vector_apart,) = (d.to_dict() for d in differences(then, cases["vector"]))
    assert vector_apart["stored"] == [10.0, 0.0]
    assert vector_apart["apart"] == pytest.approx(1e-9, rel=1e-6)
    fewer = list(differences(then, replace(then, vectors=then.vectors[:2])))
    assert [(d.what, d.channel, d.order) for d in fewer] == [("vector", "probe 1", 2)]


# --- a reading again -----------------------------------------------------------------------------------


def test_a_reading_is_the_same_again(stand):
    """Also through the store's JSON: surroundings, tuples and floats come back as they were."""
    found = again(stand.history, "0142/1", a_real_reading(stand))
    assert (found.same, found.differences, found.build, found.beside) == ("identical", (), (), 1)


def test_another_build_and_a_changed_figure_are_named(stand):
    live = a_real_reading(stand, numpy="1.0", processor="")
    found = again(stand.history, "0142/1", live)
    assert found.same == "identical"
    assert found.build[0] == f"numpy was 1.0, is {np.__version__}"
    assert found.build[1].startswith("processor was not known, is ")
    other = a_real_reading(stand, duration_s=1.0)
    found = again(stand.history, "0142/2", other)
    assert (found.same, [d.what for d in found.differences]) == ("apart", ["duration"])


def test_flags_from_beside_the_counts_are_no_difference(stand):
    found = again(stand.history, "0142/1", a_real_reading(stand, flags=("mostly_runout:probe 1",)))
    assert found.same == "identical"
    assert found.measured.flags == ("mostly_runout:probe 1",)


def test_what_cannot_be_measured_again_says_why(stand):
    _, unrecorded = stand.run(None, raw=samples())
    assert again(stand.history, "0142/1", unrecorded).why_not == NOT_RECORDED
    no_raw = a_real_reading(stand)
    stand.ledger.age_raw(0)
    found = again(stand.history, "0142/2", no_raw)
    assert (found.same, found.why_not[:44]) == (None, "The raw samples of this reading were let go ")
    newer = a_real_reading(stand, setting={**setting().to_json(), "gearing": 3})
    assert "not known to this version" in again(stand.history, "0142/3", newer).why_not


def test_keep_stores_only_what_differs(stand, desk):
    a_real_reading(stand)
    a_real_reading(stand, duration_s=1.0)
    asked = RecomputeAsked(key="key-00000001", runs=("0142/1", "0142/2"), who="ana")
    told = desk.recompute(asked, "")
    assert [[r["kept"] for r in one["readings"]] for one in told["runs"]] == [[False], [True]]
    (same,), (kept,) = (stand.history.run(n).readings for n in asked.runs)
    assert (same.version, kept.version) == (1, 2)
    assert kept.duration_s != 1.0
    assert [(m.why, m.who) for m in stand.history.measured(kept.id)] == [("live", ""), ("recompute", "ana")]
    assert desk.recompute(asked, "") == told  # a retry is no third version
    assert stand.history.reading(kept.id).version == 2


# --- a corrected set-up ----------------------------------------------------------------------------------


def test_a_revised_sensitivity_measures_the_counts_again(stand, desk):
    """From 0.01 to 0.0125 V/um: every length is 0.8 of what it was, every variance 0.64; the gap stays."""
    live = a_real_reading(stand)
    body = ChannelBody(channel="probe 1", volts_per_unit=0.0125, unit="um")
    far = ReviseAsked(key="key-00000001", runs=("0142/1",), channels=(body,), why="x")
    with pytest.raises(NeedsAnswer, match="0142/1"):  # the kit's set-up says 7874 V/um
        desk.revise(far, "ana")
    told = desk.revise(far.model_copy(update={"confirmed": True}), "ana")
    assert told["runs"][0]["readings"][0]["why_not"] is None
    now = stand.history.run("0142/1").readings[0]
    for was, v in zip(live.vectors, now.vectors, strict=True):
        by = 0.8 if v.channel == "probe 1" else 1.0
        assert v.value == pytest.approx(by * was.value, rel=1e-12)
        assert v.var_re == pytest.approx(by * by * was.var_re, rel=1e-9)
        assert v.noise_floor == pytest.approx(by * was.noise_floor, rel=1e-9)
    was, level = live.level("probe 1"), now.level("probe 1")
    assert level.gap_v == was.gap_v
    assert level.peak_to_peak == pytest.approx(0.8 * was.peak_to_peak, rel=1e-12)
    assert (now.speed_hz, now.revolutions, now.label) == (live.speed_hz, live.revolutions, live.label)


def test_without_counts_it_is_scaled_exactly_and_that_is_said(stand, desk):
    """Probe 1 from 7874 to 3937 V/um, so by 2, and wired the other way, so by -2 in all."""
    _, older = stand.run(None, 4 + 3j)
    body = ChannelBody(channel="probe 1", volts_per_unit=3937.0, unit="um", positive=1)
    asked = ReviseAsked(key="key-00000001", runs=("0142/1",), channels=(body,), why="another probe")
    (told,) = desk.revise(asked, "ana")["runs"][0]["readings"]
    assert told["why_not"] == NOT_RECORDED
    now = stand.history.reading(older.id)
    assert [v.value for v in now.vectors] == [-8 - 6j, 4 + 3j, -0.2j]
    first = now.vectors[0]
    assert (first.var_re, first.var_im, first.cov, first.noise_floor) == (0.0016, 0.002, 0.00004, 0.04)
    assert now.figures["scaled"] == {"by": {"probe 1": -2.0}, "why": NOT_RECORDED}
    assert now.version == 2


def test_scaling_reaches_levels_lines_and_the_setting():
    then = measured(
        figures={"lines": [{"channel": "probe 1", "order": 0.4, "amplitude": 3.0}], "missed": 2},
        setting=setting(0.01).to_json(),
    )
    stands = SetUpLike()
    now = corrected(stands.set_up, Correction((ChannelChange("probe 1", 3937.0, "um"),)), "0142/1")
    made = scaled(then, stands.set_up, now, "why", "counts are gone")
    assert made.levels[0] == Level("probe 1", -9.8, 0.8, 50.0, 14.2, "um")
    assert made.levels[1] == then.levels[1]
    assert made.figures["lines"] == [{"channel": "probe 1", "order": 0.4, "amplitude": 6.0}]
    assert [c["volts_per_unit"] for c in made.setting["channels"]] == [3937.0, 0.01]
    assert made.vectors[1] == vector(10 + 0j, "probe 2")


class SetUpLike:
    """The kit's set-up as a stored one."""

    def __init__(self):
        from dataclasses import fields
        from uuid import uuid4

        from store.records import SetUp, SetUpDraft

        same = {f.name: getattr(SET_UP, f.name) for f in fields(SetUpDraft)}
        self.set_up = SetUp(id=uuid4(), revision=1, **same)


def test_a_correction_that_cannot_be():
    set_up = SetUpLike().set_up
    for change, says in (
        (ChannelChange("probe 9", angle_deg=1.0), "no channel 'probe 9'. Its channels: probe 1, probe 2"),
        (ChannelChange("probe 1", 4.0, "mm/s"), "per mm/s is none of it. Write it per um"),
        (ChannelChange("probe 1", 7874.0, "um"), "measured with that set-up already"),
    ):
        with pytest.raises(Refusal) as refused:
            corrected(set_up, Correction((change,)), "0142/1")
        assert says in str(refused.value)
    moved = corrected(set_up, Correction(sensor_angle_deg=90.0), "0142/1")
    assert (moved.pulse.angle_deg, moved.channels) == (90.0, set_up.channels)


def test_one_at_a_time(desk):
    asked = ReviseAsked(key="key-00000001", runs=("0142/1",), sensor_angle_deg=9.0, why="x")
    with desk._alone(), pytest.raises(Refusal, match="being measured again just now"):
        desk.revise(asked, "ana")


def test_the_arithmetic_is_not_the_writers(stand, monkeypatch):
    """While counts are worked on the writer is free: nothing is worked on inside what it is asked."""
    inside, worked = [], []

    class Watched(AtOnce):
        def ask(self, act):
            inside.append(1)
            try:
                return super().ask(act)
            finally:
                inside.clear()

    def watched(*args):
        worked.append(list(inside))
        return revised(*args)

    monkeypatch.setattr("daq.again.revised", watched)
    a_real_reading(stand)
    asked = ReviseAsked(key="key-00000001", runs=("0142/1",), sensor_angle_deg=9.0, why="x")
    AgainDesk(Watched(stand.ledger), stand.history, Board(FakeClock())).revise(asked, "ana")
    assert worked == [[]]


def test_a_daemon_that_stops_keeps_nothing(stand):
    board = Board(FakeClock())
    desk = AgainDesk(AtOnce(stand.ledger), stand.history, board)
    a_real_reading(stand)
    board.close()
    asked = ReviseAsked(key="key-00000001", runs=("0142/1",), sensor_angle_deg=9.0, why="x")
    with pytest.raises(Refusal, match="is stopping; nothing was kept"):
        desk.revise(asked, "ana")
    assert stand.history.run("0142/1").readings[0].version == 1


def test_too_many_at_once_are_refused(stand, desk, monkeypatch):
    monkeypatch.setattr("daq.again.MOST_READINGS", 1)
    stand.run(None)
    stand.run(None)
    asked = RecomputeAsked(key="key-00000001", runs=("0142/1", "0142/2"))
    with pytest.raises(Refusal, match="hold 2 readings, and 1 may be measured again at once"):
        desk.recompute(asked, "ana")


# --- the build -------------------------------------------------------------------------------------------


def test_builds_that_differ():
    here = Build("0.2.0", "2.4.6", "x86_64 maker 6 143, X86_V4")
    assert here.other_than(here) == ()
    assert here.other_than(replace(here, software="0.1.0", processor="")) == (
        "software was 0.1.0, is 0.2.0",
        "processor was not known, is x86_64 maker 6 143, X86_V4",
    )


def test_processor_family(tmp_path, monkeypatch):
    """As the two kinds of /proc/cpuinfo name it (x86 and arm64 kernels, from memory)."""
    x86 = tmp_path / "x86"
    x86.write_text("processor\t: 0\nvendor_id\t: GenuineIntel\ncpu family\t: 6\nmodel\t\t: 143\n"
                   "model name\t: A name: with a colon\n\nprocessor\t: 1\nvendor_id\t: Other\n")  # fmt: skip
    arm = tmp_path / "arm"
    arm.write_text("processor\t: 0\nCPU implementer\t: 0x41\nCPU part\t: 0xd0c\n\n")
    assert build._listed(x86) == ["GenuineIntel", "6", "143"]
    assert build._listed(arm) == ["0x41", "0xd0c"]
    assert build._listed(tmp_path / "none") == []
    monkeypatch.setenv("OPENBLAS_NUM_THREADS", "3")
    assert build.processor().endswith(", several threads")
    one_thread()
    assert is_one_thread()
    assert not build.processor().endswith("threads")
    assert len(build.processor()) > len(build.platform.machine())


def test_the_correction_moves_by_what_the_sensitivity_was_wrong(stand, desk):
    """Job 0142: 10 um, and 4 + 3j um with 3 g at 140 mm (420 g.mm, U). Job 0150, typed 10 % too sensitive:
    10 um read 10 / 1.1, and no history fits it. Put right, -10 U / (-6 + 3j) is wanted,
    420 x 10 / sqrt(45) = 626.10 g.mm; with the vector as it was read it would have been 1.1 times less."""
    stand.run(Label.O)
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    wrong = replace(
        SET_UP, channels=tuple(replace(c, volts_per_unit=1.1 * c.volts_per_unit) for c in SET_UP.channels)
    )
    stand.set_up_id = stand.ledger.set_up(wrong).id
    stand.mount(job_number="0150")
    stand.run(Label.O, 10 / 1.1)
    with pytest.raises(Refusal):
        consult.correction(stand.history, "0150", reuse=True, planes=(1,))
    right = tuple(ChannelBody(channel=c.name, volts_per_unit=7874.0, unit="um") for c in SET_UP.channels)
    desk.revise(ReviseAsked(key="key-00000001", runs=("0150/1",), channels=right, why="typed wrong"), "ana")
    (plane,) = consult.correction(stand.history, "0150", reuse=True, planes=(1,)).planes
    assert abs(plane.add) == pytest.approx(626.099, abs=0.001)


def test_an_own_coefficient_and_its_verdict_follow_too(stand, desk):
    """Both runs 10 % too sensitive: each vector and the coefficient grow by 1.1, the weights needed stay."""
    stand.run(Label.O)
    stand.fit()
    stand.run(Label.O_T, 4 + 3j)
    before = consult.correction(stand.history, "0142", reuse=False, planes=(1,)).planes[0]
    (coefficient,) = stand.history.coefficients(plane=1, channel="probe 1")
    less = tuple(ChannelBody(channel=c.name, volts_per_unit=7874.0 / 1.1, unit="um") for c in SET_UP.channels)
    runs = ("0142/1", "0142/2")
    desk.revise(ReviseAsked(key="key-00000001", runs=runs, channels=less, why="typed wrong"), "ana")
    now = consult.correction(stand.history, "0142", reuse=False, planes=(1,)).planes[0]
    assert now.add == pytest.approx(before.add, rel=1e-9)
    (found,) = stand.history.coefficients(plane=1, channel="probe 1")
    assert found.value == pytest.approx(1.1 * coefficient.value, rel=1e-12)
    values = [v.value for v in stand.history.run("0142/2").readings[0].vectors[:2]]
    assert values == pytest.approx([4.4 + 3.3j] * 2, rel=1e-12)
