"""A wheel with notches, and 20 um (0-peak) of 1X at each probe, computed at real pace."""

import numpy as np
from pydantic import Field

from config.errors import DriverError, Refusal
from daq.drivers.base import Chunk, Driver, DriverOptions, SourceInfo

RATE_HZ, ROWS = 5000.0, 500  # samples a second, and in a block of 0.1 s
TOP = 2**23  # counts at +24 V
NOTCH, FLANK = 0.08, 3  # of the time between pulses; samples


class Options(DriverOptions):
    rpm: float = Field(default=600.0, ge=60.0, le=3000.0)


class Wheel(Driver[Options]):
    name = "example-wheel"
    Options = Options
    verbs = ("fault",)

    def _open(self):
        for probe in self.channels.probes:
            if probe.kind != "displacement":
                cause = f"{probe.name}: this source has no {probe.kind}."
                raise DriverError(cause, 'Set kind = "displacement".', kind="config", retryable=False)
        self._begun_s, self._next, self._lost = self.clock.monotonic(), 0, 0
        scale, says = (24.0 / TOP,) * len(self.channels.names), f"example wheel at {self.options.rpm:g} r/min"
        return SourceInfo(RATE_HZ, "int32", scale, (-TOP, TOP - 1), origin="simulated", description=says)

    def _read(self, timeout_s):
        with self._lock:  # _act changes _lost
            first = self._next + self._lost
        wait_s = self._begun_s + (first + ROWS) / RATE_HZ - self.clock.monotonic()
        if self._pause(min(wait_s, timeout_s)) or wait_s > timeout_s:
            return None
        lost, self._next = first - self._next, first + ROWS
        with self._lock:
            self._lost -= lost
        return Chunk(self._counts(np.arange(first, first + ROWS)), lost_before=lost)

    def _close(self):
        pass  # nothing is held

    def _act(self, verb, args):  # revmark driver check asks for kind="dropout", seconds=0.5
        if args.get("kind") != "dropout":
            raise Refusal("This source can only lose samples.", 'Ask for kind "dropout".')
        self._lost += round(float(args["seconds"]) * RATE_HZ)
        return {"said": "Samples are lost."}

    def _counts(self, samples):
        pulse, step = self.channels.once_per_rev, self.options.rpm / 60 / RATE_HZ
        phase = (samples * step * pulse.pulses + 0.5) % 1 - 0.5  # 0 where the counted edge is
        inside = np.minimum(phase, NOTCH - phase) / (FLANK / 2 * step * pulse.pulses)
        swing_v = -4.0 if pulse.edge == "falling" else 4.0
        volts = [(-10.0 if pulse.level_v is None else pulse.level_v) + swing_v * np.clip(inside, -1, 1)]
        for k, probe in enumerate(self.channels.probes):  # high spot 30 + 60 k degrees after the edge
            um = 20 * np.cos(2 * np.pi * (samples * step - (30 + 60 * k) / 360))
            gap_v = 0.0 if probe.coupling == "ac" else -10.0
            volts.append(gap_v + probe.positive * probe.volts_per_unit * um)
        return np.clip(np.column_stack(volts) / 24 * TOP, -TOP, TOP - 1).astype("int32")
