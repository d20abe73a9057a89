"""Options of the ``daqmx`` driver, ``[source.options]``, and what they and the channels make of each input.

There is no sensitivity here and no default for one: the driver reads volts, and the stand file's
``sensitivity`` is the only place where volts become motion. Two places would sooner or later disagree.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from config.errors import DriverError
from daq.drivers.base import ChannelPlan, DriverOptions, ProbePlan
from daq.drivers.problems import did_you_mean

Sensor = Literal["voltage", "proximity probe", "IEPE accelerometer", "velocity"]
Terminal = Literal[
    "differential", "pseudo-differential", "referenced single-ended", "non-referenced single-ended"
]
Coupling = Literal["dc", "ac"]

IEPE_SETTLING_S = 8.0
"""A few time constants of an IEPE input, and its sensor's bias."""
_SENSOR_OF: dict[str, Sensor] = {"displacement": "proximity probe", "velocity": "velocity"}
"""What a probe is unless its options say so; anything else is a plain voltage: nothing is powered unasked."""
_PHYSICAL = re.compile(r"[^/,:]+/ai\d+", re.I | re.A)
"""One physical channel: a device, a slash, ai and a number; no list and no range."""
_SERVER = re.compile(r"(\[[0-9A-Fa-f:.]+\]|[A-Za-z0-9.-]+):\d{1,5}")

RangeV = Annotated[float, Field(ge=0.01, le=1000)]


class InputOptions(DriverOptions):
    """One ``[source.options.inputs."Dev1/ai0"]``: what is wired to an input; left out = as the stand says."""

    sensor: Sensor | None = None
    """None = by the channel's kind: displacement is a proximity probe, velocity a self-generating velocity
    sensor, anything else a voltage."""
    range_v: RangeV | None = None
    """Highest voltage either way, at the input; None = that of all inputs."""
    terminal: Terminal | None = None
    coupling: Coupling | None = None
    """Of the once-per-rev input (None = dc); for a probe the stand file's channel says it."""
    excitation_ma: Annotated[float, Field(gt=0, le=20)] | None = None
    """Constant current for an IEPE sensor; None = none is switched on."""
    divider: Annotated[float, Field(ge=1, le=1000)] = 1.0
    """So many times larger is the sensor's voltage than the input's: 3 = a divider of 1:3."""


class DeviceOptions(DriverOptions):
    """One ``[source.options.devices.Dev1]``: which device must stand behind a name."""

    product: str | None = None
    """Product type as the library tells it."""
    serial: str | None = None
    """Serial number as printed on it: hexadecimal."""

    @field_validator("serial")
    @classmethod
    def _hexadecimal(cls, serial: str | None) -> str | None:
        if serial is not None and not re.fullmatch(r"[0-9A-Fa-f]{1,8}", serial):
            raise ValueError("must be the hexadecimal number on the device's label, up to 8 digits")
        return serial

    @property
    def serial_number(self) -> int | None:
        return None if self.serial is None else int(self.serial, 16)


class DaqmxOptions(DriverOptions):
    """``[source.options]`` in a stand file with ``driver = "daqmx"``."""

    rate_hz: Annotated[float, Field(ge=100, le=1_000_000)]
    """Samples a second and channel asked for; the device's true rate counts."""
    coerce: bool = False
    """True = take the device's own rate although it is more than 1 % off."""
    range_v: RangeV
    """Highest voltage either way, at the inputs; a gap of -10 V needs more than 10, or a divider."""
    terminal: Terminal
    """How sensors are wired to the inputs."""
    server: str | None = None
    """``host:port`` of a device server; None = the driver on this PC. The way there is not encrypted."""
    synchronised: bool = False
    """True = the inputs lie on several devices that share one sample clock (modules of one chassis, or cards
    wired for it)."""
    settling_s: Annotated[float, Field(ge=0, le=60)] | None = None
    """Left out of the samples after each start; None = 8 s when a sensor is powered, else 0."""
    block_s: Annotated[float, Field(ge=0.05, le=0.2)] = 0.1
    """Length of a read. Shorter ones overrun the device, longer ones hold up the live display."""
    inputs: dict[str, InputOptions] = Field(default_factory=dict)
    """By the channel's ``input``."""
    devices: dict[str, DeviceOptions] = Field(default_factory=dict)
    """By the device's name."""

    @field_validator("server")
    @classmethod
    def _host_and_port(cls, server: str | None) -> str | None:
        if server is not None and not _SERVER.fullmatch(server):
            raise ValueError('must be written "host:port"')
        return server

    @model_validator(mode="after")
    def _powered(self) -> DaqmxOptions:
        for name, wired in self.inputs.items():
            if wired.sensor == "IEPE accelerometer" and wired.excitation_ma is None:
                raise ValueError(f"inputs.{name}: an IEPE accelerometer needs excitation_ma, such as 2.0")
        return self


