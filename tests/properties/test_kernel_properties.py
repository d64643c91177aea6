"""What must hold of every adjusted network, on random ones: the answer depends on the readings and on nothing else."""

from dataclasses import dataclass

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st
from random_networks import consistent_flows, networks

from reconcile.adjust.solve import Problem
from reconcile.adjust.table import adjust_table
from reconcile.system import Equations

TOLERANCE = 1e-8
"""Of a sigma; rounding of random networks stays below a thousandth of it."""


@dataclass
class Outcome:
    """What is said of one snapshot, a row a stream; nan where there is nothing to say."""

    x: np.ndarray
    spread: np.ndarray
    z: np.ndarray
    checked: np.ndarray
    determined: np.ndarray
    objective: float
    checks: int


def adjust(a, y, sigma, rhs=None, beside=None):
    """Adjust the readings y, nan where there is none; `beside` is another snapshot in the same table."""
    n = a.shape[1]
    rhs = np.zeros(len(a)) if rhs is None else rhs
    empty = sp.csr_array((len(a), 0)), np.zeros((0, 2), dtype=np.int64)
    equations = Equations(sp.csr_array(a), rhs, *empty)
    far = np.full(n, np.inf)
    problem = Problem(
        equations=lambda _: equations,
        sigma=lambda _: sigma,
        columns=np.arange(n),
        readings=y,
        fixed=np.zeros(0, dtype=np.int64),
        start=np.full(n, np.nan),
        value_dependent=False,
        settle=False,
        lower=-far,
        upper=far,
    )
    table = adjust_table(problem, np.vstack([y, y if beside is None else beside]), names=str, row_names=str)
    group = table.groups[table.group_of[0]]
    row = int(np.flatnonzero(group.rows == 0)[0])
    f, parity = group.signatures, group.parity[row]
    size = np.linalg.norm(f, axis=0)
    z = np.full(n, np.nan)
    z[group.checked] = (parity @ f)[group.checked] / size[group.checked]
    known = group.determined
    return Outcome(
        x=np.where(known, group.x[row], np.nan),
        spread=np.linalg.norm(group.cover, axis=1),
        z=z,
        checked=group.checked,
        determined=known,
        objective=float(parity @ parity),
        checks=group.checks,
    )


def same(one, other, sigma, sign=1.0):
    """Whether two outcomes say the same of every stream."""
    np.testing.assert_array_equal(one.checked, other.checked)
    np.testing.assert_array_equal(one.determined, other.determined)
    assert one.checks == other.checks
    scale = sigma * np.maximum(1.0, np.nan_to_num(one.spread) / sigma)
    np.testing.assert_allclose((sign * one.x - other.x) / scale, 0 * one.x, atol=TOLERANCE)
    np.testing.assert_allclose((one.spread - other.spread) / scale, 0 * one.x, atol=TOLERANCE)
    np.testing.assert_allclose(sign * one.z, other.z, atol=TOLERANCE)
    assert one.objective == pytest.approx(other.objective, rel=TOLERANCE, abs=TOLERANCE)


@dataclass
class Case:
    rng: np.random.Generator
    a: np.ndarray
    y: np.ndarray
    sigma: np.ndarray
    mask: np.ndarray

    def outcome(self):
        return adjust(self.a, self.y, self.sigma)


@st.composite
def cases(draw):
    rng, network, mask = draw(networks())
    a = network.incidence.toarray()
    sigma = 10.0 ** rng.uniform(-1, 1, a.shape[1])
    y = consistent_flows(rng, a) + sigma * rng.normal(size=a.shape[1])
    return Case(rng, a, np.where(mask, y, np.nan), sigma, mask)


@given(cases())
def test_the_order_of_balances_and_streams_does_not_matter(case):
    rows, columns = case.rng.permutation(len(case.a)), case.rng.permutation(len(case.y))
    other = adjust(case.a[rows][:, columns], case.y[columns], case.sigma[columns])
    back = np.argsort(columns)
    for name in ("x", "spread", "z", "checked", "determined"):
        setattr(other, name, getattr(other, name)[back])
    same(case.outcome(), other, case.sigma)


@given(cases())
def test_every_stream_may_have_a_unit_of_its_own(case):
    unit = 10.0 ** case.rng.uniform(-4, 4, len(case.y))
    other = adjust(case.a * unit, case.y / unit, case.sigma / unit)
    other.x, other.spread = other.x * unit, other.spread * unit
    same(case.outcome(), other, case.sigma)


@given(cases())
def test_a_balance_may_be_multiplied_by_any_number(case):
    factor = 10.0 ** case.rng.uniform(-5, 5, len(case.a)) * case.rng.choice([-1.0, 1.0], len(case.a))
    same(case.outcome(), adjust(factor[:, None] * case.a, case.y, case.sigma), case.sigma)


