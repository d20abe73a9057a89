"""Threads that never die quietly: each has a heartbeat, and one that ends or hangs ends the daemon aloud.

They are daemon threads, so that one that hangs in a driver's library cannot keep the process from ending.
"""

from __future__ import annotations

import logging
import threading
from collections.abc import Callable
from dataclasses import dataclass, field

from daq.clock import Clock

Body = Callable[[threading.Event, Callable[[], None]], None]

log = logging.getLogger("revmark.daemon")


@dataclass(slots=True)
class Part:
    """One thread of the daemon: its body gets ``stop`` and ``beat``, to be called within ``limit_s``."""

    name: str
    body: Body
    limit_s: float
    """A heartbeat older than this means that the part hangs."""
    stop: threading.Event = field(default_factory=threading.Event)
    error: BaseException | None = None
    thread: threading.Thread | None = None
    beat_s: float = 0.0


class Supervisor:
    """Starts parts, watches them, and stops them in the order asked."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self.ended = threading.Event()
        """Set when a part has ended or failed."""

    def start(self, part: Part) -> None:
        part.beat_s = self._clock.monotonic()
        name = f"revmark-{part.name}"
        part.thread = threading.Thread(target=self._run, args=(part,), name=name, daemon=True)
        part.thread.start()

    def _run(self, part: Part) -> None:
        def beat() -> None:
            part.beat_s = self._clock.monotonic()

        try:
            part.body(part.stop, beat)
        except BaseException as error:
            part.error = error
            log.exception("the %s thread failed", part.name)
        finally:
            self.ended.set()

    def trouble(self, parts: list[Part]) -> str | None:
        """What is wrong with the parts, in a sentence; None when all are alive and beating."""
        now = self._clock.monotonic()
        for part in parts:
            if part.error is not None:
                return f"The {part.name} thread failed ({part.error})."
            if part.thread is not None and not part.thread.is_alive():
                return f"The {part.name} thread ended by itself."
            if now - part.beat_s > part.limit_s:
                return f"The {part.name} thread has not moved for {now - part.beat_s:.0f} s."
        return None

    def stop(self, part: Part, limit_s: float) -> bool:
        """Ask a part to end and wait for it; False when it did not within ``limit_s`` seconds."""
        part.stop.set()
        if part.thread is None:
            return True
        part.thread.join(limit_s)
        if part.thread.is_alive():
            log.error("the %s thread did not end within %.3g s", part.name, limit_s)
            return False
        return True
