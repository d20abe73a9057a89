"""Whether the devices behind the names are there, and are those the stand file means."""

from __future__ import annotations

import logging
from collections.abc import Sequence
from typing import Any

from config.errors import DriverError
from daq.drivers.ni.options import DaqmxOptions
from daq.drivers.ni.session import Session
from daq.drivers.ni.trouble import is_foreign


def require_present(session: Session, devices: Sequence[str], options: DaqmxOptions) -> None:
    """Raise DriverError for the first device that is not there, or that goes by another name now."""
    listed = session.device_names()
    there = {name.casefold() for name in listed}
    for name in devices:
        if name.casefold() in there:
            continue
        wanted = options.devices.get(name)
        serial = None if wanted is None else wanted.serial_number
        other = None if serial is None else _named(session, listed, serial)
        if other is not None:
            raise DriverError(
                f"The device with serial number {serial:X} is called {other} now, not {name}.",
                f"Give it its old name with its maker's tool, or write {other} in the stand file.",
                kind="config",
                retryable=False,
            )
        known = f"There are: {', '.join(listed)}." if listed else "There is no device at all."
        raise DriverError(
            f"{name} is not connected. {known}",
            "Check its cable, its power and its name; it is looked for by itself.",
            kind="gone",
        )


def listed(session: Session) -> list[tuple[str, str]]:
    """(an input of it, what it says of itself) for each device that is there."""
    found = []
    for name in session.device_names():
        device = session.device(name)
        found.append((f"{name}/ai0", f"{device.product_type}, serial {int(device.serial_num):08X}"))
    return found


def identify(session: Session, devices: Sequence[str], options: DaqmxOptions, log: logging.Logger) -> str:
    """The devices in words. Raises DriverError when one is not what the stand file says."""
    found = [_checked(session.device(name), name, options) for name in devices]
    kinds = {product for product, _ in found}
    if len(kinds) > 1:
        log.warning(
            "%s are of different types: their filters may delay differently, which turns phase; "
            "enter the difference as skew of the channels",
            " and ".join(devices),
        )
    words = (
        f"{name} ({product}, serial {serial:08X})"
        for name, (product, serial) in zip(devices, found, strict=True)
    )
    return ", ".join(words)


def _checked(device: Any, name: str, options: DaqmxOptions) -> tuple[str, int]:
    product, serial = str(device.product_type), int(device.serial_num)
    wanted = options.devices.get(name)
    if wanted is None:
        return product, serial
    if wanted.product is not None and wanted.product != product:
        raise _mismatch(f"{name} is a {product}, and the stand file says {wanted.product}.")
    if wanted.serial_number not in (None, serial):
        raise _mismatch(
            f"{name} has the serial number {serial:08X}, and the stand file says {wanted.serial_number:08X}."
        )
    return product, serial


def _mismatch(cause: str) -> DriverError:
    return DriverError(
        cause,
        "Connect the right device, or correct source.options.devices: another device is another set-up.",
        kind="config",
        retryable=False,
    )


def _named(session: Session, listed: Sequence[str], serial: int) -> str | None:
    """Which of the devices has a serial number; one that does not answer is passed over."""
    for name in listed:
        try:
            if int(session.device(name).serial_num) == serial:
                return name
        except Exception as error:
            if not is_foreign(error):
                raise
    return None
