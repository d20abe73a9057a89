"""The stand file: one wrong key at a time, all at once, and what a right one becomes.

Expected numbers: conversions of METHODS 6.5 and of definitions (1 mil = 25.4 um), limits of REUSE (a).
"""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from config.errors import StandFileError
from config.stand import Stand, SteadinessLimits, check_stand, load_stand, stand_schema
from store.records import ChannelSetUp, PulseSetUp, SetUp

GOOD = """\
[stand]
name = "bay-1"
time_zone = "Europe/Lisbon"
ends = ["drive", "free"]
angles_seen_from = "drive"
zero = "top dead centre"

[source]
driver = "simulated"

[once_per_rev]
name = "tacho"
input = "0"
edge = "falling"
level = "-11.5 V"
angle = "0 deg"

[[channel]]
name = "probe 1"
input = "1"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "45 deg"
gap_limits = ["-16 V", "-4 V"]
show = "mil pp"

[[channel]]
name = "probe 2"
input = "2"
kind = "velocity"
sensitivity = "4 mV/(mm/s)"
positive = "falling"
angle = "-45 deg"
coupling = "ac"
skew = "0.02 ms"

[steadiness]
preset = "small"

[run]
minimum_speed = "90 rpm"

[raw]
total_mib = 1000

[store]
path = "kept.sqlite"

[access]
group = "stand-users"
"""


def write(folder: Path, text: str) -> Path:
    file = folder / "bay.toml"
    file.write_text(text, encoding="utf-8")
    return file


def problems(folder: Path, text: str) -> dict[str, str]:
    with pytest.raises(StandFileError) as caught:
        load_stand(write(folder, text))
    return dict(caught.value.problems)


def changed(old: str, new: str) -> str:
    assert old in GOOD, old
    return GOOD.replace(old, new, 1)


def test_a_right_file_in_base_units(tmp_path: Path) -> None:
    stand = load_stand(write(tmp_path, GOOD))
    first, second = stand.channels
    assert (stand.name, stand.ends, stand.zone.key) == ("bay-1", ("drive", "free"), "Europe/Lisbon")
    assert (stand.pulse.name, stand.pulse.level_v, stand.pulse.hysteresis_v) == ("tacho", -11.5, None)
    assert first.volts_per_unit == pytest.approx(0.2 / 25.4, rel=1e-14)
    assert (first.gap_limits_v, first.positive_sign, first.unit) == ((-16.0, -4.0), 1, "um")
    assert (first.display.name, second.display.name) == ("mil pp", "mm/s rms")
    assert (second.angle_deg, second.positive_sign, second.skew_s) == (315.0, -1, 2e-5)
    assert (stand.run.minimum_speed_hz, stand.run.minimum_duration_s, stand.run.slow_roll_limit_hz) == (
        1.5,
        2,
        5,
    )
    assert (stand.raw.per_reading_mib, stand.raw.total_mib) == (128, 1000)
    assert stand.store_path == tmp_path / "kept.sqlite"
    assert stand.access.group == "stand-users"


