"""Planning: figures of the skid, the closed forms against a network that is built again, and refusals."""

import itertools

import numpy as np
import pytest
from diagnose_networks import BYPASS, SKID, Net
from scipy.linalg import null_space
from scipy.optimize import brentq
from scipy.stats import ncx2, norm

from reconcile.diagnose.planning import (
    BreakTie,
    FindFault,
    Narrow,
    NewMeter,
    Observe,
    Plan,
    coverage,
    detectable_shift,
    meter_plan,
    place,
)
from reconcile.diagnose.refusal import Refusal

EYE = np.eye(6)
OFFERED = [NewMeter(EYE[i], float(SKID.sigma[i])) for i in range(6)]


def build(net, readings):
    """Plan of a network in which each reading is a pair (row, sigma), from the beginning."""
    rows = np.array([r for r, _ in readings]).reshape(-1, net.matrix.shape[1])
    sigma = np.array([s for _, s in readings])
    n, k = net.matrix.shape[1], len(sigma)
    x_free = null_space(net.matrix)  # states that close every balance
    design = rows @ x_free / sigma[:, None]
    u, s, vt = np.linalg.svd(design, full_matrices=True)
    rank = int((s > 1e-9 * s[0]).sum())
    signatures = u[:, rank:].T / sigma
    solve = vt[:rank].T / s[:rank] @ u[:, :rank].T
    response = x_free @ solve / sigma
    return Plan(signatures, x_free @ vt[:rank].T / s[:rank], response, x_free @ vt[rank:].T, 1 / sigma), n, k


def rig(measured):
    return build(SKID, [(EYE[i], SKID.sigma[i]) for i in measured])[0]


# ---------------------------------------------------------------------- before any reading


def test_coverage_of_the_skid():
    got = coverage(SKID.biases, SKID.sigma)
    # computed independently from the covariance after adjustment; level 5 %, power 90 %
    assert got.share == pytest.approx([0.564, 0.584, 0.755, 0.367, 0.634, 0.096], abs=6e-4)
    assert got.smallest == pytest.approx([2.16, 6.36, 7.46, 2.14, 6.51, 2.09], abs=6e-3)
    assert got.smallest_corrected == pytest.approx([2.61, 7.68, 9.00, 2.58, 7.86, 2.53], abs=6e-3)
    assert got.share.sum() == pytest.approx(3)  # redundancy numbers add up to the checks


def test_what_nothing_checks_has_no_smallest_error():
    got = coverage(np.array([[0.5, 0.0]]), np.array([1.0, 1.0]), count=1)
    assert got.smallest[1] == np.inf
    assert got.share[1] == 0
    assert got.smallest == pytest.approx(got.smallest_corrected)


# Baarda 1968 (values from memory, recomputed): shift for level and power
@pytest.mark.parametrize(
    ("level", "power", "shift"), [(0.001, 0.80, 4.13), (0.01, 0.80, 3.42), (0.05, 0.80, 2.80), (0.05, 0.90, 3.24)]
)
def test_detectable_shift(level, power, shift):
    got = detectable_shift(level, power)
    assert got == pytest.approx(shift, abs=0.005)
    root = brentq(lambda x: ncx2.sf(norm.isf(level / 2) ** 2, 1, x) - power, 1e-6, 100, xtol=1e-13)
    assert got == pytest.approx(np.sqrt(root), rel=1e-9)


def test_detectable_shift_at_low_power_counts_both_tails():
    limit = norm.isf(0.2)
    x = detectable_shift(0.4, 0.45)
    assert norm.cdf(x - limit) + norm.cdf(-x - limit) == pytest.approx(0.45, abs=1e-12)


def test_smallest_error_by_simulation():
    # at its smallest detectable size a bias must be found with the stated power
    rng = np.random.default_rng(90)
    got = coverage(SKID.biases, SKID.sigma)
    for i in (1, 3):
        f = SKID.biases[:, i]
        z = (rng.normal(size=(20000, 3)) + f * got.smallest[i]) @ f / np.linalg.norm(f)
        assert np.mean(np.abs(z) > norm.isf(0.025)) == pytest.approx(0.9, abs=4 * np.sqrt(0.09 / 20000))


# ---------------------------------------------------------------------- the next meter


