"""A device server that stands in for hardware: the service the ``nidaqmx`` package talks to over gRPC.

Run as a process of its own: ``python device_server.py WORLD``, WORLD being JSON (see ``WORLD``). It prints
``port N`` when it serves, then reads verbs from its input, one a line, and answers each with a line. It ends
when its input ends.

The truth it emulates is written down here and shares no code with revmark: a shaft turning at ``hz``, a
once-per-rev pulse whose falling flank passes its middle at angle zero, and per probe a gap and harmonics
``A cos(n theta - lag)`` in volts at the sensor. A multiplexed device converts the inputs of a task one after
the other, ``step_s`` apart.

What it cannot show, because nobody told it or because it is no device:

- the rates, ranges, couplings and terminals a real product takes, and what it coerces silently (the rate
  rule here is "the next higher of timebase / 256 / n"; ranges and terminals are those of WORLD);
- what a real driver answers to a stop from another thread, and which of its overrun codes comes when;
- real replugging: names that change, properties that stay dead, USB ports that lose power;
- trigger and clock routing, filter delays of converters, noise, ghosting between multiplexed inputs;
- the driver's own library calls, for which see driver.c beside this file (which in turn knows no device);
- a network: everything here is loopback.

Verbs: see ``Verbs``.
"""
# ruff: noqa: N802 - the methods are named by the service

from __future__ import annotations

import copy
import json
import math
import os
import sys
import threading
import time
from concurrent import futures

import grpc
import numpy as np
from nidaqmx._stubs import nidaqmx_pb2 as pb
from nidaqmx._stubs import nidaqmx_pb2_grpc as pb_grpc
from session_pb2 import Session

WORLD = {
    "hz": 25.0,
    "speed": 1.0,  # seconds of the device's clock per second
    "port": 0,
    "devices": {},  # name -> DEVICE
    "signals": {},  # input -> SIGNAL
}
DEVICE = {
    "product": "SIM-1",
    "serial": 0x1A2B3C4D,
    "inputs": 8,
    "simultaneous": True,
    "step_s": 14e-6,
    "ranges_v": [0.2, 1.0, 5.0, 10.0],
    "terminals": ["DIFF", "PSEUDO_DIFF"],
    "couplings": 3,  # bits: 1 ac, 2 dc
    "timebase_hz": 13_107_200.0,
}
SIGNAL = {"gap_v": 0.0, "orders": [], "pulse": None, "divider": 1.0}  # orders: [n, amplitude_v, lag_deg]
PULSE = {"rest_v": -8.0, "depth_v": 7.0, "width_deg": 12.0, "flank_deg": 4.0}
TERMINALS = {10083: "RSE", 10078: "NRSE", 10106: "DIFF", 12529: "PSEUDO_DIFF"}
NAMES, CHANNELS, AVAILABLE, TOTAL, NUMBER = 0x193B, 0x1273, 0x1223, 0x192A, 0x217B
PRODUCT, SERIAL, SIMULTANEOUS, COUPLINGS = 0x0631, 0x0632, 0x298F, 0x2994
RATE, CONVERT_RATE, BUFFER, RANGE_LOW, COUPLING, AC = 0x1344, 0x1848, 0x186C, 0x1816, 0x0064, 10045
OPEN_EXIST = 0x3100


class Refused(Exception):
    """A call fails with a code of the driver."""

    def __init__(self, code: int, read: bool = False) -> None:
        super().__init__(code)
        self.code, self.read = code, read


