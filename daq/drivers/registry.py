"""Drivers by name: ours and those third parties register, imported only when one is used.

A third party's package registers ``NAME = "package.module:Class"`` in the entry-point group
``revmark.drivers``. A name of ours cannot be taken over.
"""

from __future__ import annotations

import importlib
import logging
from collections.abc import Iterator, Mapping
from importlib.metadata import entry_points
from pathlib import Path
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from config.errors import DriverError
from daq.clock import Clock
from daq.drivers.base import ChannelPlan, Driver, DriverOptions
from daq.drivers.problems import did_you_mean, sentences

GROUP = "revmark.drivers"
BUILT_IN: dict[str, str] = {
    "daqmx": "daq.drivers.daqmx:DaqmxDriver",
    "replay": "daq.drivers.replay:ReplayDriver",
    "serial": "daq.drivers.serial_driver:SerialDriver",
    "simulated": "daq.drivers.simulated:SimulatedDriver",
}
PACKAGES = {"serial": "pyserial"}
"""The package to install where it is not called like the module it brings."""
AnyDriver = Driver[Any]


def driver_names() -> tuple[str, ...]:
    """Every registered name, sorted; nothing is imported."""
    return tuple(sorted(_targets()))


def driver_class(name: str) -> type[AnyDriver]:
    """The class behind a name.

    Raises DriverError: ``config`` for an unknown name, ``no_driver`` when its code or a library it
    needs cannot be loaded.
    """
    target = _targets().get(name)
    if target is None:
        known = ", ".join(driver_names())
        hint = did_you_mean(name, driver_names())
        raise DriverError(
            f"There is no driver {name!r}.{hint}", f"Known: {known}.", kind="config", retryable=False
        )
    return _load(name, target)


def options_problems(name: str, options: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Every mistake in a stand file's ``[source]``, as (dotted key, sentence); empty = none."""
    try:
        kind = driver_class(name)
    except DriverError as error:
        return [("source.driver", str(error))]
    try:
        kind.Options.model_validate(dict(options))
    except ValidationError as error:
        found = sentences(error, _all_keys(kind.Options))
        return [(f"source.options.{key}".rstrip("."), text) for key, text in found]
    return []


def make_driver(
    name: str,
    options: Mapping[str, Any],
    channels: ChannelPlan,
    *,
    clock: Clock,
    log: logging.Logger | None = None,
    folder: Path | None = None,
) -> AnyDriver:
    """A closed driver, ready to open. Raises DriverError (``config``, ``no_driver``)."""
    kind = driver_class(name)
    problems = options_problems(name, options)
    if problems:
        listed = " ".join(f"{key}: {text}" for key, text in problems)
        raise DriverError(
            f"The options of driver {name!r} are wrong. {listed}",
            "Correct the stand file.",
            kind="config",
            retryable=False,
        )
    return kind(kind.Options.model_validate(dict(options)), channels, clock=clock, log=log, folder=folder)


def _targets() -> dict[str, str]:
    return {point.name: point.value for point in entry_points(group=GROUP)} | BUILT_IN


def _load(name: str, target: str) -> type[AnyDriver]:
    module, _, attribute = target.partition(":")
    try:
        found = getattr(importlib.import_module(module), attribute)
    except ModuleNotFoundError as error:
        package = PACKAGES.get(error.name or "", error.name)
        raise DriverError(
            f"Driver {name!r} needs the library {package!r}, which is not installed.",
            f"Install it in revmark's environment: python -m pip install {package}.",
            kind="no_driver",
            retryable=False,
        ) from error
    except Exception as error:
        raise _unusable(name, f"{target} cannot be loaded: {type(error).__name__}: {error}") from error
    if not (isinstance(found, type) and issubclass(found, Driver)):
        raise _unusable(name, f"{target} is no driver class")
    return found


def _unusable(name: str, why: str) -> DriverError:
    return DriverError(
        f"Driver {name!r} cannot be used: {why}.",
        "Update or remove the package that brings it.",
        kind="no_driver",
        retryable=False,
    )


def _all_keys(model: type[BaseModel]) -> Iterator[str]:
    for key, field in model.model_fields.items():
        yield key
        for part in (field.annotation, *get_args(field.annotation)):
            if isinstance(part, type) and issubclass(part, DriverOptions):
                yield from _all_keys(part)