def test_sigma_after_adjustment_of_the_skid():
    plan = rig(range(6))
    got = [plan.sigma_of(EYE[i]) for i in range(6)]
    assert got == pytest.approx([0.3303, 0.9673, 0.9893, 0.3183, 0.9673, 0.1902], abs=6e-5)


def test_next_meter_for_a_fault_that_nothing_notices_yet():
    ranked = place(rig([0, 1, 3, 5]), OFFERED, FindFault(1))
    best = [(SKID.streams[p.meters[0]], p.after) for p in ranked if p.effect]
    assert [n for n, _ in best] == ["R", "T", "D"]
    assert [v for _, v in best] == pytest.approx([6.88, 7.14, 8.18], abs=6e-3)
    none = {SKID.streams[p.meters[0]]: p for p in ranked if not p.effect}
    assert set(none) == {"F", "P", "B"}
    assert all(p.before == p.after == np.inf for p in none.values())


def test_the_ranking_depends_on_the_goal():
    # candidate 2 is the meter of the permeate
    ranked = {SKID.streams[p.meters[0]]: p for p in place(rig([0, 1, 3, 5]), OFFERED, FindFault(2))}
    assert [ranked[n].after for n in "PDTR"] == pytest.approx([1.66, 2.15, 2.17, 2.17], abs=6e-3)
    assert not ranked["R"].effect
    with pytest.raises(Refusal, match="goal-missing"):
        place(rig([0, 1, 3, 5]), OFFERED, None)


@pytest.mark.parametrize("measured", [range(6), [0, 1, 3, 5], [0, 3], [1], [2, 4, 5]])
def test_adding_meters_is_building_the_network_again(measured):
    rng = np.random.default_rng(4)
    readings = [(EYE[i], SKID.sigma[i]) for i in measured]
    plan = build(SKID, readings)[0]
    for row in [EYE[2], EYE[0] + EYE[1], EYE[4], EYE[5], EYE[2], EYE[1] - EYE[4]]:
        sigma = float(rng.uniform(0.2, 2))
        plan = plan.with_meter(row, sigma)
        readings.append((row, sigma))
        again = build(SKID, readings)[0]
        # another basis of parity space: compare what does not depend on it
        assert plan.signatures.shape == again.signatures.shape
        assert plan.signatures.T @ plan.signatures == pytest.approx(again.signatures.T @ again.signatures, abs=1e-9)
        for look in np.vstack([EYE, [EYE[0] + EYE[1], EYE[2] - EYE[3]]]):
            assert plan.determines(look) == again.determines(look)
            assert plan.sigma_of(look) == pytest.approx(again.sigma_of(look), rel=1e-9)
            if plan.determines(look):
                assert look @ plan.response == pytest.approx(look @ again.response, abs=1e-9)


def test_two_meters_together():
    net = rig([0, 3])
    goal = FindFault(0)
    pairs = place(net, OFFERED, goal, count=2)
    assert len(pairs) == 15
    for p in pairs:
        i, j = p.meters
        again = build(SKID, [(EYE[m], SKID.sigma[m]) for m in (0, 3, i, j)])[0]
        assert goal.measure(again) == pytest.approx(p.after, rel=1e-9)
    # The best first; what is equal but for the rounding of its sums, in the order offered.
    for left, right in itertools.pairwise(pairs):
        equal = left.after == pytest.approx(right.after, rel=1e-9)
        assert left.meters < right.meters if equal else left.after < right.after


class Given:
    """A goal whose measures are given: the first for the plan as it is, then one for each offer."""

    def __init__(self, *values):
        self.values = iter(values)

    def measure(self, plan):
        return next(self.values)


def test_equal_but_for_rounding_is_equal_wherever_it_rounds():
    near = 1.2345678905  # between two numbers of ten digits
    values = [near * (1 + d * 1e-15) for d in (3, -4, 2, -3, 1)] + [near * (1 - 1e-6)]
    ranked = place(rig([0, 3]), OFFERED, Given(2.0, *values))
    assert [p.meters for p in ranked] == [(5,), (0,), (1,), (2,), (3,), (4,)]
    ranked = place(rig([0, 3]), OFFERED, Given(np.inf, 5.0, np.inf, 0.0, np.inf, 1e-300, 5.0))
    assert [p.meters for p in ranked] == [(2,), (4,), (0,), (5,), (1,), (3,)]


