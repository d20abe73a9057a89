"""The way to the devices: the driver on this PC, or a device server on another.

Imports the library, so it is imported only when a source is opened.
"""

from __future__ import annotations

import logging
import warnings
from typing import Any

import nidaqmx
import nidaqmx.errors
from nidaqmx import SessionInitializationBehavior
from nidaqmx.system import System

log = logging.getLogger("revmark.drivers.daqmx")
warnings.filterwarnings("default", category=nidaqmx.errors.DaqWarning)  # once, not at every read

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

    def __init__(self, server: str | None, name: str) -> None:
        """``name``: of the task at a server, so that one left behind there can be found again."""
        self._channel: Any = None
        self._name = name
        if server is None:
            self.system = System.local()
            return
        self._channel, self._calls = _channel(server)
        try:
            self.system = System.remote(nidaqmx.GrpcSessionOptions(self._calls, ""))
        except BaseException:
            self.close()
            raise

    def task(self) -> Any:
        """A new, empty task."""
        if self._channel is None:
            return nidaqmx.Task()
        return self._task(SessionInitializationBehavior.INITIALIZE_SERVER_SESSION)

    def clear_left_behind(self) -> None:
        """Clear the task that a server still holds because the link broke before it could be told to.

        A server keeps a task, and the device with it, however long its client is away.
        """
        try:
            self._task(SessionInitializationBehavior.ATTACH_TO_SERVER_SESSION).close()
        except nidaqmx.errors.Error as error:
            log.debug("no task was left behind, or it cannot be cleared: %s", error)

    def _task(self, how: SessionInitializationBehavior) -> Any:
        options = nidaqmx.GrpcSessionOptions(self._calls, self._name, initialization_behavior=how)
        return nidaqmx.Task(self._name, grpc_options=options)

    def device_names(self) -> tuple[str, ...]:
        """Devices that are there now."""
        return tuple(self.system.devices.device_names)

    def device(self, name: str) -> Any:
        return self.system.devices[name]

    def close(self) -> None:
        if self._channel is not None:
            self._channel.close()


def _channel(address: str) -> tuple[Any, Any]:
    """The channel to close, and the same with a deadline on every call."""
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

    # blocks of samples are larger than the library's usual limit of 4 MiB
    channel = grpc.insecure_channel(address, options=[("grpc.max_receive_message_length", -1)])
    return channel, grpc.intercept_channel(channel, Deadline())
