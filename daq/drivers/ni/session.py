"""The way to the devices: the driver on this PC, or a device server on another.

Imports the library, so it is imported only when a source is opened.
"""

from __future__ import annotations

from typing import Any

import nidaqmx
from nidaqmx.system import System

DEADLINES_S = {
    "GetSystemInfoAttributeUInt32": 1.0,
    "GetSystemInfoAttributeString": 3.0,
    "ReadAnalogF64": 3.0,
    "StopTask": 1.5,
    "ClearTask": 1.5,
}
"""How long a call to a server may take; the library itself would wait for ever."""
DEADLINE_S = 10.0
"""Any other call: building and starting a task."""


class Session:
    """One way to the devices. ``close`` it."""

    def __init__(self, server: str | None) -> None:
        self._channel: Any = None
        self._options: Any = None
        if server is None:
            self.system = System.local()
            return
        self._channel, self._options = _server(server)
        try:
            self.system = System.remote(self._options)
        except BaseException:
            self.close()
            raise

    def task(self) -> Any:
        """A new, empty task."""
        return nidaqmx.Task(grpc_options=self._options)

    def device_names(self) -> tuple[str, ...]:
        """Devices that are there now."""
        return tuple(self.system.devices.device_names)

    def device(self, name: str) -> Any:
        return self.system.devices[name]

    def close(self) -> None:
        if self._channel is not None:
            self._channel.close()


def _server(address: str) -> tuple[Any, Any]:
    """(channel, session options). Blocks of samples are larger than the library's usual limit of 4 MiB."""
    import grpc

    class Details(grpc.ClientCallDetails):  # type: ignore[misc, unused-ignore]
        def __init__(self, of: Any) -> None:
            self.method, self.metadata = of.method, of.metadata
            self.credentials, self.compression = of.credentials, of.compression
            self.wait_for_ready = of.wait_for_ready
            self.timeout = DEADLINES_S.get(of.method.rpartition("/")[2], DEADLINE_S)

    class Deadline(grpc.UnaryUnaryClientInterceptor):  # type: ignore[misc, unused-ignore]
        def intercept_unary_unary(self, continuation: Any, details: Any, request: Any) -> Any:
            return continuation(Details(details), request)

    channel = grpc.insecure_channel(address, options=[("grpc.max_receive_message_length", -1)])
    return channel, nidaqmx.GrpcSessionOptions(grpc.intercept_channel(channel, Deadline()), "")
