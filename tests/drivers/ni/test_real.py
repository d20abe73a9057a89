"""The same assertions on a device of one's own, or on one the maker's tool simulates. Never run so far.

    REVMARK_REAL_STAND=bay.toml python -m pytest -m real tests/drivers/ni

``bay.toml`` is a stand file with ``driver = "daqmx"`` that fits the device as it is wired; nothing need turn.
Left out unless ``-m`` names ``real`` (conftest.py beside this file). No test takes the device away from
another program, resets it, or drives an output. Then pull its plug and put it back while
``test_unplugged_by_hand`` asks for it.
"""

from __future__ import annotations

import os
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from ni_kit import blocks

from config.errors import DriverError
from config.stand import Stand, check_stand
from daq.clock import SystemClock
from daq.drivers import conformance
from daq.drivers.conformance import RULES, Subject
from daq.drivers.registry import AnyDriver, make_driver, options_problems
from daq.setup import channel_plan, set_up_draft, signal_params

pytestmark = [pytest.mark.real, pytest.mark.timeout(180)]
BY_HAND_S = 60.0


@pytest.fixture(scope="module")
def stand() -> Stand:
    file = os.environ.get("REVMARK_REAL_STAND")
    assert file, "name a stand file that fits your device in REVMARK_REAL_STAND"
    return check_stand(Path(file), options_problems)


def make(stand: Stand, **change: object) -> AnyDriver:
    options = {**stand.source.options, **change}
    return make_driver("daqmx", options, channel_plan(stand), clock=SystemClock(), folder=stand.folder)


@pytest.fixture
def source(stand: Stand) -> Iterator[AnyDriver]:
    made = make(stand, settling_s=0)
    yield made
    made.close()


@pytest.mark.parametrize("rule", RULES, ids=lambda rule: rule.__name__)
def test_rule_is_kept(stand: Stand, rule: conformance.Rule) -> None:
    finding = conformance.check(rule, Subject(lambda: make(stand, settling_s=0)), SystemClock())
    assert finding.kept, finding.problem


def test_samples_come_at_the_rate_that_is_told(source: AnyDriver) -> None:
    """Within 2 % by the PC's clock over 20 s: a rate that is another one, not a clock that drifts."""
    info = source.open()
    blocks(source, 5)
    begun_s, found = time.monotonic(), blocks(source, 200)
    took_s = time.monotonic() - begun_s
    assert sum(len(b.counts) for b in found) / took_s == pytest.approx(info.rate_hz, rel=0.02)
    firsts = np.array([b.first_sample for b in found])
    assert (np.diff(firsts) == len(found[0].counts)).all()
    assert source.counters.lost_samples == 0


def test_the_device_tells_what_it_is(source: AnyDriver) -> None:
    assert "serial" in source.open().description


def test_the_skew_is_that_of_its_kind(stand: Stand, source: AnyDriver) -> None:
    """All at once, or one after the other within a sample."""
    info = source.open()
    if info.skew_s:
        assert info.skew_s[0] == 0.0
        assert 0 < max(info.skew_s) < 1 / info.rate_hz
    draft = set_up_draft(stand, info.rate_hz, info.skew_s)
    assert [c.skew_s for c in draft.channels] == [c.skew_s for c in signal_params(stand, info)[1]]


def test_a_late_reader_loses_loudly(source: AnyDriver) -> None:
    """Which of the overrun codes comes, and when, only a device shows."""
    source.open()
    segment = blocks(source, 1)[-1].segment
    time.sleep(12.0)
    with pytest.raises(DriverError) as caught:
        blocks(source, 200)
    assert caught.value.kind == "lost_data"
    source.close()
    source.open()
    assert blocks(source, 1)[0].segment > segment


def test_a_wrong_input_is_a_matter_of_the_stand_file(stand: Stand) -> None:
    wrong = make(stand, range_v=999.0, inputs={})
    with pytest.raises(DriverError) as caught:
        wrong.open()
    assert (caught.value.kind, caught.value.retryable) == ("config", False)


def test_in_use_is_told(stand: Stand, source: AnyDriver) -> None:
    source.open()
    second = make(stand)
    with pytest.raises(DriverError) as caught:
        second.open()
    second.close()
    assert caught.value.kind == "busy"
    assert blocks(source, 2)


@pytest.mark.skipif("REVMARK_BY_HAND" not in os.environ, reason="allowed: needs a hand at the plug")
def test_unplugged_by_hand(source: AnyDriver, capsys: pytest.CaptureFixture[str]) -> None:
    source.open()
    segment = blocks(source, 1)[-1].segment
    with capsys.disabled():
        print("\npull the plug now, and put it back after five seconds", flush=True)
    with pytest.raises(DriverError) as caught:
        blocks(source, round(10 * BY_HAND_S))
    assert caught.value.kind in ("gone", "timeout")
    source.close()
    until_s = time.monotonic() + BY_HAND_S
    trouble: DriverError | None = DriverError("not tried", kind="gone")
    while trouble is not None and trouble.retryable and time.monotonic() < until_s:
        trouble = trouble_of(source)
    assert trouble is None
    assert blocks(source, 1)[0].segment > segment


def trouble_of(source: AnyDriver) -> DriverError | None:
    """One attempt to open, and a rest after one that failed."""
    try:
        source.open()
    except DriverError as error:
        time.sleep(0.5)
        return error
    return None