@dataclass(frozen=True, slots=True)
class Input:
    """One input with everything decided."""

    channel: str
    """Name in the stand file."""
    physical: str
    sensor: Sensor
    range_v: float
    terminal: Terminal
    coupling: Coupling
    excitation_a: float
    """0 = none."""
    divider: float

    @property
    def device(self) -> str:
        return self.physical.partition("/")[0]


def inputs_of(options: DaqmxOptions, plan: ChannelPlan) -> tuple[Input, ...]:
    """The inputs in the order of a block's columns.

    Raises DriverError (``config``) that lists every mistake there is.
    """
    made = [_input(options, plan.once_per_rev.name, plan.once_per_rev.input, None)]
    made += [_input(options, probe.name, probe.input, probe) for probe in plan.probes]
    problems = [
        *(text for item in made for text in _problems(item)),
        *(text for probe in plan.probes for text in _contradictions(options, probe)),
        *_unknown(options, made),
        *_apart(options, made),
    ]
    if problems:
        raise DriverError(
            f"The inputs of the source cannot be used as described. {' '.join(problems)}",
            "Correct the stand file.",
            kind="config",
            retryable=False,
        )
    return tuple(made)


def devices_of(inputs: tuple[Input, ...]) -> tuple[str, ...]:
    """The devices, each once, in the order they are met."""
    return tuple(dict.fromkeys(item.device for item in inputs))


def settling_s(options: DaqmxOptions, inputs: tuple[Input, ...]) -> float:
    """What is left out after a start."""
    if options.settling_s is not None:
        return options.settling_s
    return IEPE_SETTLING_S if any(item.excitation_a for item in inputs) else 0.0


def _input(options: DaqmxOptions, channel: str, physical: str, probe: ProbePlan | None) -> Input:
    wired = options.inputs.get(physical, InputOptions())
    kind = "" if probe is None else probe.kind
    return Input(
        channel,
        physical,
        wired.sensor or _SENSOR_OF.get(kind, "voltage"),
        wired.range_v or options.range_v,
        wired.terminal or options.terminal,
        probe.coupling if probe is not None else wired.coupling or "dc",
        (wired.excitation_ma or 0.0) / 1e3,
        wired.divider,
    )


def _problems(item: Input) -> Iterator[str]:
    if not (_PHYSICAL.fullmatch(item.physical) and item.physical.isascii()):
        yield (
            f"{item.channel}: {item.physical!r} is no physical channel; write one device and one input, "
            'such as "Dev1/ai0".'
        )
    if item.sensor == "proximity probe" and item.coupling == "ac":
        yield (
            f"{item.channel}: a proximity probe is read dc-coupled; ac loses the gap voltage and turns "
            f'phase. If that is meant, write sensor = "voltage" in inputs."{item.physical}".'
        )
    if item.excitation_a and item.sensor not in ("IEPE accelerometer", "velocity"):
        yield f"{item.channel}: excitation_ma would put a current on a sensor of the kind {item.sensor!r}."
    if item.excitation_a and item.coupling == "dc":
        yield (
            f"{item.channel}: a sensor powered through its cable is ac-coupled; write "
            'coupling = "ac" at the channel, so that the set-up says so.'
        )


def _contradictions(options: DaqmxOptions, probe: ProbePlan) -> Iterator[str]:
    wired = options.inputs.get(probe.input, InputOptions())
    if wired.coupling is not None and wired.coupling != probe.coupling:
        yield f"{probe.name} is {probe.coupling}-coupled in the channel and {wired.coupling} in the options."


def _unknown(options: DaqmxOptions, made: list[Input]) -> Iterator[str]:
    wired, devices = [item.physical for item in made], devices_of(tuple(made))
    for name in options.inputs:
        if name not in wired:
            yield f"inputs.{name} belongs to no channel.{did_you_mean(name, wired)}"
    for name in options.devices:
        if name not in devices:
            yield f"devices.{name} has no channel.{did_you_mean(name, devices)}"


def _apart(options: DaqmxOptions, made: list[Input]) -> Iterator[str]:
    """Two clocks would turn every phase, without end."""
    home = made[0].device
    apart = [item for item in made if item.device != home]
    if apart and not options.synchronised:
        yield (
            f"{apart[0].channel} is on {apart[0].device} and {made[0].channel} on {home}: two devices have "
            "two clocks, and the phase drifts. Wire both to one device, or write synchronised = true when "
            "they share one sample clock (modules of one chassis)."
        )
