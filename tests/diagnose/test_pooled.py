"""Pooled evidence: against the regression of all snapshots at once."""

from __future__ import annotations

import numpy as np
import pytest
from diagnose_networks import BYPASS, SKID, Net
from scipy.stats import binom, chi2

from reconcile.diagnose.critical import smallest_detectable
from reconcile.diagnose.explain import Explainer
from reconcile.diagnose.pooled import Part, pool
from reconcile.diagnose.refusal import Refusal

TRUTH = np.array([50, 150, 200, 40, 160, 10.0])
# The same skid while one meter or another is absent: its balances with that stream projected out.
WITHOUT_D = Net(SKID.streams, np.array([[1, 1, 0, -1, -1, 0], [0, -1, 0, 0, 1, -1.0]]), SKID.sigma)
WITHOUT_B = Net(SKID.streams, np.array([[1, 1, -1, 0, 0, 0], [0, 0, 1, -1, -1, 0.0]]), SKID.sigma)


def part(net, readings):
    t = net.parity(readings.T).T
    return Part(len(t), t.sum(axis=0), net.biases)


def readings(rng, n, bias=0.0):
    y = TRUTH + rng.normal(size=(n, 6)) * SKID.sigma
    y[:, 3] += bias
    return y


def test_one_linearisation_is_the_mean_times_root_n():
    y = readings(np.random.default_rng(1), 40)
    found = pool([part(SKID, y)])
    t = SKID.parity(y.T).T
    assert found.parity == pytest.approx(np.sqrt(40) * t.mean(axis=0))
    assert found.signatures == pytest.approx(np.sqrt(40) * SKID.biases)
    assert found.checks == 3
    assert found.contrast_checks == 0
    assert np.isnan(found.contrast_p)


def test_patterns_of_absent_readings_combine_as_one_regression():
    rng = np.random.default_rng(2)
    blocks = [(net, readings(rng, n, 1.0)) for net, n in ((SKID, 15), (WITHOUT_D, 7), (WITHOUT_B, 9))]
    found = pool([part(net, y) for net, y in blocks])
    rows = np.vstack([np.tile(net.biases, (len(y), 1)) for net, y in blocks])
    target = np.concatenate([net.parity(y.T).T.ravel() for net, y in blocks])
    for i in range(6):
        f = rows[:, i]
        assert found.size[i] == pytest.approx(f @ target / (f @ f))
        assert found.sigma[i] == pytest.approx((f @ f) ** -0.5)
    # What a regression on all faults together explains is the square of the pool; the rest is between and within parts.
    fitted = rows @ np.linalg.lstsq(rows, target, rcond=None)[0]
    assert found.objective == pytest.approx(fitted @ fitted)
    assert found.checks == np.linalg.matrix_rank(rows)
    within = sum(
        ((t := net.parity(y.T).T) - t.mean(axis=0)).ravel() @ (t - t.mean(axis=0)).ravel() for net, y in blocks
    )
    assert found.objective + found.contrast + within == pytest.approx(target @ target)
    assert found.checks + found.contrast_checks == 3 + 2 + 2


def test_any_pair_of_faults_leaves_what_the_regression_leaves():
    rng = np.random.default_rng(3)
    blocks = [(net, readings(rng, n, 1.0)) for net, n in ((SKID, 15), (WITHOUT_D, 7))]
    found = pool([part(net, y) for net, y in blocks])
    rows = np.vstack([np.tile(net.biases, (len(y), 1)) for net, y in blocks])
    target = np.concatenate([net.parity(y.T).T.ravel() for net, y in blocks])
    every = rows @ np.linalg.lstsq(rows, target, rcond=None)[0]
    for pair in ((0, 3), (1, 3), (2, 5)):
        here, there = found.signatures[:, pair], rows[:, pair]
        left = found.parity - here @ np.linalg.lstsq(here, found.parity, rcond=None)[0]
        other = every - there @ np.linalg.lstsq(there, every, rcond=None)[0]
        assert left @ left == pytest.approx(other @ other)


def test_without_a_fault_the_pool_and_the_contrast_are_chi_squared():
    n = 2000
    rng = np.random.default_rng(4)
    alarms = contrasts = 0
    for _ in range(n):
        # Parity vectors of three patterns without a fault are standard normal; sums of them are all that counts.
        parts = [Part(k, np.sqrt(k) * rng.normal(size=len(net.matrix)), net.biases)
                 for net, k in ((SKID, 15), (WITHOUT_D, 7), (WITHOUT_B, 9))]  # fmt: skip
        found = pool(parts)
        alarms += found.objective > found.limit
        contrasts += found.contrast_p < 0.05
    low, high = binom.interval(0.999, n, 0.05)
    assert low <= alarms <= high
    assert low <= contrasts <= high
    assert found.limit == pytest.approx(chi2.isf(0.05, found.checks))


def test_a_bias_too_small_for_one_snapshot_shows_in_sixty():
    """Smallest detectable at 5 % and 90 %: noticed by its own test in 90 % of the trials."""
    n, windows = 2000, 60
    sigma = pool([part(SKID, readings(np.random.default_rng(0), windows))]).sigma[3]
    smallest = smallest_detectable(1 / sigma, 0.05, 0.9)
    single = smallest_detectable(np.linalg.norm(SKID.biases[:, 3]), 0.05, 0.9)
    assert smallest == pytest.approx(single / np.sqrt(windows))
    rng = np.random.default_rng(5)
    noticed = 0
    for _ in range(n):
        total = windows * smallest * SKID.biases[:, 3] + np.sqrt(windows) * rng.normal(size=3)
        found = pool([Part(windows, total, SKID.biases)])
        noticed += abs(found.size[3] / found.sigma[3]) > 1.959963984540054
    low, high = binom.interval(0.999, n, 0.9)
    assert low <= noticed <= high


def test_the_pool_is_explained_like_a_snapshot():
    found = pool([part(SKID, readings(np.random.default_rng(6), 60, 1.0))])
    explained = Explainer(found.signatures, fault_rate=0.02, size_prior=10 * SKID.sigma, max_faults=2).explain(
        found.parity
    )
    best = explained.listed[0]
    assert best.members[0].candidates == (3,)
    assert best.members[0].sizes[0] == pytest.approx(1.0, abs=4 * found.sigma[3])


def test_a_fault_that_no_pattern_checks_has_no_size():
    blind = np.hstack([BYPASS.biases, np.zeros((len(BYPASS.matrix), 1))])
    found = pool([Part(3, np.ones(len(BYPASS.matrix)), blind)])
    assert np.isnan(found.size[-1])
    with pytest.raises(Refusal, match="no snapshot has a check"):
        pool([Part(0, np.zeros(2), np.zeros((2, 1)))])
