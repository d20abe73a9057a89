"""Each way a device fails, made to happen at the server: what the driver says, how it comes back."""

from __future__ import annotations

import logging
import os
import signal
import sys
import time
from collections.abc import Callable
from typing import Any

import pytest
from ni_kit import PLAN, RATE_HZ, DeviceServer, blocks, driver, options, world

from config.errors import DriverError
from daq.clock import SystemClock
from daq.drivers.base import DriverState
from daq.drivers.ni.trouble import CONFIG, KINDS, NOT_YET
from daq.drivers.registry import AnyDriver, make_driver

Serve = Callable[..., DeviceServer]
SOON_S = 2.0
"""Samples flow again within this after the replug (issue 3)."""


@pytest.fixture
def source(server: DeviceServer) -> Any:
    made = driver(server)
    yield made
    made.close()


def lose(source: AnyDriver, within_s: float = 8.0) -> DriverError:
    """Read until the source is lost."""
    until_s = time.monotonic() + within_s
    while time.monotonic() < until_s:
        try:
            source.read(0.2)
        except DriverError as error:
            assert source.state is DriverState.LOST
            return error
    raise AssertionError("the source was not lost")


def comes_back(source: AnyDriver, after: int) -> None:
    """Close, open, and two blocks in a later segment, from sample 0."""
    source.close()
    source.open()
    first, second = blocks(source, 2)
    assert first.segment == second.segment > after
    assert (first.first_sample, second.first_sample) == (0, len(first.counts))


# --- lost samples -----------------------------------------------------------------------------------------


def test_an_overrun_is_a_loud_loss_and_a_new_segment(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 2)[-1].segment
    server.verb("fail", "ReadAnalogF64", -200279)
    error = lose(source)
    assert error.kind == "lost_data"
    assert "did not collect data of Dev1" in error.cause
    assert error.retryable
    comes_back(source, segment)


