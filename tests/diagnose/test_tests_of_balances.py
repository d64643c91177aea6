"""Nodal and principal-component tests against a worked example, deleted balances and simulation."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, BYPASS_READING, RECYCLE, SKID, SKID_R_HIGH
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom

from reconcile.diagnose.tests_of_readings import nodal_test, principal_component_test, signature_tests


def covariance(net):
    return (net.matrix * net.sigma**2) @ net.matrix.T


def objective(closure, v):
    return float(closure @ np.linalg.solve(v, closure))


CLOSURE = BYPASS.matrix @ BYPASS_READING
V = covariance(BYPASS)


def test_nodal_test_of_the_bypass_example():
    # Narasimhan & Jordache 2000: 0.6871, 3.0052, 1.2657, 1.0161 (from memory); maximum-power form: our own computation
    found = nodal_test(CLOSURE, V, 0.05)
    assert np.abs(found.z) == pytest.approx([0.6871, 3.0052, 1.2657, 1.0161], abs=1e-4)
    assert np.abs(found.z_max_power) == pytest.approx([1.2533222517, 3.64, 0.62, 2.4576547086], abs=1e-9)
    assert found.checks == 4
    assert found.dependent == ()
    # correlated closures: below the 2.491 of four independent tests (Mah & Tamhane 1982)
    assert 1.96 < found.limit < 2.491
    assert 1.96 < found.limit_max_power < 2.491


@pytest.mark.parametrize(("net", "reading"), [(BYPASS, BYPASS_READING), (SKID, SKID_R_HIGH)])
def test_maximum_power_is_the_drop_when_a_balance_is_left_out(net, reading):
    # Crowe 1992, Can. J. Chem. Eng. 70, 1030
    closure, v = net.matrix @ reading, covariance(net)
    found = nodal_test(closure, v, 0.05)
    for k in range(len(v)):
        rest = np.delete(np.arange(len(v)), k)
        drop = objective(closure, v) - objective(closure[rest], v[np.ix_(rest, rest)])
        assert found.z_max_power[k] ** 2 == pytest.approx(drop, rel=1e-9)


def test_maximum_power_is_the_test_of_a_loss_at_the_node():
    # Narasimhan & Mah 1987: the likelihood ratio of a leak
    leaks = signature_tests(BYPASS.parity(BYPASS_READING), BYPASS.leaks, 0.05)
    assert nodal_test(CLOSURE, V, 0.05).z_max_power == pytest.approx(leaks.z, abs=1e-12)


def test_a_balance_that_others_imply_is_not_tested_beyond_them():
    # the balance of the whole plant is the sum of all four
    total = np.vstack([np.eye(4), np.ones(4)])
    found = nodal_test(total @ CLOSURE, total @ V @ total.T, 0.05)
    assert found.checks == 4
    assert found.dependent == (0, 1, 2, 3, 4)
    assert np.isnan(found.z_max_power).all()
    assert np.isnan(found.limit_max_power)
    assert found.z[:4] == pytest.approx(nodal_test(CLOSURE, V, 0.05).z)
    assert found.z[4] == pytest.approx((101.91 - 98.88) / np.sqrt(2))


def test_balances_outside_a_dependency_keep_their_test():
    # a balance around nodes 1 and 2 together, in other units
    more = np.vstack([np.eye(4), [1e3, 1e3, 0, 0]])
    plain, found = nodal_test(CLOSURE, V, 0.05), nodal_test(more @ CLOSURE, more @ V @ more.T, 0.05)
    assert found.dependent == (0, 1, 4)
    assert np.isnan(found.z_max_power).tolist() == [True, True, False, False, True]
    assert found.z_max_power[2:4] == pytest.approx(plain.z_max_power[2:4], abs=1e-9)


def test_a_balance_that_no_reading_moves_is_not_testable():
    v = np.zeros((5, 5))
    v[1:, 1:] = V
    found = nodal_test(np.concatenate([[7.0], CLOSURE]), v, 0.05)
    assert np.isnan(found.z[0])
    assert np.isnan(found.z_max_power[0])
    assert found.z_max_power[1:] == pytest.approx(nodal_test(CLOSURE, V, 0.05).z_max_power)
    nothing = nodal_test(np.ones(2), np.zeros((2, 2)), 0.05)
    assert np.isnan([*nothing.z, *nothing.z_max_power, nothing.limit, nothing.limit_max_power]).all()
    assert nothing.checks == 0


def test_a_spread_that_is_rounding_is_not_testable():
    v = np.diag([1.0, 1e-32])
    assert np.isnan(nodal_test(np.ones(2), v, 0.05, scale=np.ones(2)).z).tolist() == [False, True]
    assert np.isfinite(nodal_test(np.ones(2), v, 0.05).z).all()


def test_many_snapshots_at_once():
    closures = np.random.default_rng(2).normal(size=(30, 4))
    many, scores = nodal_test(closures, V, 0.05), principal_component_test(closures, V)
    for i, closure in enumerate(closures):
        one = nodal_test(closure, V, 0.05)
        assert many.z[i] == pytest.approx(one.z, abs=1e-13)
        assert many.z_max_power[i] == pytest.approx(one.z_max_power, abs=1e-12)
        assert scores.scores[i] == pytest.approx(principal_component_test(closure, V).scores, abs=1e-12)


@pytest.mark.parametrize("net", [BYPASS, RECYCLE], ids=["bypass", "recycle"])
def test_alarms_come_as_often_as_the_level_says(net):
    n = 100_000
    closures = (np.random.default_rng(31).normal(size=(n, net.sigma.size)) * net.sigma) @ net.matrix.T
    found = nodal_test(closures, covariance(net), 0.05)
    low, high = binom.interval(0.999, n, 0.05)
    assert low <= np.sum(np.abs(found.z).max(axis=1) > found.limit) <= high
    assert low <= np.sum(np.abs(found.z_max_power).max(axis=1) > found.limit_max_power) <= high
    scores = principal_component_test(closures, covariance(net))
    assert low <= np.sum(np.abs(scores.scores).max(axis=1) > scores.limit) <= high


@given(st.integers(1, 5), st.integers(0, 10**6))
def test_units_of_balances_do_not_matter(m, seed):
    rng = np.random.default_rng(seed)
    a = rng.normal(size=(m, m + 2))
    closure, v = rng.normal(size=m), a @ a.T
    unit = 10.0 ** rng.uniform(-5, 5, m) * rng.choice([-1, 1], m)
    one, other = nodal_test(closure, v, 0.05), nodal_test(unit * closure, unit[:, None] * v * unit, 0.05)
    assert other.z * np.sign(unit) == pytest.approx(one.z, rel=1e-9)
    assert other.z_max_power * np.sign(unit) == pytest.approx(one.z_max_power, rel=1e-6)


# ------------------------------------------------------------------ principal components


def test_principal_components_of_the_bypass_example():
    # Tong & Crowe 1995, AIChE J. 41, 1712. Eigenvalues in closed form: 2, 3 and (5 +/- sqrt(17)) / 2.
    found = principal_component_test(CLOSURE, V)
    assert found.eigenvalues == pytest.approx([(5 - 17**0.5) / 2, 2, 3, (5 + 17**0.5) / 2], rel=1e-12)
    # by hand on (0, 1, -1, 0)/sqrt(2) and (1, 0, 0, -1)/sqrt(2): closures -1.19, 4.25, -1.79, 1.76
    assert np.abs(found.scores[1:3]) == pytest.approx([6.04 / 2, 2.95 / 6**0.5], abs=1e-9)
    assert found.scores @ found.scores == pytest.approx(16.6741666667, abs=1e-9)
    assert found.repeated == ()
    assert found.limit == pytest.approx(2.491, abs=5e-4)


def test_repeated_eigenvalues_are_told():
    # Two separate splitters with equal sigmas; only what does not depend on the axes is compared.
    v = np.diag([3.0, 3.0, 5.0])
    closure = np.array([1.0, 2.0, 3.0])
    found = principal_component_test(closure, v)
    assert found.repeated == ((0, 1),)
    assert np.sum(found.scores[:2] ** 2) == pytest.approx(5 / 3)
    turned = np.linalg.qr(np.random.default_rng(1).normal(size=(2, 2)))[0]
    q = np.block([[turned, np.zeros((2, 1))], [np.zeros((1, 2)), np.ones((1, 1))]])
    assert principal_component_test(q @ closure, q @ v @ q.T).repeated == ((0, 1),)


def test_dependent_balances_add_no_component():
    total = np.vstack([np.eye(4), np.ones(4)])
    found = principal_component_test(total @ CLOSURE, total @ V @ total.T)
    assert found.eigenvalues.size == 4
    assert found.scores @ found.scores == pytest.approx(16.6741666667, abs=1e-9)


def test_no_component_at_all():
    found = principal_component_test(np.ones(2), np.zeros((2, 2)))
    assert found.scores.size == 0
    assert np.isnan(found.limit)


@given(st.integers(1, 6), st.integers(0, 10**6))
def test_squares_of_scores_add_up_to_the_objective(m, seed):
    rng = np.random.default_rng(seed)
    a = rng.normal(size=(m, m + 3))
    closure = rng.normal(size=m)
    found = principal_component_test(closure, a @ a.T)
    assert found.scores @ found.scores == pytest.approx(objective(closure, a @ a.T), rel=1e-8)
