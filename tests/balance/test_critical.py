"""Critical speeds and amplification factors against METHODS 7.1 (Jeffcott rotor, from memory of any
rotordynamics text, recomputed there; the half-power form of AF is API 684's, from memory)."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

from store.balance.critical import critical_speeds

SURE = 1e-9


def jeffcott(r: NDArray[np.float64], zeta: float) -> NDArray[np.complex128]:
    """X/e with lag as angle: r^2 / (1 - r^2 - 2 j zeta r)."""
    found: NDArray[np.complex128] = r**2 / (1 - r**2 - 2j * zeta * r)
    return found


def found_at(r: NDArray[np.float64], v: NDArray[np.complex128], se: float = SURE):
    return critical_speeds(r, v, np.full(len(r), se))


@pytest.mark.parametrize(
    ("r", "size", "lag"),
    [
        (0.5, 0.33259505261887, 3.8140748342904),
        (0.9, 3.8527771026514, 25.346175941947),
        (1.0, 10.0, 90.0),
        (1.1, 5.10407694137613, 152.35402463626),
        (2.0, 1.33038021047548, 176.18592516571),
    ],
)
def test_the_tests_own_rotor_is_that_of_methods_7_1(r: float, size: float, lag: float) -> None:
    v = jeffcott(np.array([r]), 0.05)[0]
    assert abs(v) == pytest.approx(size, rel=1e-12)
    assert np.degrees(np.angle(v)) == pytest.approx(lag, abs=1e-9)


@pytest.mark.parametrize(
    ("zeta", "peak", "height", "low", "high", "af", "lag"),
    [
        (0.02, 1.00040024016011, 25.0050015005002, 0.980961816048165, 1.02104199246004, 24.9599759711551,
         91.1462212962),
        (0.05, 1.00250941423417, 10.0125234864352, 0.955691549433764, 1.05695899156915, 9.89962215984378,
         92.8695761959),
        (0.1, 1.01015254455221, 5.02518907629606, 0.920965921332922, 1.13155009252017, 4.79690633373384,
         95.7681811862),
    ],
)  # fmt: skip
def test_peak_half_power_and_amplification(
    zeta: float, peak: float, height: float, low: float, high: float, af: float, lag: float
) -> None:
    """On a grid of 1e-5 linear interpolation is exact to 1e-8 and the peak is known to half a step."""
    r = np.arange(0.7, 1.4, 1e-5)
    (one,), refused = found_at(r, jeffcott(r, zeta))
    assert refused == ()
    assert one.speed_hz == pytest.approx(peak, abs=1e-5)
    assert one.within_hz == pytest.approx(0.5e-5, rel=1e-4)
    assert one.amplitude == pytest.approx(height, rel=1e-6)
    assert one.low_hz == pytest.approx(low, abs=1e-7)
    assert one.high_hz == pytest.approx(high, abs=1e-7)
    assert one.amplification == pytest.approx(af, rel=1e-5 * 1.5)
    assert one.lag_deg == pytest.approx(lag, abs=0.06)  # 1e-5 of r is 0.03 deg where zeta is 0.02


def test_the_grid_of_a_hundredth() -> None:
    """METHODS 7.1: AF 9.828902, peak-hold 10.000000 at r = 1.00, lag 90 there."""
    r = np.arange(50, 151) / 100
    (one,), _ = found_at(r, jeffcott(r, 0.05))
    assert one.amplification == pytest.approx(9.828902, abs=1e-6)
    assert one.amplitude == pytest.approx(10.0, abs=1e-9)
    assert one.speed_hz == 1.0
    assert one.lag_deg == pytest.approx(90.0, abs=1e-9)


def test_a_coast_down_is_the_same_curve_backwards() -> None:
    r = np.arange(50, 151)[::-1] / 100
    (one,), _ = found_at(r, jeffcott(r, 0.05))
    assert one.amplification == pytest.approx(9.828902, abs=1e-6)


def swept(rate: float, r0: float, r1: float) -> tuple[NDArray[np.float64], NDArray[np.complex128]]:
    """A Jeffcott rotor of zeta 0.05 at constant acceleration a, by ODE:
    z'' + 2 zeta z' + z = (W^2 - j a) e^{j theta}, and with z = w e^{j theta}
    w'' = W^2 - j a - (2 j W + 2 zeta) w' - (1 - W^2 + j (a + 2 zeta W)) w."""
    zeta, a = 0.05, rate if r1 > r0 else -rate

    def slope(t: float, s: NDArray[np.complex128]) -> list[complex]:
        speed = r0 + a * t
        w, dw = s
        pull = speed**2 - 1j * a - (2j * speed + 2 * zeta) * dw
        return [dw, pull - (1 - speed**2 + 1j * (a + 2 * zeta * speed)) * w]

    steady = r0**2 / (1 - r0**2 + 2j * zeta * r0)
    at = np.arange(0.0, abs(r1 - r0) / rate, 0.002 / rate)
    done = solve_ivp(slope, (0.0, at[-1]), [steady, 0j], t_eval=at, rtol=1e-6, atol=1e-7, method="DOP853")
    return r0 + a * at, done.y[0].conj()


