"""Options of the simulated source, ``[source.options]`` in a stand file with ``driver = "simulated"``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from daq.drivers.base import DriverOptions
from daq.drivers.pace import Pace
from daq.drivers.rotor import RigidRotor

Above0 = Annotated[float, Field(gt=0)]
From0 = Annotated[float, Field(ge=0)]
Few = Annotated[tuple[float, ...], Field(min_length=1, max_length=64)]

FaultKind = Literal["dropout", "clip", "missed", "double", "unplug"]


class RotorOptions(DriverOptions):
    """The model's rotor, invented; z along the shaft from the centre of mass."""

    mass_kg: Above0 = 60.0
    transverse_kg_m2: Above0 = 3.0
    polar_kg_m2: Above0 = 0.7
    bearing_z_mm: tuple[float, float] = (-250.0, 250.0)
    stiffness_n_per_m: tuple[Above0, Above0] = (2.2e6, 2.4e6)
    damping_ns_per_m: tuple[From0, From0] = (900.0, 1000.0)
    plane_z_mm: Few = (-220.0, 220.0)
    """Weight planes, plane 1 first."""

    def rotor(self) -> RigidRotor:
        z1, z2 = self.bearing_z_mm
        return RigidRotor(
            self.mass_kg,
            self.transverse_kg_m2,
            self.polar_kg_m2,
            (z1 / 1e3, z2 / 1e3),
            self.stiffness_n_per_m,
            self.damping_ns_per_m,
        )


class FaultOptions(DriverOptions):
    """Something that goes wrong; times in seconds of the stream."""

    kind: FaultKind
    at_s: From0 | None = None
    """Since the source was first opened; None = at once."""
    seconds: Above0 = 1.0
    channel: str | None = None
    """``clip``: the probe's name; None = the first."""
    every: Annotated[int, Field(ge=1)] = 10
    """``missed``: one turn in so many has no pulse; 1 = none has. ``double``: one has a pulse too many, now
    here, now there in the turn."""


class SimulatedOptions(DriverOptions):
    rate_hz: Annotated[float, Field(ge=1000, le=204800)] = 12800.0
    block_s: Annotated[float, Field(ge=0.01, le=1.0)] = 0.1
    pace: Pace = 1.0
    """"real" or stream seconds per second."""
    full_scale_v: Above0 = 30.0
    seed: Annotated[int, Field(ge=0)] = 1

    rotor: RotorOptions = RotorOptions()
    probe_z_mm: tuple[float, ...] = ()
    """One per probe in stand-file order; empty = first half at bearing 1, the rest at bearing 2."""
    rotation: Literal["clockwise", "counterclockwise"] = "clockwise"
    """Seen from the end the stand angles are seen from."""
    mark_from_hole1_deg: float = 0.0
    """Where the rotor mark's triggering edge truly is, from hole 1 against rotation."""
    marks_deg: dict[str, float] = Field(default_factory=dict)
    """The same for single machines, by serial number."""

    tolerance_gmm: From0 = 955.0
    """Permissible residual unbalance of the whole rotor; the default is G 2.5 of 60 kg at 1500 r/min."""
    initial_times: tuple[From0, From0] = (3.0, 5.0)
    """A machine comes with so many tolerances (least, most), over all its planes."""
    sister_scatter: Annotated[float, Field(ge=0, le=0.3)] = 0.03
    """Relative sd of stiffness, of damping and of mass between machines."""
    run_scatter: Annotated[float, Field(ge=0, le=0.3)] = 0.01
    """Relative sd of a probe's response from start to start, real and imaginary part each."""

    start_rpm: Above0 = 1500.0
    """Where ``start`` runs up to when it names no speed."""
    run_up_rpm_per_s: Above0 = 300.0
    coast_down_rpm_per_s: Above0 = 300.0
    hunting: Annotated[float, Field(ge=0, le=0.05)] = 0.0002
    """Relative amplitude of the speed's swing in the dwell."""
    hunting_period_s: Above0 = 3.1

    gap_v: Few = (-10.0, -9.4)
    """Of displacement probes; repeated when there are more probes."""
    runout_um: Few = (0.3,)
    """0-peak, of displacement probes; repeated."""
    runout_deg: Few = (80.0, 310.0)
    """Lag of the runout's vector; repeated."""
    noise_mv: From0 = 2.0
    """White noise, sd, on every channel."""
    pulse_rest_v: float = -8.0
    pulse_depth_v: Above0 = 7.0
    """Down from rest when the stand file counts falling edges, up when it counts rising ones."""
    pulse_width_deg: Annotated[float, Field(gt=1, lt=180)] = 12.0
    edge_samples: From0 = 4.0
    """Samples that the edges of the pulse take: from 2 up a straight line finds the crossing; 0 = a step."""

    faults: tuple[FaultOptions, ...] = ()

    @model_validator(mode="after")
    def _ordered(self) -> SimulatedOptions:
        if self.initial_times[0] > self.initial_times[1]:
            raise ValueError("initial_times must be written least first")
        return self
