"""Constant or proportional: the fits, and the level that would tell, against plain regression and simulation.

The water figures are an invented building: the sum of its sub-meters and its inlet at six flows, m3/h, with a spread of
the difference of 0.25. Expected values were computed independently by regression through the origin.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import binom

from reconcile.diagnose.operating import both_terms, fit_column, plan_level, stack_columns
from reconcile.diagnose.refusal import Refusal

SUM = np.array([4.0, 8.1, 15.9, 24.2, 30.1, 12.0])
LEAKING = np.array([6.1, 9.9, 18.1, 26.2, 32.0, 14.1])
SCALED = np.array([4.4, 8.6, 17.3, 26.0, 32.6, 13.1])
SPREAD = 0.25


def stack(inlet, total=SUM):
    """Column 0 constant, column 1 proportional to what the others say the inlet carries."""
    parity = ((inlet - total) / SPREAD)[:, None]
    return stack_columns([(parity, np.array([[1 / SPREAD] * 2]), np.column_stack([np.ones(len(total)), total]))])


def test_a_constant_difference_is_told_from_a_share():
    found = stack(LEAKING)
    constant, share = fit_column(found, 0), fit_column(found, 1)
    assert found.square == pytest.approx(392, abs=0.5)
    assert (constant.size, constant.sigma) == pytest.approx((2.02, 0.10), abs=5e-3)
    assert (constant.left, constant.limit, constant.checks) == (pytest.approx(1.73, abs=5e-3), pytest.approx(11.07, abs=5e-3), 5)  # fmt: skip
    assert constant.survives
    assert share.size == pytest.approx(0.096, abs=5e-4)
    assert share.left == pytest.approx(102.8, abs=0.05)
    assert not share.survives
    _, slope = both_terms(found, (0, 1))
    assert (slope.size, slope.sigma) == pytest.approx((-0.003, 0.011), abs=5e-4)


def test_a_share_is_told_from_a_constant_difference():
    found = stack(SCALED)
    constant, share = fit_column(found, 0), fit_column(found, 1)
    assert (share.size, share.sigma) == pytest.approx((0.081, 0.006), abs=5e-4)
    assert share.left == pytest.approx(1.42, abs=5e-3)
    assert share.survives
    assert constant.left == pytest.approx(51.0, abs=0.05)
    assert not constant.survives


def test_one_level_fits_both_and_rejects_none():
    found = stack(LEAKING[2:3], SUM[2:3])
    for column in (0, 1):
        fit = fit_column(found, column)
        assert fit.left == pytest.approx(0, abs=1e-12)
        assert fit.checks == 0
        assert np.isnan(fit.limit)
        assert fit.survives
    assert np.isnan(both_terms(found, (0, 1))[0].size)


def test_many_checks_and_parts_are_one_regression():
    rng = np.random.default_rng(1)
    parts = []
    for n, r in ((7, 3), (5, 2)):
        parts.append((rng.normal(size=(n, r)), rng.normal(size=(r, 4)), rng.uniform(1, 5, size=(n, 4))))
    found = stack_columns(parts)
    design = np.vstack([(f[None] * w[:, None, :]).reshape(-1, 4) for _, f, w in parts])
    target = np.concatenate([t.ravel() for t, _, _ in parts])
    for i in range(4):
        fit = fit_column(found, i)
        size = np.linalg.lstsq(design[:, [i]], target, rcond=None)[0][0]
        assert fit.size == pytest.approx(size)
        assert fit.left == pytest.approx(((target - design[:, i] * size) ** 2).sum())
        assert fit.checks == 7 * 3 + 5 * 2 - 1
    first, second = both_terms(found, (1, 3))
    sizes = np.linalg.lstsq(design[:, [1, 3]], target, rcond=None)[0]
    covariance = np.linalg.inv(design[:, [1, 3]].T @ design[:, [1, 3]])
    assert (first.size, second.size) == pytest.approx(tuple(sizes))
    assert (first.sigma, second.sigma) == pytest.approx(tuple(np.sqrt(np.diag(covariance))))
    assert first.left == second.left == pytest.approx(((target - design[:, [1, 3]] @ sizes) ** 2).sum())


def test_a_fault_that_nothing_checks_is_no_model():
    fit = fit_column(stack_columns([(np.ones((3, 1)), np.zeros((1, 1)), np.ones((3, 1)))]), 0)
    assert np.isnan(fit.size)
    with pytest.raises(Refusal, match="no snapshot has a check"):
        stack_columns([])


# ------------------------------------------------------------------ the next level


@pytest.mark.parametrize("side", ["below", "above"])
def test_at_the_planned_level_the_wrong_model_is_rejected_as_often_as_stated(side):
    """Whichever is true, the other is rejected in at least 90 % of the trials; at the edge one of them in just that."""
    now, offset, n = 15.9, 2.2, 4000
    plan = plan_level(np.array([now]), np.array([1 / SPREAD]), offset, next_norm=1 / SPREAD)
    flow = np.array([now, getattr(plan, side)])
    rng = np.random.default_rng(2)
    rejected = []
    for truth, wrong in ((np.full(2, offset), 1), (offset / now * flow, 0)):
        trials = (stack(flow + truth + SPREAD * rng.normal(size=2), flow) for _ in range(n))
        rejected.append(sum(not fit_column(found, wrong).survives for found in trials))
    low, high = binom.interval(0.999, n, 0.9)
    assert low <= min(rejected) <= high


def test_zero_flow_alone_tells_where_the_error_is_small_and_none_does_where_it_is_smaller():
    norm = np.array([1 / SPREAD])
    small = plan_level(np.array([15.9]), norm, 1.0, next_norm=norm[0])
    assert 0 <= small.below < 5 or np.isnan(small.below)
    assert small.above > 27.6
    tiny = plan_level(np.array([15.9]), norm, 0.1, next_norm=norm[0])
    assert np.isnan(tiny.below)
    assert np.isnan(tiny.above)


def test_more_flow_apart_is_needed_for_a_smaller_error():
    norm = np.array([1 / SPREAD])
    plans = [plan_level(np.array([15.9]), norm, b, next_norm=norm[0]) for b in (4.0, 2.2, 1.5)]
    below, above = [p.below for p in plans], [p.above for p in plans]
    assert below == sorted(below, reverse=True)
    assert above == sorted(above)
