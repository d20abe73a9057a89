"""The simulated stand: a real driver whose rotor is arithmetic. No hardware needed.

What it does not model: gravity sag, bowed or flexible rotors, bearings that differ by direction (probes at
one z see the same circle), transients (the response follows the speed as if every speed were held),
harmonics, misalignment, rubs, temperature, electrical hum, a sensor's own filter or delay, a mark whose
angle wanders, wrong calibration, the range of proximity probes, and trouble with the clock. Runout is one
1X vector per probe. A sister machine differs by one factor each for stiffness, damping and mass. With
rising edges in the stand file the mark is a raised key whose leading edge counts; with falling ones a notch.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, ClassVar

import numpy as np
from numpy.typing import NDArray
from pydantic import Field

from config.errors import DriverError, Refusal
from daq.drivers.base import Chunk, Driver, DriverOptions, EndOfSource, SourceInfo
from daq.drivers.plan import FittedRotor
from daq.drivers.sim.faults import FaultList, fault_from
from daq.drivers.sim.machine import ProbeView, SimMachine, build_machine, generator, run_factors, with_pieces
from daq.drivers.sim.motion import Law, Motion
from daq.drivers.sim.options import FaultOptions, SimulatedOptions
from daq.drivers.sim.paint import FULL_COUNTS, Painter

BUFFER_S = 10.0
"""A reader this late loses samples, as with a real device's buffer."""
EARLY_S = 1e-3
"""A wait may come back this much early."""
SAMPLES_PER_TURN = 40
"""Fewest; limits the speed."""

_NOBODY = FittedRotor(serial="")


class StartArgs(DriverOptions):
    rpm: Annotated[float, Field(gt=0)] | None = None
    rotor: FittedRotor | None = None


class StopArgs(DriverOptions):
    pass


