"""The kernel against the full Lagrange system in 50-digit arithmetic, to stated figures.

Figures: x within 10 (1e-16 max|x| / sigma + 1e-15) sigma; variances within 1e-12 of themselves; test values z within
1e-9, beside the rounding of the readings themselves; with nearly dependent balances 1e-7 for each. A variance that is
exactly zero (a flow that the balances force) may come out as the square of a rounding error.
"""

import pickle

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from random_networks import consistent_flows, networks, random_network
from reference import reference

from reconcile.adjust.dense import prepare

SEEDS = range(8)


class Compared:
    def __init__(self, measured, unmeasured, sigma, y, rhs=None):
        rhs = np.zeros(len(measured)) if rhs is None else rhs
        self.y, self.sigma, self.rhs = y, sigma, rhs
        self.measured, self.unmeasured = measured, unmeasured
        self.want = reference(measured, unmeasured, sigma, y, rhs)
        self.adjuster = prepare(measured, unmeasured, sigma)
        x, parity = self.adjuster.adjust(y[None], rhs)
        self.x, self.parity = x[0], parity[0]
        self.u = self.adjuster.unmeasured(x, rhs)[0]

    @property
    def largest(self):
        return max(np.abs(self.want.x).max(initial=0.0), np.abs(self.y).max(initial=0.0))

    @property
    def z(self):
        f = self.adjuster.signatures
        size = np.linalg.norm(f, axis=0)
        return np.where(size > 0, self.parity @ f / np.where(size > 0, size, 1.0), np.nan)

    def check_classes(self):
        assert self.adjuster.checks == self.want.checks
        np.testing.assert_array_equal(self.adjuster.redundant, self.want.checked)
        np.testing.assert_array_equal(self.adjuster.observable, self.want.observable)

    def check_values(self, factor=10.0):
        limit = factor * (1e-16 * self.largest + 1e-15 * self.sigma)
        assert np.all(np.abs(self.x - self.want.x) <= limit)
        # An unmeasured variable is a sum of measured ones: as many roundings as terms.
        known = self.want.observable
        terms = np.maximum(np.abs(self.adjuster.elimination.recover @ self.measured).sum(axis=1), 1.0)
        span = np.maximum(terms * self.largest, np.abs(self.want.u))
        assert np.all(np.abs(self.u - self.want.u)[known] <= factor * 1e-16 * span[known])

    def check_variances(self, relative=1e-12):
        n = len(self.sigma)
        got = np.concatenate([(self.adjuster.cover**2).sum(axis=1), (self.adjuster.cover_unmeasured**2).sum(axis=1)])
        want = np.diag(self.want.covariance)
        known = np.concatenate([np.ones(n, dtype=bool), self.want.observable])
        natural = np.concatenate([self.sigma, np.full(known.size - n, self.sigma.max())])
        assert np.all(np.abs(got - want)[known] <= relative * np.abs(want[known]) + (1e-15 * natural[known]) ** 2)

    def check_covariance(self, relative=1e-12):
        known = np.concatenate([np.ones(len(self.sigma), dtype=bool), self.want.observable])
        cover = np.vstack([self.adjuster.cover, self.adjuster.cover_unmeasured])[known]
        want = self.want.covariance[np.ix_(known, known)]
        spread = np.sqrt(np.abs(np.diag(want)))
        zero = 1e-15 * self.sigma.max()  # what the spread of a forced variable may come out as
        limit = relative * np.outer(spread, spread) + zero * (spread[:, None] + spread) + zero**2
        assert np.all(np.abs(cover @ cover.T - want) <= limit)

    def check_tests(self, absolute=1e-9):
        """Values of z and objective; the closure of the readings is known to their own rounding, no better."""
        rounding = 1e-15 * self.largest / self.sigma.min()
        checked = self.want.checked
        assert np.all(np.abs(self.z - self.want.z)[checked] <= absolute + rounding)
        root = np.sqrt(self.want.objective)
        assert abs(np.linalg.norm(self.parity) - root) <= absolute * max(root, 1.0) + rounding

    def check_closed(self):
        terms = np.abs(self.measured) * np.abs(self.x)
        unknown = np.abs(self.unmeasured) * np.abs(self.u)
        largest = np.max(np.hstack([terms, unknown, np.abs(self.rhs)[:, None]]), axis=1)
        coefficient = np.abs(np.hstack([self.measured, self.unmeasured])).max(axis=1)
        closure = self.measured @ self.x + self.unmeasured @ self.u - self.rhs
        # Where balances force all terms to zero, what is left is the rounding of the readings.
        assert np.all(np.abs(closure) <= np.maximum(1e-9 * largest, 1e-15 * self.largest * coefficient))

    def check(self):
        self.check_classes()
        self.check_values()
        self.check_variances()
        self.check_tests()
        self.check_closed()