WRONG: list[tuple[str, str, str, str]] = [
    # old text, new text, key of the mistake, words of its sentence
    ('name = "bay-1"', 'nam = "bay-1"', "stand.nam", "did you mean name?"),
    ('name = "bay-1"', 'name = ""', "stand.name", "must not be empty"),
    ('name = "bay-1"', f'name = "{"x" * 65}"', "stand.name", "at most 64 characters"),
    ('name = "bay-1"', 'name = "bay\\u001b[31m"', "stand.name", "printable"),
    ('name = "bay-1"', "name = 1", "stand.name", "must be text in quotes, not 1"),
    ('zero = "top dead centre"\n', "", "stand.zero", "is missing. What stand angle zero is"),
    ("Europe/Lisbon", "Europe/Lisbonn", "stand.time_zone", 'did you mean "Europe/Lisbon"?'),
    ("Europe/Lisbon", "../etc/passwd", "stand.time_zone", "is no time zone"),
    ("Europe/Lisbon", "Europe", "stand.time_zone", "is no time zone"),
    ('["drive", "free"]', '["drive", "Drive"]', "stand.ends", "both ends are called"),
    ('["drive", "free"]', '["drive", "free", "top"]', "stand.ends", "takes at most 2, has 3"),
    ('["drive", "free"]', '["drive"]', "stand.ends.2", 'For example ["drive", "free"]'),
    ('["drive", "free"]', '"drive"', "stand.ends", "must be a list in square brackets"),
    ('seen_from = "drive"', 'seen_from = "left"', "stand.angles_seen_from", 'write "drive" or "free"'),
    ('driver = "simulated"', "", "source.driver", "is missing"),
    ('driver = "simulated"', 'driver = "simulated"\noptions = 3', "source.options", "must be a table"),
    ("[once_per_rev]", "[once-per-rev]", "once_per_rev", "is missing. The once-per-rev channel: without it"),
    ("[once_per_rev]", "[once-per-rev]", "once-per-rev", "did you mean once_per_rev?"),
    ("[once_per_rev]", "[[once_per_rev]]", "once_per_rev", "write its keys below a line [once_per_rev]"),
    ('edge = "falling"', 'edge = "down"', "once_per_rev.edge", "must be 'falling' or 'rising', not 'down'"),
    ('edge = "falling"', "", "once_per_rev.edge", 'One of "falling", "rising"'),
    ('level = "-11.5 V"', 'level = "-11.5"', "once_per_rev.level", "has no unit"),
    ('level = "-11.5 V"', 'level = "-2000 V"', "once_per_rev.level", "is too small"),
    ('level = "-11.5 V"', "level = -11.5", "once_per_rev.level", "write it in quotes with one"),
    ('level = "-11.5 V"', 'hysteresis = "0 V"', "once_per_rev.hysteresis", "above 0 V"),
    ('level = "-11.5 V"', "pulses = 2", "once_per_rev.pulses", "is 2, but not which of them counts"),
    ('level = "-11.5 V"', "pulses = 0", "once_per_rev.pulses", "must be from 1 to 60, not 0"),
    ('level = "-11.5 V"', "pulses = 61", "once_per_rev.pulses", "must be from 1 to 60, not 61"),
    (
        'level = "-11.5 V"',
        'marked = "long"',
        "once_per_rev.pulses",
        "is 1, so there is nothing to tell apart",
    ),
    ('level = "-11.5 V"', 'pulses = 3\nmarked = "wide"', "once_per_rev.marked", "must be 'long', not 'wide'"),
    (
        'level = "-11.5 V"',
        'pulses = 3\nspacing = ["100 deg", "120 deg"]',
        "once_per_rev.spacing",
        "adds to 220 deg",
    ),
    (
        'level = "-11.5 V"',
        'pulses = 4\nspacing = ["90 deg", "90.5 deg", "89.5 deg", "90 deg"]',
        "once_per_rev.spacing",
        "looks the same from pulse 3 as from pulse 1 (to 1 deg)",
    ),
    (
        'level = "-11.5 V"',
        'pulses = 4\nspacing = ["80 deg", "100 deg", "80 deg", "100 deg"]',
        "once_per_rev.spacing",
        "looks the same from pulse 3 as from pulse 1",
    ),
    (
        'level = "-11.5 V"',
        'pulses = 4\nspacing = ["100 deg", "120 deg", "140 deg"]',
        "once_per_rev.pulses",
        "is 4, but spacing has 3 angles",
    ),
    (
        'level = "-11.5 V"',
        'pulses = 3\nmarked = "long"\nspacing = ["100 deg", "120 deg", "140 deg"]',
        "once_per_rev.pulses",
        "not with both",
    ),
    ('level = "-11.5 V"', "pulses = 2\nspacing = [90, 270]", "once_per_rev.spacing.1", "has no unit"),
    ('level = "-11.5 V"', "pulses = true", "once_per_rev.pulses", "must be a whole number"),
    ('angle = "0 deg"', 'angle = "361 deg"', "once_per_rev.angle", "is out of range"),
    ('angle = "0 deg"', 'angle = "0"', "once_per_rev.angle", "has no unit"),
    ('angle = "0 deg"', 'angle = "0 mm"', "once_per_rev.angle", "is not a unit of angle"),
    ('name = "probe 1"', 'nmae = "probe 1"', "channel.1.nmae", "did you mean name?"),
    ('name = "probe 2"', 'name = "Probe 1"', "channel.2.name", "is the name of channel.1 already"),
    ('name = "probe 2"', 'name = "tacho"', "channel.2.name", "is the name of once_per_rev already"),
    ('input = "2"', 'input = "1"', "channel.2.input", "is wired to channel.1 already"),
    ('input = "2"', 'input = "0"', "channel.2.input", "is wired to once_per_rev already"),
    ('input = "2"', "input = 2", "channel.2.input", "must be text in quotes, not 2"),
    ('kind = "displacement"', 'kind = "shift"', "channel.1.kind", "must be 'displacement', 'velocity'"),
    ('"200 mV/mil"', '"200"', "channel.1.sensitivity", "has no unit"),
    ('"200 mV/mil"', "200", "channel.1.sensitivity", "has no unit"),
    ('"200 mV/mil"', '"100 mV/g"', "channel.1.sensitivity", "sensitivity for acceleration"),
    ('"200 mV/mil"', '"-200 mV/mil"', "channel.1.sensitivity", "must be above zero"),
    ('sensitivity = "200 mV/mil"', "", "channel.1.sensitivity", 'For example "200 mV/mil"'),
    ('positive = "rising"', 'positive = "up"', "channel.1.positive", "must be 'rising' or 'falling'"),
    ('positive = "rising"', "", "channel.1.positive", "is missing"),
    ('angle = "45 deg"', 'angle = "-400 deg"', "channel.1.angle", "is out of range"),
    ('["-16 V", "-4 V"]', '["-4 V", "-16 V"]', "channel.1.gap_limits", "write the lower limit first"),
    ('["-16 V", "-4 V"]', '["-4 V", "-4 V"]', "channel.1.gap_limits", "is not below"),
    ('["-16 V", "-4 V"]', '["-16", "-4 V"]', "channel.1.gap_limits.1", "has no unit"),
    ('coupling = "ac"', 'coupling = "ac"\ngap_limits = ["1 V", "2 V"]', "channel.2.gap_limits", "ac-coupled"),
    ('show = "mil pp"', 'show = "mm/s rms"', "channel.1.show", "is no way to show displacement"),
    ('show = "mil pp"', "show = 3", "channel.1.show", "must be text"),
    ('show = "mil pp"', 'minimum_speed = "60 rpm"', "channel.1.minimum_speed", "it belongs under [run]"),
    ('skew = "0.02 ms"', 'skew = "2 s"', "channel.2.skew", "is too large"),
    ("[run]", "[rum]", "rum", "did you mean run?"),
    ('preset = "small"', 'preset = "tiny"', "steadiness.preset", "must be 'standard' or 'small'"),
    ('preset = "small"', "window = 60", "steadiness.window", 'for example "60 s"'),
    ('preset = "small"', 'window = "0 s"', "steadiness.window", "is too small"),
    (
        'preset = "small"',
        'window = "90 s"\nlongest_window = "60 s"',
        "steadiness",
        "longest_window (60 s) is shorter than window (90 s)",
    ),
    ('preset = "small"', 'phase_target = "0 deg"', "steadiness.phase_target", "is too small"),
    ('preset = "small"', "blocks = 5", "steadiness.blocks", "must be at least 6, not 5"),
    ('preset = "small"', "min_revolutions = 5", "steadiness.min_revolutions", "must be at least 6"),
    ('preset = "small"', 'preset = "small"\nblocks = 12', "steadiness", "10 turns do not fill 12 blocks"),
    ('preset = "small"', 'speed_band = "0.5"', "steadiness.speed_band", "is not a number with %"),
    ('preset = "small"', 'speed_band = "0 %"', "steadiness.speed_band", "is out of range"),
    ('preset = "small"', 'speed_sd = "0.1 %/min"', "steadiness.speed_sd", "is not a number with %"),
    ('preset = "small"', 'speed_drift = "0.1 %"', "steadiness.speed_drift", "is not a number with %/min"),
    ('preset = "small"', 'change = "-5 %"', "steadiness.change", "is not a number with %"),
    ('preset = "small"', 'scatter = "101 %"', "steadiness.scatter", "is out of range"),
    ('preset = "small"', 'lookback = "-1 s"', "steadiness.lookback", "is too small"),
    ('preset = "small"', 'hold = "2 days"', "steadiness.hold", "is not a unit of time"),
    ('preset = "small"', "min_signal_to_noise = 0", "steadiness.min_signal_to_noise", "must be above 0"),
    (
        'preset = "small"',
        'change_floor = { displacement = "1 um" }',
        "steadiness.change_floor.displacement",
        "is no way to show displacement",
    ),
    (
        'preset = "small"',
        'change_floor = { velocity = "0 mm/s rms" }',
        "steadiness.change_floor.velocity",
        "is not an amplitude above zero",
    ),
    ('"90 rpm"', '"90"', "run.minimum_speed", "has no unit"),
    ('"90 rpm"', '"0 rpm"', "run.minimum_speed", "is too small"),
    ('"90 rpm"', '"300 rpm"', "run.slow_roll_limit", "is not above minimum_speed (300 rpm)"),
    ('"90 rpm"', '"90 rpm"\nminimum_duration = "-1 s"', "run.minimum_duration", "is too small"),
    ("total_mib = 1000", "total_mib = 100", "raw.total_mib", "do not hold one reading of 128 MiB"),
    ("total_mib = 1000", "per_reading_mib = 0", "raw.per_reading_mib", "must be at least 1, not 0"),
    ("total_mib = 1000", 'total_mib = "1000"', "raw.total_mib", "must be a whole number"),
    ('path = "kept.sqlite"', 'path = ""', "store.path", "must not be empty"),
    ('path = "kept.sqlite"', 'file = "kept.sqlite"', "store.file", "Known keys: path"),
    ('"stand-users"', '"two words"', "access.group", "is no name of a group"),
]


