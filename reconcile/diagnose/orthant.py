"""Probability that a normal vector has no negative component, as a logarithm that stays accurate in the tails.

One component: the normal distribution function. Two: Owen's function T (Owen 1956, Ann. Math. Statist. 27, 1075) in
the body, Gauss-Legendre quadrature of the log-concave integrand in the tails. Three and more: sequential conditioning
(Genz 1992, J. Comput. Graph. Stat. 1, 141) on a fixed Richtmyer lattice, so that the result is reproducible; its
error is about 1e-3 of the probability for the three or four components that occur here.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.special import log_ndtr, logsumexp, ndtr, ndtri_exp, owens_t

__all__ = ["log_orthant"]

Array = npt.NDArray[np.float64]

BODY = 1e-6  # above it the difference of Owen's functions keeps ten digits
DROP = 45.0  # logarithm of the part of the peak that quadrature leaves out
NODES, WEIGHTS = np.polynomial.legendre.leggauss(32)
LATTICE = 4096
PRIMES = np.array([2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37], dtype=float)


def log_orthant(mean: Array, covariance: Array) -> Array:
    """Logarithm of ``P(x >= 0)`` for ``x ~ N(mean, covariance)``.

    Parameters
    ----------
    mean : ndarray, shape (N, q)
    covariance : ndarray, shape (N, q, q)
        Positive definite.

    Returns
    -------
    ndarray, shape (N,)
    """
    q = mean.shape[1]
    if q == 0:
        return np.zeros(mean.shape[0])
    sd = np.sqrt(np.einsum("nii->ni", covariance))
    h = mean / sd
    if q == 1:
        return np.asarray(log_ndtr(h[:, 0]))
    correlation = covariance / (sd[:, :, None] * sd[:, None, :])
    return _two(h[:, 0], h[:, 1], correlation[:, 0, 1]) if q == 2 else _many(h, correlation)


def _two(h: Array, k: Array, rho: Array) -> Array:
    rho = np.clip(rho, -1 + 1e-13, 1 - 1e-13)
    value = _owen(h, k, rho)
    out = np.log(np.maximum(value, BODY))
    tail = value < BODY
    if tail.any():
        out[tail] = _tail(np.minimum(h, k)[tail], np.maximum(h, k)[tail], rho[tail])
    return out


def _owen(h: Array, k: Array, rho: Array) -> Array:
    s = np.sqrt((1 - rho) * (1 + rho))
    h = np.where(h == 0, 1e-300, h)
    k = np.where(k == 0, 1e-300, k)
    with np.errstate(over="ignore"):
        a, b = (k / h - rho) / s, (h / k - rho) / s
    opposite = np.where((h > 0) == (k > 0), 0.0, 0.5)
    return np.asarray(0.5 * (ndtr(h) + ndtr(k)) - owens_t(h, a) - owens_t(k, b) - opposite)


def _tail(h: Array, k: Array, rho: Array) -> Array:
    """Quadrature over the more restricted component x >= -h of phi(x) Phi((k + rho x) / s)."""
    s = np.sqrt((1 - rho) * (1 + rho))

    def g(x: Array) -> Array:
        shape = (-1,) + (1,) * (x.ndim - 1)
        t = (k.reshape(shape) + rho.reshape(shape) * x) / s.reshape(shape)
        return -0.5 * x**2 + np.asarray(log_ndtr(t))

    # The logarithm is concave: its slope decides on which side of the mode a point lies.
    reach = np.abs(h) + np.abs(k) + 10.0
    low, high = -h.copy(), np.maximum(-h, 0.0) + reach
    for _ in range(70):
        x = 0.5 * (low + high)
        t = (k + rho * x) / s
        mills = np.exp(-0.5 * t**2 - 0.5 * np.log(2 * np.pi) - log_ndtr(t))
        rising = -x + rho / s * mills > 0
        low, high = np.where(rising, x, low), np.where(rising, high, x)
    mode = 0.5 * (low + high)
    peak = g(mode)
    ends = []
    for direction in (-1.0, 1.0):
        near, far = np.zeros_like(mode), np.full_like(mode, np.sqrt(2 * DROP) + 1.0)  # curvature is at least 1
        for _ in range(60):
            x = 0.5 * (near + far)
            inside = g(mode + direction * x) > peak - DROP
            near, far = np.where(inside, x, near), np.where(inside, far, x)
        ends.append(mode + direction * far)
    left, right = np.maximum(ends[0], -h), ends[1]
    safe = np.where(np.abs(rho) < 1e-12, 1e-12, rho)
    kink, width = -k / safe, 6 * s / np.abs(safe)
    edges = np.sort(
        np.clip(np.stack([left, mode, kink - width, kink, kink + width, right], 1), left[:, None], right[:, None]), 1
    )
    # Halves resolve the exponential decay beside a mode on the border.
    edges = np.sort(np.concatenate([edges, 0.5 * (edges[:, 1:] + edges[:, :-1])], 1), 1)
    half = 0.5 * np.diff(edges, axis=1)
    x = (0.5 * (edges[:, 1:] + edges[:, :-1]))[:, :, None] + half[:, :, None] * NODES
    with np.errstate(divide="ignore"):
        logs = g(x) + np.log(half[:, :, None] * WEIGHTS)
    return np.asarray(logsumexp(logs, axis=(1, 2))) - 0.5 * np.log(2 * np.pi)


def _many(h: Array, correlation: Array) -> Array:
    q = h.shape[1]
    if q > PRIMES.size + 1:
        raise ValueError(f"at most {PRIMES.size + 1} one-sided sizes at once")
    w = np.mod(np.outer(np.arange(1, LATTICE + 1) - 0.5, np.sqrt(PRIMES[: q - 1])), 1.0)
    w = np.clip(np.abs(2 * w - 1), 1e-16, 1.0)
    out = np.empty(h.shape[0])
    for n in range(h.shape[0]):
        order = np.argsort(h[n], kind="stable")  # the most restricted component first: least variance
        c = np.linalg.cholesky(correlation[n][np.ix_(order, order)])
        y = np.zeros((LATTICE, q - 1))
        total = np.zeros(LATTICE)
        for i in range(q):
            t = (h[n, order[i]] + y[:, :i] @ c[i, :i]) / c[i, i]
            log_p = log_ndtr(t)
            total += log_p
            if i < q - 1:
                y[:, i] = -ndtri_exp(np.log(w[:, i]) + log_p)
        out[n] = logsumexp(total) - np.log(LATTICE)
    return out
