"""The wall clock is set by hours in the middle of a run: it is recorded, and nothing else comes of it."""

from __future__ import annotations

from pathlib import Path

import pytest
from daemon_kit import Bay, until

from store.records import MarkState, RunState

pytestmark = pytest.mark.slow

SETTABLE = """
import daq.clock, time

def now_us(self):
    try:
        step_s = float(open({file!r}).read())
    except (OSError, ValueError):
        step_s = 0.0
    return time.time_ns() // 1000 + int(step_s * 1e6)

daq.clock.SystemClock.now_us = now_us
"""


@pytest.mark.parametrize(("step_s", "way"), [(-7200.0, "back by 7200.0 s"), (7200.0, "forward by 7200.0 s")])
def test_a_step_in_the_middle_of_a_run(mounted: Bay, tmp_path: Path, step_s: float, way: str) -> None:
    file = tmp_path / "step"
    patch = SETTABLE.format(file=str(file))
    assert mounted.stop() == 0
    mounted.start(patch=patch)
    mounted.mark("O", choose="next")
    mounted.a_run()
    key = mounted.mark("check", choose="next")["mark"]["key"]
    mounted.turn()
    mounted.until_run()
    file.write_text(str(step_s))
    with mounted.history() as history:
        until(lambda: any(e.kind == "clock_step" for e in history.events()), "the event")
        (step,) = [e for e in history.events() if e.kind == "clock_step"]
    assert way in step.text
    mounted.until_readings()
    mounted.coast()
    mounted.until_idle()
    mounted.a_run()  # a whole one after it
    last = mounted.must("mark", "trim", "--last", "--json").json["mark"]
    assert (last["state"], last["run"]) == ("labelled", "0142/3")
    with mounted.history() as history:
        mark = history.mark(key)
        assert mark is not None
        assert (mark.state, mark.run_name) == (MarkState.LABELLED, "0142/2")
        lines = history.runs()
        assert [line.name for line in lines] == ["0142/3", "0142/2", "0142/1"]
        assert all(line.state is RunState.COMPLETE for line in lines)
        assert all(line.readings >= 1 for line in lines)
        (reading, *_) = history.run("0142/2").readings
    assert 0.6 <= reading.duration_s < 2.0
    for words in (("run", "list"), ("run", "show", "0142/2"), ("job", "show", "0142"), ("status",)):
        mounted.must(*words)
    assert mounted.stop() == 0
    mounted.start(patch=patch)  # with the clock as it was set
    assert mounted.must("run", "list", "--json").json[0]["run"] == "0142/3"


def test_a_kill_after_a_step_back_is_recovered(mounted: Bay, tmp_path: Path) -> None:
    """The run that was open began, by the wall clock, an hour after now."""
    file = tmp_path / "step"
    file.write_text("3600")
    patch = SETTABLE.format(file=str(file))
    mounted.kill()
    mounted.start(patch=patch)
    mounted.turn()
    mounted.until_readings()
    mounted.kill()
    file.unlink()
    mounted.start(patch=patch)
    with mounted.history() as history:
        run = history.run("0142/1")
    assert run.state is RunState.INTERRUPTED
    assert run.ended_us is not None
    assert run.ended_us >= run.started_us
