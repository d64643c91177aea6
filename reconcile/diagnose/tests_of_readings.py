"""Tests of readings and balances: functions of the parity vector and of signatures.

Measurement test in its maximum-power form and generalised likelihood ratio are one thing here: with signature f of
a fault, ``z = f.p / |f|`` is standard normal when nothing is wrong, ``f.p / |f|^2`` is the size of the fault, and
``z^2`` is what the objective loses when the fault is granted (Mah & Tamhane 1982; Narasimhan & Mah 1987).

A parity vector that averages N snapshots has less noise; say so with ``noise = 1 / sqrt(N)``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, ndtri

from .critical import chi2_limit, familywise_limit, sidak_limit
from .lookalike import classes
from .tests_of_balances import NodalTest, PrincipalComponentTest, nodal_test, principal_component_test

__all__ = [
    "GlobalTest",
    "GlobalTests",
    "NodalTest",
    "PrincipalComponentTest",
    "SignatureTests",
    "global_test",
    "global_tests",
    "nodal_test",
    "principal_component_test",
    "share_checked",
    "signature_tests",
]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

TOO_GOOD = 0.999
"""Probability of a larger objective above which agreement is suspiciously good: one case in a thousand."""

INTERVAL = float(ndtri(0.975))
"""Half width of a 95 % interval in standard uncertainties."""

TIE = 1e-9
"""Relative difference between two test values below which they count as equal."""


@dataclass(frozen=True)
class GlobalTest:
    """Test of all readings of one snapshot together.

    Attributes
    ----------
    objective : float
    checks : int
    limit, p : float
        Limit of the objective, and probability of a larger one when nothing is wrong; nan without checks.
    status : str
        ``agrees``, ``disagrees``, ``suspiciously good`` (p above 0.999), ``no check possible``, or ``not known`` where
        the objective is not a number.
    level : float
    """

    objective: float
    checks: int
    limit: float
    p: float
    status: str
    level: float


@dataclass(frozen=True)
class GlobalTests:
    """Test of all readings together, for N snapshots with the same checks.

    Attributes
    ----------
    objective, p : ndarray, shape (N,)
    checks : int
    limit : float
    status : ndarray of str, shape (N,)
        See `GlobalTest`.
    level : float
    """

    objective: Array
    checks: int
    limit: float
    p: Array
    status: npt.NDArray[np.str_]
    level: float


def global_test(parity: Array, level: float, *, noise: float = 1.0) -> GlobalTest:
    """Test whether the readings agree with the balances within their sigmas (Reilly & Carpani 1963).

    Parameters
    ----------
    parity : ndarray, shape (r,)
    level : float
    noise : float
        Standard deviation of each component of the parity vector when nothing is wrong.

    Returns
    -------
    GlobalTest
        Without checks it is ``no check possible``, never a pass.
    """
    t = global_tests(np.asarray(parity, dtype=float)[None, :], level, noise=noise)
    return GlobalTest(float(t.objective[0]), t.checks, t.limit, float(t.p[0]), str(t.status[0]), level)


def global_tests(parity: Array, level: float, *, noise: float = 1.0) -> GlobalTests:
    """`global_test` for many snapshots.

    Parameters
    ----------
    parity : ndarray, shape (N, r)
    level, noise
        See `global_test`.

    Returns
    -------
    GlobalTests
    """
    p = np.asarray(parity, dtype=float)
    n, r = p.shape
    objective = _objective(p, noise)
    limit = chi2_limit(level, r)
    if r == 0:
        return GlobalTests(objective, 0, limit, np.full(n, np.nan), np.full(n, "no check possible"), level)
    tail = np.asarray(chdtrc(r, objective))
    status = np.select(
        [np.isnan(objective), objective > limit, tail > TOO_GOOD],
        ["not known", "disagrees", "suspiciously good"],
        "agrees",
    )
    return GlobalTests(objective, r, limit, tail, status, level)


@dataclass(frozen=True)
class SignatureTests:
    """Tests of single faults, of one snapshot or of N with the same checks.

    Attributes
    ----------
    z : ndarray, shape (k,) or (N, k)
        Test value, with the sign of the size; nan where nothing checks the fault.
    sigma : ndarray, shape (k,)
        Standard uncertainty of the size, in the unit of the fault; nan where nothing checks it.
    objective : ndarray, shape () or (N,)
    limit : float
        For the largest |z| of all; nan where there is none.
    limit_error : float
        Standard error of the limit from its computation.
    correction : str
        How the number of tests was taken into account: ``exact`` or ``sidak``.
    distinct : int
        Number of different test values: those of parallel signatures count once.
    tied : tuple of tuple of int
        Faults whose test values are the same whatever is read.
    unchecked : tuple of int
        Faults that nothing checks.
    worst : int or ndarray of int, shape (N,)
        Index of the largest |z|, the lowest of a tie; -1 where there is none.
    """

    z: Array
    sigma: Array
    objective: Array
    limit: float
    limit_error: float
    correction: str
    distinct: int
    tied: tuple[tuple[int, ...], ...]
    unchecked: tuple[int, ...]
    worst: int | Ints

    @property
    def size(self) -> Array:
        """Least-squares size of each fault on its own, in its unit, shape of z."""
        return np.asarray(self.z * self.sigma)

    @property
    def low(self) -> Array:
        """Lower end of the 95 % interval of the size, shape of z."""
        return np.asarray((self.z - INTERVAL) * self.sigma)

    @property
    def high(self) -> Array:
        """Upper end of the 95 % interval of the size, shape of z."""
        return np.asarray((self.z + INTERVAL) * self.sigma)

    @property
    def statistic(self) -> Array:
        """Generalised likelihood ratio statistic: what the objective loses when the fault is granted, shape of z."""
        return np.asarray(self.z**2)

    @property
    def leftover(self) -> Array:
        """Objective that remains when the fault is granted, shape of z; it has one check less.

        It is a difference, so good to about 1e-15 of the objective.
        """
        return np.maximum(self.objective[..., None] - self.z**2, 0.0)


def signature_tests(
    parity: Array,
    signatures: Array,
    level: float,
    correction: Literal["exact", "sidak"] = "exact",
    *,
    scale: npt.ArrayLike | None = None,
    noise: float = 1.0,
) -> SignatureTests:
    """Test each fault alone.

    Parameters
    ----------
    parity : ndarray, shape (r,) or (N, r)
    signatures : ndarray, shape (r, k)
    level : float
        Chance that any of the tests alarms when nothing is wrong.
    correction : {"exact", "sidak"}
        Exact limit under the true correlation of the tests, or the conservative one for independent tests.
    scale : array of shape (k,), optional
        Length that each signature would have if it were fully checked, ``1 / sigma`` for a meter. A signature shorter
        than 1e-10 of it is rounding, and its fault is not checked. The longest signature is taken when left out, so
        give it when sizes are in units of very different magnitude.
    noise : float
        Standard deviation of each component of the parity vector when nothing is wrong.

    Returns
    -------
    SignatureTests
    """
    p = np.asarray(parity, dtype=float)
    f = np.asarray(signatures, dtype=float)
    alike = classes(f, scale=scale)
    live, norms = alike.label >= 0, alike.norms
    z = np.full((*p.shape[:-1], f.shape[1]), np.nan)
    z[..., live] = p @ (f[:, live] / norms[live]) / noise
    sigma = np.full(f.shape[1], np.nan)
    sigma[live] = noise / norms[live]
    distinct = len(alike.members)
    limit, error = float("nan"), 0.0
    if distinct and correction == "exact":
        exact = familywise_limit(alike.units, level)
        limit, error = exact.limit, exact.error
    elif distinct:
        limit = sidak_limit(level, distinct)
    worst = _worst(z, np.array([m[0] for m in alike.members], dtype=np.int64))
    return SignatureTests(
        z, sigma, np.asarray(_objective(p, noise)), limit, error, correction, distinct, alike.tied, alike.unchecked,
        worst if p.ndim > 1 else int(worst),
    )  # fmt: skip


def _objective(parity: Array, noise: float) -> Array:
    return np.asarray(np.einsum("...r,...r->...", parity, parity) / noise**2)


def _worst(z: Array, first: Ints) -> Ints:
    """Index of the largest |z| among the first members of the classes, which stand for all that tie with them."""
    if first.size == 0:
        return np.full(z.shape[:-1], -1, dtype=np.int64)
    size = np.abs(z[..., first])
    largest = size.max(axis=-1, keepdims=True)
    found = first[np.argmax(size >= largest * (1 - TIE), axis=-1)]
    return np.where(np.isnan(largest[..., 0]), -1, found)


def share_checked(signatures: Array, sigma: Array) -> Array:
    """Share of an error of each reading that shows in the evidence: its redundancy number (Baarda 1968).

    Parameters
    ----------
    signatures : ndarray, shape (r, n)
        Per unit of each reading.
    sigma : ndarray, shape (n,)
        Standard uncertainties of the readings' own errors.

    Returns
    -------
    ndarray, shape (n,)
        ``|sigma f|^2``, within 0 and 1. For readings without shared errors the shares of all add up to the number of
        checks.
    """
    return np.clip(np.linalg.norm(signatures * sigma, axis=0) ** 2, 0.0, 1.0)
