"""Orthant probabilities against scipy.stats, closed forms and arbitrary-precision quadrature."""

import mpmath
import numpy as np
import pytest
from scipy.stats import multivariate_normal, norm

from reconcile.diagnose.orthant import log_orthant


def pair(h, k, rho):
    return float(log_orthant(np.array([[h, k]]), np.array([[[1.0, rho], [rho, 1.0]]]))[0])


def test_nothing_one_sided_costs_nothing():
    assert log_orthant(np.zeros((3, 0)), np.zeros((3, 0, 0))) == pytest.approx(np.zeros(3))


def test_one_component_far_in_the_tail():
    assert log_orthant(np.array([[-40.0]]), np.array([[[4.0]]]))[0] == pytest.approx(norm.logcdf(-20.0), rel=1e-12)


@pytest.mark.parametrize("rho", [-0.999, -0.5, 0.0, 0.3, 0.999])
def test_two_centred_components(rho):
    # Sheppard 1899: 1/4 + arcsin(rho) / (2 pi)
    assert np.exp(pair(0, 0, rho)) == pytest.approx(0.25 + np.arcsin(rho) / (2 * np.pi), rel=1e-10)


def test_two_components_against_scipy():
    rng = np.random.default_rng(5)
    for _ in range(30):
        h, k = rng.normal(size=2)
        rho = rng.uniform(-0.95, 0.95)
        theirs = multivariate_normal([0, 0], [[1, rho], [rho, 1]]).cdf([h, k])
        assert np.exp(pair(h, k, rho)) == pytest.approx(theirs, abs=2e-7)


@pytest.mark.parametrize(
    ("h", "k", "rho"),
    [(-15.64, 10.86, -0.3), (-1.49, -4.05, -0.9), (-3.77, 0.65, -0.9), (1.6, -4.09, 0.99), (-4.53, 24.5, -0.99)],
)
def test_two_components_in_the_tail_against_high_precision(h, k, rho):
    with mpmath.workdps(30):
        s = mpmath.sqrt(1 - mpmath.mpf(rho) ** 2)
        points = sorted({-h, *(-h + d for d in (0.01, 0.1, 0.3, 1, 2, 4, 8, 16)), *np.linspace(-h, 40, 30)[1:]})
        exact = mpmath.log(mpmath.quad(lambda x: mpmath.npdf(x) * mpmath.ncdf((k + rho * x) / s), points))
    assert pair(h, k, rho) == pytest.approx(float(exact), abs=1e-8)


def test_body_and_tail_meet():
    # the method changes at a probability of 1e-6: no step there
    h = np.linspace(-4.6, -3.2, 200)
    mean = np.stack([h, np.full_like(h, 0.5)], 1)
    logs = log_orthant(mean, np.broadcast_to([[1.0, -0.4], [-0.4, 1.0]], (200, 2, 2)))
    assert logs[0] < np.log(1e-6) < logs[-1]
    assert np.abs(np.diff(logs, 3)).max() < 1e-5


def test_three_components():
    # centred, equal correlation: 1/8 + 3 arcsin(rho) / (4 pi)
    rho = 0.5
    c = np.full((3, 3), rho) + (1 - rho) * np.eye(3)
    exact = 1 / 8 + 3 * np.arcsin(rho) / (4 * np.pi)
    assert np.exp(log_orthant(np.zeros((1, 3)), c[None])[0]) == pytest.approx(exact, rel=1e-3)


def test_independent_components_multiply_even_in_the_tail():
    mean = np.array([[-8.0, 0.3, -5.0, 2.0]])
    assert log_orthant(mean, np.eye(4)[None])[0] == pytest.approx(norm.logcdf(mean).sum(), rel=1e-9)


def test_three_components_in_the_tail_against_nested_quadrature():
    mean = np.array([-3.0, -2.0, 0.5])
    c = np.array([[1.0, -0.5, 0.2], [-0.5, 1.0, 0.1], [0.2, 0.1, 1.0]])
    # condition on the first: a quadrature over it of the two-component probability
    x, w = np.polynomial.legendre.leggauss(200)
    x, w = 6.0 * (x + 1), 6.0 * w
    shift = mean[1:] + np.outer(x - mean[0], c[1:, 0])
    rest = c[1:, 1:] - np.outer(c[1:, 0], c[1:, 0])
    inner = np.exp(log_orthant(shift, np.broadcast_to(rest, (200, 2, 2))))
    exact = np.log(np.sum(w * norm.pdf(x - mean[0]) * inner))
    assert log_orthant(mean[None], c[None])[0] == pytest.approx(exact, abs=3e-3)
