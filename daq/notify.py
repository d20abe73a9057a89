"""Tells systemd how the daemon does (sd_notify): a few lines of socket code, silent without systemd."""

from __future__ import annotations

import os
import socket
from collections.abc import Mapping
from contextlib import suppress


class Notifier:
    """Sends states to the socket in NOTIFY_SOCKET (a path, or abstract with ``@``); silent without one."""

    def __init__(self, env: Mapping[str, str] = os.environ) -> None:
        name = env.get("NOTIFY_SOCKET", "")
        self._to = "\0" + name[1:] if name.startswith("@") else name
        self._status = ""

    def ready(self) -> None:
        """The store and the control channel answer."""
        self._send("READY=1")

    def stopping(self) -> None:
        self._send("STOPPING=1")

    def alive(self, status: str) -> None:
        """Feed the watchdog; call it only while every thread's heartbeat is fresh. ``status`` is one line."""
        lines = ["WATCHDOG=1"]
        if status != self._status:
            self._status = status
            lines.append(f"STATUS={status}")
        self._send("\n".join(lines))

    def _send(self, text: str) -> None:
        if not self._to:
            return
        with suppress(OSError), socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as link:
            link.sendto(text.encode(), self._to)
