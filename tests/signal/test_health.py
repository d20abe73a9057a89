"""Flags and their sentences; clipping; the once-per-rev that is lost while it turns still."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.signal.health import (
    SENTENCES,
    SHORT,
    RangeScan,
    ac_rms,
    describe,
    flag,
    pulse_flags,
    sentence,
    still_vibrating,
)


def test_every_code_has_one_sentence() -> None:
    for code, text in SENTENCES.items():
        assert text.endswith(".")
        assert code == code.lower()
        assert "probe 2" in sentence(flag(code, "probe 2")) or "{channel}" not in text
    assert (
        sentence("clipped:probe 2") == "probe 2 is clipped: its voltage reaches the end of the input's range."
    )
    assert sentence("no_pulses") == "No once-per-rev pulses stand out, so there is no speed and no phase."


def test_names_with_colons_and_braces_stay_whole() -> None:
    assert sentence(flag("flat", "a:{b}")) == "a:{b} is flat: its signal does not move at all."


def test_a_flag_that_several_channels_share_is_said_once() -> None:
    assert describe(["flat:a", "missed_pulses", "flat:b", "flat:c", "flat:b"]) == (
        "each of a, b and c is flat: its signal does not move at all.",
        "Some once-per-rev pulses were missed; where they belong is taken from their neighbours.",
    )


def test_every_sentence_has_its_word_for_a_column() -> None:
    assert SENTENCES.keys() == SHORT.keys()
    assert all(1 <= len(word) <= 9 for word in SHORT.values())


def test_a_code_of_a_newer_version_is_named() -> None:
    assert describe(["rubs:probe 1", "fog"]) == ("Flag rubs of probe 1.", "Flag fog.")


@settings(max_examples=100, deadline=None)
@given(
    at=st.integers(0, 97),
    run=st.integers(1, 4),
    cuts=st.lists(st.integers(1, 99), max_size=12),
    low=st.booleans(),
)
def test_three_at_the_end_of_the_scale_are_clipped_wherever_the_blocks_end(
    at: int, run: int, cuts: list[int], low: bool
) -> None:
    counts = np.random.default_rng(1).integers(-100, 100, (100, 2)).astype(np.int16)
    counts[at : at + run, 1] = -32768 if low else 32740  # within 0.1 % of the scale's half
    scan = RangeScan([(-32768, 32767)] * 2)
    for a, b in pairwise(sorted({0, 100, *cuts})):
        scan.add(counts[a:b])
    assert scan.clipped.tolist() == [False, min(run, 100 - at) >= 3]
    assert scan.low.tolist() == counts.min(axis=0).tolist()
    assert scan.high.tolist() == counts.max(axis=0).tolist()


def test_near_the_end_is_not_clipped() -> None:
    scan = RangeScan([(-32768, 32767)])
    scan.add(np.full((50, 1), 32700, np.int16))
    assert not scan.clipped[0]
    assert scan.flat[0]


@pytest.mark.parametrize("columns", [1, 3, 16])
def test_extremes_of_any_layout(columns: int) -> None:
    counts = np.random.default_rng(2).integers(-9000, 9000, (1003, columns)).astype(np.int32)
    for part in (counts, counts[:, ::-1], np.asfortranarray(counts), counts[5:7], counts[:0]):
        if not len(part):
            continue
        scan = RangeScan([(-(2**23), 2**23 - 1)] * columns)
        scan.add(part)
        assert scan.low.tolist() == part.min(axis=0).tolist()
        assert scan.high.tolist() == part.max(axis=0).tolist()


def test_pulses_are_judged() -> None:
    assert pulse_flags(0, 0, 5.0, 100.0) == []
    assert pulse_flags(1, 2, 2.0, 100.0) == ["missed_pulses", "double_pulses", "few_samples"]
    assert pulse_flags(0, 0, 3.0, 5.0) == ["few_samples"]


def test_rms_is_about_the_mean() -> None:
    counts = np.stack((np.tile([-3, 3], 50) - 5000, np.full(100, 7)), axis=1).astype(np.int16)
    assert ac_rms(counts).tolist() == [3.0, 0.0]


@pytest.mark.parametrize(
    ("now", "turning", "noise", "vibrates"),
    [
        # 6 um 0-pk while turning is 4.24 rms; noise 0.25
        ([4.2], [4.25], [0.25], True),  # the pulses went, the probe did not notice
        ([0.25], [4.25], [0.25], False),  # it stands
        ([2.5], [4.25], [0.25], True),  # coasting down, pulses gone: more than a quarter of the power
        ([1.5], [4.25], [0.25], False),
        ([0.26], [0.27], [0.25], False),  # it never showed in this probe: no vote
        ([0.25, 4.0], [0.26, 4.2], [0.25, 0.25], True),  # one probe is enough
    ],
)
def test_vibration_without_pulses(
    now: list[float], turning: list[float], noise: list[float], vibrates: bool
) -> None:
    assert still_vibrating(np.array(now), np.array(turning), np.array(noise)) is vibrates
