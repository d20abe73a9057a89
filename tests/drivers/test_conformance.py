"""Every registered driver keeps every rule; and the rules catch a driver that does not."""

import digitizer_kit
import ni_kit
import numpy as np
import pytest

from daq.clock import SystemClock
from daq.drivers import conformance
from daq.drivers.base import Chunk, Driver, DriverOptions, SourceInfo
from daq.drivers.conformance import RULES, Finding, Subject
from daq.drivers.registry import driver_names, make_driver


def lose_half_a_second(driver):
    driver.act("fault", kind="dropout", seconds=0.5)
    return 6400  # 0.5 s at 12,800 samples a second


def simulated(plan, clock, recordings, request):
    return Subject(lambda: make_driver("simulated", {}, plan, clock=clock), lose=lose_half_a_second), clock


def replay(pace):
    options = {"files": ["fan-O.wav"], "full_scale": "30 V", "pace": pace}

    def subject(plan, clock, recordings, request):
        found = Subject(
            lambda: make_driver("replay", options, plan, clock=clock, folder=recordings),
            start=("next", {"file": "fan-O.wav"}),
            lose=None,  # a file has no gaps
        )
        return found, clock

    return subject


def daqmx(plan, clock, recordings, request):
    """Against the device server of tests/drivers/ni, on the real clock."""
    server = request.getfixturevalue("device_server")
    server.renew()

    def lose(driver):
        server.verb("short", 100)  # a read that comes back short is a loss
        return 100

    return Subject(lambda: ni_kit.driver(server), lose=lose), SystemClock()


def serial(lines):
    """A digitizer on a wire of tests/drivers/serial, in pieces of 0.07 s, on the real clock."""

    def subject(plan, clock, recordings, request):
        port = request.getfixturevalue("tmp_path") / "port"
        wire = digitizer_kit.SocketWire() if lines else digitizer_kit.PtyWire(port)
        rotor = digitizer_kit.Rotor(rate_hz=1000.0 if lines else 12_800.0)
        scans = round(0.07 * rotor.rate_hz)
        digitizer = digitizer_kit.Digitizer(rotor, scans=scans, lines=8 * lines, every_s=0.1)
        sender = digitizer_kit.Sender(wire, digitizer)
        request.addfinalizer(sender.close)
        options = {"port": wire.url, "channels": 3, "codec": "lines" if lines else "binary"}
        wires, clock = digitizer_kit.plan(), SystemClock()
        found = Subject(
            lambda: make_driver("serial", options, wires, clock=clock),
            lose=lambda driver: sender.swallow(2) * digitizer.scans,
        )
        return found, clock

    return subject


ENTRIES = {
    ("serial", "frames on a pseudo-terminal"): serial(lines=False),
    ("serial", "lines on a socket"): serial(lines=True),
    ("daqmx", "device server"): daqmx,
    ("simulated", "real pace"): simulated,
    ("replay", "real pace"): replay("real"),
    ("replay", "fast"): replay("fast"),
}
# what a driver cannot show; a rule that finds nothing to check anywhere else is a failure
UNSHOWN = {("replay", "loss_is_counted")}


def test_every_registered_driver_has_an_entry():
    assert set(driver_names()) == {name for name, _ in ENTRIES}


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.__name__)
@pytest.mark.parametrize("entry", ENTRIES, ids=" ".join)
def test_rule_is_kept(entry, rule, plan, clock, recordings, request):
    subject, clock = ENTRIES[entry](plan, clock, recordings, request)
    finding = conformance.check(rule, subject, clock)
    assert finding.kept, finding.problem
    assert bool(finding.note) == ((entry[0], rule.__name__) in UNSHOWN)


# --- drivers that break rules -------------------------------------------------------------------------


class Good(Driver[DriverOptions]):
    name = "good"
    Options = DriverOptions
    frames = 100
    columns = 3

    def _open(self):
        self.begun = 0
        return SourceInfo(1000.0, "int16", (1e-3,) * 3, (-32768, 32767), "live", "made up")

    def _read(self, timeout_s):
        if self._pause(0.1 if timeout_s >= 0.1 else timeout_s):
            return None
        self.begun += 1
        return Chunk(np.zeros((self.frames, self.columns), "int16")) if self.begun % 2 else None

    def _close(self):
        pass


class OwnRead(Good):
    def read(self, timeout_s=0.2):
        return super().read(timeout_s)


class Slow(Good):
    def _read(self, timeout_s):
        self._pause(timeout_s + 0.9)
        return super()._read(timeout_s)


class SameMemory(Good):
    def _open(self):
        self.buffer = np.zeros((self.frames, self.columns), "int16")
        return super()._open()

    def _read(self, timeout_s):
        got = super()._read(timeout_s)
        self.buffer += 1
        return got and Chunk(self.buffer)


class Wide(Good):
    columns = 4


class Hangs(Good):
    def _close(self):
        self.clock.sleep(3.0)


class Miscounts(Good):
    lost = 0

    def _read(self, timeout_s):
        got = super()._read(timeout_s)
        if got and self.lost:
            got, self.lost = Chunk(got.counts, lost_before=self.lost - 1), 0
        return got


def lose_ten(driver):
    driver.lost = 10
    return 10


@pytest.mark.parametrize(
    ("kind", "broken"),
    [
        (Good, set()),
        (OwnRead, {"overrides_no_public_method"}),
        (Slow, {"time_out_is_kept"}),
        (SameMemory, {"blocks_keep_their_own_memory"}),
        (Hangs, {"stops_in_time"}),
        (Miscounts, {"loss_is_counted"}),
    ],
)
def test_a_broken_driver_is_caught(kind, broken, plan, clock):
    lose = lose_ten if kind is Miscounts else None
    subject = Subject(lambda: kind(DriverOptions(), plan, clock=clock), lose=lose)
    found = conformance.run(subject, clock)
    assert {f.rule for f in found if not f.kept} == broken


def test_a_driver_that_delivers_nonsense_is_caught(plan, clock):
    subject = Subject(lambda: Wide(DriverOptions(), plan, clock=clock))
    finding = conformance.check(conformance.blocks_are_as_announced, subject, clock)
    assert "Mend the driver" in finding.problem


def test_a_loss_that_cannot_be_provoked_is_said_not_skipped(plan, clock):
    subject = Subject(lambda: Good(DriverOptions(), plan, clock=clock))
    finding = conformance.check(conformance.loss_is_counted, subject, clock)
    assert finding == Finding("loss_is_counted", note="a loss cannot be provoked")