@pytest.mark.parametrize(("old", "new", "key", "words"), WRONG)
def test_one_wrong_key_at_a_time(tmp_path: Path, old: str, new: str, key: str, words: str) -> None:
    found = problems(tmp_path, changed(old, new))
    assert words in found[key]
    assert len(found) <= 2  # a misspelt key is unknown, and the right one missing


def test_an_unknown_key_is_refused_in_every_table(tmp_path: Path) -> None:
    text = GOOD.replace("]\n", "]\nxyzzy = 1\n").replace('["drive", "free"]\nxyzzy = 1', '["drive", "free"]')
    text = text.replace('"-4 V"]\nxyzzy = 1', '"-4 V"]')
    tables = "stand source once_per_rev channel.1 channel.2 steadiness run raw store access".split()  # noqa: SIM905
    assert set(problems(tmp_path, "xyzzy = 1\n" + text)) == {"xyzzy"} | {f"{table}.xyzzy" for table in tables}


def test_every_mistake_is_reported_at_once_and_the_drivers_among_them(tmp_path: Path) -> None:
    text = GOOD
    for old, new in [
        ("Europe/Lisbon", "Mars/Base"),
        ('edge = "falling"', 'egde = "falling"'),
        ('"200 mV/mil"', '"200"'),
        ('input = "2"', 'input = "1"'),
        ('"90 rpm"', '"90 mm"'),
        ('driver = "simulated"', 'driver = "simulated"\noptions = { sead = 1 }'),
    ]:
        assert old in text
        text = text.replace(old, new, 1)

    def options_check(driver: str, options: Mapping[str, Any]) -> list[tuple[str, str]]:
        return [(f"source.options.{key}", f"is not known to {driver}.") for key in options]

    with pytest.raises(StandFileError) as caught:
        check_stand(write(tmp_path, text), options_check)
    assert [key for key, _ in caught.value.problems] == [
        "stand.time_zone",
        "once_per_rev.edge",
        "once_per_rev.egde",
        "channel.1.sensitivity",
        "run.minimum_speed",
        "channel.2.input",
        "source.options.sead",
    ]
    assert "bay.toml has 7 mistakes" in str(caught.value)
    assert "source.options.sead: is not known to simulated." in str(caught.value)


