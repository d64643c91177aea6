"""The limit of the largest of correlated test values against tables, quadrature and simulation."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, CYCLE, RECYCLE, SKID
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.linalg import qr, solve_triangular
from scipy.optimize import brentq
from scipy.stats import binom, multivariate_normal, norm, ortho_group, studentized_range, t

from reconcile.diagnose.critical import familywise_limit, familywise_limit_of_correlation, sidak_limit
from reconcile.diagnose.refusal import Refusal


def unit(r, k, seed):
    f = np.random.default_rng(seed).normal(size=(r, k))
    return f / np.linalg.norm(f, axis=0)


def differences(n):
    """All differences of n means: n (n - 1) / 2 signatures of rank n - 1."""
    i, j = np.triu_indices(n, 1)
    f = np.zeros((n, i.size))
    f[i, np.arange(i.size)] = 1
    f[j, np.arange(i.size)] = -1
    return f


def equicorrelated(k, rho):
    return np.full((k, k), rho) + (1 - rho) * np.eye(k)


def within(found, exact):
    """Within what Student's t of eight batches leaves outside in 1 of 2000; the standard error itself must be small."""
    assert found.error < 2.5e-3
    assert abs(found.limit - exact) <= t.isf(0.5 / 2000, 7) * found.error + 1e-9


# ------------------------------------------------------------------ exact where it can be


@pytest.mark.parametrize(("n", "printed"), [(4, 2.491), (6, 2.631)])
def test_independent_tests_have_the_sidak_limit(n, printed):
    # Mah & Tamhane 1982: 2.49 for four, 2.63 for six (third decimal computed)
    found = familywise_limit(ortho_group.rvs(n, random_state=n) * np.arange(1.0, n + 1), 0.05)
    assert found.limit == pytest.approx(printed, abs=5e-4)
    assert found.limit == pytest.approx(sidak_limit(0.05, n), abs=1e-12)
    assert found.error == 0.0
    assert found.distinct == n


def test_parallel_signatures_are_one_test():
    f = np.outer([1.0, 2.0, -1.0], [1.0, -3.0, 1e6])
    found = familywise_limit(f, 0.05, scale=np.linalg.norm(f, axis=0))
    assert found.limit == pytest.approx(1.959963984540054, abs=1e-12)
    assert (found.distinct, found.error) == (1, 0.0)


def test_copies_and_zeros_change_nothing():
    f = unit(4, 6, 3)
    more = np.hstack([f, -2.5 * f[:, :3], np.zeros((4, 2))])
    assert familywise_limit(more, 0.05) == familywise_limit(f, 0.05)


def test_nearly_independent_tests_are_not_far_from_sidak():
    # The sampled path must run into the closed form: correlations of 1e-6 change the limit by far less than it shows.
    f = np.linalg.cholesky(equicorrelated(5, 1e-6)).T
    found = familywise_limit(f, 0.05)
    assert found.error > 0
    within(found, sidak_limit(0.05, 5))


# ------------------------------------------------------------------ printed tables

# Dunnett 1964, Biometrics 20, 482: two-sided comparisons with a control, 5 %, infinitely many degrees of freedom; the
# differences have the correlation 1/2 (table from memory).
DUNNETT = {2: 2.21, 3: 2.35, 4: 2.44, 5: 2.51, 6: 2.57, 7: 2.61, 8: 2.65, 9: 2.69}


@pytest.mark.parametrize(("k", "printed"), DUNNETT.items())
def test_comparisons_with_a_control(k, printed):
    found = familywise_limit_of_correlation(equicorrelated(k, 0.5), 0.05)
    assert found.limit == pytest.approx(printed, abs=0.005 + 4 * found.error)


# Studentized range, 5 %, infinitely many degrees of freedom: Pearson & Hartley, Biometrika Tables for Statisticians I,
# Table 29 (from memory).
RANGE = {3: 3.31, 4: 3.63, 5: 3.86, 6: 4.03, 10: 4.47}


