"""The daqmx driver at 16 channels and 51.2 kS/s through the device server, beside the bare package.

Run it:  python tests/bench/bench_daqmx.py [SECONDS]

The server of tests/drivers/ni is a process of its own and makes the samples as they come due. Printed for the
driver (read, scale to counts, hand over) and for the bare package (the same task, the same reads into one
array, nothing else): samples that came of those that were due, the process's share of a core, and how far it
was behind at most. No thresholds: a benchmark is read, not passed.
"""

from __future__ import annotations

import os
import sys
import time
from pathlib import Path

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "drivers" / "ni"))

import numpy as np
from ni_kit import DeviceServer, driver, world

from daq.drivers.base import ChannelPlan, EndOfSource, ProbePlan, PulsePlan

RATE_HZ, INPUTS, BLOCK_S = 51_200.0, 16, 0.1


def plan() -> ChannelPlan:
    probes = tuple(ProbePlan(f"probe {k}", f"Dev1/ai{k}") for k in range(1, INPUTS))
    return ChannelPlan(PulsePlan("once-per-rev", "Dev1/ai0"), probes)


def about() -> dict[str, object]:
    made = world(inputs=INPUTS)
    for k in range(1, INPUTS):
        made["signals"][f"Dev1/ai{k}"] = {"gap_v": -3.0, "orders": [[1, 0.05, 10.0 * k]]}
    return made


def report(name: str, came: int, seconds: float, cpu_s: float, behind_s: float) -> None:
    due = round(seconds / BLOCK_S) * round(BLOCK_S * RATE_HZ)
    print(
        f"{name:>12}: {came} of {due} samples a channel, {100 * cpu_s / seconds:.1f} % of a core, "
        f"at most {1e3 * behind_s:.0f} ms behind"
    )


def through_the_driver(server: DeviceServer, seconds: float) -> None:
    source = driver(server, plan(), rate_hz=RATE_HZ, inputs={})
    source.open()
    begun_s, cpu_s, came, behind_s = time.monotonic(), time.process_time(), 0, 0.0
    while came < round(seconds * RATE_HZ):
        block = source.read(0.2)
        if block is None or isinstance(block, EndOfSource):
            continue
        assert block.first_sample == came
        came += len(block.counts)
        behind_s = max(behind_s, time.monotonic() - begun_s - came / RATE_HZ)
    cpu_s = time.process_time() - cpu_s
    lost = source.counters.lost_samples
    source.close()
    report("driver", came - lost, seconds, cpu_s, behind_s)


def bare(server: DeviceServer, seconds: float) -> None:
    import grpc
    import nidaqmx
    from nidaqmx.constants import AcquisitionType, TerminalConfiguration
    from nidaqmx.stream_readers import AnalogMultiChannelReader

    frames = round(BLOCK_S * RATE_HZ)
    options = [("grpc.max_receive_message_length", -1)]
    with (
        grpc.insecure_channel(server.address, options=options) as channel,
        nidaqmx.Task(grpc_options=nidaqmx.GrpcSessionOptions(channel, "")) as task,
    ):
        for k in range(INPUTS):
            task.ai_channels.add_ai_voltage_chan(
                f"Dev1/ai{k}", terminal_config=TerminalConfiguration.DIFF, min_val=-10, max_val=10
            )
        task.timing.cfg_samp_clk_timing(RATE_HZ, sample_mode=AcquisitionType.CONTINUOUS)
        task.in_stream.input_buf_size = 100 * frames
        reader = AnalogMultiChannelReader(task.in_stream)
        reader.verify_array_shape = False
        array = np.zeros((INPUTS, frames))
        task.start()
        begun_s, cpu_s, came, behind_s = time.monotonic(), time.process_time(), 0, 0.0
        while came < round(seconds * RATE_HZ):
            came += reader.read_many_sample(array, frames, timeout=1.0)
            behind_s = max(behind_s, time.monotonic() - begun_s - came / RATE_HZ)
        cpu_s = time.process_time() - cpu_s
    report("bare package", came, seconds, cpu_s, behind_s)


def main() -> None:
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 30.0
    server = DeviceServer(about())
    try:
        print(f"{INPUTS} channels at {RATE_HZ:g} samples a second for {seconds:g} s, blocks of {BLOCK_S:g} s")
        through_the_driver(server, seconds)
        bare(server, seconds)
    finally:
        server.close()


if __name__ == "__main__":
    main()