def test_no_channel_at_all(tmp_path: Path) -> None:
    head, _, _ = GOOD.partition("[[channel]]")
    assert "is missing. The probes" in problems(tmp_path, head)["channel"]
    assert "needs at least 1, has 0" in problems(tmp_path, "channel = []\n" + head)["channel"]
    single = head + GOOD.partition("[[channel]]")[2].partition("[[channel]]")[0]
    wrong = problems(tmp_path, single.replace('name = "probe 1"', '[channel]\nname = "probe 1"'))
    assert wrong == {"channel": "must be a list of tables: write [[channel]] with double brackets."}


@pytest.mark.parametrize(
    ("text", "key"),
    [
        ('[stand]\nname = "bay-1\n', "line 2"),
        ("[stand]\nname = bay-1\n", "line 2"),
        ("[stand]\n[stand]\n", "line 2"),
        ('a = 1\n[stand\nname = "b"\n', "line 2"),
        ('[stand]\nname = """bay', "end of file"),
    ],
)
def test_a_slip_in_the_toml_names_its_line(tmp_path: Path, text: str, key: str) -> None:
    found = problems(tmp_path, text)
    assert list(found) == [key]
    assert found[key].startswith("is not TOML: ")


def test_a_file_that_is_no_text(tmp_path: Path) -> None:
    file = tmp_path / "bay.toml"
    file.write_bytes(b"\xff\xfe[stand]")
    with pytest.raises(StandFileError, match="is not text in UTF-8"):
        load_stand(file)


