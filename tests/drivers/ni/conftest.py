"""One device server for all tests of a file; its faults are taken back after each test."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import pytest
from ni_kit import DeviceServer, world


@pytest.fixture
def serve() -> Iterator[Callable[..., DeviceServer]]:
    """``serve(step_s=...)`` starts a server whose Dev1 is like that; ``serve(about=...)`` another world."""
    started: list[DeviceServer] = []

    def start(about: dict[str, Any] | None = None, **device: Any) -> DeviceServer:
        started.append(DeviceServer(world(**device) if about is None else about))
        return started[-1]

    yield start
    for server in started:
        server.close()


@pytest.fixture
def server(serve: Callable[..., DeviceServer]) -> DeviceServer:
    """Dev1, all inputs at once."""
    return serve()