def test_a_reader_that_is_too_late_overruns_the_buffer(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.verb("put", "speed", 2000)  # the device's clock runs away: 10 s of buffer are full at once
    time.sleep(0.3)
    assert lose(source).kind == "lost_data"
    server.verb("put", "speed", 1)
    comes_back(source, segment)


def test_the_third_overrun_in_ten_minutes_is_final(server: DeviceServer, source: AnyDriver) -> None:
    for number in (1, 2, 3):
        source.open()
        server.verb("fail", "ReadAnalogF64", -200361)
        error = lose(source)
        source.close()
        assert error.retryable == (number < 3)
    assert "loss number 3 within 10 minutes" in error.cause
    assert "Lower rate_hz" in error.remedy


def test_a_short_read_is_a_loss_counted_exactly(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    before = blocks(source, 2)[-1]
    server.verb("short", 700, 500)
    after, later = blocks(source, 2)
    assert after.segment == later.segment == before.segment + 1
    assert after.first_sample == before.first_sample + len(before.counts) + 1200
    assert (source.counters.gaps, source.counters.lost_samples) == (1, 1200)


def test_what_follows_a_short_read_is_in_its_place(server: DeviceServer, source: AnyDriver) -> None:
    """The samples are those of their own place in time, by the truth: 512 samples a turn, 2 turns cut."""
    source.open()
    before = blocks(source, 1)[0]
    server.verb("short", 1024)
    after = blocks(source, 1)[0]
    shift = (after.first_sample - before.first_sample) % 512
    expected = before.counts[:512].take(range(shift, shift + 400), axis=0, mode="wrap")
    assert abs(after.counts[:400] - expected).max() <= 1


def test_three_short_reads_in_a_row_lose_the_source(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.verb("short", 10, 20, 30)
    error = lose(source)
    assert error.kind == "timeout"
    assert "30 of 1280 samples" in error.cause
    comes_back(source, segment)


def test_a_slow_reader_is_warned_of_before_it_loses_anything(
    server: DeviceServer, source: AnyDriver, caplog: pytest.LogCaptureFixture
) -> None:
    source.open()
    blocks(source, 1)
    time.sleep(3.2)  # of a buffer of 10 s
    with caplog.at_level(logging.WARNING):
        blocks(source, 40)
    assert any("% of the device's buffer is full" in r.message for r in caplog.records)
    assert source.counters.lost_samples == 0


# --- silence ----------------------------------------------------------------------------------------------


def test_a_stalled_clock_is_a_silence_after_two_seconds(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.verb("stall", 1)
    begun_s = time.monotonic()
    error = lose(source)
    assert error.kind == "timeout"
    assert "No whole block came from Dev1" in error.cause
    assert "of 1280 samples" in error.cause
    assert "clock or trigger" in error.remedy
    assert time.monotonic() - begun_s > 2.0
    server.verb("stall", 0)
    comes_back(source, segment)


@pytest.mark.skipif(not hasattr(signal, "SIGSTOP"), reason="allowed: no SIGSTOP on this system")
def test_a_server_that_hangs_holds_nobody_for_ever(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    os.kill(server.pid, signal.SIGSTOP)
    try:
        error = lose(source, within_s=15.0)
        begun_s = time.monotonic()
        source.close()
        assert time.monotonic() - begun_s < 5.0
    finally:
        os.kill(server.pid, signal.SIGCONT)
    assert error.kind == "timeout"
    assert f"{server.address} did not answer in time" in error.cause
    comes_back(source, segment)


# --- gone -------------------------------------------------------------------------------------------------


def test_unplugged_and_plugged_in_again(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.verb("remove")
    error = lose(source)
    assert (error.kind, error.retryable) == ("gone", True)
    assert error.cause.startswith(f"Dev1 at {server.address} was removed or has no power")
    source.close()
    for _ in range(2):
        with pytest.raises(DriverError, match=r"Dev1 is not connected\. There is no device") as caught:
            source.open()
        assert (caught.value.kind, caught.value.retryable) == ("gone", True)
    server.verb("replug")
    begun_s = time.monotonic()
    comes_back(source, segment)
    assert time.monotonic() - begun_s < SOON_S


def test_a_link_that_broke_leaves_no_task_to_block_the_device(
    server: DeviceServer, source: AnyDriver
) -> None:
    """The server was never told to clear: it would hold the device against its own client."""
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.verb("fail", "ClearTask", -201390, 1)
    server.verb("fail", "ReadAnalogF64", -201390)
    assert lose(source).cause.startswith(f"The network link to Dev1 at {server.address} failed")
    source.close()
    assert len(server.told()["tasks"]) == 1
    source.open()
    assert len(server.told()["tasks"]) == 1
    assert blocks(source, 1)[0].segment > segment


def test_a_server_that_dies_and_comes_back(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.kill()
    error = lose(source)
    assert error.kind == "gone"
    assert error.cause == f"The device server {server.address} does not answer."
    source.close()
    with pytest.raises(DriverError, match="does not answer") as caught:
        source.open()
    assert caught.value.kind == "gone"
    server.start_again()
    comes_back(source, segment)


def test_a_session_the_server_forgot_is_no_riddle(server: DeviceServer, source: AnyDriver) -> None:
    """A server started anew between two reads knows nothing of the task."""
    source.open()
    segment = blocks(source, 1)[-1].segment
    server.kill()
    server.start_again()
    assert lose(source).retryable
    comes_back(source, segment)


def test_closing_without_a_server_is_harmless(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    server.kill()
    source.close()
    assert (source.state, source.counters.errors) == (DriverState.CLOSED, 0)


@pytest.fixture
def at_home(server: DeviceServer, monkeypatch: pytest.MonkeyPatch) -> Any:
    """The driver believes that Dev1 is on this PC."""
    from daq.drivers.ni import session

    real = session.Session
    monkeypatch.setattr(session, "Session", lambda _, name: real(server.address, name))
    made = make_driver("daqmx", options(), PLAN, clock=SystemClock())
    yield made
    made.close()


def test_a_device_that_comes_back_dead_needs_a_new_process(server: DeviceServer, at_home: AnyDriver) -> None:
    at_home.open()
    server.verb("remove")
    lose(at_home)
    at_home.close()
    with pytest.raises(DriverError, match="not connected"):
        at_home.open()
    server.verb("remove", "half")
    until_s, error = time.monotonic() + 10.0, DriverError("", kind="gone")
    while error.retryable and time.monotonic() < until_s:
        with pytest.raises(DriverError) as caught:
            at_home.open()
        error = caught.value
        time.sleep(0.5)
    assert (error.kind, error.retryable) == ("gone", False)
    assert "plugged in again, but does not answer this process" in error.cause


def test_a_device_that_was_never_seen_to_leave_does_not(server: DeviceServer, at_home: AnyDriver) -> None:
    """Else a device that stays listed while it is away would end the daemon over and over."""
    server.verb("remove", "half")
    for _ in range(6):
        with pytest.raises(DriverError) as caught:
            at_home.open()
        assert (caught.value.kind, caught.value.retryable) == ("gone", True)
        time.sleep(0.5)


# --- busy, and other refusals -----------------------------------------------------------------------------


def test_in_use_is_told_and_tried_again(server: DeviceServer, source: AnyDriver) -> None:
    server.verb("fail", "StartTask", -50103, 3)
    for _ in range(3):
        with pytest.raises(DriverError, match="in use by another program") as caught:
            source.open()
        assert (caught.value.kind, caught.value.retryable) == ("busy", True)
    source.open()
    assert blocks(source, 1)


def test_a_device_that_another_client_reads_is_in_use(server: DeviceServer, source: AnyDriver) -> None:
    source.open()
    second = driver(server)
    with pytest.raises(DriverError, match="in use by another program") as caught:
        second.open()
    assert caught.value.kind == "busy"
    assert [b.first_sample for b in blocks(source, 2)] == [0, 1280]
    source.close()
    second.open()
    assert blocks(second, 1)
    second.close()


def test_a_task_that_cannot_start_is_not_left_behind(server: DeviceServer, source: AnyDriver) -> None:
    server.verb("fail", "CfgSampClkTiming", -50103)
    with pytest.raises(DriverError):
        source.open()
    assert server.told()["tasks"] == []


@pytest.mark.parametrize("code", sorted(set(KINDS) - {NOT_YET}))
def test_every_code_reaches_us_with_its_kind(device_server: DeviceServer, code: int) -> None:
    source = driver(device_server)
    source.open()
    device_server.verb("fail", "ReadAnalogF64", code)
    error = lose(source)
    source.close()
    assert error.kind == KINDS[code]
    assert error.retryable == (code not in CONFIG)
    assert error.__cause__ is not None


def test_a_rate_the_device_has_not_is_refused_or_coerced(server: DeviceServer) -> None:
    with pytest.raises(DriverError, match="Asked for 10000 samples a second, Dev1 runs at 10240") as caught:
        driver(server, rate_hz=10_000).open()
    assert (caught.value.kind, caught.value.retryable) == ("config", False)
    assert "rate_hz = 10240" in caught.value.remedy
    assert server.told()["tasks"] == []
    source = driver(server, rate_hz=10_000, coerce=True)
    info = source.open()
    block = blocks(source, 1)[0]
    source.close()
    assert info.rate_hz == block.rate_hz == 10_240
    assert len(block.counts) == 1024


def test_a_rate_within_one_percent_is_taken_as_it_is(server: DeviceServer) -> None:
    source = driver(server, rate_hz=12_750)
    assert source.open().rate_hz == RATE_HZ
    source.close()


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"range_v": 30.0}, "-200077"),
        ({"terminal": "referenced single-ended"}, "-200077"),
        ({"rate_hz": 100_000}, "-200077"),
    ],
)
def test_what_the_device_cannot_do_is_a_matter_of_the_stand_file(
    server: DeviceServer, change: dict[str, Any], words: str
) -> None:
    with pytest.raises(DriverError, match="refuses what the stand file asks") as caught:
        driver(server, **change).open()
    assert (caught.value.kind, caught.value.retryable) == ("config", False)
    assert words in caught.value.cause


def test_an_input_the_device_has_not(serve: Serve) -> None:
    with pytest.raises(DriverError, match="code -200170") as caught:
        driver(serve(inputs=2)).open()
    assert not caught.value.retryable


def test_what_has_worked_is_tried_again_when_refused(server: DeviceServer, source: AnyDriver) -> None:
    """Half-way through a replug a device may refuse what it took before."""
    source.open()
    source.close()
    server.verb("fail", "CreateAIVoltageChan", -200170)
    with pytest.raises(DriverError) as caught:
        source.open()
    assert (caught.value.kind, caught.value.retryable) == ("config", True)
    source.open()


# --- another device ---------------------------------------------------------------------------------------


def test_the_device_must_be_the_one_that_was_meant(server: DeviceServer) -> None:
    right = driver(server, devices={"Dev1": {"product": "SIM-1", "serial": "1a2b3c4d"}})
    assert "Dev1 (SIM-1, serial 1A2B3C4D)" in right.open().description
    right.close()
    with pytest.raises(DriverError, match="1A2B3C4D, and the stand file says 0000BEEF") as caught:
        driver(server, devices={"Dev1": {"serial": "BEEF"}}).open()
    assert (caught.value.kind, caught.value.retryable) == ("config", False)
    with pytest.raises(DriverError, match="Dev1 is a SIM-1, and the stand file says SIM-2"):
        driver(server, devices={"Dev1": {"product": "SIM-2"}}).open()


def test_a_renamed_device_is_found_by_its_serial_number(server: DeviceServer) -> None:
    server.verb("rename", "Dev1", "Dev3")
    source = driver(server, devices={"Dev1": {"serial": "1A2B3C4D"}})
    with pytest.raises(DriverError, match="serial number 1A2B3C4D is called Dev3 now, not Dev1") as caught:
        source.open()
    assert caught.value.kind == "config"
    with pytest.raises(DriverError, match=r"Dev1 is not connected\. There are: Dev3\."):
        driver(server).open()


def test_modules_of_different_types_are_warned_of(serve: Serve, caplog: pytest.LogCaptureFixture) -> None:
    about = world()
    about["devices"]["Dev2"] = {"product": "SIM-2", "serial": 2}
    far = PLAN.probes[1].__class__("probe 3", "Dev2/ai0")
    plan = PLAN.__class__(PLAN.once_per_rev, (*PLAN.probes, far))
    source = driver(serve(about=about), plan, synchronised=True)
    with caplog.at_level(logging.WARNING):
        source.open()
    source.close()
    assert "Dev1 and Dev2 are of different types: their filters may delay differently" in caplog.text


# --- no driver, no package --------------------------------------------------------------------------------


def test_a_pc_without_the_driver_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    if not sys.platform.startswith("linux"):
        pytest.skip("allowed: the driver is looked for in another way on this system")
    import nidaqmx._lib

    monkeypatch.setattr(nidaqmx._lib, "find_library", lambda _: None)
    monkeypatch.setattr(nidaqmx._lib, "lib_importer", nidaqmx._lib.DaqLibImporter())
    monkeypatch.setattr("nidaqmx._library_interpreter.lib_importer", nidaqmx._lib.lib_importer)
    with pytest.raises(DriverError, match="The DAQmx driver is not installed on this PC") as caught:
        driver(None).open()
    assert (caught.value.kind, caught.value.retryable) == ("no_driver", False)


@pytest.mark.parametrize("package", ["nidaqmx", "grpc"])
def test_a_missing_package_is_named_with_the_extra(monkeypatch: pytest.MonkeyPatch, package: str) -> None:
    for name in ("identity", "session", "task"):
        monkeypatch.delitem(sys.modules, f"daq.drivers.ni.{name}", raising=False)
    monkeypatch.setitem(sys.modules, package, None)
    source = make_driver("daqmx", options("127.0.0.1:9"), PLAN, clock=SystemClock())
    with pytest.raises(DriverError, match=rf"package '{package}'.* is not installed") as caught:
        source.open()
    assert caught.value.kind == "no_driver"
    assert "pip install 'revmark[ni]'" in caught.value.remedy
