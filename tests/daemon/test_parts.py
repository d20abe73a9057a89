"""A part of the daemon that fails or hangs ends the daemon aloud, with its run closed."""

from __future__ import annotations

from pathlib import Path

import pytest
from daemon_kit import Bay, until

from store.records import RunState

pytestmark = pytest.mark.slow

FAILS = """
import os
from {module} import {kind} as kind

whole = kind.{method}

def broken(self, *args, **kwargs):
    if os.path.exists({file!r}):
        raise ZeroDivisionError("planted")
    return whole(self, *args, **kwargs)

kind.{method} = broken
"""
HANGS = """
import os, time
import daq.daemon
from daq.analysis import Analysis

daq.daemon.HANGS_AFTER_S["analysis"] = 0.5
daq.daemon.ENDS_WITHIN_S["analysis"] = 0.2
whole = Analysis._post

def hanging(self):
    while os.path.exists({file!r}):
        time.sleep(0.01)
    whole(self)

Analysis._post = hanging
"""


def started(bay: Bay, patch: str) -> None:
    """A run with a reading, under a daemon with something planted in it."""
    assert bay.stop() == 0
    bay.start(patch=patch)
    bay.turn()
    bay.until_readings()


def ended(bay: Bay) -> int:
    assert bay.daemon is not None
    code = bay.daemon.wait(20.0)
    assert code is not None, bay.log
    return code


@pytest.mark.parametrize(
    ("part", "module", "kind", "method", "reason"),
    [
        ("driver", "daq.pump", "Pump", "_do_acts", "daemon stopped"),
        ("analysis", "daq.analysis", "Analysis", "_post", "the analysis failed"),
        ("control", "daq.control", "_Server", "on_tick", "daemon stopped"),
        ("writer", "daq.writer", "Writer", "_serve_one", "the daemon ended without closing it"),
    ],
)
def test_a_part_that_fails_ends_the_daemon(
    mounted: Bay, tmp_path: Path, part: str, module: str, kind: str, method: str, reason: str
) -> None:
    file = tmp_path / "break"
    started(mounted, FAILS.format(module=module, kind=kind, method=method, file=str(file)))
    file.touch()
    assert ended(mounted) == 75
    assert f"the {part} thread failed" in mounted.log
    assert "ZeroDivisionError: planted" in mounted.log
    assert f"The {part} thread failed (planted). The daemon ends; start it again." in mounted.log
    assert list(mounted.runtime.iterdir()) == []
    file.unlink()
    mounted.start()  # a failed writer's run is closed here
    with mounted.history() as history:
        run = history.run("0142/1")
    assert (run.state, run.reason) == (RunState.INTERRUPTED, reason)
    assert len(run.readings) >= 1


def test_a_part_that_hangs_ends_the_daemon(mounted: Bay, tmp_path: Path) -> None:
    file = tmp_path / "hang"
    started(mounted, HANGS.format(file=str(file)))
    file.touch()
    assert ended(mounted) == 75
    assert "The analysis thread has not moved for" in mounted.log
    assert "the analysis thread did not end within 0.2 s" in mounted.log
    file.unlink()
    mounted.start()
    with mounted.history() as history:
        assert history.run("0142/1").state is RunState.INTERRUPTED


def test_a_driver_with_a_defect_loses_its_source_and_is_opened_again(mounted: Bay, tmp_path: Path) -> None:
    """What a driver raises is a lost source, whatever it is: the daemon goes on."""
    file = tmp_path / "break"
    planted = FAILS.format(
        module="daq.drivers.simulated", kind="SimulatedDriver", method="_read", file=str(file)
    )
    started(mounted, planted)
    file.touch()
    mounted.until_state("source lost")
    until(lambda: not mounted.live()["run"], "the run to be closed")
    with mounted.history() as history:
        run = history.run("0142/1")
    assert run.state is RunState.INTERRUPTED
    assert "ZeroDivisionError: planted" in run.reason
    file.unlink()
    mounted.until_state("turning", 15.0)
    assert mounted.stop() == 0


def test_a_source_that_cannot_be_opened_as_configured_is_a_configuration_error(mounted: Bay) -> None:
    assert mounted.stop() == 0
    mounted.stand.write_text(mounted.stand.read_text().replace("seed = 3", "probe_z_mm = [1.0]"))
    done = mounted.serve().done()
    assert done.code == 78
    assert "probe_z_mm places 1 probes, and the stand file has 2." in done.err
    assert "Traceback" not in done.err
    assert list(mounted.runtime.iterdir()) == []
