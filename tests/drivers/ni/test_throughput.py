"""16 inputs at 51.2 kS/s, for a few seconds; tests/bench/bench_daqmx.py runs it for 30 s beside the bare
package."""

from __future__ import annotations

import time
from collections.abc import Callable

import pytest
from ni_kit import DeviceServer, blocks, driver, world

from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan

RATE_HZ, INPUTS, SECONDS = 51_200, 16, 3
SHARE = 0.10
"""Of a core, at most, for the reading process (issue 3)."""


def test_sixteen_inputs_at_full_rate_all_arrive(serve: Callable[..., DeviceServer]) -> None:
    about = world(inputs=INPUTS)
    for k in range(INPUTS):
        about["signals"][f"Dev1/ai{k}"] = {"gap_v": k / 10}  # each its own level, told apart below
    probes = tuple(ProbePlan(f"probe {k}", f"Dev1/ai{k}") for k in range(1, INPUTS))
    plan = ChannelPlan(PulsePlan("once-per-rev", "Dev1/ai0"), probes)
    source = driver(serve(about=about), plan, rate_hz=RATE_HZ, inputs={})
    info = source.open()
    blocks(source, 1)
    cpu_s, begun_s = time.process_time(), time.monotonic()
    found = blocks(source, 10 * SECONDS)
    cpu_s, took_s = time.process_time() - cpu_s, time.monotonic() - begun_s
    source.close()
    assert [b.first_sample for b in found] == [5120 * n for n in range(1, 1 + 10 * SECONDS)]
    assert {b.counts.shape for b in found} == {(5120, INPUTS)}
    assert {b.segment for b in found} == {found[0].segment}
    volts = found[-1].counts[0] * info.volts_per_count
    assert volts == pytest.approx([k / 10 for k in range(INPUTS)], abs=1e-5)
    assert source.counters.lost_samples == 0
    assert cpu_s / took_s < SHARE
