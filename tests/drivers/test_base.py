"""The base class with drivers made for the purpose."""

import logging
import threading

import numpy as np
import pytest

from config.errors import DriverError, Refusal
from daq.clock import SystemClock
from daq.drivers.base import Chunk, Driver, DriverOptions, DriverState, EndOfSource, SourceInfo

INFO = SourceInfo(1000.0, "int16", (1e-3,) * 3, (-32768, 32767), "live", "a script")


class Args(DriverOptions):
    size: int


class Scripted(Driver[DriverOptions]):
    """Plays a list: chunks, None, ends, or exceptions to raise."""

    name = "scripted"
    Options = DriverOptions
    verbs = ("grow", "fail")
    silence_limit_s = 1.0

    def _prepare(self):
        self.script = []
        self.info = INFO
        self.closed = 0

    def _open(self):
        if isinstance(self.info, Exception):
            raise self.info
        return self.info

    def _read(self, timeout_s):
        step = self.script.pop(0) if self.script else None
        if isinstance(step, Exception):
            raise step
        if step is None:
            self._pause(timeout_s)
        return step

    def _close(self):
        self.closed += 1

    def _act(self, verb, args):
        if verb == "fail":
            raise OSError("broken")
        return {"size": Args.model_validate(dict(args)).size}


def frames(n=4, columns=3, dtype="int16"):
    return np.zeros((n, columns), dtype)


@pytest.fixture
def driver(plan, clock):
    made = Scripted(DriverOptions(), plan, clock=clock)
    yield made
    made.close()


def test_blocks_are_numbered_and_counted(driver):
    driver.open()
    driver.script = [
        Chunk(frames()),
        Chunk(frames(6)),
        Chunk(frames(), lost_before=90),
        Chunk(frames(), fresh=True),
    ]
    blocks = [driver.read() for _ in range(4)]
    assert [(b.segment, b.first_sample) for b in blocks] == [(0, 0), (0, 4), (1, 100), (2, 104)]
    count = driver.counters
    assert (count.blocks, count.samples, count.gaps, count.lost_samples) == (4, 18, 1, 90)


def test_after_an_end_the_next_block_starts_a_segment(driver):
    driver.open()
    driver.script = [Chunk(frames()), EndOfSource("end of source"), None, Chunk(frames())]
    first, end, nothing, second = [driver.read() for _ in range(4)]
    assert end == EndOfSource("end of source")
    assert nothing is None
    assert (second.segment, second.first_sample) == (first.segment + 1, 4)


def test_a_foreign_error_leaves_as_driver_error_with_its_cause(driver):
    driver.open()
    driver.script = [OSError("cable")]
    with pytest.raises(DriverError, match="scripted failed while it was read: OSError: cable") as caught:
        driver.read()
    assert isinstance(caught.value.__cause__, OSError)
    assert driver.state is DriverState.LOST
    assert driver.counters.errors == 1


def test_a_refusal_inside_read_is_a_driver_error_too(driver):
    driver.open()
    driver.script = [Refusal("not now")]
    with pytest.raises(DriverError, match="Refusal"):
        driver.read()
    assert driver.state is DriverState.LOST


def test_a_lost_source_refuses_reads_until_opened_again(driver):
    driver.open()
    driver.script = [Chunk(frames()), DriverError("Gone.", kind="gone")]
    driver.read()
    with pytest.raises(DriverError, match=r"^Gone\.$"):
        driver.read()
    with pytest.raises(DriverError, match="is lost"):
        driver.read()
    driver.close()
    driver.open()
    driver.script = [Chunk(frames())]
    again = driver.read()
    assert (again.segment, again.first_sample) == (1, 0)


def test_a_failed_open_is_closed_and_may_be_tried_again(driver):
    driver.info = OSError("no such port")
    with pytest.raises(DriverError, match="OSError: no such port"):
        driver.open()
    assert (driver.state, driver.closed) == (DriverState.CLOSED, 1)
    driver.info = INFO
    driver.open()
    assert driver.state is DriverState.OPEN


def test_a_source_with_other_channels_than_the_stand_file_is_refused(driver):
    driver.info = SourceInfo(1000.0, "int16", (1e-3,) * 2, (-32768, 32767), "live", "two channels")
    with pytest.raises(DriverError, match="describes 2 channels at 1000 Hz where the stand file has 3"):
        driver.open()


@pytest.mark.parametrize(
    "chunk",
    [
        Chunk(frames(columns=2)),
        Chunk(frames(dtype="int32")),
        Chunk(frames(0)),
        Chunk(np.zeros(6, "int16")),
        Chunk(frames(), lost_before=-1),
        Chunk(frames(), mono_s=-5.0),
    ],
)
def test_an_unsound_chunk_is_the_drivers_fault(driver, chunk):
    driver.open()
    driver.script = [chunk]
    with pytest.raises(DriverError, match="Mend the driver") as caught:
        driver.read()
    assert caught.value.kind == "protocol"


def test_silence_beyond_the_limit_is_a_time_out(driver, clock):
    driver.open()
    assert [driver.read(0.5) for _ in range(2)] == [None, None]
    with pytest.raises(DriverError, match=r"sent no data for 1\.5 s") as caught:
        driver.read(0.5)
    assert caught.value.kind == "timeout"


def test_a_block_ends_the_silence(driver):
    driver.open()
    driver.script = [None, None, Chunk(frames()), None, None]
    assert [driver.read(0.5) is None for _ in range(5)] == [True, True, False, True, True]


def test_verbs_and_arguments_are_refused_in_words(driver):
    with pytest.raises(Refusal, match="scripted is closed"):
        driver.act("grow", size=1)
    driver.open()
    assert driver.act("grow", size=3) == {"size": 3}
    with pytest.raises(Refusal, match=r"cannot 'shrink'\. It knows grow, fail"):
        driver.act("shrink")
    with pytest.raises(Refusal, match=r"size: .*not 'big'"):
        driver.act("grow", size="big")
    with pytest.raises(DriverError, match="OSError: broken"):
        driver.act("fail")
    assert driver.state is DriverState.OPEN


def test_an_error_while_closing_is_logged_and_the_source_is_closed(driver, caplog):
    driver.open()
    driver._close = lambda: 1 / 0
    with caplog.at_level(logging.WARNING):
        driver.close()
    assert driver.state is DriverState.CLOSED
    assert "did not close cleanly" in caplog.text


def test_close_from_another_thread_wakes_a_read(plan):
    driver = Scripted(DriverOptions(), plan, clock=SystemClock())
    driver.open()
    entered, got = threading.Event(), []

    def read():
        entered.set()
        got.append(driver.read(timeout_s=30.0))

    reader = threading.Thread(target=read)
    reader.start()
    assert entered.wait(5)
    driver.close()
    reader.join(5)
    assert not reader.is_alive()
    assert got in ([None], [])  # [] when close came first and the read was refused
    assert driver.state is DriverState.CLOSED
