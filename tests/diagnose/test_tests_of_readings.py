"""Tests of readings against a worked example, refitted adjustments, simulation and invariances."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, BYPASS_READING, LOOP, LOOP_READING, RECYCLE, SKID, SKID_R_HIGH
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binom, chi2

from reconcile.diagnose.critical import sidak_limit
from reconcile.diagnose.tests_of_readings import global_test, global_tests, share_checked, signature_tests

EVERY = np.hstack([BYPASS.biases, BYPASS.leaks])
P = BYPASS.parity(BYPASS_READING)


def refitted_objective(net, reading, without=(), granted=None):
    """Weighted least squares by its normal equations (KKT), without some readings or with a loss at a node granted."""
    a, n = net.matrix, net.sigma.size
    weight = 1 / net.sigma**2
    weight[list(without)] = 0.0
    extra = np.zeros((len(a), 0)) if granted is None else granted[:, None]
    k = np.zeros((n + extra.shape[1] + len(a),) * 2)
    k[:n, :n] = np.diag(weight)
    constraints = np.hstack([a, -extra])
    k[-len(a) :, : constraints.shape[1]] = constraints
    k[: constraints.shape[1], -len(a) :] = constraints.T
    rhs = np.zeros(len(k))
    rhs[:n] = weight * reading
    x = np.linalg.solve(k, rhs)[:n]
    return float(np.sum(weight * (reading - x) ** 2))


# ------------------------------------------------------------------ global test


def test_global_test_of_the_bypass_example():
    # Narasimhan & Jordache 2000, Data Reconciliation and Gross Error Detection: 16.674 against 9.488 (from memory)
    found = global_test(P, 0.05)
    assert found.objective == pytest.approx(16.674, abs=5e-4)
    assert found.limit == pytest.approx(9.488, abs=5e-4)
    assert found.checks == 4
    assert found.p == pytest.approx(chi2.sf(16.6741666667, 4), rel=1e-9)
    assert found.status == "disagrees"


def test_both_sides_of_the_limit_for_three_checks():
    # A limit of 7.81 for three checks: Villadsen, Nielsen & Liden 2003, Table 3.5
    assert global_test(np.array([2.7, 0.5, 0.5]), 0.05).status == "agrees"
    assert global_test(np.array([2.8, 0.5, 0.5]), 0.05).status == "disagrees"


def test_without_checks_nothing_passes():
    found = global_test(np.zeros(0), 0.05)
    assert (found.status, found.checks, found.objective) == ("no check possible", 0, 0.0)
    assert np.isnan(found.limit)
    assert np.isnan(found.p)
    assert global_tests(np.zeros((2, 0)), 0.05).status.tolist() == ["no check possible"] * 2


def test_agreement_can_be_too_good():
    edge = np.sqrt(chi2.isf(0.999, 4))
    assert global_test(np.array([edge * 0.999, 0, 0, 0]), 0.05).status == "suspiciously good"
    assert global_test(np.array([edge * 1.001, 0, 0, 0]), 0.05).status == "agrees"


def test_what_is_not_a_number_does_not_pass():
    found = global_tests(np.array([[np.nan, 0.1], [0.3, 0.9], [9.0, 0.0]]), 0.05)
    assert found.status.tolist() == ["not known", "agrees", "disagrees"]


def test_many_snapshots_are_tested_as_one_by_one():
    p = np.random.default_rng(4).normal(size=(50, 3)) * 1.5
    many = global_tests(p, 0.05)
    for i, row in enumerate(p):
        one = global_test(row, 0.05)
        assert (one.status, one.limit) == (many.status[i], many.limit)
        assert (one.objective, one.p) == pytest.approx((many.objective[i], many.p[i]), rel=1e-14)


def test_mean_of_snapshots_has_less_noise():
    # the mean of 25 snapshots: noise 1/5, so half a sigma is two and a half
    found = signature_tests(np.array([0.5]), np.array([[1.0]]), 0.05, noise=0.2)
    assert found.z[0] == pytest.approx(2.5)
    assert found.sigma[0] == pytest.approx(0.2)
    assert found.size[0] == pytest.approx(0.5)
    assert global_test(np.array([0.5]), 0.05, noise=0.2).objective == pytest.approx(6.25)


@pytest.mark.parametrize("checks", [1, 4, 11])
def test_a_five_percent_test_rejects_five_percent(checks):
    n = 100_000
    found = global_tests(np.random.default_rng(checks).normal(size=(n, checks)), 0.05)
    low, high = binom.interval(0.999, n, 0.05)
    assert low <= np.sum(found.status == "disagrees") <= high
    low, high = binom.interval(0.999, n, 0.001)
    assert low <= np.sum(found.status == "suspiciously good") <= high


# ------------------------------------------------------------------ single faults


def test_tests_of_the_bypass_example():
    # Network and readings of Narasimhan & Jordache 2000 (from memory). The last digits are our own computation by normal
    # equations; a loss at node 2 beats the bias of F2 because F2 and F4 are the only meters there.
    found = signature_tests(P, EVERY, 0.05)
    of_meters = [1.2533222517, 3.2047490801, 0.4939804315, 2.0004166233, 1.6983128883, 2.4576547086]
    of_nodes = [1.2533222517, 3.64, 0.62, 2.4576547086]
    assert np.abs(found.z) == pytest.approx([*of_meters, *of_nodes], abs=1e-9)
    assert found.size == pytest.approx([1.535, 3.925, -0.605, -2.45, 2.08, -3.01, 1.535, 3.64, 0.62, 3.01], abs=1e-9)
    assert found.statistic[[1, 7]] == pytest.approx([10.2704166667, 13.2496], abs=1e-9)
    assert found.worst == 7
    assert found.tied == ((0, 6), (5, 9))
    assert found.distinct == 8


def test_among_meters_alone_the_biased_one_is_named():
    found = signature_tests(P, BYPASS.biases, 0.05)
    assert BYPASS.streams[found.worst] == "F2"
    assert abs(found.z[1]) > found.limit
    # 4 was added to the reading of F2
    assert found.low[1] < 4 < found.high[1]


@pytest.mark.parametrize(
    ("net", "reading"), [(BYPASS, BYPASS_READING), (SKID, SKID_R_HIGH)], ids=["bypass", "membrane skid"]
)
def test_leftover_is_the_objective_of_an_adjustment_without_the_reading(net, reading):
    # Narasimhan & Mah 1987, AIChE J. 33, 1514: the likelihood ratio is the drop of the objective
    found = signature_tests(net.parity(reading), net.biases, 0.05)
    for i in range(net.sigma.size):
        assert found.leftover[i] == pytest.approx(refitted_objective(net, reading, without=[i]), rel=1e-9, abs=1e-9)


@pytest.mark.parametrize("node", range(4))
def test_leftover_is_the_objective_with_the_loss_granted(node):
    loss = np.eye(4)[node]
    found = signature_tests(P, BYPASS.leaks, 0.05)
    assert found.leftover[node] == pytest.approx(refitted_objective(BYPASS, BYPASS_READING, granted=loss), rel=1e-9)


def test_the_limit_is_exact_or_for_independent_tests():
    exact = signature_tests(P, EVERY, 0.05)
    plain = signature_tests(P, EVERY, 0.05, "sidak")
    assert (exact.correction, plain.correction) == ("exact", "sidak")
    assert plain.limit == pytest.approx(sidak_limit(0.05, 8), rel=1e-14)
    assert exact.limit < plain.limit
    assert 0 < exact.limit_error < 1e-3
    assert plain.limit_error == 0.0


def test_what_nothing_checks_has_no_test_value():
    # The wash of the crystalliser loop is in no check; rounding of the projection must not give it a test value.
    f = LOOP.biases.copy()
    f[:, 5] = [3e-17, -2e-17]
    found = signature_tests(LOOP.parity(LOOP_READING), f, 0.05, scale=1 / LOOP.sigma)
    assert found.unchecked == (5,)
    for values in (found.z, found.size, found.sigma, found.low, found.high, found.statistic, found.leftover):
        assert np.isnan(values).tolist() == [False] * 5 + [True]
    assert found.distinct == 3
    assert found.worst != 5


def test_units_of_very_different_size_with_their_scale():
    sigma = np.array([1e-9, 1e6, 1.0])
    f = np.array([[0.6, 0.0, 0.8], [0.0, 0.7, 0.5]]) / sigma
    found = signature_tests(np.array([1.0, 2.0]), f, 0.05, scale=1 / sigma)
    assert found.unchecked == ()
    assert found.z == pytest.approx([1.0, 2.0, 1.8 / np.sqrt(0.89)])


def test_nothing_to_test():
    for f, checks in ((np.zeros((2, 3)), 2), (np.zeros((0, 3)), 0), (np.zeros((2, 0)), 2)):
        found = signature_tests(np.ones(checks), f, 0.05)
        assert found.z.shape == (f.shape[1],)
        assert np.isnan(found.z).all()
        assert np.isnan(found.limit)
        assert (found.distinct, found.worst) == (0, -1)
    assert signature_tests(np.ones((4, 2)), np.zeros((2, 3)), 0.05).worst.tolist() == [-1] * 4


def test_a_tie_is_named_by_its_first_member_whatever_the_rounding():
    # F and R of the crystalliser loop are in one balance only: their z differ by rounding at most.
    rng = np.random.default_rng(8)
    p = rng.normal(size=(2000, 2)) + 4 * LOOP.biases[:, 0] / np.linalg.norm(LOOP.biases[:, 0])
    found = signature_tests(p, LOOP.biases, 0.05, scale=1 / LOOP.sigma)
    assert found.tied == ((0, 1), (3, 4))
    assert set(found.worst.tolist()) == {0, 2, 3}


def test_many_snapshots_at_once():
    p = np.vstack([np.random.default_rng(9).normal(size=(20, 4)) * 2, np.full((1, 4), np.nan)])
    many = signature_tests(p, EVERY, 0.05)
    assert many.z.shape == (21, 10)
    for i, row in enumerate(p[:-1]):
        one = signature_tests(row, EVERY, 0.05)
        assert many.z[i] == pytest.approx(one.z, abs=1e-13)
        assert many.leftover[i] == pytest.approx(one.leftover, abs=1e-12)
        assert many.low[i] == pytest.approx(one.low, abs=1e-12)
        assert (many.worst[i], many.limit) == (one.worst, one.limit)
        assert type(one.worst) is int
    assert many.worst[-1] == -1


@pytest.mark.parametrize("net", [BYPASS, RECYCLE], ids=["bypass", "recycle"])
def test_alarms_come_as_often_as_the_level_says_with_leaks_too(net):
    f = np.hstack([net.biases, net.leaks])
    n = 100_000
    found = signature_tests(np.random.default_rng(17).normal(size=(n, 4)), f, 0.05)
    low, high = binom.interval(0.999, n, 0.05)
    assert low <= np.sum(np.abs(found.z).max(axis=1) > found.limit) <= high


def test_intervals_cover_the_size_as_often_as_they_say():
    n, size = 50_000, 3.0
    p = np.random.default_rng(23).normal(size=(n, 4)) + size * RECYCLE.biases[:, 4]
    found = signature_tests(p, RECYCLE.biases[:, [4]], 0.05)
    low, high = binom.interval(0.999, n, 0.95)
    assert low <= np.sum((found.low[:, 0] < size) & (size < found.high[:, 0])) <= high


# ------------------------------------------------------------------ invariances


@given(st.integers(1, 5), st.integers(1, 7), st.integers(0, 10**6))
def test_basis_signs_order_and_units_do_not_matter(r, k, seed):
    rng = np.random.default_rng(seed)
    f, p = rng.normal(size=(r, k)), 3 * rng.normal(size=r)
    turn = np.linalg.qr(rng.normal(size=(r, r)))[0]
    factor = rng.choice([-1, 1], k) * 10.0 ** rng.uniform(-4, 4, k)
    order = rng.permutation(k)
    one = signature_tests(p, f, 0.05)
    other = signature_tests(turn @ p, (turn @ f * factor)[:, order], 0.05)
    sign = np.sign(factor)[order]
    assert other.z == pytest.approx(one.z[order] * sign, abs=1e-9)
    assert other.size * factor[order] == pytest.approx(one.size[order], rel=1e-9, abs=1e-9)
    assert other.leftover == pytest.approx(one.leftover[order], abs=1e-8)
    assert global_test(turn @ p, 0.05).objective == pytest.approx(global_test(p, 0.05).objective, rel=1e-12)
    if one.distinct > 1:
        assert order[other.worst] == one.worst


@given(st.integers(1, 5), st.integers(1, 7), st.integers(0, 10**6))
def test_no_single_fault_takes_more_than_the_objective(r, k, seed):
    rng = np.random.default_rng(seed)
    f, p = rng.normal(size=(r, k)), rng.normal(size=r)
    found = signature_tests(p, f, 0.05)
    assert np.all(found.leftover >= 0)
    assert found.leftover + found.statistic == pytest.approx(np.full(k, found.objective), rel=1e-12)


# ------------------------------------------------------------------ shares


@pytest.mark.parametrize("net", [BYPASS, RECYCLE, SKID, LOOP], ids=["bypass", "recycle", "skid", "loop"])
def test_shares_are_redundancy_numbers(net):
    # Baarda 1968: 1 - var(adjusted) / var(reading); they add up to the number of checks
    share = share_checked(net.biases, net.sigma)
    v = (net.matrix * net.sigma**2) @ net.matrix.T
    adjusted = np.diag(net.sigma**2) - np.diag(net.sigma**2) @ net.matrix.T @ np.linalg.solve(
        v, net.matrix @ np.diag(net.sigma**2)
    )
    assert share == pytest.approx(1 - np.diag(adjusted) / net.sigma**2, abs=1e-12)
    assert share.sum() == pytest.approx(len(net.matrix), abs=1e-12)


def test_bypass_shares_are_two_thirds():
    # adjusted sigmas 0.57735 of 1 each, so 1 - 1/3
    assert share_checked(BYPASS.biases, BYPASS.sigma) == pytest.approx(np.full(6, 2 / 3))


def test_shares_stay_within_zero_and_one():
    assert share_checked(np.array([[1 + 1e-12, 0.0]]), np.ones(2)).tolist() == [1.0, 0.0]