def test_a_byte_order_mark_does_no_harm(tmp_path: Path) -> None:
    file = tmp_path / "bay.toml"
    file.write_bytes(b"\xef\xbb\xbf" + GOOD.encode())
    assert load_stand(file).name == "bay-1"


def test_a_missing_file_says_how_to_make_one(tmp_path: Path) -> None:
    with pytest.raises(StandFileError, match=r"There is no stand file .*bay.toml") as caught:
        load_stand(tmp_path / "bay.toml")
    assert "revmark stand new bay.toml" in caught.value.remedy
    assert not (tmp_path / "bay.toml").exists()


def test_a_folder_is_no_stand_file(tmp_path: Path) -> None:
    with pytest.raises(StandFileError, match="cannot be read"):
        load_stand(tmp_path)


@given(
    st.recursive(
        st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
        lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner, max_size=3),
        max_leaves=8,
    ),
    st.sampled_from(
        ["stand", "source", "once_per_rev", "channel", "steadiness", "run", "raw", "store", "access"]
    ),
)
def test_no_content_of_a_table_brings_a_foreign_error(
    tmp_path_factory: pytest.TempPathFactory, value: Any, table: str
) -> None:
    from config import stand as module

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(module, "_read", lambda _file: {table: value})
        with pytest.raises(StandFileError):
            load_stand("bay.toml")


# --- steadiness: values of REUSE (a) ------------------------------------------------------------------


def test_the_standard_limits(tmp_path: Path) -> None:
    limits = load_stand(write(tmp_path, changed('preset = "small"', ""))).steadiness
    assert (limits.window_s, limits.min_revolutions, limits.blocks) == (60, 100, 8)
    assert (limits.speed_band_pct, limits.speed_sd_pct, limits.speed_drift_pct_per_min) == (0.5, 0.1, 0.1)
    assert (limits.change_pct, limits.lookback_s, limits.hold_s) == (5, 300, 300)
    assert limits.min_signal_to_noise == 3
    assert (limits.amplitude_target_pct, limits.phase_target_deg) == (0.5, 0.3)
    assert (limits.longest_window_s, limits.thermal_time_constant_s) == (600, 1800)
    assert limits.target_floor("displacement") == pytest.approx(0.05)
    assert limits.change_floor("displacement") == 0.5  # 1 um pk-pk
    assert limits.change_floor("velocity") == pytest.approx(0.05 * 2**0.5, rel=1e-3)  # 0.05 mm/s rms
    assert limits.change_floor("acceleration") == 0.02  # judged


