"""What the driver asks of a device, what it makes of the volts, and that it leaves nothing behind."""

from __future__ import annotations

import logging
import time
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from ni_kit import DIVIDER, PLAN, PROBES, RATE_HZ, DeviceServer, blocks, driver, world

from config.errors import DriverError
from daq.drivers.base import ChannelPlan
from daq.drivers.ni.counts import FULL, FULL_SCALE_COUNTS, Scale

Serve = Callable[..., DeviceServer]
IEPE = {
    "sensor": "IEPE accelerometer",
    "excitation_ma": 2.0,
    "range_v": 5.0,
    "terminal": "pseudo-differential",
}


def accelerometer(**changes: Any) -> ChannelPlan:
    """PLAN with an accelerometer as probe 1."""
    probe = replace(PLAN.probes[0], kind="acceleration", coupling="ac", **changes)
    return replace(PLAN, probes=(probe, *PLAN.probes[1:]))


def open_and_read(server: DeviceServer, plan: ChannelPlan = PLAN, count: int = 2, **more: Any) -> np.ndarray:
    """Volts at the sensors, (frames, columns)."""
    source = driver(server, plan, **more)
    info = source.open()
    counts = np.concatenate([block.counts for block in blocks(source, count)])
    source.close()
    return counts * np.array(info.volts_per_count)


def test_the_task_is_built_as_the_stand_file_says(server: DeviceServer) -> None:
    source = driver(server)
    source.open()
    (task,) = server.told()["tasks"]
    source.close()
    assert [c["name"] for c in task["channels"]] == list(PLAN.inputs)
    assert {c["terminal"] for c in task["channels"]} == {"DIFF"}
    assert {c["range_v"] for c in task["channels"]} == {10.0}
    assert {c["coupling"] for c in task["channels"]} == {10050}  # dc
    assert task["rate_hz"] == RATE_HZ
    assert task["buffer"] == 10 * RATE_HZ
    assert server.told()["tasks"] == []


def test_the_buffer_holds_ten_seconds_in_whole_blocks(server: DeviceServer) -> None:
    source = driver(server, rate_hz=51_200 / 7, block_s=0.13)
    info = source.open()
    (task,) = server.told()["tasks"]
    source.close()
    frames = round(0.13 * info.rate_hz)
    assert task["buffer"] % frames == 0
    assert 0 <= task["buffer"] - 10 * info.rate_hz < frames


def test_a_block_is_one_call(server: DeviceServer) -> None:
    source = driver(server)
    source.open()
    blocks(source, 1)
    before = server.told()["calls"]
    blocks(source, 20)
    after = server.told()["calls"]
    source.close()
    made = {name: after[name] - before.get(name, 0) for name in after}
    assert made.pop("ReadAnalogF64") == 20
    assert sum(made.values()) <= 4  # the look once a second


def test_a_patient_reader_and_an_impatient_one_see_the_same(server: DeviceServer) -> None:
    """With a time-out below a block the driver asks first and comes back in time."""
    source = driver(server)
    source.open()
    begun_s = time.monotonic()
    assert source.read(0.02) is None
    assert time.monotonic() - begun_s < 0.5
    found = blocks(source, 3, timeout_s=0.03)
    source.close()
    assert [b.first_sample for b in found] == [0, 1280, 2560]
    assert {len(b.counts) for b in found} == {1280}


@pytest.mark.parametrize(("name", "column"), [("Dev1/ai1", 1), ("Dev1/ai2", 2)])
def test_the_gap_reads_as_at_the_probe_in_front_of_its_divider(
    server: DeviceServer, name: str, column: int
) -> None:
    volts = open_and_read(server, count=4)  # 0.4 s = 10 whole turns of 25 Hz
    assert volts[:, column].mean() == pytest.approx(PROBES[name][2], abs=1e-4)


def test_an_input_without_a_divider_reads_its_own_volts(server: DeviceServer) -> None:
    volts = open_and_read(server, count=4, inputs={})
    assert volts[:, 1].mean() == pytest.approx(PROBES["Dev1/ai1"][2] / DIVIDER, abs=1e-4)


def test_a_wider_range_of_the_device_is_the_scale(server: DeviceServer) -> None:
    """Asked for 6 V, the device takes its 10 V: the counts must mean the latter, and 8 V is not clipped."""
    source = driver(server, range_v=6.0, inputs={})
    info = source.open()
    source.close()
    assert info.volts_per_count == (10.0 / FULL,) * 3


