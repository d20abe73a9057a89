"""What is refused at the desk by what the stand does now, and what is asked before it is written."""

from __future__ import annotations

import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "store"))

from store_kit import FakeClock, Stand

from config.errors import NeedsAnswer, Refusal
from daq.board import Board, StandState
from daq.desk import Desk
from daq.marks import MarkDesk
from daq.requests import (
    MachineAsked,
    MarkAsked,
    MarkPositionBody,
    MountAsked,
    PieceBody,
    RemovalAsked,
    SenseBody,
    WeightAsked,
    WeightVoidAsked,
)
from store.database import create_store


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
def board():
    made = Board(FakeClock())
    made.post(state=StandState.NO_PULSES)
    return made


@pytest.fixture
def desk(stand, board):
    return Desk(AtOnce(stand.ledger), stand.history, board, ("drive", "free"))


def weight(mass_g=3.0, hole=16, n=1, **other):
    piece = PieceBody(plane=1, mass_g=mass_g, hole=hole)
    return WeightAsked(key=f"key-{n:08d}", piece=piece, **{"locked_out": True, **other})


def test_a_weight_is_refused_while_turning_and_while_pulses_are_lost(desk, board):
    board.post(state=StandState.TURNING, speed_hz=25.0)
    with pytest.raises(Refusal, match=r"turning \(1500 r/min\)"):
        desk.weight(weight(), "ana")
    board.post(state=StandState.PULSES_LOST)
    with pytest.raises(Refusal, match="probes still vibrate"):
        desk.weight(weight(), "ana")


@pytest.mark.parametrize("state", [StandState.NO_PULSES, StandState.SOURCE_LOST, StandState.STARTING])
def test_no_pulses_is_not_standstill(desk, board, state):
    board.post(state=state)
    with pytest.raises(NeedsAnswer) as raised:
        desk.weight(weight(locked_out=False), "ana")
    assert raised.value.options == ("--locked-out",)
    assert "does not prove" in raised.value.cause


def test_a_second_piece_in_a_hole_is_asked(desk):
    desk.weight(weight(), "ana")
    with pytest.raises(NeedsAnswer, match="carries 3 g already; with this it would carry 4 g") as raised:
        desk.weight(weight(1.0, n=2), "ana")
    assert raised.value.options == ("--yes",)
    told = desk.weight(weight(1.0, n=2, confirmed=True), "ana")
    assert told["weights"][0]["mass_g"] == 1.0


def test_a_weight_heavier_than_its_bearing_carries_is_asked(desk, stand):
    # 20 kg x 9.80665 m/s2 / (157.08 rad/s)^2 = 7949 g.mm at 1500 r/min: 56.8 g at 140 mm is the static load
    desk.weight(weight(56.0), "ana")
    with pytest.raises(NeedsAnswer, match="more than the static load"):
        desk.weight(weight(58.0, hole=3, n=2), "ana")
    assert [w.mass_g for w in stand.history.weights(stand.history.current_mount().id)] == [56.0]


def test_the_force_is_told_with_the_cautions(desk):
    told = desk.weight(weight(), "ana")
    # 3 g at 140 mm and 25 Hz: 0.42e-3 kg.m x (50 pi)^2 = 10.36 N; 5.28 % of 20 kg
    assert told["force"]["force_n"] == pytest.approx(10.363, abs=0.001)
    assert told["force"]["share_of_static_load"] == pytest.approx(0.05284, abs=0.00002)
    assert any("lock out" in line for line in told["cautions"])


def test_a_retry_under_its_key_is_no_second_weight(desk, stand):
    first = desk.weight(weight(), "ana")
    again = desk.weight(weight(), "ana")
    assert first["weights"] == again["weights"]
    assert len(stand.history.weights(stand.history.current_mount().id)) == 1
    with pytest.raises(Refusal):
        desk.weight(weight(4.0, hole=5), "ana")


def test_which_weights_came_off_must_be_said(desk):
    desk.weight(weight(), "ana")
    for said in ({}, {"hole": 16, "all": True}):
        with pytest.raises(Refusal, match="Which weights"):
            desk.remove(RemovalAsked(key="key-00000009", plane=1, locked_out=True, **said), "ana")


def test_a_mount_is_refused_while_turning_and_from_an_unknown_end(desk, board):
    rotation = SenseBody(turn="clockwise", seen_from="top")
    asked = MountAsked(key="key-00000001", serial="F-204", job="0143", rotation=rotation)
    with pytest.raises(Refusal, match="no end named 'top'"):
        desk.mount(asked, "ana")
    board.post(state=StandState.TURNING, speed_hz=25.0)
    seen = asked.model_copy(update={"rotation": SenseBody(turn="clockwise", seen_from="drive")})
    with pytest.raises(Refusal, match="turning"):
        desk.mount(seen, "ana")