def test_the_small_preset_differs_in_time_alone(tmp_path: Path) -> None:
    limits = load_stand(write(tmp_path, GOOD)).steadiness
    assert (limits.window_s, limits.min_revolutions, limits.lookback_s, limits.hold_s) == (3, 10, 0, 0)
    assert limits.speed_drift_pct_per_min * limits.window_s / 60 == pytest.approx(0.1)
    same = dataclasses.replace(
        limits,
        window_s=60,
        longest_window_s=600,
        min_revolutions=100,
        lookback_s=300,
        hold_s=300,
        speed_drift_pct_per_min=0.1,
        thermal_time_constant_s=1800,
    )
    assert same == SteadinessLimits()


def test_single_limits_override_the_preset(tmp_path: Path) -> None:
    keys = """preset = "small"
window = "1.5 min"
min_revolutions = 20
blocks = 10
speed_band = "0.2 %"
speed_sd = "0.3%"
speed_drift = "1 %/min"
change = "10 %"
change_floor = { displacement = "2 um pp", velocity = "0.1 mm/s rms", acceleration = "0.01 g pk" }
scatter = "7 %"
lookback = "5 min"
hold = "15 min"
amplitude_target = "1 %"
phase_target = "0.5 deg"
thermal_time_constant = "45 min"
min_signal_to_noise = 4.5
"""
    limits = load_stand(write(tmp_path, changed('preset = "small"', keys))).steadiness
    assert limits.to_dict() == pytest.approx(
        {
            "window_s": 90.0,
            "longest_window_s": 900.0,
            "amplitude_target_pct": 1.0,
            "phase_target_deg": 0.5,
            "thermal_time_constant_s": 2700.0,
            "min_revolutions": 20,
            "blocks": 10,
            "speed_band_pct": 0.2,
            "speed_sd_pct": 0.3,
            "speed_drift_pct_per_min": 1.0,
            "change_pct": 10.0,
            "change_floor_um_pk": 1.0,
            "change_floor_mm_s_pk": 0.1414213562,
            "change_floor_m_s2_pk": 0.0980665,
            "scatter_pct": 7.0,
            "lookback_s": 300.0,
            "hold_s": 900.0,
            "min_signal_to_noise": 4.5,
        }
    )


# --- the store's path, the set-up's content, the schema ------------------------------------------------


@pytest.mark.parametrize(
    ("driver", "file"),
    [("simulated", "bay-simulated.sqlite"), ("replay", "bay-replay.sqlite"), ("other", "bay.sqlite")],
)
def test_unless_told_otherwise_what_never_happened_here_has_a_store_of_its_own(
    tmp_path: Path, driver: str, file: str
) -> None:
    text = changed('path = "kept.sqlite"', "").replace('"simulated"', f'"{driver}"')
    assert load_stand(write(tmp_path, text)).store_path == tmp_path / file


def test_the_store_path_starts_at_the_files_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "etc").mkdir()
    write(tmp_path / "etc", changed('"kept.sqlite"', '"../data/kept.sqlite"'))
    monkeypatch.chdir(tmp_path)
    assert load_stand("etc/bay.toml").store_path == tmp_path / "data" / "kept.sqlite"
    write(tmp_path, changed('"kept.sqlite"', '"/srv/kept.sqlite"'))
    assert load_stand("bay.toml").store_path == Path("/srv/kept.sqlite")


def test_the_set_up_content_fits_the_stores_records(tmp_path: Path) -> None:
    content = load_stand(write(tmp_path, GOOD)).set_up_content(12800)
    assert json.loads(json.dumps(content)) == content

    def names(record: Any) -> set[str]:
        return {field.name for field in dataclasses.fields(record)}

    assert set(content) == names(SetUp) - {"id", "revision"}
    assert all(set(channel) == names(ChannelSetUp) for channel in content["channels"])
    assert set(content["pulse"]) == names(PulseSetUp)
    assert content["rate_hz"] == 12800.0
    assert content["channels"][1] == {
        "name": "probe 2",
        "kind": "velocity",
        "unit": "mm/s",
        "input": "2",
        "volts_per_unit": 0.004,
        "positive": -1,
        "angle_deg": 315.0,
        "coupling": "ac",
        "filter": "none",
        "skew_s": 2e-5,
        "gap_low_v": None,
        "gap_high_v": None,
        "pair": None,
    }


