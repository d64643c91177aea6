"""Snapshots with sigmas of their own, in blocks, against one snapshot at a time."""

from dataclasses import replace

import numpy as np
import pytest
from random_networks import consistent_flows
from test_batch_kernel import NAMES, incidence, problem_of

from reconcile.adjust.batch import BLOCK
from reconcile.adjust.batch_rows import RowBatch
from reconcile.adjust.table import adjust_table


def percent_problem(a, relative, absolute, measured, *, settle):
    return replace(
        problem_of(a, absolute, measured),
        sigma=lambda v: np.hypot(relative * v, absolute),
        value_dependent=True,
        settle=settle,
    )


def campaign(seed, *, settle, share, streams=None, part=1.0):
    rng = np.random.default_rng(seed)
    nodes = int(rng.integers(2, 6))
    a = incidence(rng, nodes, streams or nodes + int(rng.integers(2, 9)))
    n = a.shape[1]
    measured = np.sort(rng.permutation(n)[: max(2, int(n * part))])
    true = consistent_flows(rng, a)
    relative, absolute = rng.uniform(0.005, 0.03, measured.size), rng.uniform(0.2, 1.0, measured.size)
    sigma = np.hypot(relative * true[measured], absolute)
    y = true[measured] * rng.uniform(0.5, 1.5, size=(50, 1)) + sigma * rng.normal(size=(50, measured.size))
    y[rng.random(y.shape) < share] = np.nan
    return percent_problem(a, relative, absolute, measured, settle=settle), true[measured], y


def compare(problem, nominal, y, within):
    k, n = problem.columns.size, problem.start.size
    batch = RowBatch(problem, np.ones(k, dtype=bool), nominal, np.arange(n), np.arange(k), **NAMES)
    got, left = batch.adjust(np.ascontiguousarray(y.T))
    table = adjust_table(problem, y, **NAMES)
    assert not table.failed
    done = 0
    for group in table.groups:
        row = int(group.rows[0])
        if left[row]:
            continue
        done += 1
        sigma = np.linalg.norm(group.cover, axis=1)
        known = group.determined
        assert got.checks[row] == group.checks
        np.testing.assert_array_equal(got.checked[row], group.checked)
        np.testing.assert_array_equal(np.isnan(got.values[:, row]), ~known)
        floor = within * sigma[known] + 1e-13 * np.abs(group.x[0, known]).max(initial=1.0)
        assert np.all(np.abs(got.values[known, row] - group.x[0, known]) <= floor)
        np.testing.assert_allclose(got.sigmas[row], sigma, rtol=max(within, 1e-7), atol=1e-9, equal_nan=True)
        assert got.objective[row] == pytest.approx((group.parity**2).sum(), rel=10 * within, abs=10 * within)
        length = np.linalg.norm(group.signatures, axis=0)
        if np.any(length > 0):
            z = np.where(length > 0, group.parity[0] @ group.signatures / np.where(length > 0, length, 1.0), 0.0)
            assert abs(got.largest[row]) == pytest.approx(np.abs(z).max(), rel=10 * within, abs=10 * within)
            assert abs(z[got.suspect[row]]) == pytest.approx(np.abs(z).max(), rel=1e-5)
        else:
            assert got.suspect[row] == -1
    return done, left


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("share", [0.0, 0.1])
def test_sigmas_at_the_reading(seed, share):
    compare(*campaign(seed, settle=False, share=share), within=1e-9)


@pytest.mark.parametrize("seed", range(12))
@pytest.mark.parametrize("share", [0.0, 0.1])
def test_sigmas_that_follow_the_adjusted_value(seed, share):
    # One snapshot at a time stops within 1e-7 sigma of where the values stand still.
    compare(*campaign(seed, settle=True, share=share), within=1e-6)


@pytest.mark.parametrize("seed", range(12))
def test_with_variables_that_are_not_read(seed):
    compare(*campaign(seed, settle=False, share=0.05, part=0.8), within=1e-9)


def test_most_snapshots_of_a_plant_with_checks_need_no_other_way():
    problem, nominal, y = campaign(3, settle=False, share=0.02, streams=16)
    y = np.where(np.abs(nominal) > 5, y, np.where(np.isnan(y), 1.0, y))
    done, left = compare(problem, nominal, y, within=1e-9)
    assert done + left.sum() == 50
    assert done >= 45


def test_a_sigma_that_vanishes_is_left_to_the_other_way():
    a = np.array([[1.0, -1.0, -1.0]])
    problem = percent_problem(a, np.full(3, 0.01), np.zeros(3), [0, 1, 2], settle=False)
    batch = RowBatch(problem, np.ones(3, dtype=bool), np.array([3.0, 1.0, 2.0]), np.arange(3), np.arange(3), **NAMES)
    got, left = batch.adjust(np.array([[3.0, 3.1], [1.0, 0.0], [2.0, 2.0]]))
    assert left.tolist() == [False, True]
    assert got.values[:, 0] == pytest.approx([3.0, 1.0, 2.0])


def test_a_snapshot_depends_on_its_block_alone():
    problem, nominal, y = campaign(5, settle=True, share=0.05)
    many = np.ascontiguousarray(np.tile(y, (60, 1)).T)
    batch = RowBatch(problem, np.ones(nominal.size, dtype=bool), nominal, np.arange(problem.start.size),
                     np.arange(nominal.size), **NAMES)  # fmt: skip
    whole, left = batch.adjust(many)
    part, some = batch.adjust(np.ascontiguousarray(many[:, BLOCK:]))
    assert np.array_equal(left[BLOCK:], some)
    assert np.array_equal(whole.values[:, BLOCK:], part.values, equal_nan=True)
    assert np.array_equal(whole.sigmas[BLOCK:], part.sigmas, equal_nan=True)
