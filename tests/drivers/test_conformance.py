"""Every registered driver keeps every rule; and the rules catch a driver that does not."""

import dataclasses

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
    assert finding == Finding(
        "loss_is_counted", note="a loss cannot be provoked, and none came by itself within 3 s"
    )


# --- streams: blocks as long as the rules' own time-out, and losses that come by themselves ------------


class Stream(Good):
    """A block every ``block_s`` seconds, of which every fifth follows a loss of ``own_loss`` samples."""

    block_s = 0.05
    own_loss = 0

    def _open(self):
        self.due_s = self.clock.monotonic() + self.block_s
        return super()._open()

    def _read(self, timeout_s):
        wait_s = self.due_s - self.clock.monotonic()
        if self._pause(min(wait_s, timeout_s)) or wait_s > timeout_s:
            return None
        return self.delivered()

    def delivered(self):
        self.due_s += self.block_s
        self.begun += 1
        lost = self.own_loss if self.begun % 5 == 0 else 0
        return Chunk(np.zeros((self.frames, self.columns), "int16"), lost_before=lost)


class AlwaysReady(Stream):
    def _read(self, timeout_s):
        self._pause(0.001)
        return self.delivered()


class WaitsForItsBlock(Stream):
    def _read(self, timeout_s):
        self._pause(self.due_s - self.clock.monotonic())
        return self.delivered()


class Loses(Stream):
    own_loss = 25


class LosesUncounted(Loses):
    """Takes what the base has counted out of its counters again."""

    def _read(self, timeout_s):
        self._count.lost_samples = 0
        return super()._read(timeout_s)

    def _block(self, chunk):
        block = super()._block(chunk)
        self._count.lost_samples = 0
        return block


class LosesInOneSegment(Loses):
    def _block(self, chunk):
        block = super()._block(chunk)
        return dataclasses.replace(block, segment=0)


def tried(kind, rule, plan, clock):
    begin_s = clock.monotonic()
    finding = conformance.check(rule, Subject(lambda: kind(DriverOptions(), plan, clock=clock)), clock)
    return finding, clock.monotonic() - begin_s


@pytest.mark.parametrize("block_s", [0.02, 0.05, 0.1, 0.2])
def test_a_block_as_long_as_the_time_out_keeps_the_time_out(block_s, plan, clock, monkeypatch):
    monkeypatch.setattr(Stream, "block_s", block_s)
    finding, took_s = tried(Stream, conformance.time_out_is_kept, plan, clock)
    assert finding == Finding("time_out_is_kept")
    assert took_s < 1.0


def test_a_time_out_that_cannot_be_seen_is_said_in_seconds(plan, clock):
    finding, took_s = tried(AlwaysReady, conformance.time_out_is_kept, plan, clock)
    assert finding.kept
    assert "no read of 0.01 s came back empty within 3 s" in finding.note
    assert "--never-silent" in finding.note
    assert took_s < 4.0


def test_a_driver_that_waits_for_its_block_breaks_the_time_out(plan, clock):
    finding, took_s = tried(WaitsForItsBlock, conformance.time_out_is_kept, plan, clock)
    assert "wait for a block instead of coming back empty: 0.050 s each" in finding.problem
    assert took_s < 4.0


def test_a_source_without_samples_is_given_up_in_seconds(plan, clock, monkeypatch):
    monkeypatch.setattr(Stream, "block_s", 1e6)
    finding, took_s = tried(Stream, conformance.stops_in_time, plan, clock)
    assert finding.problem == "only 0 blocks came within 20 s"
    assert took_s < 21.0


@pytest.mark.parametrize(
    ("kind", "problem"),
    [
        (Loses, ""),
        (LosesUncounted, "the sample numbers jump by 25 where the counters grow by 0"),
        (LosesInOneSegment, "a loss of 25 samples started no segment"),
    ],
)
def test_a_loss_that_comes_by_itself_is_looked_at(kind, problem, plan, clock):
    finding, took_s = tried(kind, conformance.loss_is_counted, plan, clock)
    assert finding == Finding("loss_is_counted", problem)
    assert took_s < 1.0


def test_a_check_for_losses_of_their_own_ends(plan, clock):
    _, took_s = tried(Stream, conformance.loss_is_counted, plan, clock)
    assert 3.0 <= took_s < 4.0
