"""One store has one daemon; what a killed one left behind is in nobody's way; two stands on one PC."""

from __future__ import annotations

import json
import os
import signal
import socket
from collections.abc import Callable
from pathlib import Path

import pytest
from daemon_kit import Bay, no_traceback

pytestmark = pytest.mark.slow


def test_a_second_daemon_on_one_store_is_refused(mounted: Bay) -> None:
    assert mounted.daemon is not None
    done = mounted.run("serve", "--stand", os.fspath(mounted.stand))
    assert done.code == 1
    assert f"The store {mounted.store} is in use by another process (pid {mounted.daemon.pid})." in done.err
    no_traceback(done)
    mounted.a_run()  # the first one is unharmed
    assert mounted.run("status").code == 0


def test_a_second_daemon_by_another_name_of_the_store_is_refused(
    mounted: Bay, make_bay: Callable[..., Bay], tmp_path: Path
) -> None:
    """The store through a symbolic link is the same store."""
    link = tmp_path / "link.sqlite"
    link.symlink_to(mounted.store)
    other = make_bay(name="bay-2", store_name="link.sqlite")
    done = other.run("serve", "--stand", os.fspath(other.stand))
    assert done.code == 1, done.err
    assert "is in use by another process" in done.err


def test_what_a_killed_daemon_left_behind_does_no_harm(mounted: Bay) -> None:
    mounted.kill()
    left = sorted(path.suffix for path in mounted.runtime.iterdir())
    assert left == [".json", ".sock"]
    done = mounted.run("status")
    assert done.code == 1
    assert "No daemon is running on this PC. Start it with: revmark serve" in done.err
    assert "revmark serve --stand FILE" in done.err
    mounted.start()
    assert mounted.run("status").code == 0
    assert mounted.stop() == 0
    assert list(mounted.runtime.iterdir()) == []


def test_a_runtime_file_whose_port_belongs_to_somebody_else_names_no_daemon(bay: Bay) -> None:
    """The pid and the port of a killed daemon are soon another program's: its file is no proof."""
    (file,) = bay.runtime.glob("*.json")
    bay.kill()
    with socket.create_server(("127.0.0.1", 0)) as stranger:
        told = {**json.loads(file.read_text()), "port": stranger.getsockname()[1], "pid": os.getpid()}
        file.write_text(json.dumps(told))
        done = bay.fork("status")
        stranger.settimeout(10)
        link, _ = stranger.accept()
        link.close()
        link, _ = stranger.accept()
        link.sendall(b"SSH-2.0-other\r\n")
        link.close()
        ended = done.done()
    assert ended.code == 1
    assert "bay-1" in ended.err
    no_traceback(ended)


def test_two_stands_on_one_pc(bay: Bay, make_bay: Callable[..., Bay]) -> None:
    other = make_bay(name="bay-2", store_name="other.sqlite")
    other.start()
    done = bay.run("status")
    assert done.code == 1
    for name in (f"bay-1 ({bay.stand})", f"bay-2 ({other.stand})", "--stand FILE"):
        assert name in " ".join(done.err.split())
    for one in (bay, other):
        done = one.must("status", "--stand", os.fspath(one.stand), "--json")
        assert done.json["stand"] == one.name
    assert bay.run("status", REVMARK_STAND=os.fspath(other.stand)).out.startswith("stand    bay-2")
    assert bay.run("mark", "O").code == 1
    other.kill()  # its runtime file stays, and the other one is alone again
    assert bay.run("status").out.startswith("stand    bay-1")


def test_a_stand_whose_daemon_does_not_run_is_named(bay: Bay, make_bay: Callable[..., Bay]) -> None:
    other = make_bay(name="bay-2", store_name="other.sqlite")
    done = bay.run("status", "--stand", os.fspath(other.stand))
    assert done.code == 1
    assert f"No daemon runs for the stand file {other.stand}." in " ".join(done.err.split())
    assert f"revmark serve --stand {other.stand}" in " ".join(done.err.split())


def test_the_lock_ends_with_the_process(mounted: Bay) -> None:
    """The next one starts at once, whoever's pid is in the lock file."""
    mounted.kill()
    mounted.store.with_name("bay.sqlite.lock").write_text(f"{os.getpid()}\n")
    mounted.start()
    assert mounted.daemon is not None
    mounted.daemon.signal(signal.SIGTERM)
    assert mounted.daemon.wait(10.0) == 0