class Job:
    """A task of the client."""

    def __init__(self, world: dict) -> None:
        self.world = world
        self.channels: list[dict] = []
        self.rate_hz, self.buffer, self.position = 0.0, 0, 0
        self.begun_s: float | None = None
        self.dead = 0

    @property
    def device(self) -> dict:
        return self.world["devices"][self.channels[0]["name"].partition("/")[0]]

    def total(self) -> int:
        """Samples taken since the start."""
        if self.begun_s is None:
            return 0
        now_s = self.world.get("stalled_s") or time.monotonic()
        return max(self.position, int((now_s - self.begun_s) * self.rate_hz * self.world["speed"]))

    def volts(self, count: int) -> np.ndarray:
        """The next samples at the inputs, (channels, count)."""
        t_s = (self.position + np.arange(count)) / self.rate_hz
        rows = []
        for place, channel in enumerate(self.channels):
            mine = [c for c in self.channels[:place] if c["name"].partition("/")[0] == channel["device"]]
            later_s = 0.0 if channel["simultaneous"] else len(mine) * channel["step_s"]
            rows.append(self._one(channel, self.world["hz"] * (t_s + later_s)))
        return np.array(rows)

    def _one(self, channel: dict, turns: np.ndarray) -> np.ndarray:
        signal = SIGNAL | self.world["signals"].get(channel["name"], {})
        moving = self.world.get("turning", 1)
        v = np.full(len(turns), 0.0 if channel["coupling"] == AC else float(signal["gap_v"]))
        for order, amplitude_v, lag_deg in signal["orders"]:
            v += moving * amplitude_v * np.cos(2 * np.pi * order * turns - math.radians(lag_deg))
        if signal["pulse"] is not None:
            pulse = PULSE | signal["pulse"]
            flank, width = pulse["flank_deg"] / 360, pulse["width_deg"] / 360
            u = (turns + 0.5) % 1.0 - 0.5
            down = np.clip(u / flank + 0.5, 0, 1) - np.clip((u - width) / flank + 0.5, 0, 1)
            v += pulse["rest_v"] - moving * pulse["depth_v"] * down
        volts = np.clip(v / signal["divider"], -channel["range_v"], channel["range_v"])
        return volts / channel.get("volts_per_unit", 1.0)


class Verbs:
    """What goes wrong, on demand. Each method is a verb; its words are its arguments."""

    def __init__(self, world: dict) -> None:
        self.world, self.first = world, copy.deepcopy(world)
        self.jobs: dict[str, Job] = {}
        self.reset()

    def reset(self) -> str:
        """As at the start: no fault, no task, the first world."""
        self.world.clear()
        self.world.update(copy.deepcopy(self.first))
        self.jobs.clear()
        self.calls: dict[str, int] = {}
        self.planned: dict[str, list[int]] = {}
        self.short_by: list[int] = []
        self.absent = self.half = False
        return "ok"

    def fail(self, method: str, code: str, times: str = "1") -> str:
        """The next calls of a method fail; a code above 0 is a warning of a read."""
        self.planned[method] = [int(code)] * int(times)
        return "ok"

    def short(self, *counts: str) -> str:
        """Each of the next reads times out with only so many samples."""
        self.short_by = [int(n) for n in counts]
        return "ok"

    def stall(self, on: str) -> str:
        """The sample clock stands still; 0 = it runs on from there."""
        stalled_s = self.world.pop("stalled_s", None)
        if on == "1":
            self.world["stalled_s"] = time.monotonic()
        elif stalled_s is not None:
            for job in self.jobs.values():
                job.begun_s = job.begun_s and job.begun_s + time.monotonic() - stalled_s
        return "ok"

    def remove(self, how: str = "all") -> str:
        """Unplug; "half" = plugged in again, but no property answers."""
        self.absent, self.half = how != "half", how == "half"
        for job in self.jobs.values():
            job.dead = -201003
        return "ok"

    def replug(self) -> str:
        self.absent = self.half = False
        return "ok"

    def rename(self, old: str, new: str) -> str:
        """A device comes back under another name."""
        self.world["devices"][new] = self.world["devices"].pop(old)
        return "ok"

    def put(self, key: str, value: str) -> str:
        """Change the world: hz, turning, speed; open = inputs without a sensor."""
        self.world[key] = json.loads(value)
        return "ok"

    def device(self, name: str, key: str, value: str) -> str:
        self.world["devices"][name][key] = json.loads(value)
        return "ok"

    def told(self) -> str:
        """What the client asked for, and how often: as JSON."""
        keys = ("channels", "rate_hz", "buffer", "position")
        jobs = [{key: getattr(job, key) for key in keys} for job in self.jobs.values()]
        return json.dumps({"calls": self.calls, "tasks": jobs})


