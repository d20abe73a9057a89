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
from daq.requests import MachineAsked, MountAsked, PieceBody, RemovalAsked, SenseBody, WeightAsked
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
