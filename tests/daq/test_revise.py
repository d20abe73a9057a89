"""A corrected sensitivity that is many times another is asked about; what changed is told."""

from __future__ import annotations

from dataclasses import replace
from uuid import UUID

import pytest

from config.errors import NeedsAnswer
from daq.revise import changes, question_far_off
from store.records import ChannelSetUp, PulseSetUp, SetUp

PROBE = ChannelSetUp("probe 1", "displacement", "um", "1", 7.874e-3, 1, 0.0)  # 200 mV/mil
THEN = SetUp(
    UUID(int=3), 1, "bay-1", ("drive", "free"), "drive", "top", (PROBE,),
    PulseSetUp("once-per-rev", "0", "falling", None, 0.0), 12800.0, "replay",
)  # fmt: skip


def now(**changed: float) -> SetUp:
    return replace(THEN, channels=(replace(PROBE, **changed),))  # type: ignore[arg-type]


@pytest.mark.parametrize("volts_per_um", [7.874, 7.874e-3 * 3.1, 7.874e-3 / 3.1])
def test_a_slip_of_the_unit_is_asked_about(volts_per_um: float) -> None:
    with pytest.raises(NeedsAnswer, match="probe 1") as asked:
        question_far_off(THEN, now(volts_per_unit=volts_per_um).draft(), "0142/1")
    assert asked.value.options == ("--yes",)


def test_a_correction_is_not() -> None:
    question_far_off(THEN, now(volts_per_unit=7.874e-3 * 2.9).draft(), "0142/1")


def test_what_changed_is_told() -> None:
    revised = replace(
        now(angle_deg=45.0, volts_per_unit=8.6614e-3), pulse=replace(THEN.pulse, angle_deg=90.0)
    )
    assert changes(THEN, revised.draft()) == [
        {"channel": "probe 1", "what": "volts_per_unit", "was": 7.874e-3, "is": 8.6614e-3},
        {"channel": "probe 1", "what": "angle_deg", "was": 0.0, "is": 45.0},
        {"channel": None, "what": "angle_deg", "was": 0.0, "is": 90.0},
    ]
