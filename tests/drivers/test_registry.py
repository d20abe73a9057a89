"""Names, lazy import, options."""

import subprocess
import sys
from importlib.metadata import EntryPoint

import pytest

from config.errors import DriverError
from daq.drivers import registry
from daq.drivers.registry import driver_class, driver_names, make_driver, options_problems


@pytest.fixture
def third_party(monkeypatch):
    def add(**targets):
        points = [EntryPoint(name, target, registry.GROUP) for name, target in targets.items()]
        monkeypatch.setattr(registry, "entry_points", lambda group: points)

    return add


def test_our_names_are_there():
    assert {"simulated", "replay"} <= set(driver_names())


def test_nothing_is_imported_until_a_driver_is_used():
    code = (
        "import sys; from daq.drivers import registry; registry.driver_names();"
        "print(sorted(m for m in sys.modules if m.startswith('daq.drivers.')))"
    )
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert "simulated" not in out
    assert "replay" not in out


def test_an_unknown_name_lists_the_known_and_the_nearest():
    with pytest.raises(DriverError, match=r"no driver 'simulatd'\. Did you mean 'simulated'\?") as caught:
        driver_class("simulatd")
    assert caught.value.kind == "config"
    assert "replay" in caught.value.remedy


def test_a_third_party_driver_is_found_and_cannot_take_our_name(third_party):
    third_party(mine="daq.drivers.replay:ReplayDriver", simulated="nobody:Nothing")
    assert "mine" in driver_names()
    assert driver_class("mine").name == "replay"
    assert driver_class("simulated").name == "simulated"


def test_a_missing_library_names_itself_and_how_to_install_it(third_party):
    third_party(mine="library_that_is_not_there:Driver")
    with pytest.raises(DriverError, match="pip install library_that_is_not_there") as caught:
        driver_class("mine")
    assert caught.value.kind == "no_driver"
    assert isinstance(caught.value.__cause__, ModuleNotFoundError)


@pytest.mark.parametrize("target", ["json:dumps", "json:nothing", "daq.drivers.plan:ChannelPlan"])
def test_what_is_no_driver_is_refused(third_party, target):
    third_party(mine=target)
    with pytest.raises(DriverError, match="cannot be used") as caught:
        driver_class("mine")
    assert caught.value.kind == "no_driver"


def test_every_wrong_option_is_told_with_its_key():
    problems = dict(
        options_problems(
            "simulated",
            {"sed": 3, "rate_hz": -1.0, "rotor": {"mass_kg": "heavy"}, "faults": [{"kind": "fire"}]},
        )
    )
    assert problems["source.options.sed"] == "'sed' is not known. Did you mean 'seed'?"
    assert set(problems) == {
        "source.options.sed",
        "source.options.rate_hz",
        "source.options.rotor.mass_kg",
        "source.options.faults.0.kind",
    }


@pytest.mark.parametrize(
    ("options", "key", "words"),
    [
        ({}, "source.options.full_scale", "missing"),
        ({"full_scale": 30.0, "files": ["a.wav"]}, "source.options.full_scale", "unit"),
        ({"full_scale": "30", "files": ["a.wav"]}, "source.options.full_scale", "no unit"),
        ({"full_scale": "30 mm", "files": ["a.wav"]}, "source.options.full_scale", "not a unit of voltage"),
        ({"full_scale": "0 V", "files": ["a.wav"]}, "source.options.full_scale", "too small"),
        ({"full_scale": "30 V"}, "source.options", "rate_hz and bits"),
        ({"full_scale": "30 V", "files": ["a.wav"], "pace": "slow"}, "source.options.pace", ""),
        ({"full_scale": "30 V", "files": ["a.wav"], "pace": float("nan")}, "source.options.pace", ""),
        ({"full_scale": "30 V", "files": ["a.wav"], "columns": {"1": 0}}, "source.options.columns.1", ""),
        ({"full_scale": "30 V", "files": ["a.wav"], "file": "a"}, "source.options.file", "mean 'files'"),
    ],
)
def test_one_wrong_replay_option_at_a_time(options, key, words):
    problems = options_problems("replay", options)
    assert any(found.startswith(key) and words in text for found, text in problems), problems


def test_good_options_have_no_problems():
    assert options_problems("simulated", {"seed": 3, "pace": 20, "rotor": {"mass_kg": 40}}) == []
    assert options_problems("replay", {"files": ["a.wav"], "full_scale": "30 V", "pace": "fast"}) == []


def test_an_unknown_driver_is_a_problem_of_its_key():
    assert options_problems("nobody", {})[0][0] == "source.driver"


def test_make_driver_refuses_wrong_options(plan, clock):
    with pytest.raises(DriverError, match=r"source\.options\.sed") as caught:
        make_driver("simulated", {"sed": 1}, plan, clock=clock)
    assert caught.value.kind == "config"
