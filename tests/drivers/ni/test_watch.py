"""The look once a second, on a stream that tells whatever the test wants."""

from __future__ import annotations

import logging

import pytest

from config.errors import DriverError
from daq.drivers.ni.watch import Watch

LOG = logging.getLogger("revmark.test")
RATE_HZ, BUFFER = 1000.0, 10_000


class Stream:
    """Counts how often it is asked."""

    def __init__(self) -> None:
        self.total, self.asked = 0, 0

    @property
    def total_samp_per_chan_acquired(self) -> int:
        self.asked += 1
        return self.total


def watched(caplog: pytest.LogCaptureFixture) -> tuple[Stream, Watch]:
    caplog.set_level(logging.INFO)
    stream = Stream()
    return stream, Watch(stream, RATE_HZ, BUFFER, powered=False, log=LOG)


def test_the_device_is_asked_once_a_second(caplog: pytest.LogCaptureFixture) -> None:
    stream, watch = watched(caplog)
    for tenth in range(31):
        watch.look(tenth / 10, 0)
    assert stream.asked in (3, 4)


def test_a_reader_behind_is_told_at_a_quarter_and_at_more_than_half(caplog: pytest.LogCaptureFixture) -> None:
    stream, watch = watched(caplog)
    for second, behind in enumerate((0, 2400, 2600, 2700, 6100, 9000, 100, 2600)):
        stream.total = 1000 * second + behind
        watch.look(float(2 * second), 1000 * second)
    assert [(r.levelname, r.message.split(":")[1].split()[0]) for r in caplog.records] == [
        ("WARNING", "26"),
        ("ERROR", "61"),
        ("WARNING", "26"),
    ]


def test_fewer_samples_than_were_fetched_is_no_device_to_trust(caplog: pytest.LogCaptureFixture) -> None:
    stream, watch = watched(caplog)
    stream.total = 99
    with pytest.raises(DriverError, match="took 1 samples fewer") as caught:
        watch.look(0.0, 100)
    assert caught.value.kind == "protocol"


@pytest.mark.parametrize(("ppm", "level"), [(30, "INFO"), (-50, "INFO"), (5000, "WARNING")])
def test_the_two_clocks_are_compared_now_and_then(
    caplog: pytest.LogCaptureFixture, ppm: float, level: str
) -> None:
    stream, watch = watched(caplog)
    for second in range(1001):
        stream.total = round(second * RATE_HZ * (1 + ppm / 1e6))
        watch.look(float(second), stream.total)
    assert [(r.levelname, r.args) for r in caplog.records] == [
        (level, (pytest.approx(ppm, abs=5), seconds)) for seconds in (60.0, 240.0, 960.0)
    ]