def test_an_iepe_input_is_powered_ac_coupled_and_read_in_volts(serve: Serve) -> None:
    about = world()
    about["signals"]["Dev1/ai1"] = {"gap_v": 11.0, "orders": [[1, 0.5, 40.0]]}  # 11 V of bias
    server = serve(about=about)
    source = driver(server, accelerometer(), inputs={"Dev1/ai1": IEPE}, settling_s=0)
    info = source.open()
    (task,) = server.told()["tasks"]
    volts = np.concatenate([b.counts for b in blocks(source, 4)])[:, 1] * info.volts_per_count[1]
    source.close()
    powered = task["channels"][1]
    assert powered["excitation_a"] == pytest.approx(0.002)
    assert (powered["coupling"], powered["terminal"], powered["range_v"]) == (10045, "PSEUDO_DIFF", 5.0)
    assert "excitation_a" not in task["channels"][2]
    assert (volts.max() - volts.min()) / 2 == pytest.approx(0.5, rel=1e-4)
    assert volts.mean() == pytest.approx(0.0, abs=1e-4)


def test_what_a_powered_sensor_sends_first_is_left_out(server: DeviceServer) -> None:
    source = driver(server, accelerometer(), inputs={"Dev1/ai1": IEPE}, settling_s=0.45)
    source.open()
    first, second = blocks(source, 2)
    position = server.told()["tasks"][0]["position"]
    source.close()
    assert position >= 5760 + 2 * 1280  # 0.45 s, rounded up to whole blocks, and two blocks
    assert (first.first_sample, second.first_sample) == (0, 1280)
    assert source.counters.lost_samples == 0


def test_a_device_that_couples_only_as_wanted_is_not_told_to(serve: Serve) -> None:
    server = serve(couplings=2)
    open_and_read(server)
    assert "SetChanAttributeInt32" not in server.told()["calls"]


def test_a_device_that_cannot_couple_so_is_refused(serve: Serve) -> None:
    source = driver(serve(couplings=1))
    with pytest.raises(DriverError, match="refuses what the stand file asks") as caught:
        source.open()
    assert caught.value.kind == "config"


def test_a_missing_sensor_is_told_once(server: DeviceServer, caplog: pytest.LogCaptureFixture) -> None:
    server.verb("put", "open", '["Dev1/ai1"]')
    source = driver(server, accelerometer(), inputs={"Dev1/ai1": IEPE}, settling_s=0)
    source.open()
    with caplog.at_level(logging.WARNING):
        blocks(source, 24)  # looked at three times
    source.close()
    told = [r.message for r in caplog.records if "Dev1/ai1" in r.message]
    assert told == ["input Dev1/ai1 has no sensor at the end of its cable, or a broken cable"]


def test_a_device_without_such_a_list_is_asked_once(server: DeviceServer) -> None:
    source = driver(server, accelerometer(), inputs={"Dev1/ai1": IEPE}, settling_s=0)
    source.open()
    blocks(source, 24)
    source.close()
    assert server.told()["calls"]["GetReadAttributeBool"] == 3


def test_a_warning_of_the_driver_costs_no_samples(server: DeviceServer) -> None:
    from nidaqmx.errors import DaqWarning

    source = driver(server)
    source.open()
    server.verb("fail", "ReadAnalogF64", 200011)  # converting faster than the inputs settle
    with pytest.warns(DaqWarning, match="200011"):
        found = blocks(source, 2)
    source.close()
    assert found[1].first_sample == 1280
    assert found[0].segment == found[1].segment


def test_opening_over_and_over_leaves_nothing_behind(server: DeviceServer) -> None:
    source = driver(server)
    for _ in range(25):
        source.open()
        source.close()
    told = server.told()
    assert told["tasks"] == []
    assert told["calls"]["ClearTask"] == told["calls"]["CreateTask"] == 25


# --- counts -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("range_v", [0.2, 5.0, 10.0, 60.0])
def test_a_24_bit_converter_loses_nothing(range_v: float) -> None:
    """Every code of such a converter over the range comes out as itself."""
    codes = np.unique(np.linspace(-(2**23), 2**23 - 1, 20_001).round()).astype(np.int64)
    volts = codes * (2 * range_v / 2**24)
    counts = Scale([range_v], [1.0]).counts(volts.reshape(1, -1))
    assert counts.dtype == np.int32
    assert (counts[:, 0] == codes).all()


def test_counts_are_volts_again_by_their_own_scale() -> None:
    scale = Scale([10.0, 5.0], [3.0, 1.0])
    volts = np.random.default_rng(1).uniform(-4.9, 4.9, (2, 1000))
    back = scale.counts(volts) * np.array(scale.volts_per_count)
    assert np.allclose(back, volts.T * [3.0, 1.0], atol=3 * 10.0 / 2**24 + 1e-12)


def test_what_is_beyond_the_range_is_held_at_its_end() -> None:
    counts = Scale([10.0], [1.0]).counts(np.array([[-10.4, -10.0, 0.0, 10.0, 99.0]]))
    low, high = FULL_SCALE_COUNTS
    assert counts[:, 0].tolist() == [low, low, 0, high, high]


def test_no_number_is_no_sample() -> None:
    with pytest.raises(DriverError, match="no numbers"):
        Scale([10.0], [1.0]).counts(np.array([[0.0, np.nan]]))
