"""The conformance suite on the driver and the source of a stand file: for people who write drivers."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from config.errors import Refusal
from config.stand import Stand
from daq.clock import Clock
from daq.drivers import conformance
from daq.drivers.base import SourceInfo
from daq.drivers.conformance import Finding, Subject
from daq.drivers.registry import AnyDriver, driver_class, make_driver
from daq.setup import channel_plan

LOSS_S = 0.5
"""Length of the loss that a driver with the verb ``fault`` is asked for (``kind="dropout"``)."""


def check_driver(name: str, stand: Stand, clock: Clock, *, falls_silent: bool = True) -> list[Finding]:
    """One finding per rule, on the source that ``stand`` describes, opened anew for each.

    Raises Refusal when the stand has another driver, DriverError when the source cannot be opened at all.
    """
    driver_class(name)
    if stand.source.driver != name:
        raise Refusal(
            f"The stand file {stand.file.name} uses the driver {stand.source.driver!r}, not {name!r}.",
            f"Name a stand file whose source has driver = {name!r}.",
        )
    driver = _maker(stand, clock)()
    try:
        info = driver.open()
    finally:
        driver.close()
    return conformance.run(_subject(stand, clock, info, falls_silent=falls_silent), clock)


def _maker(stand: Stand, clock: Clock) -> Callable[[], AnyDriver]:

    def make() -> AnyDriver:
        source = stand.source
        return make_driver(
            source.driver, source.options, channel_plan(stand), clock=clock, folder=stand.folder
        )

    return make


def _subject(stand: Stand, clock: Clock, info: SourceInfo, *, falls_silent: bool) -> Subject:
    """What the suite needs to know of a stand's driver, as far as its verbs tell it."""
    verbs = driver_class(stand.source.driver).verbs
    return Subject(
        _maker(stand, clock),
        start=_start(verbs, stand.source.options),
        lose=_losing(info.rate_hz) if "fault" in verbs else None,
        falls_silent=falls_silent,
    )


def _start(verbs: tuple[str, ...], options: Mapping[str, Any]) -> tuple[str, Mapping[str, Any]] | None:
    """How samples are made to come; a source that streams by itself is left alone, a rotor too."""
    if "next" not in verbs:
        return None
    files = options.get("files") or [None]
    return "next", {"file": files[0]}


def _losing(rate_hz: float) -> Callable[[AnyDriver], int]:
    def lose(driver: AnyDriver) -> int:
        driver.act("fault", kind="dropout", seconds=LOSS_S)
        return round(LOSS_S * rate_hz)

    return lose
