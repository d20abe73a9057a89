"""Working the simulated rotor or the next recording. A real source has no such verbs."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from config.stand import Stand
from daq.board import Board
from daq.drivers.base import FittedRotor, Piece
from daq.pump import Pump
from daq.requests import SimFaultAsked, SimNextAsked, SimStartAsked, SimStopAsked
from store.balance.angles import Ends, hole_angle_deg, plane_of, same_sense, wrap_deg
from store.history import History
from store.records import MarkPosition, Mount, Sense, WeightEvent

Json = dict[str, Any]


class RotorDesk:
    """Hands the driver what it is asked, with the weights fitted now at each start."""

    def __init__(self, pump: Pump, history: History, board: Board, stand: Stand) -> None:
        self._pump = pump
        self._history = history
        self._board = board
        self._stand = stand

    def start(self, asked: SimStartAsked, _peer: str) -> Json:
        told = {} if asked.speed_hz is None else {"rpm": asked.speed_hz * 60}
        return dict(self._pump.act("start", rotor=fitted_rotor(self._history, self._stand), **told))

    def stop(self, _asked: SimStopAsked, _peer: str) -> Json:
        return dict(self._pump.act("stop"))

    def next(self, asked: SimNextAsked, _peer: str) -> Json:
        return dict(self._pump.act("next", file=asked.file))

    def fault(self, asked: SimFaultAsked, _peer: str) -> Json:
        told = asked.model_dump(include={"kind", "seconds", "channel", "every"}, exclude_none=True)
        return dict(self._pump.act("fault", **told))


def fitted_rotor(history: History, stand: Stand) -> FittedRotor | None:
    """The mounted machine with its weights; None = nothing is mounted."""
    mount = history.current_mount()
    if mount is None:
        return None
    pieces = []
    for weight in history.weights(mount.id):
        sign = -1.0 if weight.act == "drilled" else 1.0
        angle = from_hole1_deg(weight, mount, stand.ends)
        pieces.append(Piece(weight.plane, sign * weight.mass_g * weight.radius_mm, angle))
    zero_end = Sense("clockwise", stand.identity.angles_seen_from)
    return FittedRotor(mount.machine.serial, tuple(pieces), same_sense(mount.rotation, zero_end, stand.ends))


def from_hole1_deg(weight: WeightEvent, mount: Mount, ends: Ends) -> float:
    """Angle of a fitted piece against rotation from hole 1 of its plane, wherever the rotor mark is."""
    plane = plane_of(mount, weight.plane)
    if weight.hole is not None:
        at_hole1 = replace(mount, marks=(MarkPosition(plane.number, 0.0),))
        return hole_angle_deg(plane, at_hole1, weight.hole, ends)
    from_mark = weight.angle_deg or 0.0
    return wrap_deg(from_mark - hole_angle_deg(plane, mount, 1, ends)) if plane.holes else from_mark
