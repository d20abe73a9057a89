"""The influence-coefficient method against METHODS sections 1, 2, 6.4 and 9 (marks as printed there)."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from store.balance.angles import angle_deg, difference_deg, polar
from store.balance.influence import (
    coefficient,
    coefficient_matrix,
    condition_number,
    correction,
    correction_one_plane,
    plane_effects,
)

P = polar


def assert_polar(value: complex, amplitude: float, deg: float, rel: float = 1e-10) -> None:
    assert abs(value) == pytest.approx(amplitude, rel=rel)
    assert difference_deg(angle_deg(value), deg) == pytest.approx(0.0, abs=1e-8 if rel < 1e-9 else 1e-5)


def test_example_1_0_practice_sized():  # METHODS 1.0 [D]
    v0, v1 = P(2.6, 312), P(1.7, 251)
    assert_polar(v1 - v0, 2.31609217369, 171.938610515)
    assert_polar(correction_one_plane(v0, v1, P(1, 0)), 1.12258053869, 320.061389485)
    assert_polar(correction_one_plane(v0, v1, P(1, 0), kept=True), 0.733994967606, 259.061389485)


@pytest.mark.parametrize(
    ("deg", "ratio", "percent"),
    [
        # METHODS 1.0: the trial moved against the sense in which the reading grows, in hole steps
        (-15, 1.0, 42.1948730497), (-30, 1.0, 19.6620946469), (-45, 1.0, 13.7370191528),
        (-15, 1.01791121962, 42.1646957102), (-30, 1.10573424511, 17.2592907272),
        (-45, 1.11820330911, 8.82230639657), (15, 1.0, 87.7542441568), (45, 1.0, 127.920051004),
    ],
)  # fmt: skip
def test_example_1_0_hole_steps(deg, ratio, percent):
    v0, v1 = P(2.6, 312), P(1.7, 251)
    left = v0 + coefficient(v0, v1, P(1, 0)) * P(ratio, deg)
    assert 100 * abs(left) / abs(v0) == pytest.approx(percent, rel=1e-9)


def test_example_1_1a_two_planes():  # METHODS 1.1 (a) [M: Rao], originals 60 and 205
    v0 = [P(8.5, 60), P(6.5, 205)]
    runs = [([P(6.0, 125), P(4.5, 230)], P(10, 270)), ([P(6.0, 35), P(10.5, 160)], P(12, 180))]
    A = coefficient_matrix(v0, runs)
    assert_polar(A[0, 0], 0.807111747545, 287.643504149)
    assert_polar(A[0, 1], 0.331312685078, 99.6274945282)
    assert_polar(A[1, 0], 0.307912235196, 76.8561656316)
    assert_polar(A[1, 1], 0.623497774477, 302.098751808)
    assert condition_number(A) == pytest.approx(2.34076535989, rel=1e-10)
    w = correction(A, v0)
    assert_polar(w[0], 10.0561386990, 325.554803852)
    assert_polar(w[1], 5.87736166287, 68.2559339695)
    assert_polar(-w[0], 10.0561386990, 145.554803852)  # the original unbalance, not the weights to add
    assert_polar(-w[1], 5.87736166287, 248.255933970)


def test_example_1_1c_trial_kept():  # METHODS 1.1 (b) and its keep-W_L variant (c)
    v0 = [P(8.5, 63), P(6.5, 206)]
    first = ([P(6.0, 125), P(4.5, 230)], P(10, 270))
    kept = ([P(2.51062663975, 161.832210576), P(7.53708343489, 156.5992779)], P(12, 180))
    A = coefficient_matrix(v0, [first, kept], kept=True)
    assert_polar(A[0, 1], 0.355408074617, 104.335600918, rel=1e-8)
    assert_polar(A[1, 1], 0.632889825151, 302.000401133, rel=1e-8)
    w = correction(A, v0)
    assert_polar(w[0], 10.3886739517, 327.121348761, rel=1e-8)
    assert_polar(w[1], 5.85912440617, 67.5165304879, rel=1e-8)


def test_example_1_1b_condition_number():
    v0 = [P(8.5, 63), P(6.5, 206)]
    runs = [([P(6.0, 125), P(4.5, 230)], P(10, 270)), ([P(6.0, 35), P(10.5, 160)], P(12, 180))]
    assert condition_number(coefficient_matrix(v0, runs)) == pytest.approx(2.4324619467, rel=1e-10)


def test_example_1_2_grinding_wheel():  # METHODS 1.2 [F]; the answer printed in the book is wrong
    v0, v1, w = P(0.25, 40), P(0.5, 150), P(170, -65)
    assert_polar(v1 - v0, 0.630876402976, 171.862218722)
    assert_polar(coefficient(v0, v1, w), 0.00371103766456, 236.862218722)
    assert_polar(correction_one_plane(v0, v1, w), 67.3666027126, 343.137781278)
    assert_polar(correction_one_plane(v0, v1, w, kept=True), 134.733205425, 93.1377812784)


def test_example_1_5_flywheel():  # METHODS 1.5 [F]; the answer printed there is wrong
    v0, v1, w = P(0.165, -15), P(0.225, 35), P(50, 45)
    assert_polar(coefficient(v0, v1, w), 0.00347119691062, 36.7410296748)
    assert_polar(correction_one_plane(v0, v1, w), 47.5340363133, 128.258970325)
    assert_polar(correction_one_plane(v0, v1, w, kept=True), 64.8191404272, 178.258970325)
    assert_polar(correction_one_plane(P(6.5, -15), P(8.8, 35), P(2, 45)), 1.91352224869, 127.868120272)


def test_example_1_6_by_graph():  # METHODS 1.6 [F: McMillan p. 71-73]
    v0, v1 = P(3.5, 60), P(5.0, 120)
    assert abs(v1 - v0) == pytest.approx(4.44409720866, rel=1e-11)
    w = correction_one_plane(v0, v1, P(5, 0))
    assert abs(w) == pytest.approx(3.93780765324, rel=1e-11)
    assert abs(difference_deg(angle_deg(w), 0.0)) == pytest.approx(76.9960880572, rel=1e-11)


LS_A = [
    [P(1.20, 35), P(0.40, 310)], [P(0.55, 80), P(0.90, 150)], [P(0.30, 200), P(1.40, 20)],
    [P(2.10, 95), P(1.10, 120)], [P(1.50, 140), P(1.90, 260)], [P(0.80, 250), P(2.40, 85)],
]  # fmt: skip
LS_V0 = [P(42, 120), P(25, 200), P(31, 75), P(60, 170), P(48, 310), P(55, 20)]


def test_least_squares_of_section_2():  # METHODS 2, row LS (Goodman 1964 [M]; four routes)
    A, v0 = np.array(LS_A), np.array(LS_V0)
    w = correction(A, v0)
    assert condition_number(A) == pytest.approx(1.434669613905, rel=1e-12)
    assert_polar(w[0], 23.251910606232, 282.9681766041, rel=1e-12)
    assert_polar(w[1], 9.510030254066, 214.5087677020, rel=1e-12)
    left = np.abs(A @ w + v0)
    assert float((left**2).sum()) == pytest.approx(5139.009540680549, rel=1e-12)
    assert left == pytest.approx(
        [19.1178516096, 7.5400151951, 25.2002362059, 21.2223234212, 40.6535540697, 44.4805023201]
    )


def test_weighted_least_squares_of_section_2():  # METHODS 2, row weights 1,1,1,4,4,4
    w = correction(np.array(LS_A), np.array(LS_V0), np.array([1.0, 1, 1, 4, 4, 4]))
    assert_polar(w[0], 21.652358920224, 288.4209786596, rel=1e-12)
    assert_polar(w[1], 8.459184576902, 192.0683972987, rel=1e-12)


def test_convention_trap():  # METHODS 6.4: lag readings with weights against rotation, and the mirror image
    v0, v1 = P(2.6, 312), P(1.7, 251)
    assert_polar(correction_one_plane(v0, v1, P(1, 10)), 1.12258053869, 330.061389485)
    lead = correction_one_plane(v0.conjugate(), v1.conjugate(), P(1, -10))
    assert_polar(lead, 1.12258053869, 29.9386105152)
    # W numbered 10 WITH rotation is -10 against: right answer 310.061 against (49.939 with)
    assert_polar(correction_one_plane(v0, v1, P(1, -10)), 1.12258053869, 310.061389485)


def test_slow_roll_of_section_9():
    v0, v_slow, v1, w = P(2.5, 75), P(0.8, 200), P(1.9, 140), P(10, 30)
    assert_polar(v0 - v_slow, 3.0305619520815, 62.511851575603, rel=1e-12)
    assert_polar(P(4.0, 120) - P(0.5, 300), 4.5, 120.0)
    alpha = coefficient(v0, v1, w)
    assert_polar(alpha, 0.24176696452293, 179.58173619128, rel=1e-12)
    assert_polar(coefficient(v0 - v_slow, v1 - v_slow, w), 0.24176696452293, 179.58173619128, rel=1e-12)
    A = np.array([[alpha]])
    assert_polar(correction(A, [v0])[0], 10.340535998924, 75.418263808716, rel=1e-12)
    assert_polar(correction(A, [v0 - v_slow])[0], 12.535053984987, 62.930115384319, rel=1e-12)


vectors = st.builds(P, st.floats(0.5, 50), st.floats(0, 360))


@given(vectors, vectors, vectors)
def test_kept_is_removed_less_the_trial(v0, v1, w):  # METHODS 1: w_add = w - W, an exact identity
    assume(abs(v1 - v0) > 0.1)
    removed = correction_one_plane(v0, v1, w)
    assert correction_one_plane(v0, v1, w, kept=True) == pytest.approx(removed - w, rel=1e-7, abs=1e-7)


@given(vectors, vectors, vectors, st.floats(-180, 180))
def test_turning_mark_and_weights_together_turns_the_answer(v0, v1, w, by):
    assume(abs(v1 - v0) > 0.1)
    turned = correction_one_plane(v0 * P(1, by), v1 * P(1, by), w * P(1, by))
    assert turned == pytest.approx(correction_one_plane(v0, v1, w) * P(1, by), rel=1e-7)


@given(vectors, st.lists(vectors, min_size=2, max_size=2), st.lists(vectors, min_size=3, max_size=3))
def test_linear_runs_give_their_coefficients_back(base, alphas, weights):
    W = np.array([[0, 0], [weights[0], 0], [0, weights[1]], [weights[2], weights[0]]])
    v = base + W @ np.array(alphas)
    found = plane_effects(W, v, np.ones(4))
    assert found.known == (True, True)
    assert found.values == pytest.approx(np.array(alphas), rel=1e-6, abs=1e-6)


def test_a_difference_below_a_percent_tells_nothing_apart():
    W = np.array([[0, 0], [100, 100], [200, 200.5]], dtype=complex)
    assert plane_effects(W, W.sum(axis=1), np.ones(3)).known == (False, False)
    W[2, 1] = 300
    assert plane_effects(W, W.sum(axis=1), np.ones(3)).known == (True, True)


def test_one_reading_knows_nothing():
    assert plane_effects(np.array([[5j]]), np.array([1 + 0j]), np.ones(1)).known == (False,)
