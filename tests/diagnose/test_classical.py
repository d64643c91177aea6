"""The step-by-step methods: known outcomes, their figures by simulation, and how they fare beside explanations."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, BYPASS_READING, LOOP, LOOP_READING, RECYCLE, SKID, SKID_R_AND_P

from reconcile.diagnose.classical import collective_compensation, serial_compensation, serial_elimination

METHODS = [serial_elimination, serial_compensation, collective_compensation]


@pytest.mark.parametrize("method", METHODS)
def test_one_bias_in_the_bypass(method):
    # Narasimhan & Jordache 2000, chapter 7 (from memory): F2 is identified; its bias 3.925 recomputed
    found = method(BYPASS.parity(BYPASS_READING), BYPASS.biases)
    assert np.flatnonzero(found.flagged[0]).tolist() == [1]
    assert found.sizes[0, 1] == pytest.approx(3.925)
    assert np.isnan(found.sizes[0, [0, 2, 3, 4, 5]]).all()


def test_serial_methods_follow_the_largest_test_into_the_wrong_pair():
    # true faults are R and P; F has the largest single test
    p = SKID.parity(SKID_R_AND_P)
    assert np.flatnonzero(serial_elimination(p, SKID.biases).flagged[0]).tolist() == [0, 1]
    collective = collective_compensation(p, SKID.biases)
    assert np.flatnonzero(collective.flagged[0]).tolist() == [0, 1]
    assert collective.sizes[0, [0, 1]] == pytest.approx([2.73, 6.63], abs=0.005)


def test_ties_go_to_the_first_and_elimination_stops_without_redundancy():
    p = LOOP.parity(LOOP_READING)
    found = serial_elimination(p, LOOP.biases, scale=1 / LOOP.sigma)
    assert np.flatnonzero(found.flagged[0]).tolist() == [0]
    # one balance: after one reading is dropped nothing is redundant, however large the imbalance
    f = np.array([[1.0, -1.0, -1.0]])
    assert serial_elimination(np.array([[50.0]]), f).steps.tolist() == [1]
    assert collective_compensation(np.array([[50.0]]), f).steps.tolist() == [1]


@pytest.mark.parametrize("method", METHODS)
def test_trials_are_independent_of_each_other(method):
    rng = np.random.default_rng(8)
    p = 4 * rng.normal(size=(60, 4))
    together = method(p, BYPASS.biases)
    assert len(np.unique(together.steps)) > 2
    for i in range(60):
        alone = method(p[i], BYPASS.biases)
        assert np.array_equal(alone.flagged[0], together.flagged[i])
        assert alone.sizes[0] == pytest.approx(together.sizes[i], nan_ok=True)


@pytest.mark.parametrize("method", METHODS)
def test_no_candidate_is_checked(method):
    found = method(np.array([[3.0, 1.0]]), np.zeros((2, 3)))
    assert not found.flagged.any()
    assert found.steps.tolist() == [0]


# Share of biases found / wrong flags per trial, k biases of 5 to 25 sigmas with random signs. Computed independently
# with an implementation in flow space (8000 trials); not published figures.
SIMULATED = [
    ("bypass", serial_elimination, [(np.nan, 0.047), (0.996, 0.044), (0.929, 0.166), (0.654, 0.771)]),
    ("bypass", serial_compensation, [(np.nan, 0.046), (0.995, 0.028), (0.935, 0.387), (0.692, 0.929)]),
    ("recycle", serial_elimination, [(np.nan, 0.041), (0.964, 0.047), (0.746, 0.438), (0.589, 0.861)]),
    ("recycle", serial_compensation, [(np.nan, 0.041), (0.964, 0.037), (0.750, 0.465), (0.591, 0.940)]),
]


def draw(net, k, trials, rng):
    n = len(net.sigma)
    which = np.argsort(rng.random((trials, n)), axis=1)[:, :k]
    true = np.zeros((trials, n), dtype=bool)
    np.put_along_axis(true, which, True, axis=1)
    size = rng.uniform(5, 25, (trials, n)) * rng.choice([-1, 1], (trials, n)) * net.sigma
    return true, rng.normal(size=(trials, net.biases.shape[0])) + (true * size) @ net.biases.T


@pytest.mark.parametrize(("network", "method", "figures"), SIMULATED)
def test_figures_by_simulation(network, method, figures):
    net = {"bypass": BYPASS, "recycle": RECYCLE}[network]
    rng = np.random.default_rng(2024)
    trials = 8000
    for k, (right, wrong) in enumerate(figures):
        true, p = draw(net, k, trials, rng)
        found = method(p, net.biases).flagged
        flags = (found & ~true).sum(axis=1)
        error = np.sqrt(2 * max(flags.var(), wrong) / trials)  # both figures have one
        assert flags.mean() == pytest.approx(wrong, abs=4 * error)
        if k:
            share = (found & true).sum(axis=1) / k
            error = np.sqrt(2 * max(share.var(), 0.003) / trials)
            assert share.mean() == pytest.approx(right, abs=4 * error)
