"""Flags of the live vectors that hang on the job's records, and how often those are read."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any, cast
from uuid import UUID

from daq.board import Live, LiveVector
from daq.live_flags import KEEP_S, LiveFlags
from store.records import (
    ChannelSetUp,
    Job,
    JobStory,
    Machine,
    Model,
    Mount,
    Origin,
    PulseSetUp,
    Run,
    RunState,
    Sense,
    SetUp,
)

ID = UUID(int=1)


def story(turn: str) -> tuple[JobStory, Run]:
    """A job whose open run has probes at 0 and 90 deg as a pair, and no slow roll."""
    channels = tuple(
        ChannelSetUp(f"probe {i}", "displacement", "um", str(i), 7.874e-3, 1, deg, pair="bearing 1")
        for i, deg in ((1, 0.0), (2, 90.0))
    )
    pulse = PulseSetUp("once-per-rev", "0", "falling", None, 0.0)
    set_up = SetUp(ID, 1, "bay-1", ("drive", "free"), "drive", "top", channels, pulse, 12800.0, "simulated")
    machine = Machine(ID, "F-204", 1, Model(ID, "KR-22", 1, ()), 60.0, 25.0, 2.5)
    rotation = Sense(cast("Any", turn), "drive")
    mount = Mount(ID, ID, machine, rotation, (), None, None, "rigid", "belt", 1)
    run = Run(ID, "0142", 1, None, ID, ID, Origin.LIVE, "ana", {}, "1", 2, None, RunState.OPEN, "", None, ())
    return JobStory(Job(ID, "0142", "F-204", (25.0,), 0), (mount,), (run,), (), {ID: set_up}), run


def flags_of(turn: str) -> tuple[LiveFlags, SimpleNamespace]:
    told, run = story(turn)
    desk = SimpleNamespace(asked=0, now=100.0)

    def open_run() -> Run:
        desk.asked += 1
        return run

    history = SimpleNamespace(open_run=open_run, job_story=lambda _: told)
    clock = SimpleNamespace(monotonic=lambda: desk.now)
    return LiveFlags(cast("Any", history), cast("Any", clock)), desk


BACKWARD = (LiveVector("probe 1", "um", 3.0, 20.0, 0.01), LiveVector("probe 2", "um", 3.0, 290.0, 0.01))
"""METHODS 6.3: a backward circle for a rotation from X to Y."""


def test_a_whirl_against_the_mounted_rotation_is_flagged_live() -> None:
    flags, _ = flags_of("clockwise")
    both = ["backward_precession:probe 1", "backward_precession:probe 2"]
    assert flags.of(Live(run="0142/1", vectors=BACKWARD)) == both
    flags, _ = flags_of("counterclockwise")
    assert flags.of(Live(run="0142/1", vectors=BACKWARD)) == []


def test_a_vector_below_its_floor_takes_no_part() -> None:
    flags, _ = flags_of("clockwise")
    low = LiveVector("probe 2", "um", 0.02, None, 0.01)
    assert flags.of(Live(run="0142/1", vectors=(BACKWARD[0], low))) == ["below_floor:probe 2"]


def test_the_records_are_read_again_after_a_while_or_for_another_run() -> None:
    flags, desk = flags_of("clockwise")
    for _ in range(5):
        flags.of(Live(run="0142/1", vectors=BACKWARD))
    assert desk.asked == 1
    desk.now += KEEP_S + 0.1
    flags.of(Live(run="0142/1", vectors=BACKWARD))
    assert desk.asked == 2
    flags.of(Live(run="0142/2", vectors=BACKWARD))
    assert desk.asked == 3


def test_nothing_is_asked_while_nothing_turns() -> None:
    flags, desk = flags_of("clockwise")
    assert flags.of(Live(run="0142/1")) == flags.of(Live(vectors=BACKWARD)) == []
    assert desk.asked == 0
