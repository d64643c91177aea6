"""Audit of the sigmas: against general optimisers, and how often it is right."""

from __future__ import annotations

import numpy as np
import pytest
from diagnose_networks import BYPASS, SKID, Net
from scipy.optimize import minimize
from scipy.stats import binom, multivariate_normal

from reconcile.diagnose.audit import LEAST_SHARE, Scatter, audit, joint_factors, scatter, select_factors
from reconcile.diagnose.refusal import Refusal

TRUTH = np.array([50, 150, 200, 40, 160, 10.0])
T, B = 4, 5


def declared(tag, sigma):
    """The skid with another sigma declared for one meter."""
    sigmas = SKID.sigma.copy()
    sigmas[tag] = sigma
    return Net(SKID.streams, SKID.matrix, sigmas)


def windows(net, seed, count=90):
    reading = TRUTH + np.random.default_rng(seed).normal(size=(count, 6)) * SKID.sigma
    return scatter(net.parity(reading.T).T, net.biases, net.sigma)


# ------------------------------------------------------------------ against the likelihood itself


def log_likelihood(parity, own, factors):
    covariance = np.eye(parity.shape[1]) + (own * (np.asarray(factors) ** 2 - 1)) @ own.T
    return multivariate_normal(np.zeros(parity.shape[1]), covariance).logpdf(parity).sum()


def test_factor_gain_and_interval_are_those_of_the_likelihood():
    net = declared(T, 0.4)
    reading = TRUTH + np.random.default_rng(7).normal(size=(90, 6)) * SKID.sigma
    parity, own = net.parity(reading.T).T, net.biases * net.sigma
    found = audit([scatter(parity, net.biases, net.sigma)])
    nothing = log_likelihood(parity, own, np.ones(6))
    for i in (0, 1, 2, 3, T):

        def at(factor, i=i):
            factors = np.ones(6)
            factors[i] = factor
            return -2 * (log_likelihood(parity, own, factors) - nothing)

        best = minimize(lambda x: at(x[0]), [1.2], method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10})
        assert found.factor[i] == pytest.approx(best.x[0], rel=1e-5)
        assert found.gain[i] == pytest.approx(-best.fun, abs=1e-7)
        for end in (found.factor_low[i], found.factor_high[i]):
            assert at(end) == pytest.approx(best.fun + 3.841458820694124, abs=1e-6)


def test_factors_together_are_the_optimum_of_a_general_solver():
    net = declared(T, 0.4)
    reading = TRUTH + np.random.default_rng(8).normal(size=(90, 6)) * SKID.sigma * [1, 1, 1, 2.5, 1, 1]
    parity, own = net.parity(reading.T).T, net.biases * net.sigma
    part = scatter(parity, net.biases, net.sigma)
    found = joint_factors([part], [T, 3])

    def at(x):
        factors = np.ones(6)
        factors[[T, 3]] = np.abs(x)
        return -2 * log_likelihood(parity, own, factors)

    best = minimize(at, [2.0, 2.0], method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-10, "maxiter": 4000})
    assert found.separable
    assert found.factor == pytest.approx(np.abs(best.x), rel=1e-5)
    assert found.gain == pytest.approx(at([1, 1]) - best.fun, abs=1e-6)


def test_small_changes_are_the_regression_on_signature_products():
    """Almasy & Mah 1984: vec(S - I) regressed on g x g; to first order the likelihood gives the same variances."""
    rng = np.random.default_rng(9)
    g = BYPASS.biases * BYPASS.sigma
    # Three readings whose products are linearly independent; their variances are changed by about one per cent.
    chosen = [0, 1, 2]
    moment = 1e8 * (np.eye(len(g)) + (g[:, chosen] * [0.01, -0.008, 0.012]) @ g[:, chosen].T)
    noise = rng.normal(size=moment.shape) * 1e4
    moment += noise + noise.T
    design = np.column_stack([np.outer(g[:, i], g[:, i]).ravel() for i in chosen])
    regressed = np.linalg.lstsq(design, (moment / 1e8 - np.eye(len(g))).ravel(), rcond=None)[0]
    found = joint_factors([Scatter(10**8, moment, g, 10**8)], chosen)
    assert found.factor**2 - 1 == pytest.approx(regressed, rel=0.03)


def test_parts_with_different_readings_absent_add_up():
    """A reading that is absent in half of the windows: both halves count with what they check."""
    half = Net(SKID.streams, np.array([[1, 0, 0, -1, 0, -1.0], [1, 1, -1, 0, 0, 0]]), SKID.sigma)
    rng = np.random.default_rng(10)
    sigma = SKID.sigma * [1, 1, 1, 3, 1, 1]
    one, two = (TRUTH + rng.normal(size=(60, 6)) * sigma for _ in range(2))
    parts = [scatter(n.parity(y.T).T, n.biases, n.sigma) for n, y in ((SKID, one), (half, two))]
    found = audit(parts)
    assert found.checks == 60 * 3 + 60 * 2
    assert found.best == 3
    assert found.factor_low[3] < 3 < found.factor_high[3]
    assert found.seen.tolist() == [120, 120, 120, 120, 60, 120]


