"""The decoder has time to spare, and the driver keeps up. The full rate: tests/bench/bench_serial.py."""

import time

import numpy as np
import pytest
from digitizer_kit import Digitizer, Rotor, description_body, samples_body, sealed

from daq.drivers.base import ChannelPlan, ProbePlan, PulsePlan
from daq.drivers.frames.binary import BinaryCodec
from daq.drivers.frames.records import Tally
from daq.drivers.frames.stream import Stream

CHANNELS, SCANS = 16, 200
PLAN = ChannelPlan(PulsePlan("p", "1"), tuple(ProbePlan(f"c{i}", str(i)) for i in range(2, CHANNELS + 1)))


def frames(n, rate_hz):
    """A description first and then a frame each, of noise about -10 V."""
    noise = np.random.default_rng(1).normal(-10_922, 300, (n * SCANS, CHANNELS)).astype(int)
    told = description_body(0, rate_hz, 2, 16, 0, [0.5] * CHANNELS, "fast")
    out = [sealed(told)]
    for i in range(n):
        part = noise[i * SCANS : (i + 1) * SCANS]
        out.append(sealed(samples_body(i + 1, i * SCANS, part, 2, 0.5)))
    return out, noise


def test_five_million_samples_take_less_than_a_second_of_a_core():
    data, _ = frames(150, 312_500.0)  # 0.48 million samples
    wire = b"\0" + b"".join(data)
    tally = Tally()
    stream = Stream(BinaryCodec(tally), tally)
    begin_s = time.thread_time()
    runs = [run for at in range(0, len(wire), 65536) for run in stream.feed(wire[at : at + 65536])]
    took_s = time.thread_time() - begin_s
    assert sum(len(run.counts) for run in runs) == 150 * SCANS
    assert took_s < 150 * SCANS * CHANNELS / 5e6


@pytest.mark.parametrize("wire", ["pty", "socket"])
def test_a_million_samples_a_second_arrive_as_they_are_sent(send, driver, wire):
    rate_hz = 62_500.0
    data, noise = frames(470, rate_hz)
    digitizer = Digitizer(Rotor(rate_hz=rate_hz))
    told, rest = data[0], iter(data[1:])
    begun = []

    def make():
        """Descriptions until the driver listens, then each frame once."""
        if not begun:
            time.sleep(0.01)
            return told
        digitizer.first += SCANS
        return next(rest, b"\0")

    source = driver(send(digitizer, wire, make=make), channels=CHANNELS, plan=PLAN)
    source.open()
    begun.append(time.monotonic())
    got, until_s = [], time.monotonic() + 20
    while sum(len(b.counts) for b in got) < len(noise) and time.monotonic() < until_s:
        block = source.read(0.2)
        if block is not None:
            got.append(block)
    took_s = time.monotonic() - begun[0]
    assert np.array_equal(np.concatenate([b.counts for b in got]), noise)
    assert {b.segment for b in got} == {0}
    assert source.tally.damaged == source.tally.gaps == 0
    assert took_s < len(noise) / rate_hz + 1.0
