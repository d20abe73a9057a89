"""Slow roll taken off: METHODS section 9, all check values; covariances by hand."""

from __future__ import annotations

import cmath
import math

import pytest

from store.balance.slowroll import SlowRoll, cautions, less, less_slow_roll, turned, unbalance_share, why_raw
from store.records import Vector


def at(amplitude: float, degrees: float) -> complex:
    return cmath.rect(amplitude, math.radians(degrees))


def degrees(value: complex) -> float:
    return math.degrees(cmath.phase(value)) % 360


def vector(value: complex, **other: object) -> Vector:
    told = {"channel": "probe 1", "order": 1, "var_re": 0.04, "var_im": 0.09, "cov": 0.01,
            "noise_floor": 0.6, "unit": "um", **other}  # fmt: skip
    return Vector(value=value, **told)  # type: ignore[arg-type]


def slow(value: complex, **other: object) -> SlowRoll:
    told = vector(value, var_re=0.0009, var_im=0.0016, cov=-0.0004, noise_floor=0.25)
    return SlowRoll("0142/1", 1, 5.0, Vector(**{**_fields(told), **other}))  # type: ignore[arg-type]


def _fields(v: Vector) -> dict[str, object]:
    return {name: getattr(v, name) for name in Vector.__dataclass_fields__}


@pytest.mark.parametrize(
    ("raw", "runout", "size", "lag"),
    [
        # the larger one: scalar subtraction would say 1.7
        (at(2.5, 75), at(0.8, 200), 3.0305619520815, 62.511851575603),
        (at(4.0, 120), at(0.5, 300), 4.5, 120.0),
        # Jeffcott, zeta 0.05, e 1 @ 0, bow 0.5 @ 90, at r = 0.5: what is left is not unbalance alone (0.3326)
        (at(0.7437051466, 67.24902366), at(0.5, 90), 0.3424275648, 32.86867893),
        (at(7.579171779, 73.24312226), at(0.5, 90), 7.101866605, 72.08003718),
        (at(1.34073352, 183.3109415), at(0.5, 90), 1.457737974, 203.3356069),
    ],
)
def test_vectors_are_subtracted_as_vectors(raw: complex, runout: complex, size: float, lag: float) -> None:
    for found in (less(raw, runout), less_slow_roll(vector(raw), slow(runout)).value):
        assert abs(found) == pytest.approx(size, rel=1e-8)
        assert degrees(found) == pytest.approx(lag, abs=1e-6)


def test_nothing_to_take_off() -> None:
    assert less(at(2.5, 75), None) == at(2.5, 75)


def test_the_effect_of_a_weight_does_not_change() -> None:
    """METHODS 9: alpha 0.24176696452293 @ 179.58173619128 both ways (V1 1.9 @ 140, W 10 @ 30); the weight
    changes by V_sr / alpha, from 10.340535998924 @ 75.418263808716 to 12.535053984987 @ 62.930115384319."""
    v0, v1, runout, trial = at(2.5, 75), at(1.9, 140), at(0.8, 200), at(10, 30)
    raw = (v1 - v0) / trial
    for effect in (raw, (less(v1, runout) - less(v0, runout)) / trial):
        assert abs(effect) == pytest.approx(0.24176696452293, rel=1e-12)
        assert degrees(effect) == pytest.approx(179.58173619128, abs=1e-9)
    for base, size, where in ((v0, 10.340535998924, 75.418263808716),
                              (less(v0, runout), 12.535053984987, 62.930115384319)):  # fmt: skip
        assert abs(-base / raw) == pytest.approx(size, rel=1e-12)
        assert degrees(-base / raw) == pytest.approx(where, abs=1e-9)


def test_covariances_add() -> None:
    """0.04 + 0.0009, 0.09 + 0.0016, 0.01 - 0.0004; floors 0.6 and 0.25 give 0.65."""
    found = less_slow_roll(vector(at(2.5, 75)), slow(at(0.8, 200)))
    assert (found.var_re, found.var_im, found.cov) == pytest.approx((0.0409, 0.0916, 0.0096))
    assert found.noise_floor == pytest.approx(0.65)


@pytest.mark.parametrize("other", [{"channel": "probe 2"}, {"order": 2}, {"unit": "mm/s"}])
def test_only_the_same_probe_order_and_unit(other: dict[str, object]) -> None:
    with pytest.raises(ValueError, match="is not the slow roll of probe 1"):
        less_slow_roll(vector(1 + 0j), slow(1 + 0j, **other))


def test_turning_a_vector_turns_its_covariance() -> None:
    """By 90 deg the axes change places and the covariance its sign; by 45 deg of 0.04, 0.09, 0.01: the
    variances are 0.065 -+ 0.01, the covariance (0.04 - 0.09)/2 = -0.025."""
    found = turned(vector(3 + 4j), 90)
    assert found.value == pytest.approx(-4 + 3j)
    assert (found.var_re, found.var_im, found.cov) == pytest.approx((0.09, 0.04, -0.01))
    found = turned(vector(3 + 4j), 45)
    assert (found.var_re, found.var_im, found.cov) == pytest.approx((0.055, 0.075, -0.025))
    assert turned(vector(3 + 4j), 0.0) == vector(3 + 4j)


@pytest.mark.parametrize(("slow_rpm", "rpm", "share"), [(300, 3000, 0.01), (200, 3600, 0.003086419753)])
def test_share_of_the_unbalance_response(slow_rpm: float, rpm: float, share: float) -> None:
    assert unbalance_share(slow_rpm / 60, rpm / 60) == pytest.approx(share, rel=1e-9)


def test_what_is_said() -> None:
    share, bow = cautions(5.0, 50.0)
    assert share == "the slow roll at 300 r/min holds 1 % of the unbalance response at 3000 r/min itself"
    assert bow == "near a critical speed a residual bow is amplified and the difference is wrong there"
    assert cautions(10.0, 50.0)[0].endswith("holds 4 % of the unbalance response at 3000 r/min itself: "
                                            "take it slower")  # fmt: skip
    assert why_raw("seismo 1", "velocity") == (
        "seismo 1 is a velocity sensor on the casing, which has no runout: left as measured."
    )