def network_case(seed, spread=(-0.5, 0.5), nodes=11, streams=28, share=0.7):
    """A random network; sigmas are spread evenly over these powers of ten."""
    rng = np.random.default_rng(seed)
    a = random_network(rng, nodes, streams).incidence.toarray()
    sigma = 10.0 ** rng.uniform(*spread, streams)
    sigma[:2] = 10.0 ** np.array(spread)
    mask = rng.random(streams) < share
    mask[:2] = True
    y = consistent_flows(rng, a) + sigma * rng.normal(size=streams)
    return a, mask, sigma, y, rng


@given(networks())
def test_random_networks(case):
    rng, network, mask = case
    a = network.incidence.toarray()
    sigma = 10.0 ** rng.uniform(-1, 1, len(mask))
    y = consistent_flows(rng, a) + sigma * rng.normal(size=len(mask))
    compared = Compared(a[:, mask], a[:, ~mask], sigma[mask], y[mask])
    compared.check()
    compared.check_covariance()


@given(st.integers(0, 2**32 - 1), st.integers(1, 6), st.integers(1, 8), st.integers(0, 3))
def test_random_balances(seed, m, n, n_u):
    """Coefficients and right-hand sides of any kind, more balances than variables too."""
    rng = np.random.default_rng(seed)
    measured, unmeasured = rng.normal(size=(m, n)), rng.normal(size=(m, n_u))
    truth = rng.normal(size=n + n_u)
    if m > n + n_u:
        keep = n + n_u
        mix = rng.normal(size=(m - keep, keep))
        measured[keep:], unmeasured[keep:] = mix @ measured[:keep], mix @ unmeasured[:keep]
    rhs = measured @ truth[:n] + unmeasured @ truth[n:]
    sigma = 10.0 ** rng.uniform(-2, 0, n)
    rank = np.linalg.matrix_rank(np.hstack([measured, unmeasured]))
    condition = np.linalg.svd(np.hstack([measured, unmeasured]), compute_uv=False)
    if condition[0] > 1e3 * condition[rank - 1]:
        return  # nearly dependent balances have tests of their own
    y = truth[:n] + sigma * rng.normal(size=n)
    if m > n + n_u:  # implied rows agree with the others only to rounding, which 50 digits would call a contradiction
        a = prepare(measured, unmeasured, sigma)
        assert a.checks == n
        return
    compared = Compared(measured, unmeasured, sigma, y, rhs)
    compared.check_classes()
    compared.check_values(factor=10.0 * condition[0] / condition[rank - 1])
    compared.check_closed()


@pytest.mark.parametrize("share", [0.6, 1.0])
@pytest.mark.parametrize("seed", SEEDS)
def test_sigmas_over_twelve_orders(seed, share):
    a, mask, sigma, y, _ = network_case(seed, spread=(-8, 4), share=share)
    Compared(a[:, mask], a[:, ~mask], sigma[mask], y[mask]).check()


