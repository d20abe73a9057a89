"""Options, inputs, and every mistake that can be told before a device is touched."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest
from ni_kit import PLAN, options

from config.errors import DriverError
from daq.drivers.base import ChannelPlan
from daq.drivers.ni.options import DaqmxOptions, devices_of, inputs_of, settling_s
from daq.drivers.registry import options_problems


def plan(**changes: Any) -> ChannelPlan:
    """The plan with probe 1 changed."""
    return replace(PLAN, probes=(replace(PLAN.probes[0], **changes), *PLAN.probes[1:]))


def read(**more: Any) -> DaqmxOptions:
    return DaqmxOptions.model_validate(options(**more))


def refusal(made: DaqmxOptions, of: ChannelPlan = PLAN) -> str:
    with pytest.raises(DriverError) as caught:
        inputs_of(made, of)
    assert caught.value.kind == "config"
    assert not caught.value.retryable
    return str(caught.value)


def test_the_defaults_power_nothing_and_read_dc() -> None:
    made = inputs_of(read(inputs={}), PLAN)
    assert [item.physical for item in made] == list(PLAN.inputs)
    assert {item.coupling for item in made} == {"dc"}
    assert {item.excitation_a for item in made} == {0.0}
    assert {item.divider for item in made} == {1.0}
    assert [item.sensor for item in made] == ["voltage", "proximity probe", "proximity probe"]
    assert settling_s(read(), made) == 0.0


def test_an_acceleration_is_a_plain_voltage_until_power_is_asked_for() -> None:
    unpowered = inputs_of(read(inputs={}), plan(kind="acceleration"))
    assert (unpowered[1].sensor, unpowered[1].excitation_a) == ("voltage", 0.0)
    wired = {"Dev1/ai1": {"sensor": "IEPE accelerometer", "excitation_ma": 2.0, "range_v": 5.0}}
    made = read(inputs=wired)
    powered = inputs_of(made, plan(kind="acceleration", coupling="ac"))
    assert (powered[1].excitation_a, powered[1].range_v, powered[2].range_v) == (0.002, 5.0, 10.0)
    assert settling_s(made, powered) == 8.0
    assert settling_s(read(inputs=wired, settling_s=5), powered) == 5.0


def test_nothing_has_a_sensitivity() -> None:
    """Volts become motion in the stand file alone."""
    from daq.drivers.ni import options as module

    keys = {key for kind in (module.DaqmxOptions, module.InputOptions) for key in kind.model_fields}
    assert not any("sensitivity" in key or "volts_per" in key for key in keys)


@pytest.mark.parametrize(
    ("more", "key", "words"),
    [
        ({"rate_hz": 50}, "rate_hz", "100"),
        ({"range_v": None}, "range_v", ""),
        ({"terminal": "rse"}, "terminal", "differential"),
        ({"block_s": 0.0003}, "block_s", "0.05"),
        ({"server": "somewhere"}, "server", "host:port"),
        ({"servr": "a:1"}, "servr", "Did you mean 'server'?"),
        ({"inputs": {"Dev1/ai1": {"sensitivity": 100}}}, "inputs.Dev1/ai1.sensitivity", "not known"),
        ({"inputs": {"Dev1/ai1": {"sensor": "IEPE accelerometer"}}}, "", "needs excitation_ma"),
        ({"inputs": {"Dev1/ai1": {"divider": 0.5}}}, "inputs.Dev1/ai1.divider", ""),
        ({"devices": {"Dev1": {"serial": "xyz"}}}, "devices.Dev1.serial", "hexadecimal"),
    ],
)
def test_a_wrong_option_is_told_with_its_key(more: dict[str, Any], key: str, words: str) -> None:
    problems = options_problems("daqmx", options(**more))
    assert [found for found, _ in problems] == [f"source.options.{key}".rstrip(".")]
    assert words in problems[0][1]


@pytest.mark.parametrize("missing", ["rate_hz", "range_v", "terminal"])
def test_what_has_no_safe_default_must_be_written(missing: str) -> None:
    given = {key: value for key, value in options().items() if key != missing}
    assert options_problems("daqmx", given) == [(f"source.options.{missing}", f"{missing!r} is missing.")]


@pytest.mark.parametrize("wrong", ["1", "ai1", "Dev1/ai1:3", "Dev1/ai1, Dev1/ai2", "Dev1/ctr0", "Dév1/ai1"])
def test_an_input_is_one_physical_channel(wrong: str) -> None:
    said = refusal(read(inputs={}), plan(input=wrong))
    assert f"probe 1: {wrong!r} is no physical channel" in said


def test_an_ac_coupled_proximity_probe_is_refused_unless_it_is_meant() -> None:
    assert "loses the gap voltage" in refusal(read(), plan(coupling="ac"))
    meant = read(inputs={"Dev1/ai1": {"sensor": "voltage"}})
    assert inputs_of(meant, plan(coupling="ac"))[1].coupling == "ac"


def test_power_on_a_sensor_that_takes_none_is_refused() -> None:
    said = refusal(read(inputs={"Dev1/ai1": {"excitation_ma": 2.0}}))
    assert "put a current on a sensor of the kind 'proximity probe'" in said


def test_a_powered_sensor_must_be_called_ac_coupled_in_the_set_up() -> None:
    wired = {"Dev1/ai1": {"sensor": "IEPE accelerometer", "excitation_ma": 4.0}}
    assert 'write coupling = "ac" at the channel' in refusal(read(inputs=wired), plan(kind="acceleration"))


def test_options_that_contradict_the_channel_are_refused() -> None:
    assert "dc-coupled in the channel and ac" in refusal(read(inputs={"Dev1/ai1": {"coupling": "ac"}}))


def test_the_once_per_rev_input_may_be_ac_only_when_it_says_so() -> None:
    assert inputs_of(read(inputs={"Dev1/ai0": {"coupling": "ac"}}), PLAN)[0].coupling == "ac"


def test_all_mistakes_are_told_at_once_and_near_misses_named() -> None:
    said = refusal(
        read(inputs={"Dev1/ai8": {}, "Dev1/ai1": {"excitation_ma": 1.0}}, devices={"Dev11": {}}),
    )
    assert "inputs.Dev1/ai8 belongs to no channel. Did you mean 'Dev1/ai" in said
    assert "devices.Dev11 has no channel. Did you mean 'Dev1'?" in said
    assert "excitation_ma" in said


def test_two_devices_without_a_common_clock_are_refused() -> None:
    far = plan(input="Dev2/ai0")
    said = refusal(read(inputs={}), far)
    assert "probe 1 is on Dev2 and once-per-rev on Dev1: two devices have two clocks" in said
    assert devices_of(inputs_of(read(inputs={}, synchronised=True), far)) == ("Dev1", "Dev2")