def test_nothing_depends_on_the_basis_of_the_parity_space():
    part = windows(declared(T, 0.4), 11)
    turn = np.linalg.qr(np.random.default_rng(0).normal(size=(3, 3)))[0]
    turned = Scatter(part.count, turn @ part.moment @ turn.T, turn @ part.signatures, part.snapshots)
    assert audit([turned]).factor == pytest.approx(audit([part]).factor, rel=1e-9, nan_ok=True)


# ------------------------------------------------------------------ what cannot be known


def test_readings_with_parallel_signatures_are_not_audited_one_by_one():
    net = Net(("a", "b"), np.array([[1.0, -1.0]]), np.array([0.5, 1.0]))
    y = 10 + np.random.default_rng(12).normal(size=(40, 2)) * [1.5, 1.0]
    found = audit([scatter(net.parity(y.T).T, net.biases, net.sigma)])
    assert found.alike == ((0, 1),)
    assert not found.auditable.any()
    assert not joint_factors([scatter(net.parity(y.T).T, net.biases, net.sigma)], [0, 1]).separable


def test_few_windows_and_small_shares_are_not_auditable():
    assert not audit([windows(SKID, 13, count=19)]).auditable.any()
    found = audit([windows(SKID, 13, count=20)])
    assert found.share[B] < LEAST_SHARE
    assert found.auditable.tolist() == [True] * 5 + [False]


def test_a_sigma_declared_far_too_small_is_audited_though_its_share_is_small():
    found = audit([windows(declared(T, 0.4), 20240611)])
    assert found.share[T] < LEAST_SHARE
    assert found.auditable[T]


def test_refusals():
    with pytest.raises(Refusal, match="without checks"):
        audit([])
    with pytest.raises(Refusal, match="test level"):
        audit([windows(SKID, 1)], level=0)
    with pytest.raises(Refusal, match="zero, mean or pairs"):
        scatter(np.zeros((2, 1)), np.ones((1, 1)), np.ones(1), about="median")


# ------------------------------------------------------------------ how often it is right


def test_a_retentate_sigma_of_a_quarter_is_found():
    """Declared 0.4 where the spread is 1.6, seed 20240611: factor 3.5, 95 % from 2.7 to 4.5, ratio 1.34."""
    found = audit([windows(declared(T, 0.4), 20240611)])
    assert found.best == T
    assert (round(found.factor[T], 1), round(found.factor_low[T], 1), round(found.factor_high[T], 1)) == (3.5, 2.7, 4.5)
    assert round(found.ratio, 2) == 1.34
    assert (round(found.low, 2), round(found.high, 2)) == (0.84, 1.18)
    assert select_factors([windows(declared(T, 0.4), 20240611)], found).readings == (T,)


def test_over_a_hundred_seeds_the_right_reading_comes_first_and_its_interval_covers():
    net = declared(T, 0.4)
    found = [audit([windows(net, seed)]) for seed in range(100)]
    assert sum(a.best == T for a in found) >= 95
    assert 88 <= sum(a.factor_low[T] <= 4.0 <= a.factor_high[T] for a in found) <= 99


def test_with_right_sigmas_no_change_is_indicated_in_most_seeds():
    found = [audit([windows(SKID, seed)]) for seed in range(100)]
    assert sum(not a.change_indicated for a in found) >= 90
    assert found[0].limit == pytest.approx(6.96, abs=5e-3)
    low, high = binom.interval(0.999, 100, 0.95)
    assert low <= sum(a.band_holds for a in found) <= high


def test_all_sigmas_too_large_is_one_factor_for_all():
    found = [
        audit([Scatter(p.count, 0.25 * p.moment, p.signatures, p.snapshots)])
        for p in (windows(SKID, s) for s in range(50))
    ]
    assert all(a.ratio < a.low for a in found)
    assert all(a.overall_gain > np.nanmax(a.gain) for a in found)
    low, high = binom.interval(0.999, 50, 0.95)
    assert low <= sum(a.overall_low <= 0.5 <= a.overall_high for a in found) <= high


def test_a_steady_fault_does_not_count_about_the_mean_nor_a_drift_in_pairs():
    rng = np.random.default_rng(14)
    parity = rng.normal(size=(200, 3))
    shifted, sliding = parity + np.array([3.0, 0, 0]), parity + np.outer(np.linspace(0, 8, 200), [1.0, 0, 0])
    assert not audit([scatter(shifted, SKID.biases, SKID.sigma)]).band_holds
    assert audit([scatter(shifted, SKID.biases, SKID.sigma, about="mean")]).band_holds
    assert not audit([scatter(sliding, SKID.biases, SKID.sigma, about="mean")]).band_holds
    assert audit([scatter(sliding, SKID.biases, SKID.sigma, about="pairs")]).band_holds
