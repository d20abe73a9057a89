"""What systemd is told (sd_notify(3), DAQ.md section 5): a datagram of lines, path or abstract socket."""

from __future__ import annotations

import socket

import pytest

from daq.notify import Notifier


@pytest.fixture(params=["path", "abstract"])
def receiver(request, tmp_path):
    name = str(tmp_path / "n.sock") if request.param == "path" else f"@revmark-test-{tmp_path.name}"
    link = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
    link.bind(name if request.param == "path" else "\0" + name[1:])
    link.settimeout(2)
    yield name, link
    link.close()


def test_ready_alive_and_stopping_are_told(receiver):
    name, link = receiver
    notifier = Notifier({"NOTIFY_SOCKET": name})
    notifier.ready()
    notifier.alive("turning")
    notifier.alive("turning")
    notifier.alive("source lost: unplugged")
    notifier.stopping()
    assert [link.recv(200) for _ in range(5)] == [
        b"READY=1",
        b"WATCHDOG=1\nSTATUS=turning",
        b"WATCHDOG=1",
        b"WATCHDOG=1\nSTATUS=source lost: unplugged",
        b"STOPPING=1",
    ]


def test_without_systemd_nothing_happens():
    Notifier({}).ready()
    Notifier({"NOTIFY_SOCKET": "/nowhere/at/all"}).alive("x")