@pytest.mark.parametrize("seed", SEEDS)
def test_sigmas_over_twelve_orders_with_readings_that_doubles_hold_exactly(seed):
    """On a grid of 2^-38 all closures are exact, so that z can be held to 1e-9 with no allowance for rounding."""
    a, _, sigma, y, _ = network_case(seed, spread=(-8, 3), share=1.0)
    y = np.round(y * 2.0**38) / 2.0**38
    compared = Compared(a, a[:, :0], sigma, y)
    compared.check()
    assert np.nanmax(np.abs(compared.z - compared.want.z)) <= 1e-9


def test_a_balance_that_only_wide_sigmas_make_look_dependent():
    """Two nodes share a stream whose meter is 12 orders worse than those that tell the two balances apart.

    In units of sigma the rows differ by 1e-12 only; both count nevertheless. Figures invented.
    """
    a = np.array([[1.0, -1.0, 0.0], [0.0, -1.0, 1.0]])
    sigma = np.array([1e-8, 1e4, 2e-8])
    y = np.array([10.0, 12.0, 10.0 + 3e-8])
    compared = Compared(a, a[:, :0], sigma, y)
    compared.check()
    assert compared.adjuster.checks == 2
    # The two good meters read one flow: the mean weighted with 4 and 1.
    np.testing.assert_allclose(compared.x - 10.0, 0.6e-8, rtol=0, atol=2e-15)


def test_spread_of_an_unmeasured_stream_between_two_bad_meters():
    """The difference of two readings with sigma 1e6 is known to 1e-6 by a third: no cancellation. Figures invented."""
    a = np.array([[1.0, -1.0, -1.0, 0.0], [0.0, 0.0, 1.0, -1.0]])  # x1 = x2 + u, u = x3
    mask = np.array([True, True, False, True])
    compared = Compared(a[:, mask], a[:, ~mask], np.array([1e6, 1e6, 1e-6]), np.array([5.0, 3.0, 2.0]))
    compared.check()
    np.testing.assert_allclose(np.linalg.norm(compared.adjuster.cover_unmeasured), 1e-6, rtol=1e-12)


# ---------------------------------------------------------------- dependent and nearly dependent balances


def nearly_dependent(seed, distance, share):
    """A network with one row repeated with coefficients changed by this fraction, and one sum of three rows so."""
    a, mask, sigma, y, rng = network_case(seed, share=share)
    more = [a[0] * (1 + distance * rng.normal(size=a.shape[1]))]
    more.append(a[1:4].sum(axis=0) * (1 + distance * rng.normal(size=a.shape[1])))
    a = np.vstack([a, *more])
    return a, mask, sigma, consistent_flows(rng, a) + sigma * rng.normal(size=len(y)), rng


@pytest.mark.parametrize("distance", [1e-4, 1e-6, 1e-9])
@pytest.mark.parametrize("seed", SEEDS)
def test_nearly_dependent_rows(seed, distance):
    """As in balances of two almost equal components: what little the rows differ by counts to the last digit."""
    a, _, sigma, y, _ = nearly_dependent(seed, distance, 1.0)
    compared = Compared(a, a[:, :0], sigma, y)
    assert compared.adjuster.checks == np.linalg.matrix_rank(a[:11]) + 2
    compared.check()


@pytest.mark.parametrize("distance", [1e-4, 1e-6, 1e-9])
@pytest.mark.parametrize("seed", SEEDS)
def test_nearly_dependent_rows_with_right_hand_sides_and_unmeasured_streams(seed, distance):
    a, mask, sigma, y, rng = nearly_dependent(seed, distance, 0.8)
    # Right-hand sides on a grid, so that doubles hold them.
    shift = np.round(rng.normal(size=len(y)) * 10)
    rhs = np.round(a @ shift)
    compared = Compared(a[:, mask], a[:, ~mask], sigma[mask], (y + shift)[mask], rhs)
    compared.check()


