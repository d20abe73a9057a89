"""Permissible unbalance and trial weights against METHODS sections 4 and 5 (marks as printed there)."""

from __future__ import annotations

import pytest

from store.balance.tolerance import (
    grade_force_share,
    permissible_eccentricity_um,
    permissible_gmm,
    shares_by_load,
    tolerance_of,
)
from store.balance.trial import (
    force_n,
    lag_is_known,
    place_by_coefficient_deg,
    place_by_lag_deg,
    static_load_kg,
    trial_unbalance_gmm,
)


@pytest.mark.parametrize(
    ("grade", "mass", "rpm", "e_per", "u_per"),
    [  # METHODS 4, ISO 21940-11
        (2.5, 40, 3000, 7.9577471545948, 318.30988618379),
        (6.3, 100, 1500, 40.107045659158, 4010.7045659158),
        (2.5, 3600, 3000, 7.9577471545948, 28647.889756541),
        (1, 5, 12000, 0.79577471545948, 3.9788735772974),
    ],
)
def test_permissible(grade, mass, rpm, e_per, u_per):
    assert permissible_eccentricity_um(grade, rpm / 60) == pytest.approx(e_per, rel=1e-13)
    assert permissible_gmm(grade, mass, rpm / 60) == pytest.approx(u_per, rel=1e-13)


def test_force_of_a_grade():  # METHODS 4
    assert grade_force_share(2.5, 50.0) == pytest.approx(0.0800883240859, rel=1e-12)
    assert grade_force_share(6.3, 25.0) == pytest.approx(0.100911288348, rel=1e-12)


def test_allocation():
    """METHODS 4: L_A 900, L_B 1500 and L_A 400, L_B 2000; the static load of A is in proportion to L_B."""
    assert shares_by_load(318.309886184, (1500, 900)) == pytest.approx((198.943678865, 119.366207319))
    assert shares_by_load(318.309886184, (2000, 400)) == pytest.approx((222.816920329, 95.4929658551))


def test_tolerance_of_machines(kit):
    half = tolerance_of(kit.machine(grade_mm_s=2.5, rotor_mass_kg=40.0, service_hz=50.0))
    assert half.permissible_gmm == pytest.approx(318.30988618379)
    assert half.shares_gmm == {1: pytest.approx(159.154943091895), 2: pytest.approx(159.154943091895)}
    assert "half for each plane" in half.how
    loaded = tolerance_of(
        kit.machine(grade_mm_s=2.5, rotor_mass_kg=40.0, service_hz=50.0, bearing_loads_kg=(25.0, 15.0))
    )
    assert loaded.shares_gmm == {1: pytest.approx(198.943678865), 2: pytest.approx(119.366207319)}
    one = tolerance_of(kit.machine(model=kit.model(planes=1), permissible_gmm=77.0))
    assert (one.permissible_gmm, one.shares_gmm) == (77.0, {1: 77.0})
    assert tolerance_of(kit.machine(grade_mm_s=None)) is None


def test_trial_mass():  # METHODS 5: M 60 kg, 3000 r/min: 596.17283133968 g.mm, 3.9744855422645 g at 150 mm
    u = trial_unbalance_gmm(60, 50.0)
    assert u == pytest.approx(596.17283133968, rel=1e-13)
    assert u / 150 == pytest.approx(3.9744855422645, rel=1e-13)
    assert u / permissible_gmm(6.3, 60, 50.0) == pytest.approx(0.49548471, rel=1e-7)
    # U_t = 89425924.700952 M/N^2; F = 0.010966227112322 (N/1000)^2 U
    assert trial_unbalance_gmm(1, 1 / 60) == pytest.approx(89425924.700952, rel=1e-13)
    assert force_n(1, 1000 / 60) == pytest.approx(0.010966227112322, rel=1e-12)


def test_static_load(kit):
    assert static_load_kg(kit.machine(), 2)[0] == 20.0
    assert static_load_kg(kit.machine(bearing_loads_kg=(25.0, 15.0)), 2)[0] == 15.0
    one = kit.machine(model=kit.model(planes=1))
    assert static_load_kg(one, 1)[0] == 40.0
    load, how = static_load_kg(kit.machine(model=kit.model(planes=1), bearing_loads_kg=(25.0, 15.0)), 1)
    assert load == 15.0
    assert "smaller" in how


def test_place():
    # METHODS 6.1: heavy spot 40, psi 25, probe and sensor 0 read lag 65; probe +90: 155; sensor +90: 335.
    # The trial goes opposite the heavy spot, at 220, in all three.
    assert place_by_lag_deg(65, 0, 0, mechanical_lag_deg=25) == pytest.approx(220)
    assert place_by_lag_deg(155, 90, 0, mechanical_lag_deg=25) == pytest.approx(220)
    assert place_by_lag_deg(335, 0, 90, mechanical_lag_deg=25) == pytest.approx(220)
    # displacement lag 312 reads 222 as velocity and 132 as acceleration
    at = place_by_lag_deg(312, 0, 0)
    assert place_by_lag_deg(222, 0, 0, "velocity") == pytest.approx(at)
    assert place_by_lag_deg(132, 0, 0, "acceleration") == pytest.approx(at)
    assert place_by_coefficient_deg(65, 25) == pytest.approx(220)


def test_when_the_lag_is_known():
    assert lag_is_known(34.9, 50.0)
    assert not lag_is_known(35.0, 50.0)
    assert not lag_is_known(10.0, None)