@pytest.mark.parametrize(
    ("keys", "pattern"),
    [
        ('pulses = 3\nmarked = "long"', {"marked": "long"}),
        (
            'pulses = 4\nspacing = ["90 deg", "88.2 deg", "91.8 deg", "90 deg"]',
            {"spacing_deg": [90.0, 88.2, 91.8, 90.0]},
        ),
        ("pulses = 1", None),
    ],
)
def test_how_the_pulse_that_counts_is_told_is_part_of_the_set_up(
    tmp_path: Path, keys: str, pattern: dict[str, Any] | None
) -> None:
    content = load_stand(write(tmp_path, changed('level = "-11.5 V"', keys))).set_up_content(12800)
    assert content["pulse"]["pattern"] == pattern
    assert json.loads(json.dumps(content)) == content


def test_how_it_is_shown_is_no_part_of_the_set_up(tmp_path: Path) -> None:
    one = load_stand(write(tmp_path, GOOD)).set_up_content(1000)
    other = load_stand(write(tmp_path, changed('show = "mil pp"', 'show = "um pk"'))).set_up_content(1000)
    assert one == other
    turned = load_stand(write(tmp_path, changed('angle = "45 deg"', 'angle = "46 deg"'))).set_up_content(1000)
    assert turned != one


def test_the_schema_has_the_keys_and_defaults_as_typed() -> None:
    schema = stand_schema()
    parts = schema["$defs"]
    assert schema["required"] == ["stand", "source", "once_per_rev", "channel"]
    assert parts["RunRules"]["properties"]["minimum_speed"]["type"] == "string"
    assert parts["RunRules"]["properties"]["minimum_speed"]["default"] == "60 rpm"
    assert parts["Channel"]["properties"]["sensitivity"]["examples"] == ["200 mV/mil"]
    assert '"null"' not in json.dumps(schema)
    assert all(part["additionalProperties"] is False for part in parts.values())
    for part in (schema, *parts.values()):
        for key, field in part["properties"].items():
            assert field.get("description") or "$ref" in field, key


def test_a_number_in_base_units_says_which_in_its_name() -> None:
    """Habit 9: no numeric field without its unit, but for counts and ratios."""
    plain = {"pulses", "blocks", "min_revolutions", "min_signal_to_noise"}
    units = (
        "_hz",
        "_s",
        "_deg",
        "_v",
        "_pct",
        "_pct_per_min",
        "_pk",  # of a channel, in the base unit of its kind
        "_mib",
        "_um_pk",
        "_mm_s_pk",
        "_m_s2_pk",
        "_per_unit",
    )
    sections = [f.annotation for f in Stand.model_fields.values() if hasattr(f.annotation, "model_fields")]
    from config.sections import ChangeFloor, Channel

    seen = 0
    for section in (*sections, Channel, ChangeFloor):
        for name, field in section.model_fields.items():  # type: ignore[union-attr]
            if "float" in str(field.annotation) or "int" in str(field.annotation).split("[")[0]:
                seen += 1
                assert name in plain or name.endswith(units), name
    assert seen > 20


# --- XY pairs, noise limits, surroundings --------------------------------------------------------------

PAIRED = GOOD.replace('angle = "45 deg"', 'angle = "45 deg"\npair = "drive"').replace(
    """kind = "velocity"
sensitivity = "4 mV/(mm/s)"
positive = "falling"
angle = "-45 deg"
""",
    """kind = "displacement"
sensitivity = "200 mV/mil"
positive = "falling"
angle = "-45 deg"
pair = "drive"
""",
)