@pytest.mark.parametrize(("n", "printed"), RANGE.items())
def test_range_of_several_means(n, printed):
    found = familywise_limit(differences(n), 0.05)
    assert found.distinct == n * (n - 1) // 2
    assert np.sqrt(2) * found.limit == pytest.approx(printed, abs=0.005 + 4 * np.sqrt(2) * found.error)


@pytest.mark.parametrize("n", [3, 5, 12])
@pytest.mark.parametrize("level", [0.2, 0.05, 0.001])
def test_range_against_scipy_stats(n, level):
    within(familywise_limit(differences(n), level), studentized_range.isf(level, n, np.inf) / np.sqrt(2))


# ------------------------------------------------------------------ quadrature


@pytest.mark.parametrize("rho", [-0.95, 0.3, 0.8, 0.9999])
def test_two_tests_against_the_bivariate_normal_law(rho):
    law = multivariate_normal([0, 0], [[1, rho], [rho, 1]])

    def alarm(c):
        return 1 - law.cdf([c, c], lower_limit=[-c, -c]) - 0.05

    within(familywise_limit_of_correlation(np.array([[1, rho], [rho, 1]]), 0.05), brentq(alarm, 1.9, 2.3))


@pytest.mark.parametrize(("k", "rho"), [(3, 0.5), (8, 0.2), (20, 0.9), (60, 0.6), (200, 0.3)])
@pytest.mark.parametrize("level", [0.05, 1e-4])
def test_equal_correlations_against_quadrature(k, rho, level):
    # Given the part that all share, the tests are independent.
    def alarm(c):
        def given_shared(x):
            s = np.sqrt(1 - rho)
            inside = norm.cdf((c - np.sqrt(rho) * x) / s) - norm.cdf((-c - np.sqrt(rho) * x) / s)
            return norm.pdf(x) * (1 - inside**k)

        return quad(given_shared, -12, 12, limit=400, epsabs=1e-13, epsrel=1e-11)[0] - level

    exact = brentq(alarm, sidak_limit(level, 1) - 1e-6, sidak_limit(level, k) + 1e-6, xtol=1e-10)
    within(familywise_limit_of_correlation(equicorrelated(k, rho), level), exact)


@pytest.mark.parametrize("k", [3, 5, 9])
def test_two_checks_against_quadrature_over_the_angle(k):
    f = unit(2, k, k)

    def alarm(c):
        # radius of a plane normal vector: upper tail exp(-x^2 / 2)
        def tail(angle):
            return np.exp(-0.5 * (c / np.abs(np.array([np.cos(angle), np.sin(angle)]) @ f).max()) ** 2)

        kinks = np.sort(np.concatenate([np.arctan2(f[1], f[0]) + a for a in (0, np.pi / 2)]) % np.pi)
        return quad(tail, 0, np.pi, points=kinks, limit=400)[0] / np.pi - 0.05

    within(familywise_limit(f, 0.05), brentq(alarm, 1.95, 3))


def test_the_standard_error_is_honest():
    exact = studentized_range.isf(0.05, 5, np.inf) / np.sqrt(2)
    found = [familywise_limit(differences(5), 0.05, seed=s, points=1024) for s in range(200)]
    ratio = np.array([(f.limit - exact) / f.error for f in found])
    # Eight batches: Student's t with 7 degrees of freedom, whose 95 % point is 2.365.
    low, high = binom.interval(0.999, 200, 0.95)
    assert low <= np.sum(np.abs(ratio) < 2.365) <= high


def test_many_checks_keep_the_accuracy():
    found = familywise_limit(unit(300, 500, 1), 0.05)
    assert found.error < 1.5e-3
    assert sidak_limit(0.05, 400) < found.limit <= found.sidak


# ------------------------------------------------------------------ networks, by simulation


def by_qr(net):
    """Signatures of meter biases, from T of a QR factor of the scaled balances: p = R'^-1 A y."""
    scaled = net.matrix * net.sigma
    r = qr(scaled.T, mode="economic")[1]
    return solve_triangular(r, net.matrix, trans="T")