class Server(pb_grpc.NiDAQmxServicer):
    """The methods the client calls; each guarded by the faults."""

    def __init__(self, world: dict) -> None:
        self.world = world
        self.verbs = Verbs(world)
        self.jobs = self.verbs.jobs
        for method in [name for name in vars(Server) if name[0].isupper()]:
            setattr(self, method, self._guarded(method, getattr(self, method)))

    def _guarded(self, method, body):
        def call(request, context):
            self.verbs.calls[method] = self.verbs.calls.get(method, 0) + 1
            try:
                planned = self.verbs.planned.get(method)
                if planned and planned[0] < 0:
                    raise Refused(planned.pop(0), method == "ReadAnalogF64")
                return body(request, context)
            except Refused as error:
                more = (("ni-samps-per-chan-read", "0"),) if error.read else ()
                context.set_trailing_metadata((("ni-error", str(error.code)), *more))
                context.abort(grpc.StatusCode.UNKNOWN, f"made-up text\n\nStatus Code: {error.code}")

        return call

    def _device(self, name: str) -> dict:
        if self.verbs.absent or self.verbs.half:
            raise Refused(-201003)
        if name not in self.world["devices"]:
            raise Refused(-200220)
        return self.world["devices"][name]

    def _job(self, request) -> Job:
        if request.task.name not in self.jobs:
            raise Refused(-200088)
        return self.jobs[request.task.name]

    # --- the system and its devices

    def GetSystemInfoAttributeUInt32(self, request, context):
        return pb.GetSystemInfoAttributeUInt32Response(value=25)

    def GetSystemInfoAttributeString(self, request, context):
        names = "" if self.verbs.absent else ", ".join(self.world["devices"])
        return pb.GetSystemInfoAttributeStringResponse(value=names)

    def GetDeviceAttributeString(self, request, context):
        return pb.GetDeviceAttributeStringResponse(value=self._device(request.device_name)["product"])

    def GetDeviceAttributeUInt32(self, request, context):
        return pb.GetDeviceAttributeUInt32Response(value=self._device(request.device_name)["serial"])

    def GetDeviceAttributeBool(self, request, context):
        return pb.GetDeviceAttributeBoolResponse(value=self._device(request.device_name)["simultaneous"])

    def GetDeviceAttributeInt32(self, request, context):
        return pb.GetDeviceAttributeInt32Response(value_raw=self._device(request.device_name)["couplings"])

    # --- a task and its channels

    def CreateTask(self, request, context):
        name = request.session_name or f"task{len(self.jobs) + 1}-{time.monotonic_ns()}"
        known = name in self.jobs
        if request.initialization_behavior == (1 if known else 2):
            context.abort(grpc.StatusCode.FAILED_PRECONDITION, "there is one, or none")
        self.jobs.setdefault(name, Job(self.world))
        return pb.CreateTaskResponse(task=Session(name=name), new_session_initialized=not known)

    def GetTaskAttributeString(self, request, context):
        names = ", ".join(c["name"] for c in self._job(request).channels)
        asked = request.attribute_raw
        return pb.GetTaskAttributeStringResponse(value=names if asked == CHANNELS else request.task.name)

    def _add(self, request, **more):
        name = request.physical_channel
        device = self._device(name.partition("/")[0])
        if int(name.rpartition("/ai")[2]) >= device["inputs"]:
            raise Refused(-200170)
        ranges = [r for r in device["ranges_v"] if r >= max(abs(request.min_val), abs(request.max_val))]
        if not ranges or TERMINALS.get(request.terminal_config_raw) not in device["terminals"]:
            raise Refused(-200077)
        made = {"name": name, "device": name.partition("/")[0], "range_v": ranges[0], "coupling": 10050}
        made |= {"terminal": TERMINALS[request.terminal_config_raw], "step_s": device["step_s"]}
        made |= {"simultaneous": device["simultaneous"], **more}
        self._job(request).channels.append(made)

    def CreateAIVoltageChan(self, request, context):
        self._add(request)
        return pb.CreateAIVoltageChanResponse()

    def CreateAIAccelChan(self, request, context):
        volts_per_g = request.sensitivity / 1e3
        self._add(request, excitation_a=request.current_excit_val, volts_per_unit=volts_per_g)
        return pb.CreateAIAccelChanResponse()

    def _channel(self, request) -> dict:
        return next(c for c in self._job(request).channels if c["name"] == request.channel)

    def SetChanAttributeInt32(self, request, context):
        if request.attribute_raw == COUPLING:
            bit = 1 if request.value_raw == AC else 2
            if not self._device(self._channel(request)["device"])["couplings"] & bit:
                raise Refused(-200077)
            self._channel(request)["coupling"] = request.value_raw
        return pb.SetChanAttributeInt32Response()

    def GetChanAttributeDouble(self, request, context):
        sign = -1 if request.attribute_raw == RANGE_LOW else 1
        return pb.GetChanAttributeDoubleResponse(value=sign * self._channel(request)["range_v"])

    # --- timing and buffer

    def CfgSampClkTiming(self, request, context):
        job = self._job(request)
        highest_hz = job.device["timebase_hz"] / 256
        if request.rate > highest_hz:
            raise Refused(-200077)
        job.rate_hz = highest_hz / math.floor(highest_hz / request.rate)
        return pb.CfgSampClkTimingResponse()

    def GetTimingAttributeDouble(self, request, context):
        job = self._job(request)
        value = job.rate_hz if request.attribute_raw == RATE else 1 / job.device["step_s"]
        return pb.GetTimingAttributeDoubleResponse(value=value)

    def GetTimingAttributeExDouble(self, request, context):
        step_s = self._device(request.device_names)["step_s"]
        return pb.GetTimingAttributeExDoubleResponse(value=1 / step_s)

    def SetBufferAttributeUInt32(self, request, context):
        self._job(request).buffer = request.value
        return pb.SetBufferAttributeUInt32Response()

    def SetReadAttributeInt32(self, request, context):
        return pb.SetReadAttributeInt32Response()

    # --- running

    def StartTask(self, request, context):
        job = self._job(request)
        mine = {c["device"] for c in job.channels}
        for device in mine:
            self._device(device)
        others = [j for j in self.jobs.values() if j is not job and j.begun_s is not None]
        if any(c["device"] in mine for j in others for c in j.channels):
            raise Refused(-50103)
        job.begun_s = time.monotonic()
        return pb.StartTaskResponse()

    def StopTask(self, request, context):
        job = self._job(request)
        self._live(job)
        job.begun_s = None
        return pb.StopTaskResponse()

    def ClearTask(self, request, context):
        self.jobs.pop(request.task.name, None)
        return pb.ClearTaskResponse()

    def _live(self, job: Job) -> int:
        """Samples that wait; a task that has failed fails for good."""
        waiting = job.total() - job.position
        if waiting > job.buffer:
            job.dead = job.dead or -200279
        if job.dead:
            raise Refused(job.dead, read=True)
        return waiting

    def GetReadAttributeUInt32(self, request, context):
        job = self._job(request)
        value = len(job.channels) if request.attribute_raw == NUMBER else self._live(job)
        return pb.GetReadAttributeUInt32Response(value=value)

    def GetReadAttributeUInt64(self, request, context):
        job = self._job(request)
        self._live(job)
        return pb.GetReadAttributeUInt64Response(value=job.total())

    def GetReadAttributeBool(self, request, context):
        if "open" not in self.world:
            raise Refused(-200452)  # a device without such lists
        there = request.attribute_raw == OPEN_EXIST and bool(self.world["open"])
        return pb.GetReadAttributeBoolResponse(value=there)

    def GetReadAttributeString(self, request, context):
        return pb.GetReadAttributeStringResponse(value=", ".join(self.world["open"]))

    def GetErrorString(self, request, context):
        return pb.GetErrorStringResponse(error_string=f"made-up text for {request.error_code}")

    def ReadAnalogF64(self, request, context):
        job, wanted = self._job(request), request.num_samps_per_chan
        until_s = time.monotonic() + request.timeout
        planned = self.verbs.planned.get("ReadAnalogF64") or [0]
        count = wanted
        if self.verbs.short_by:
            count = self.verbs.short_by.pop(0)
        while (waiting := self._live(job)) < count:
            if time.monotonic() > until_s:
                count = waiting
                break
            time.sleep(min(0.02, (count - waiting) / job.rate_hz / self.world["speed"] + 1e-4))
        block = job.volts(count)
        job.position += count
        packed = np.zeros(request.array_size_in_samps)
        packed[: block.size] = block.ravel()
        status = planned.pop(0) if count == wanted else -200284
        return pb.ReadAnalogF64Response(status=status, read_array=packed, samps_per_chan_read=count)


def main() -> None:
    world = WORLD | json.loads(sys.argv[1])
    world["devices"] = {name: DEVICE | found for name, found in world["devices"].items()}
    servicer = Server(world)
    server = grpc.server(futures.ThreadPoolExecutor(max_workers=4), options=[("grpc.so_reuseport", 0)])
    pb_grpc.add_NiDAQmxServicer_to_server(servicer, server)
    port = server.add_insecure_port(f"127.0.0.1:{world['port']}")
    server.start()
    print(f"port {port}", flush=True)
    for line in sys.stdin:
        verb, *words = line.split()
        print(getattr(servicer.verbs, verb)(*words), flush=True)
    threading.Timer(1.0, os._exit, (0,)).start()
    server.stop(0)


if __name__ == "__main__":
    main()
