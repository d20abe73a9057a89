"""The closed form against METHODS 7: values derived and checked there by ODE integration, or quoted."""

from math import degrees

import numpy as np
import pytest

from daq.drivers.rotor import RigidRotor, critical_speeds_hz, response

# METHODS 7.2: m 25, It 0.8, Ip 0.2, a 0.30, b 0.25, k 2.0e6/2.6e6, c 900/1100; planes and probes as there
ROTOR = RigidRotor(25.0, 0.8, 0.2, (-0.30, 0.25), (2.0e6, 2.6e6), (900.0, 1100.0))
PROBES = (-0.30, 0.25)
PLANES = (-0.22, 0.18)

# METHODS 7.2, table of alpha in um 0-pk per g.mm [D, verified by ODE]
TABLE = {
    1800: [
        (0.0175985436484, 5.6680295828), (0.00375897265403, 7.2362140560),
        (0.00342681922386, 7.1434740132), (0.0138773333659, 5.3585831087),
    ],
    3000: [
        (0.0711872885185, 14.7036459832), (0.0270946374978, 21.5613765453),
        (0.0255942316155, 21.6056755400), (0.0567019182832, 14.1451971327),
    ],
}  # fmt: skip


@pytest.mark.parametrize("rpm", [1800, 3000])
def test_influence_coefficients_of_methods_7_2(rpm):
    found = response(ROTOR, [rpm / 60], PROBES, PLANES)[0].ravel()
    for value, (amp, lag) in zip(found, TABLE[rpm], strict=True):
        assert abs(value) == pytest.approx(amp, rel=1e-11)
        assert degrees(np.angle(value)) == pytest.approx(lag, abs=1e-8)


@pytest.mark.parametrize(
    ("rpm", "expected"),
    [
        # METHODS 7.2: U1 80 g.mm @ 40, U2 55 @ 200 (ODE and fit: same to 1e-11)
        (1800, [(1.21350764553, 48.7558423805), (0.518761097564, 194.0481677875)]),
        (3000, [(4.25731332413, 59.2684838440), (1.60813440722, 178.1910998690)]),
    ],
)
def test_response_rows_of_methods_7_2(rpm, expected):
    unbalance = np.array([80 * np.exp(1j * np.radians(40)), 55 * np.exp(1j * np.radians(200))])
    found = response(ROTOR, [rpm / 60], PROBES, PLANES)[0] @ unbalance
    for value, (amp, lag) in zip(found, expected, strict=True):
        assert abs(value) == pytest.approx(amp, rel=1e-11)
        assert degrees(np.angle(value)) % 360 == pytest.approx(lag, abs=1e-8)


@pytest.mark.parametrize(
    ("r", "amp", "lag"),
    [
        # METHODS 7.1: Jeffcott rotor, zeta 0.05, X/e and lag [F/M]
        (0.5, 0.33259505261887, 3.8140748342904),
        (0.9, 3.8527771026514, 25.346175941947),
        (1.0, 10.0, 90.0),
        (1.1, 5.10407694137613, 152.35402463626),
        (2.0, 1.33038021047548, 176.18592516571),
        (5.0, 1.04144068409178, 178.80651057602),
    ],
)
def test_symmetric_rotor_is_the_jeffcott_rotor_of_methods_7_1(r, amp, lag):
    mass, wn = 20.0, 300.0
    k, c = mass * wn**2 / 2, 2 * 0.05 * mass * wn / 2
    rotor = RigidRotor(mass, 0.5, 0.1, (-0.2, 0.2), (k, k), (c, c))
    found = response(rotor, [r * wn / (2 * np.pi)], [0.0], [0.0])[0, 0, 0] * mass
    assert abs(found) == pytest.approx(amp, rel=1e-10)
    assert degrees(np.angle(found)) == pytest.approx(lag, abs=1e-8)


def test_tilting_critical_of_methods_7_3():
    # METHODS 7.3: It 0.8, Ip 0.2, k 1e5 (tilt): forward synchronous 408.248290463863 rad/s
    rotor = RigidRotor(10.0, 0.8, 0.2, (-0.5, 0.5), (2.0e5, 2.0e5), (0.0, 0.0))
    found = [2 * np.pi * hz for hz in critical_speeds_hz(rotor)]
    # hand calculation: translation sqrt(4e5 / 10) = 200 rad/s
    assert found == pytest.approx([200.0, 408.248290463863], rel=1e-12)


def test_no_tilting_critical_when_polar_inertia_is_the_larger():
    # METHODS 7.3: none when Ip >= It, unbalance never excites it
    rotor = RigidRotor(10.0, 0.2, 0.8, (-0.5, 0.5), (2.0e5, 2.0e5), (0.0, 0.0))
    assert [2 * np.pi * hz for hz in critical_speeds_hz(rotor)] == pytest.approx([200.0], rel=1e-12)


def test_shape_by_speeds_probes_planes():
    assert response(ROTOR, [10.0, 20.0, 30.0], (0.1,), PLANES).shape == (3, 1, 2)
    assert not response(ROTOR, [0.0], PROBES, PLANES).any()