@given(cases(), st.integers(1, 4))
def test_balances_that_others_imply_change_nothing(case, count):
    mix = case.rng.integers(-3, 4, size=(count, len(case.a)))
    same(case.outcome(), adjust(np.vstack([case.a, mix @ case.a]), case.y, case.sigma), case.sigma)


@given(cases())
def test_a_stream_drawn_the_other_way_round_changes_its_sign_only(case):
    sign = case.rng.choice([-1.0, 1.0], len(case.y))
    same(case.outcome(), adjust(case.a * sign, case.y * sign, case.sigma), case.sigma, sign=sign)


@given(cases(), st.integers(1, 3))
def test_a_missing_reading_is_one_without_its_meter(case, count):
    """Projected out of a table where other snapshots have it, or not there from the beginning."""
    absent = case.rng.choice(np.flatnonzero(case.mask), min(count, case.mask.sum() - 1), replace=False)
    missing = case.y.copy()
    missing[absent] = np.nan
    same(adjust(case.a, missing, case.sigma), adjust(case.a, missing, case.sigma, beside=case.y), case.sigma)


@given(cases())
def test_sigmas_twice_as_wide(case):
    one, two = case.outcome(), adjust(case.a, case.y, 2 * case.sigma)
    assert two.objective == pytest.approx(one.objective / 4, rel=1e-9, abs=1e-12)
    np.testing.assert_allclose(two.z, one.z / 2, atol=TOLERANCE)
    two.spread, two.z, two.objective = two.spread / 2, 2 * two.z, 4 * two.objective
    same(one, two, case.sigma)


@given(cases())
def test_a_change_that_balances_is_passed_on_unchanged(case):
    change = consistent_flows(case.rng, case.a)
    other = adjust(case.a, case.y + change, case.sigma)
    other.x = other.x - change
    same(case.outcome(), other, case.sigma)


@given(cases())
def test_sources_known_to_the_balances_are_passed_on(case):
    """A constant on the right-hand side is a stream whose flow is known."""
    shift = case.rng.normal(size=len(case.y)) * 10
    other = adjust(case.a, case.y + shift, case.sigma, rhs=case.a @ shift)
    other.x = other.x - shift
    same(case.outcome(), other, case.sigma)


@given(cases())
def test_adjusted_values_need_no_adjustment(case):
    one = case.outcome()
    again = adjust(case.a, np.where(case.mask, one.x, np.nan), case.sigma)
    assert again.objective == pytest.approx(0, abs=1e-20 * (1 + (100 / case.sigma.min()) ** 2))
    scale = case.sigma + np.nan_to_num(one.spread)
    np.testing.assert_allclose((again.x - one.x) / scale, 0 * one.x, atol=TOLERANCE)


@given(cases())
def test_balances_close_and_spreads_never_grow(case):
    one = case.outcome()
    whole = ~np.any((case.a != 0) & ~one.determined, axis=1)
    terms = np.abs(case.a[whole] * one.x).max(axis=1, initial=0.0, where=case.a[whole] != 0)
    closure = (case.a[whole] * np.nan_to_num(one.x)).sum(axis=1)
    assert np.all(np.abs(closure) <= np.maximum(1e-9 * terms, 1e-12))
    assert np.all(one.spread[case.mask] <= case.sigma[case.mask] * (1 + 1e-12))
    np.testing.assert_allclose(one.spread[case.mask & ~one.checked], case.sigma[case.mask & ~one.checked], rtol=1e-12)


@given(cases())
def test_shares_checked_add_up_to_the_checks(case):
    one = case.outcome()
    share = 1 - (one.spread / case.sigma)[case.mask] ** 2
    assert share.sum() == pytest.approx(one.checks, abs=1e-9)


@given(cases())
def test_a_reading_of_hopeless_quality_is_as_good_as_none(case):
    """Sigma times 10^7: what it still says is 10^-14 of what it said."""
    j = int(case.rng.choice(np.flatnonzero(case.mask)))
    vague, gone = case.sigma.copy(), case.y.copy()
    vague[j] *= 1e7
    gone[j] = np.nan
    one, other = adjust(case.a, case.y, vague), adjust(case.a, gone, case.sigma)
    known = other.determined
    scale = case.sigma + np.nan_to_num(other.spread)
    np.testing.assert_allclose(((one.x - other.x) / scale)[known], 0, atol=1e-5)
    np.testing.assert_allclose(((one.spread - other.spread) / scale)[known], 0, atol=1e-5)
    if one.checked[j]:
        assert one.checks == other.checks + 1
    assert one.objective == pytest.approx(other.objective, rel=1e-6, abs=1e-6)
