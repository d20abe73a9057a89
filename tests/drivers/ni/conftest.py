"""One device server for most tests, as new for each; others for other worlds."""

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
def server(device_server: DeviceServer) -> DeviceServer:
    """Dev1 of ``ni_kit.world``, as new, also after a test that ended the process."""
    device_server.renew()
    return device_server


def pytest_collection_modifyitems(config: pytest.Config, items: list[pytest.Item]) -> None:
    """What needs a device is left out unless ``-m`` names it."""
    if "real" in (config.option.markexpr or ""):
        return
    left_out = [item for item in items if item.get_closest_marker("real")]
    items[:] = [item for item in items if item not in left_out]
    config.hook.pytest_deselected(items=left_out)