@pytest.mark.parametrize(
    ("loads", "words"), [((100.0, 500.0), "add up to 600 kg"), ((60.0,), r"1 bearing load\(s\) for 2")]
)
def test_bearing_loads_must_fit_the_rotor(desk, loads, words):
    asked = MachineAsked(
        key="key-00000001", serial="F-9", model="KR-22", rotor_mass_kg=60.0, service_hz=25.0,
        bearing_loads_kg=loads,
    )  # fmt: skip
    with pytest.raises(Refusal, match=words):
        desk.add_machine(asked, "ana")


def mount(*marks, **other):
    return MountAsked(
        key="key-00000001", serial="F-204", job="0142",
        rotation=SenseBody(turn="counterclockwise", seen_from="drive"), mark_how="degree wheel",
        marks=tuple(MarkPositionBody(plane=plane, from_hole1_deg=at) for plane, at in marks), **other,
    )  # fmt: skip


def test_another_mark_position_is_asked_and_answered_under_the_same_key(desk, stand):
    with pytest.raises(NeedsAnswer, match=r"was 30 deg from hole 1, now 67\.5: was the mark moved") as raised:
        desk.mount(mount((1, 67.5)), "ana")
    assert raised.value.options == ("--mark-moved", "--mark-mistyped")
    told = desk.mount(mount((1, 67.5), mark_change="mistyped"), "ana")
    assert told["marks"] == [{"plane": 1, "from_hole1_deg": 67.5}]
    assert [m.marks[0].from_hole1_deg for m in stand.history.mounts("0142")] == [67.5, 67.5]


@pytest.mark.parametrize("marks", [((1, 30.0), (1, 30.0)), ((None, 30.0), (None, 40.0))])
def test_a_mark_position_given_twice_is_refused(desk, marks):
    with pytest.raises(Refusal, match="given twice"):
        desk.mount(mount(*marks), "ana")


def test_one_plane_may_differ_from_what_holds_for_all(desk):
    told = desk.mount(mount((None, 30.0), (2, 45.0)), "ana")
    assert [m["from_hole1_deg"] for m in told["marks"]] == [30.0, 45.0]


def test_a_void_entry_needs_no_lock_out_and_may_be_retried(desk, stand, board):
    told = desk.weight(weight(), "ana")
    board.post(state=StandState.TURNING, speed_hz=25.0)
    asked = WeightVoidAsked(key="key-00000002", number=told["weights"][0]["number"], why="wrong hole")
    gone = desk.void_weight(asked, "rui")
    assert [(w["act"], w["void"]) for w in gone["weights"]] == [("fitted", "wrong hole")]
    assert desk.void_weight(asked, "rui") == gone
    assert stand.history.weights(stand.history.current_mount().id) == ()


def test_revising_a_mounted_machine_says_how_it_is_mounted(desk):
    told = desk.add_machine(MachineAsked(key="key-00000001", serial="F-204", grade_mm_s=6.3), "ana")
    (note,) = told["notes"]
    assert note.startswith(
        "F-204 is mounted as its revision 1; mount it again for the new one (its tolerance"
    )
    assert (told["grade_mm_s"], told["rotor_mass_kg"], told["model"]) == (6.3, 40.0, "KR-22")


def test_the_same_machine_again_or_another_says_nothing(desk):
    assert desk.add_machine(MachineAsked(key="key-00000001", serial="F-204"), "ana")["notes"] == []
    other = MachineAsked(
        key="key-00000002", serial="F-211", model="KR-22", rotor_mass_kg=40.0, service_hz=25.0
    )  # fmt: skip
    assert desk.add_machine(other, "ana")["notes"] == []


def test_a_new_mass_must_fit_the_loads_that_are_kept(desk):
    with pytest.raises(Refusal, match="add up to 40 kg, the rotor has 60 kg"):
        desk.add_machine(MachineAsked(key="key-00000001", serial="F-204", rotor_mass_kg=60.0), "ana")


class NoAnalysis:
    def want_fresh(self, from_sample):
        raise AssertionError("a run that is named needs no new reading")


def test_a_named_run_is_labelled_also_while_the_rotor_turns(stand, board):
    marks = MarkDesk(AtOnce(stand.ledger), stand.history, board, FakeClock(), NoAnalysis(), 5.0, {})
    stand.run(None)
    board.post(state=StandState.TURNING, speed_hz=25.0)
    told = marks.ask(MarkAsked(key="key-00000001", label="O", run="0142/1"), "rui")
    assert (told["mark"]["state"], told["mark"]["run"], told["reading"]["label"]) == (
        "labelled",
        "0142/1",
        "O",
    )
    with pytest.raises(NeedsAnswer, match="is labelled O; it would become check"):
        marks.ask(MarkAsked(key="key-00000002", label="check", run="0142/1", reading=1), "rui")
    for wrong, says in (({"reading": 1}, "no run"), ({"run": "0142/1", "choose": "last"}, "one of the two")):
        with pytest.raises(Refusal, match=says):
            marks.ask(MarkAsked(key="key-00000003", label="O", **wrong), "rui")