@pytest.mark.parametrize("net", [BYPASS, RECYCLE, SKID, CYCLE], ids=["bypass", "recycle", "skid", "cycle"])
@pytest.mark.parametrize("level", [0.05, 0.01])
def test_alarms_come_as_often_as_the_level_says(net, level):
    f = by_qr(net)
    found = familywise_limit(f, level)
    # Simulate readings, not parity vectors: closure, whitening and signatures are all part of the claim.
    n = 200_000
    noise = np.random.default_rng(42).normal(size=(n, net.sigma.size)) * net.sigma
    p = solve_triangular(qr((net.matrix * net.sigma).T, mode="economic")[1], net.matrix @ noise.T, trans="T")
    largest = np.abs((f / np.linalg.norm(f, axis=0)).T @ p).max(axis=0)
    low, high = binom.interval(0.999, n, level)
    assert low <= np.sum(largest > found.limit) <= high
    if level == 0.05:
        # The limit for independent tests is too high here: fewer alarms than it promises.
        assert np.sum(largest > found.sidak) < low


# ------------------------------------------------------------------ invariances

FRAMES = st.tuples(st.integers(1, 5), st.integers(1, 8), st.integers(0, 10**6))


@given(FRAMES, st.integers(0, 10**6))
def test_basis_signs_and_lengths_do_not_matter(shape, seed):
    r, k, fseed = shape
    f = unit(r, k, fseed)
    rng = np.random.default_rng(seed)
    turned = np.linalg.qr(rng.normal(size=(r, r)))[0] @ f
    changed = turned * rng.choice([-1, 1], k) * 10.0 ** rng.uniform(-3, 3, k)
    one, other = familywise_limit(f, 0.05), familywise_limit(changed, 0.05)
    assert other.limit == pytest.approx(one.limit, abs=1e-6)
    assert other.distinct == one.distinct


@given(FRAMES, st.randoms(use_true_random=False))
def test_the_order_does_not_matter_beyond_the_standard_error(shape, random):
    f = unit(*shape)
    order = list(range(f.shape[1]))
    random.shuffle(order)
    one, other = familywise_limit(f, 0.05), familywise_limit(f[:, order], 0.05)
    assert abs(one.limit - other.limit) <= 6 * np.hypot(one.error, other.error) + 1e-9


@given(FRAMES, st.floats(1e-6, 0.9))
def test_between_one_test_and_as_many_independent_ones(shape, level):
    found = familywise_limit(unit(*shape), level)
    assert sidak_limit(level, 1) <= found.limit <= sidak_limit(level, found.distinct) == found.sidak


def test_the_same_seed_gives_the_same_limit():
    f = unit(4, 7, 11)
    assert familywise_limit(f, 0.05) == familywise_limit(f.copy(), 0.05)
    assert familywise_limit(f, 0.05, seed=1).limit != familywise_limit(f, 0.05, seed=2).limit


def test_an_equal_network_in_other_units_is_found_in_the_cache():
    from reconcile.diagnose.familywise import _of_canonical

    f = unit(5, 9, 12)
    familywise_limit(f, 0.05)
    before = _of_canonical.cache_info().misses
    familywise_limit(-3.0 * np.linalg.qr(unit(5, 5, 13))[0] @ f, 0.05)
    assert _of_canonical.cache_info().misses == before


def test_correlation_and_signatures_say_the_same():
    f = unit(3, 6, 5)
    within(familywise_limit_of_correlation(f.T @ f, 0.05), familywise_limit(f, 0.05).limit)


@pytest.mark.parametrize(
    ("call", "code"),
    [
        (lambda: familywise_limit(np.zeros((3, 2)), 0.05), "no-signature"),
        (lambda: familywise_limit(np.zeros((0, 4)), 0.05), "no-signature"),
        (lambda: familywise_limit(np.eye(2), 1.5), "level-out-of-range"),
        (lambda: familywise_limit_of_correlation(2 * np.eye(2), 0.05), "not-a-correlation"),
        (lambda: familywise_limit_of_correlation(np.ones((2, 3)), 0.05), "not-a-correlation"),
        (lambda: familywise_limit_of_correlation(equicorrelated(4, -0.9), 0.05), "not-a-correlation"),
    ],
)
def test_questions_without_an_answer_are_refused(call, code):
    with pytest.raises(Refusal) as caught:
        call()
    assert caught.value.code == code
