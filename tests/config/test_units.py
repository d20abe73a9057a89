"""Units at the border: METHODS 6.5, exact definitions (25.4, 28.349523125, 9.80665), or by hand."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from config.errors import BadQuantity
from config.units import parse_display, parse_quantity, parse_sensitivity, rpm


@pytest.mark.parametrize(
    ("text", "measure", "value"),
    [
        ("3.0g", "mass", 3.0),
        ("3 g", "mass", 3.0),
        ("1 oz", "mass", 28.349523125),  # exact by definition (avoirdupois ounce)
        ("250 mg", "mass", 0.25),
        ("1 lb", "rotor mass", 0.45359237),  # exact by definition
        ("1.5 t", "rotor mass", 1500.0),
        ("1 in", "length", 25.4),  # exact by definition
        ("14 cm", "length", 140.0),
        ("1500rpm", "speed", 25.0),
        ("3600 r/min", "speed", 60.0),
        ("25 Hz", "speed", 25.0),
        ("1 oz.in", "unbalance", 720.077887375),  # METHODS 6.5
        ("2 kg.mm", "unbalance", 2000.0),
        ("-11.5 V", "voltage", -11.5),
        ("850 mV", "voltage", 0.85),
        ("1.5 min", "time", 90.0),
        ("20 ms", "time", 0.02),
        ("180 deg", "angle", 180.0),
        ("6.3 mm/s", "grade", 6.3),
        (" 1e3 g ", "mass", 1000.0),
        (".5 g", "mass", 0.5),
    ],
)
def test_a_quantity_in_its_base_unit(text: str, measure: str, value: float) -> None:
    assert parse_quantity(text, measure) == pytest.approx(value, rel=1e-14)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("text", "measure", "cause"),
    [
        ("3.0", "mass", "'3.0' has no unit."),
        ("3 rpm", "mass", "'rpm' is not a unit of mass."),
        ("three g", "mass", "'three g' is not a mass."),
        ("", "mass", "'' is not a mass."),
        ("nan g", "mass", "'nan g' is not a mass."),
        ("1e400 g", "mass", "'1e400 g' is out of range."),
        ("60 RPM", "speed", "'RPM' is not a unit of speed."),
        ("3,5 g", "mass", "',5 g' is not a unit of mass."),
        ("3 g 4", "mass", "'g 4' is not a unit of mass."),
    ],
)
def test_what_is_no_quantity_is_refused_in_words(text: str, measure: str, cause: str) -> None:
    with pytest.raises(BadQuantity) as caught:
        parse_quantity(text, measure)  # type: ignore[arg-type]
    assert caught.value.cause == cause
    assert caught.value.remedy


def test_limits_are_told_in_the_base_unit() -> None:
    assert parse_quantity("60 rpm", "speed", minimum=1.0, maximum=1.0) == 1.0
    with pytest.raises(BadQuantity, match=r"'59 rpm' is too small. The speed must be at least 1 Hz."):
        parse_quantity("59 rpm", "speed", minimum=1.0)
    with pytest.raises(BadQuantity, match=r"'61 rpm' is too large. The speed must be at most 1 Hz."):
        parse_quantity("61 rpm", "speed", maximum=1.0)


@pytest.mark.parametrize(
    ("text", "kind", "volts_per_unit"),
    [
        ("200 mV/mil", "displacement", 0.2 / 25.4),  # 1 mil = 25.4 um; 7.874 mV/um (README of the recordings)
        ("7.874 mV/um", "displacement", 0.007874),
        ("8 V/mm", "displacement", 0.008),
        ("4 mV/(mm/s)", "velocity", 0.004),
        ("4 mV/mm/s", "velocity", 0.004),
        ("500 mV/ips", "velocity", 0.5 / 25.4),
        ("100 mV/g", "acceleration", 0.1 / 9.80665),  # 1 g = 9.80665 m/s2, exact by definition
        ("10 mV/(m/s2)", "acceleration", 0.01),
    ],
)
def test_a_sensitivity_names_its_kind(text: str, kind: str, volts_per_unit: float) -> None:
    found = parse_sensitivity(text)
    assert found.kind == kind
    assert found.volts_per_unit == pytest.approx(volts_per_unit, rel=1e-14)


@pytest.mark.parametrize(
    "text", ["200", "200 mV", "200 mil/mV", "0 mV/mil", "-200 mV/mil", "mV/mil", "200 A/mil"]
)
def test_what_is_no_sensitivity_is_refused(text: str) -> None:
    with pytest.raises(BadQuantity) as caught:
        parse_sensitivity(text)
    assert "200 mV/mil" in caught.value.remedy


@pytest.mark.parametrize(
    ("stored_pk", "kind", "shown_as", "shown"),
    [
        # METHODS 6.5: 2.6 mil pp = 66.04 um pp = 33.02 um 0-pk = 23.3486659148 um rms
        (33.02, "displacement", "mil pp", 2.6),
        (33.02, "displacement", "um pp", 66.04),
        (33.02, "displacement", "um rms", 23.3486659148),
        # METHODS 6.5: 1 mil pp at 3600 cpm = 0.188495559215 ips
        # = 4.78778720407 mm/s pk = 3.38547679888 mm/s rms
        (4.78778720407, "velocity", "ips pk", 0.188495559215),
        (4.78778720407, "velocity", "mm/s rms", 3.38547679888),
        # by hand: 1 g = 9.80665 m/s2
        (9.80665, "acceleration", "g pk", 1.0),
        (9.80665, "acceleration", "m/s2 pp", 19.6133),
    ],
)
def test_amplitudes_as_shown(stored_pk: float, kind: str, shown_as: str, shown: float) -> None:
    display = parse_display(shown_as, kind)
    assert display.name == shown_as
    assert stored_pk * display.factor == pytest.approx(shown, rel=1e-11)


@pytest.mark.parametrize(
    ("text", "kind"),
    [("um", "displacement"), ("mm/s rms", "displacement"), ("um max", "displacement"), ("", "velocity")],
)
def test_what_is_no_way_to_show_names_the_ways(text: str, kind: str) -> None:
    with pytest.raises(BadQuantity, match="Choose one of"):
        parse_display(text, kind)


def test_rpm_is_sixty_a_hertz() -> None:
    assert rpm(25.0) == 1500.0


@given(st.text(max_size=20), st.sampled_from(["mass", "length", "speed", "angle", "time", "voltage"]))
def test_any_text_is_a_finite_quantity_or_our_refusal(text: str, measure: str) -> None:
    try:
        value = parse_quantity(text, measure)  # type: ignore[arg-type]
    except BadQuantity:
        return
    assert math.isfinite(value)


@given(st.text(max_size=20))
def test_any_text_is_a_sensitivity_above_zero_or_our_refusal(text: str) -> None:
    try:
        found = parse_sensitivity(text)
    except BadQuantity:
        return
    assert found.volts_per_unit > 0
