"""What a service manager hears of a real daemon: ready, alive, how it does, stopping."""

from __future__ import annotations

import socket
import tempfile
import time
from pathlib import Path

import pytest

from config.templates import template_text


@pytest.fixture
def heard():
    """A socket as systemd has it, in a short path, and a way to wait for a line."""
    with tempfile.TemporaryDirectory(prefix="rv-") as folder:
        link = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        link.bind(f"{folder}/notify")
        link.settimeout(1.0)
        lines: list[str] = []

        def wait_for(start: str, seconds: float = 30.0) -> str:
            until = time.monotonic() + seconds
            while time.monotonic() < until:
                found = [line for line in lines if line.startswith(start)]
                if found:
                    return found[-1]
                try:
                    lines.extend(link.recv(4096).decode().splitlines())
                except TimeoutError:
                    continue
            raise AssertionError(f"never heard {start!r} in {lines}")

        yield f"{folder}/notify", wait_for, lines
        link.close()


@pytest.mark.slow
def test_the_service_manager_hears_ready_alive_the_source_and_stopping(operator, heard):
    path, wait_for, lines = heard
    operator.env["NOTIFY_SOCKET"] = path
    text = template_text("simulated").replace('pace = "real"', "pace = 4")
    (operator.folder / "bay.toml").write_text(text)
    with operator.serving("bay.toml"):
        wait_for("READY=1")
        wait_for("WATCHDOG=1")
        assert "simulated rotor" in wait_for("STATUS=no pulses")
        operator.type("sim", "fault", "unplug", "--for", "20 s")
        wait_for("STATUS=source lost; lost: ")
        lines.clear()
        wait_for("WATCHDOG=1")  # a source that is opened again and again is alive
    wait_for("STOPPING=1")
    assert Path(path).exists()
