"""The block kernel against the adjuster that takes one pattern of absent readings at a time."""

import numpy as np
import pytest
import scipy.sparse as sp
from random_networks import consistent_flows, random_network

from reconcile.adjust.batch import BLOCK, Batch
from reconcile.adjust.solve import Problem
from reconcile.adjust.table import adjust_table
from reconcile.system import Equations

NAMES = {"names": str, "row_names": str}


def problem_of(a, sigma, measured, rhs=None, fixed=(), start=None):
    m, n = a.shape
    rhs = np.zeros(m) if rhs is None else rhs
    equations = Equations(sp.csr_array(a), rhs, sp.csr_array((m, 0)), np.zeros((0, 2), dtype=np.int64), ())
    return Problem(
        equations=lambda _: equations,
        sigma=lambda _: sigma,
        columns=np.asarray(measured, dtype=np.int64),
        readings=np.full(len(measured), np.nan),
        fixed=np.array(fixed, dtype=np.int64),
        start=np.full(n, np.nan) if start is None else start,
        value_dependent=False,
        settle=False,
        lower=np.full(n, -np.inf),
        upper=np.full(n, np.inf),
    )


def incidence(rng, nodes, streams):
    net = random_network(rng, nodes, streams)
    a = np.zeros((nodes, streams))
    for j, (s, t) in enumerate(zip(net.source, net.target, strict=True)):
        if s >= 0:
            a[s, j] -= 1.0
        if t >= 0:
            a[t, j] += 1.0
    return a


def readings_of(rng, a, sigma, measured, count, share, rhs=None):
    true = np.array([consistent_flows(rng, a) for _ in range(count)])
    if rhs is not None:
        true = true + np.linalg.lstsq(a, rhs, rcond=None)[0]
    y = true[:, measured] + sigma * rng.normal(size=(count, len(measured)))
    y[rng.random(y.shape) < 0.02] += 30.0
    y[rng.random(y.shape) < share] = np.nan
    return y


def check_against_table(problem, y, within=1e-10, tested=None):
    """Every number of the block kernel, snapshot by snapshot, against `adjust_table`."""
    k, n = problem.columns.size, problem.start.size
    tested = np.arange(k) if tested is None else tested
    given = np.isfinite(y).any(axis=0)
    batch = Batch(problem, given, np.arange(n), tested, **NAMES)
    got = batch.adjust(np.ascontiguousarray(y.T), tests=True)
    table = adjust_table(problem, y, **NAMES)
    for group in table.groups:
        sigma = np.linalg.norm(group.cover, axis=1)
        signature = group.signatures
        length = np.linalg.norm(signature, axis=0)
        scale = np.nanmax(sigma, initial=1e-3)
        for i, row in enumerate(group.rows):
            p = got.pattern[row]
            np.testing.assert_array_equal(got.absent[p], np.isnan(y[row]))
            np.testing.assert_array_equal(got.checked[p], group.checked)
            assert got.checks[row] == group.checks
            np.testing.assert_array_equal(np.isnan(got.values[:, row]), ~group.determined)
            known = group.determined
            # Where sigma vanishes, rounding of the largest value is what there is.
            floor = within * sigma[known] + 1e-15 * np.abs(group.x[i, known]).max(initial=1.0)
            assert np.all(np.abs(got.values[known, row] - group.x[i, known]) <= floor)
            np.testing.assert_allclose(got.sigmas[p], sigma, rtol=1e-9, atol=1e-9 * scale, equal_nan=True)
            parity = group.parity[i]
            assert got.objective[row] == pytest.approx(parity @ parity, rel=1e-9, abs=1e-9)
            z = np.where(length > 0, parity @ signature / np.where(length > 0, length, 1.0), np.nan)[tested]
            np.testing.assert_allclose(got.z[:, row], z, rtol=1e-8, atol=1e-8)
            if np.isfinite(z).any():
                largest = np.nanmax(np.abs(z))
                assert abs(got.largest[row]) == pytest.approx(largest, rel=1e-8, abs=1e-8)
                close = tested[np.abs(z) >= largest * (1 - 1e-6) - 1e-9]
                assert got.suspect[row] in close
            else:
                assert got.suspect[row] == -1
                assert np.isnan(got.largest[row])
    return got


@pytest.mark.parametrize("seed", range(40))
@pytest.mark.parametrize("share", [0.0, 0.05, 0.4])
def test_random_networks(seed, share):
    rng = np.random.default_rng(seed)
    nodes = int(rng.integers(1, 7))
    streams = nodes + int(rng.integers(1, 10))
    a = incidence(rng, nodes, streams)
    measured = np.sort(rng.permutation(streams)[: max(1, int(streams * rng.choice([0.6, 0.8, 1.0])))])
    sigma = 10.0 ** rng.uniform(-1, 0.5, size=measured.size)
    y = readings_of(rng, a, sigma, measured, 60, share)
    y[0] = np.where(np.isnan(y[0]), 1.0, y[0])
    check_against_table(problem_of(a, sigma, measured), y)