@pytest.mark.parametrize(
    ("rate", "up", "down"),
    [
        (1e-4, (10.034483, 1.006486), (9.975938, 0.998664)),
        (1e-3, (9.863233, 1.035789), (9.468385, 0.972680)),
        (1e-2, (7.780926, 1.172829), (6.753861, 0.856685)),
    ],
)
def test_acceleration_shifts_the_peak_the_way_it_goes(
    rate: float, up: tuple[float, float], down: tuple[float, float]
) -> None:
    """METHODS 7.1, run-up at constant acceleration: up and down differ and are not one critical speed. Steps
    of 0.002 leave the peak's place within 0.002 and its height within 0.2 %."""
    wide = 0.25 if rate < 1e-3 else 0.7
    for (size, place), (r0, r1) in ((up, (1 - wide, 1 + wide)), (down, (1 + wide, 1 - wide))):
        r, v = swept(rate, r0, r1)
        taken, _ = found_at(r, v)
        one = max(taken, key=lambda c: c.amplitude)
        assert one.amplitude == pytest.approx(size, rel=2e-3)
        assert one.speed_hz == pytest.approx(place, abs=2.1e-3)


# --- refused -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("r0", "r1", "why"),
    [
        (0.5, 1.03, "its upper half-power point lies outside the trace"),
        (0.97, 1.5, "its lower half-power point lies outside the trace"),
        (0.98, 1.03, "half-power point lies outside the trace; its upper half-power point"),
        (0.5, 0.95, "the amplitude is highest at the trace's end: a critical may lie above"),
        (1.1, 1.9, "the amplitude is highest at the trace's end: a critical may lie below"),
    ],
)
def test_a_half_power_point_outside_the_trace_is_said(r0: float, r1: float, why: str) -> None:
    r = np.arange(r0, r1, 0.005)
    taken, refused = found_at(r, jeffcott(r, 0.05))
    assert taken == ()
    (one,) = refused
    assert why in one.why


def test_a_peak_in_its_own_noise_is_none() -> None:
    """Noise of 0.3 about 10: the highest of 400 stands some 3 standard errors out, not 6."""
    rng = np.random.default_rng(3)
    v = 10 + 0.3 * (rng.normal(size=400) + 1j * rng.normal(size=400))
    taken, refused = critical_speeds(np.linspace(10, 50, 400), v, np.full(400, 0.3))
    assert taken == ()
    assert "of its standard errors only (6 are wanted)" in refused[0].why


def test_a_gentle_hump_is_none() -> None:
    r = np.linspace(0.5, 1.5, 101)
    taken, refused = found_at(r, (10 - (r - 1) ** 2).astype(complex))
    assert taken == ()
    assert refused[0].why == "it stands out by 2 % of itself only (10 % are wanted)"


def test_two_criticals_and_two_that_are_not_apart() -> None:
    r = np.arange(0.5, 2.5, 0.002)
    wide = jeffcott(r, 0.03) + jeffcott(r / 1.7, 0.03)
    taken, refused = found_at(r, wide)
    assert [round(c.speed_hz, 1) for c in taken] == [1.0, 1.7]
    assert refused == ()


def test_a_peak_on_the_shoulder_of_a_higher_one() -> None:
    """Straight lines: 10 at 1, down to 8.5, 11 at 1.4. Half power of 11 is 7.778: at 0.7778 and 1.6929."""
    r = np.arange(0, 481) / 200
    taken, refused = found_at(r, np.interp(r, [0, 1, 1.2, 1.4, 2.4], [0, 10, 8.5, 11, 0]).astype(complex))
    (higher,), (lower,) = taken, refused
    assert (lower.speed_hz, higher.speed_hz) == (1.0, 1.4)
    assert lower.why == "a higher peak lies before its upper half-power point: the two are not apart"
    assert (higher.low_hz, higher.high_hz) == pytest.approx((0.777817, 1.692893), abs=1e-5)
    assert higher.amplification == pytest.approx(1.52989, abs=1e-4)


def test_too_few_steps_say_nothing() -> None:
    assert found_at(np.array([1.0, 2.0]), np.array([1 + 0j, 2 + 0j])) == ((), ())


def test_a_peak_among_steps_of_one_speed_is_refused() -> None:
    """No width, so no amplification factor: by hand, both half-power speeds are 10 Hz."""
    taken, refused = critical_speeds(np.full(5, 10.0), np.array([1, 2, 5, 2, 1 + 0j]), np.full(5, 0.01))
    assert taken == ()
    assert [(r.speed_hz, r.why) for r in refused] == [(10.0, "the steps beside it have the same speed")]
