"""The control channel's paths, each with what answers it. One table for acts, one for questions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from config.stand import Stand
from daq import requests
from daq.again import AgainDesk
from daq.analysis import Analysis
from daq.board import Board, Live
from daq.clock import Clock
from daq.control import Act, Question
from daq.desk import Desk
from daq.live_flags import LiveFlags
from daq.marks import MarkDesk, waits_for
from daq.pump import Pump
from daq.rotor_desk import RotorDesk
from daq.writer import Writer
from store import asjson
from store.history import History
from store.records import Mark

Json = dict[str, Any]
NO_PARAMETERS: frozenset[str] = frozenset()


def acts(
    stand: Stand,
    writer: Writer,
    history: History,
    board: Board,
    pump: Pump,
    analysis: Analysis,
    clock: Clock,
) -> tuple[Act, ...]:
    desk = Desk(writer, history, board, stand.ends)
    marks = mark_desk(stand, writer, history, board, analysis, clock)
    rotor = RotorDesk(pump, history, board, stand)
    again = AgainDesk(writer, history, board)
    return (
        Act("/v1/machine", requests.MachineAsked, desk.add_machine),
        Act("/v1/mount", requests.MountAsked, desk.mount),
        Act("/v1/unmount", requests.UnmountAsked, desk.unmount),
        Act("/v1/weight", requests.WeightAsked, desk.weight),
        Act("/v1/weight/remove", requests.RemovalAsked, desk.remove),
        Act("/v1/weight/void", requests.WeightVoidAsked, desk.void_weight),
        Act("/v1/run/void", requests.VoidAsked, desk.void),
        Act("/v1/run/assign", requests.AssignAsked, desk.assign),
        Act("/v1/run/recompute", requests.RecomputeAsked, again.recompute),
        Act("/v1/run/revise", requests.ReviseAsked, again.revise),
        Act("/v1/mark", requests.MarkAsked, marks.ask),
        Act("/v1/mark/cancel", requests.CancelAsked, marks.cancel),
        Act("/v1/sim/start", requests.SimStartAsked, rotor.start),
        Act("/v1/sim/stop", requests.SimStopAsked, rotor.stop),
        Act("/v1/sim/next", requests.SimNextAsked, rotor.next),
        Act("/v1/sim/fault", requests.SimFaultAsked, rotor.fault),
    )


def questions(
    stand: Stand,
    writer: Writer,
    history: History,
    board: Board,
    _pump: Pump,
    analysis: Analysis,
    clock: Clock,
) -> tuple[Question, ...]:
    marks = mark_desk(stand, writer, history, board, analysis, clock)

    served, flags = stand_file_stamp(stand), LiveFlags(history, clock)

    def status(_given: Mapping[str, str]) -> Json:
        told = status_json(stand, history, board.read(), flags)
        return {**told, "stand_file_changed": stand_file_stamp(stand) != served}

    return (
        Question("/v1/hello", NO_PARAMETERS, lambda _given: {"stand": stand.name}),
        Question("/v1/status", NO_PARAMETERS, status),
        Question("/v1/mark/newest", NO_PARAMETERS, marks.newest),
        Question("/v1/mark/state/{key}", frozenset({"wait_s"}), marks.state),
    )


def stand_file_stamp(stand: Stand) -> tuple[int, int] | None:
    """Size and time of change of the stand file; None = it is gone."""
    try:
        told = stand.file.stat()
    except OSError:
        return None
    return told.st_size, told.st_mtime_ns


def mark_desk(
    stand: Stand, writer: Writer, history: History, board: Board, analysis: Analysis, clock: Clock
) -> MarkDesk:
    return MarkDesk(writer, history, board, clock, analysis, stand.run.slow_roll_limit_hz, shows(stand))


def shows(stand: Stand) -> dict[str, str]:
    """By channel, how the stand file has its amplitudes shown."""
    return {c.name: c.display.name for c in stand.channels}


def _pending_json(stand: Stand, history: History, live: Live, pending: Mark) -> Json:
    waits = waits_for(live, pending, history, stand.run.slow_roll_limit_hz)
    return {**asjson.mark_json(pending), "waits_for": waits}


def status_json(stand: Stand, history: History, live: Live, flags: LiveFlags) -> Json:
    """What ``revmark status --json`` prints."""
    mount, pending, info = history.current_mount(), history.pending_mark(), history.info()
    number = next((j.number for j in history.jobs() if mount and j.id == mount.job_id), None)
    told = {**asdict(live), "derived_flags": flags.of(live)}
    speed = told.pop("speed_hz")
    return {
        "stand": stand.name,
        "stand_file": str(stand.file),
        "store": str(stand.store_path),
        "live": {**told, "state": str(live.state), "speed_rpm": None if speed is None else speed * 60},
        "mount": asjson.mount_json(mount, number) if mount else None,
        "pending": None if pending is None else _pending_json(stand, history, live, pending),
        "sqlite": info.sqlite,
        "wal_reset_safe": info.sqlite_wal_reset_safe,
        "wal_bytes": info.wal_bytes,
    }