@pytest.mark.parametrize("angle", ["-45 deg", "135 deg", "-40 deg", "-50 deg"])
def test_two_probes_90_deg_apart_are_a_pair(tmp_path: Path, angle: str) -> None:
    stand = load_stand(write(tmp_path, PAIRED.replace("-45 deg", angle)))
    assert [c["pair"] for c in stand.set_up_content(1000)["channels"]] == ["drive", "drive"]


@pytest.mark.parametrize(
    ("old", "new", "key", "said"),
    [
        ('angle = "-45 deg"', 'angle = "-39 deg"', "channel.2.pair", "its probes stand 84 deg apart"),
        ('angle = "-45 deg"', 'angle = "225 deg"', "channel.2.pair", "its probes stand 180 deg apart"),
        ('pair = "drive"\n', "", "channel.2.pair", "'drive' has this channel only"),
        ('pair = "drive"\n', 'pair = "Drive"\n', "channel.1.pair", "'Drive' has this channel only"),
        ('pair = "drive"', 'pair = ""', "channel.1.pair", "must not be empty"),
        ('pair = "drive"', "pair = 1", "channel.1.pair", "must be text in quotes, not 1"),
    ],
)
def test_what_is_no_pair_is_refused(tmp_path: Path, old: str, new: str, key: str, said: str) -> None:
    assert said in problems(tmp_path, PAIRED.replace(old, new, 1))[key]


def test_all_that_is_wrong_with_pairs_is_said_at_once(tmp_path: Path) -> None:
    third = """
[[channel]]
name = "probe 3"
input = "3"
kind = "velocity"
sensitivity = "4 mV/(mm/s)"
positive = "rising"
angle = "0 deg"
pair = "drive"

[[channel]]
name = "probe 4"
input = "3"
kind = "displacement"
sensitivity = "200 mV/mil"
positive = "rising"
angle = "0 deg"
pair = "free"
"""
    with pytest.raises(StandFileError) as caught:
        load_stand(write(tmp_path, PAIRED + third))
    told = "\n".join(f"{key}: {text}" for key, text in caught.value.problems)
    assert "channel.3.pair: 'drive' is the pair of channel.1, channel.2 already" in told
    assert "channel.3.pair: an XY pair takes displacement probes, and this channel's kind is" in told
    assert "channel.4.pair: 'free' has this channel only" in told
    assert "channel.4.input: '3' is wired to channel.3 already" in told


def test_a_noise_limit_is_an_amplitude_of_the_channels_kind(tmp_path: Path) -> None:
    with_limits = changed('show = "mil pp"', 'show = "mil pp"\nnoise_limit = "0.1 mil rms"').replace(
        'coupling = "ac"', 'coupling = "ac"\nnoise_limit = "0.3 mm/s pk"'
    )
    first, second = load_stand(write(tmp_path, with_limits)).channels
    assert first.noise_limit_pk == pytest.approx(0.1 * 25.4 * 2**0.5, rel=1e-14)
    assert second.noise_limit_pk == 0.3
    for text, said in (('"2 um"', "is no way to show"), ("2", "has no unit"), ('"-1 um rms"', "above zero")):
        wrong = changed('show = "mil pp"', f"noise_limit = {text}")
        assert said in problems(tmp_path, wrong)["channel.1.noise_limit"]


def test_surroundings_in_hz(tmp_path: Path) -> None:
    near = load_stand(write(tmp_path, GOOD)).surroundings
    assert (near.mains_hz, near.neighbours_hz) == (None, ())
    told = '[surroundings]\nmains = "60 Hz"\nneighbours = ["1480 rpm", "24.5 Hz"]\n'
    near = load_stand(write(tmp_path, GOOD + told)).surroundings
    assert near.mains_hz == 60.0
    assert near.neighbours_hz == (pytest.approx(1480 / 60), 24.5)
    found = problems(tmp_path, GOOD + '[surroundings]\nmains = 50\nneighbours = ["fast"]\nmain = 1\n')
    assert "has no unit" in found["surroundings.mains"]
    assert "is not a speed" in found["surroundings.neighbours.1"]
    assert "did you mean mains?" in found["surroundings.main"]