@pytest.mark.parametrize("seed", range(10))
def test_sources_in_the_balances_and_columns_that_are_known(seed):
    rng = np.random.default_rng(100 + seed)
    a = incidence(rng, 5, 12)
    rhs = rng.normal(size=5)
    start = np.full(12, np.nan)
    true = np.linalg.lstsq(a, rhs, rcond=None)[0]
    start[3] = true[3]
    measured = np.array([j for j in range(12) if j not in (3, 7)])
    sigma = 10.0 ** rng.uniform(-1, 0.5, size=measured.size)
    y = true[measured] + sigma * rng.normal(size=(80, measured.size))
    y[rng.random(y.shape) < 0.1] = np.nan
    y[0] = true[measured]
    check_against_table(problem_of(a, sigma, measured, rhs, fixed=[3], start=start), y)


def test_more_readings_than_bits_of_a_word():
    rng = np.random.default_rng(7)
    a = incidence(rng, 30, 90)
    measured = np.arange(90)[rng.random(90) < 0.9]
    sigma = rng.uniform(0.5, 2.0, size=measured.size)
    y = readings_of(rng, a, sigma, measured, 25, 0.05)
    y[0] = np.where(np.isnan(y[0]), 1.0, y[0])
    check_against_table(problem_of(a, sigma, measured), y)


def test_an_absent_reading_can_leave_another_unchecked():
    # Two streams in a row: each checks the other and nothing else does.
    a = np.array([[1.0, -1.0, 0.0], [0.0, 1.0, -1.0]])
    y = np.array([[5.0, 5.2, 5.1], [5.0, np.nan, 5.1], [5.0, np.nan, np.nan], [np.nan, np.nan, np.nan]])
    y[3] = [np.nan, 4.0, np.nan]
    got = check_against_table(problem_of(a, np.array([0.1, 0.2, 0.1]), [0, 1, 2]), y)
    assert got.checks.tolist() == [2, 1, 0, 0]
    assert got.suspect[2] == -1
    assert got.values[:, 2] == pytest.approx([5.0] * 3)


def test_wide_sigmas_and_far_placeholders():
    rng = np.random.default_rng(3)
    a = incidence(rng, 4, 9)
    sigma = 10.0 ** rng.uniform(-4, 2, size=9)
    y = readings_of(rng, a, sigma, np.arange(9), 300, 0.2)
    y[0] = np.where(np.isnan(y[0]), 1.0, y[0])
    check_against_table(problem_of(a, sigma, np.arange(9)), y)


def test_a_snapshot_depends_on_its_block_alone():
    rng = np.random.default_rng(11)
    a = incidence(rng, 5, 14)
    sigma = rng.uniform(0.5, 2.0, size=14)
    y = readings_of(rng, a, sigma, np.arange(14), 3 * BLOCK + 77, 0.05).T.copy()
    problem = problem_of(a, sigma, np.arange(14))
    batch = Batch(problem, np.ones(14, dtype=bool), np.arange(14), np.arange(14), **NAMES)
    whole = batch.adjust(y)
    fresh = Batch(problem, np.ones(14, dtype=bool), np.arange(14), np.arange(14), **NAMES)
    part = fresh.adjust(np.ascontiguousarray(y[:, 2 * BLOCK :]))
    assert np.array_equal(part.values, whole.values[:, 2 * BLOCK :], equal_nan=True)
    assert np.array_equal(part.objective, whole.objective[2 * BLOCK :])
    assert np.array_equal(part.largest, whole.largest[2 * BLOCK :], equal_nan=True)
    assert np.array_equal(part.sigmas[part.pattern], whole.sigmas[whole.pattern[2 * BLOCK :]], equal_nan=True)


def test_parallel_streams_tie_and_the_first_is_named():
    # Two parallel streams between two nodes have the same test value whatever is read.
    a = np.array([[1.0, -1.0, -1.0, 0.0], [0.0, 1.0, 1.0, -1.0]])
    sigma = np.ones(4)
    rng = np.random.default_rng(5)
    y = np.array([2.0, 1.0, 1.0, 2.0]) + rng.normal(size=(500, 4))
    y[:, 1] += 8.0
    batch = Batch(problem_of(a, sigma, range(4)), np.ones(4, dtype=bool), np.arange(4), np.arange(4), **NAMES)
    got = batch.adjust(np.ascontiguousarray(y.T))
    assert set(got.suspect.tolist()) <= {0, 1, 3}
    assert np.mean(got.suspect == 1) > 0.9