def test_rows_nearer_than_the_rank_tolerance_count_once():
    """At 1e-13 nothing but rounding tells two rows apart, and the tool does not pretend that it could."""
    a, _, sigma, y, rng = network_case(3, share=1.0)
    more = np.vstack([a, a[0] * (1 + 1e-13 * rng.normal(size=len(y)))])
    one, two = prepare(a, a[:, :0], sigma), prepare(more, more[:, :0], sigma)
    assert two.checks == one.checks
    x, _ = one.adjust(y[None], np.zeros(11))
    again, _ = two.adjust(y[None], np.zeros(12))
    np.testing.assert_allclose(again, x, rtol=0, atol=1e-10)


@pytest.mark.parametrize("seed", SEEDS)
def test_exactly_duplicate_rows_change_nothing(seed):
    a, mask, sigma, y, rng = network_case(seed)
    more = np.vstack([a, a[2], 3.0 * a[4], a.sum(axis=0)])[rng.permutation(14)]
    plain = Compared(a[:, mask], a[:, ~mask], sigma[mask], y[mask])
    other = Compared(more[:, mask], more[:, ~mask], sigma[mask], y[mask])
    other.check()
    np.testing.assert_allclose(other.x, plain.x, rtol=0, atol=1e-13 * plain.largest)
    assert abs(np.linalg.norm(other.parity) - np.linalg.norm(plain.parity)) < 1e-12


@pytest.mark.parametrize("seed", SEEDS)
def test_rows_scaled_over_ten_orders(seed):
    """Powers of two, so that the scaled network is the same network to the last bit."""
    a, mask, sigma, y, rng = network_case(seed)
    scale = 2.0 ** rng.integers(-17, 17, len(a))
    scale[:2] = 2.0**-17, 2.0**17  # ten orders
    a = scale[:, None] * a
    Compared(a[:, mask], a[:, ~mask], sigma[mask], y[mask]).check()


@pytest.mark.parametrize("seed", SEEDS)
def test_columns_scaled_over_ten_orders(seed):
    """Every stream in a unit of its own: values, sigmas and coefficients differ by ten orders."""
    a, mask, sigma, y, rng = network_case(seed)
    unit = 2.0 ** rng.integers(-17, 17, len(y))
    plain = Compared(a[:, mask], a[:, ~mask], sigma[mask], y[mask])
    other = Compared((a * unit)[:, mask], (a * unit)[:, ~mask], (sigma / unit)[mask], (y / unit)[mask])
    other.check_classes()
    other.check_variances()
    other.check_tests(absolute=1e-9 + 1e-15 * plain.largest / plain.sigma.min())
    limit = 10 * (1e-16 * plain.largest + 1e-15 * sigma[mask])
    assert np.all(np.abs(other.x - other.want.x) * unit[mask] <= limit)


def test_two_thousand_balances_of_one_stream_pair():
    """A long chain of meters in series: the mean of all readings. Exact answer known."""
    n = 300
    a = np.eye(n - 1, n) - np.eye(n - 1, n, k=1)
    rng = np.random.default_rng(5)
    y = 50.0 + rng.normal(size=n)
    adjuster = prepare(a, a[:, :0], np.ones(n))
    x, parity = adjuster.adjust(y[None], np.zeros(n - 1))
    np.testing.assert_allclose(x[0], y.mean(), rtol=0, atol=1e-13 * 50)
    np.testing.assert_allclose((parity**2).sum(), ((y - y.mean()) ** 2).sum(), rtol=1e-12)
    np.testing.assert_allclose((adjuster.cover**2).sum(axis=1), 1 / n, rtol=1e-12)


def test_a_prepared_network_can_be_sent_to_another_process():
    a, mask, sigma, y, _ = nearly_dependent(1, 1e-9, 0.8)
    adjuster = prepare(a[:, mask], a[:, ~mask], sigma[mask])
    assert adjuster.sharp is not None
    twin = pickle.loads(pickle.dumps(adjuster))
    rhs = np.ones(len(a))
    for one, other in zip(adjuster.adjust(y[mask][None], rhs), twin.adjust(y[mask][None], rhs), strict=True):
        np.testing.assert_array_equal(one, other)