class SimulatedDriver(Driver[SimulatedOptions]):
    """Streams always, at standstill too; ``start``, ``stop`` and ``fault`` are its verbs."""

    name = "simulated"
    Options: ClassVar[type[DriverOptions]] = SimulatedOptions
    verbs = ("start", "stop", "fault")

    def _prepare(self) -> None:
        options = self.options
        law = Law(
            options.run_up_rpm_per_s / 60,
            options.coast_down_rpm_per_s / 60,
            options.hunting,
            1 / options.hunting_period_s,
        )
        self._motion = Motion(options.rate_hz, law)
        self._painter = Painter(options, self.channels, generator(options.seed, "noise"))
        self._frames = round(options.block_s * options.rate_hz)
        self._faults = FaultList()
        self._planned = list(options.faults)
        self._at = 0
        """Next sample, counted since the first open, lost and unplugged time included."""
        self._lost = 0
        self._left_s: float | None = None
        self._back_s = 0.0
        self._starts: dict[str, int] = {}
        self._stand_up(_NOBODY)

    # --- source --------------------------------------------------------------------------------------

    def _open(self) -> SourceInfo:
        self._check_probes()
        self._plan_faults()
        self._view = ProbeView(self.options, self.channels)
        now_s = self.clock.monotonic()
        if now_s < self._back_s:
            raise DriverError(
                "The simulated source is unplugged.", "It comes back by itself; wait.", kind="gone"
            )
        options = self.options
        with self._lock:
            if self._left_s is not None:
                self._skip(round((now_s - self._left_s) * self._per_s))
            self._begin(now_s)
        columns = 1 + len(self.channels.probes)
        return SourceInfo(
            rate_hz=options.rate_hz,
            dtype="int16",
            volts_per_count=(self._painter.volts_per_count,) * columns,
            full_scale_counts=(-FULL_COUNTS, FULL_COUNTS - 1),
            origin="simulated",
            description=f"simulated rotor, seed {options.seed}, {options.pace:g} times real pace",
        )

    def _read(self, timeout_s: float) -> Chunk | EndOfSource | None:
        with self._lock:
            wait_s = self._next_due_s() - self.clock.monotonic()
        if wait_s > timeout_s:
            self._pause(timeout_s)
            return None
        if wait_s > 0 and self._pause(wait_s):
            return None
        with self._lock:
            if wait_s < -BUFFER_S:
                self._lose(round(-wait_s * self._per_s))
            if self._next_due_s() > self.clock.monotonic() + EARLY_S:
                return None
            return self._next_chunk()

    def _close(self) -> None:
        if self._left_s is None:
            self._left_s = self.clock.monotonic()

    @property
    def _per_s(self) -> float:
        """Samples in one second of the clock."""
        return self.options.rate_hz * self.options.pace

    def _begin(self, now_s: float) -> None:
        self._origin_s, self._origin = now_s, self._at
        self._left_s = None
        self._lost = 0

    def _due_s(self, sample: int) -> float:
        return self._origin_s + (sample - self._origin) / self._per_s

    def _skip(self, samples: int) -> None:
        self._motion.skip(samples)
        self._at += samples

    def _lose(self, samples: int) -> None:
        self._skip(samples)
        self._lost += samples

    def _next_due_s(self) -> float:
        """When the next chunk is complete, after any break that is due now."""
        while (fault := self._faults.next_break(self._at, 1)) is not None:
            self._faults.done(fault)
            samples = fault.end - self._at
            if fault.kind == "unplug" and samples > 0:
                self._unplug(samples / self._per_s)
            self._lose(max(samples, 0))
        return self._due_s(self._at + self._frames_ahead())

    def _frames_ahead(self) -> int:
        fault = self._faults.next_break(self._at, self._frames)
        return self._frames if fault is None else fault.begin - self._at

    def _next_chunk(self) -> Chunk:
        counts = self._counts(self._frames_ahead())
        lost, self._lost = self._lost, 0
        return Chunk(counts, lost_before=lost, mono_s=self._due_s(self._at))

    def _unplug(self, seconds: float) -> None:
        self._back_s = self.clock.monotonic() + seconds
        raise DriverError("The simulated source was unplugged.", "Plug it in again.", kind="gone")

    def _counts(self, frames: int) -> NDArray[np.int16]:
        turns, hz = self._motion.take(frames)
        touching = [(f, f.covers(self._at, frames)) for f in self._faults.touching(self._at, frames)]
        self._at += frames
        return self._painter.paint(turns, hz, self._vectors, touching)

    # --- rotor ---------------------------------------------------------------------------------------

    def _vectors(self, hz: NDArray[np.float64]) -> NDArray[np.complex128]:
        return self._view.vectors(self._machine.rotor, self._unbalance_gmm, self._factors, hz)

    def _stand_up(self, fitted: FittedRotor) -> None:
        """Put a machine with its weights on the stand; each time is a new run with its own scatter."""
        options, serial = self.options, fitted.serial
        run = self._starts.get(serial, 0)
        self._starts[serial] = run + 1
        self._fitted = fitted
        self._machine: SimMachine = build_machine(options, serial)
        mark_deg = options.marks_deg.get(serial, options.mark_from_hole1_deg)
        clockwise = options.rotation == "clockwise"
        from_hole1 = with_pieces(self._machine.unbalance_gmm, fitted, clockwise=clockwise)
        self._unbalance_gmm = from_hole1 * np.exp(-1j * np.radians(mark_deg))
        self._factors = run_factors(options, serial, run, len(self.channels.probes))

    def _check_probes(self) -> None:
        places, probes = len(self.options.probe_z_mm), len(self.channels.probes)
        if places not in (0, probes):
            raise _config(
                f"probe_z_mm places {places} probes, and the stand file has {probes}.",
                "Give one z per probe, or none.",
            )

    def _plan_faults(self) -> None:
        """Take the faults of the options, at the first open."""
        while self._planned:
            try:
                self._faults.add(fault_from(self._planned[0], 0, self.options.rate_hz, self.channels.names))
            except Refusal as error:
                raise _config(error.cause, error.remedy) from error
            del self._planned[0]

    # --- verbs ---------------------------------------------------------------------------------------

    def _act(self, verb: str, args: Mapping[str, Any]) -> Mapping[str, Any]:
        if verb == "start":
            return self._start(StartArgs.model_validate(dict(args)))
        if verb == "stop":
            StopArgs.model_validate(dict(args))
            return self._coast_down()
        return self._inject(FaultOptions.model_validate(dict(args)))

    def _start(self, args: StartArgs) -> Mapping[str, Any]:
        rpm = self.options.start_rpm if args.rpm is None else args.rpm
        most_rpm = 60 * self.options.rate_hz / SAMPLES_PER_TURN
        if rpm > most_rpm:
            raise Refusal(
                f"{rpm:g} r/min is too fast for {self.options.rate_hz:g} samples a second.",
                f"Stay below {most_rpm:g} r/min.",
            )
        fitted = args.rotor or _NOBODY
        self._check_planes(fitted)
        if self._motion.phase == "still":
            self._stand_up(fitted)
        elif args.rotor is not None and args.rotor != self._fitted:
            raise Refusal("The simulated rotor is turning.", "Stop it before its machine or weights change.")
        self._motion.go(rpm / 60)
        return self._report(f"goes to {rpm:g} r/min; pieces fitted: {len(self._fitted.pieces)}.")

    def _coast_down(self) -> Mapping[str, Any]:
        if self._motion.phase == "still":
            return self._report("stands still already.")
        self._motion.go(0.0)
        return self._report(f"coasts down from {self._motion.hz * 60:.0f} r/min.")

    def _check_planes(self, fitted: FittedRotor) -> None:
        planes = len(self.options.rotor.plane_z_mm)
        wrong = sorted({p.plane for p in fitted.pieces if not 1 <= p.plane <= planes})
        if wrong:
            raise Refusal(
                f"The simulated rotor has {planes} planes, and a weight is in plane {wrong[0]}.",
                "Give it the plane in plane_z_mm of the stand file's source.options.rotor.",
            )

    def _inject(self, options: FaultOptions) -> Mapping[str, Any]:
        fault = fault_from(options, self._at, self.options.rate_hz, self.channels.names)
        self._faults.add(fault)
        seconds = (fault.end - fault.begin) / self.options.rate_hz
        said = f"Fault injected into the simulated source: {fault.kind} for {seconds:g} s."
        return {"said": said, "kind": fault.kind, "begin_sample": fault.begin, "end_sample": fault.end}

    def _report(self, what: str) -> Mapping[str, Any]:
        motion, serial = self._motion, self._fitted.serial
        said = f"The simulated rotor {what}" if not serial else f"The simulated {serial} {what}"
        return {"said": said, "serial": serial, "phase": motion.phase, "rpm": motion.hz * 60}


def _config(cause: str, remedy: str) -> DriverError:
    return DriverError(cause, remedy, kind="config", retryable=False)