def test_breaking_a_tie():
    # an invented loop: F + R = S and S = C + L; F and R look alike until one of them is read again
    loop = Net(
        ("F", "R", "S", "C", "L"),
        np.array([[1, 1, -1, 0, 0], [0, 0, 1, -1, -1.0]]),
        np.array([0.2, 0.4, 0.5, 0.2, 0.4]),
    )
    eye = np.eye(5)
    plan = build(loop, [(eye[i], loop.sigma[i]) for i in range(5)])[0]
    ranked = place(plan, [NewMeter(eye[i], 0.3) for i in range(5)], BreakTie((0, 1)))
    got = {loop.streams[p.meters[0]]: p for p in ranked}
    assert got["F"].before == pytest.approx(1)
    assert got["F"].after < 0.5
    assert got["F"].effect
    assert got["R"].effect
    assert not got["S"].effect
    assert not got["C"].effect
    assert got["S"].after == pytest.approx(1)


def test_making_values_observable():
    plan = rig([0, 3])  # F and P known: B is, R, D and T are not
    assert [plan.determines(EYE[i]) for i in range(6)] == [True, False, False, True, False, True]
    ranked = place(plan, OFFERED, Observe(EYE))
    got = {SKID.streams[p.meters[0]]: p.after for p in ranked}
    assert got == {"R": 0, "D": 0, "T": 0, "F": 3, "P": 3, "B": 3}
    assert ranked[0].before == 3


def test_narrowing_a_value():
    ranked = place(rig([0, 1, 3, 5]), OFFERED, Narrow(EYE[3]))
    assert SKID.streams[ranked[0].meters[0]] == "P"
    again = build(SKID, [(EYE[i], SKID.sigma[i]) for i in (0, 1, 3, 5, 3)])[0]
    assert ranked[0].after == pytest.approx(again.sigma_of(EYE[3]), rel=1e-9)
    assert all(p.after <= p.before * (1 + 1e-12) for p in ranked)


def test_price_decides_between_equals():
    offers = [NewMeter(EYE[1], 1.5, 900.0), NewMeter(EYE[1], 1.5, 400.0), NewMeter(EYE[4], 1.6, 10.0)]
    assert [p.meters for p in place(rig([0, 1, 3, 5]), offers, FindFault(1))] == [(1,), (0,), (2,)]


def test_plan_from_the_covariance_of_the_adjusted_values():
    s = np.diag(BYPASS.sigma**2)
    c = s - s @ BYPASS.biases.T @ BYPASS.biases @ s
    value, vector = np.linalg.eigh(c)
    plan = meter_plan(BYPASS.biases, vector * np.sqrt(np.maximum(value, 0)), range(6), BYPASS.sigma)
    again = build(BYPASS, [(EYE[i], 1.0) for i in range(6)])[0]
    assert plan.response == pytest.approx(again.response, abs=1e-9)
    one, two = plan.with_meter(EYE[1], 0.5), again.with_meter(EYE[1], 0.5)
    assert one.signatures.T @ one.signatures == pytest.approx(two.signatures.T @ two.signatures, abs=1e-9)


def test_units_do_not_decide_what_is_checked():
    # the same rig in units a million million times smaller: what nothing noticed is still not noticed
    plan = build(SKID, [(EYE[i], SKID.sigma[i] * 1e12) for i in (0, 1, 3, 5)])[0]
    assert FindFault(1).measure(plan) == np.inf
    assert FindFault(2).measure(plan) == pytest.approx(1e12 * FindFault(2).measure(rig([0, 1, 3, 5])), rel=1e-9)


@pytest.mark.parametrize(
    ("call", "code"),
    [
        (lambda: place(rig([0, 3]), [NewMeter(EYE[0], 0.0)], FindFault(0)), "sigma-not-positive"),
        (lambda: place(rig([0, 3]), [NewMeter(0 * EYE[0], 1.0)], FindFault(0)), "meter-reads-nothing"),
        (lambda: place(rig([0, 3]), OFFERED, FindFault(0), count=7), "count-out-of-range"),
        (lambda: coverage(SKID.biases, SKID.sigma, count=0), "count-out-of-range"),
        (lambda: detectable_shift(0.05, 0.04), "level-out-of-range"),
        (lambda: detectable_shift(0.0, 0.9), "level-out-of-range"),
    ],
)
def test_questions_without_an_answer(call, code):
    with pytest.raises(Refusal) as caught:
        call()
    assert caught.value.code == code
