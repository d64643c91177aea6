"""Tests of readings and balances: functions of the parity vector and of signatures.

Measurement test in its maximum-power form and generalised likelihood ratio are one thing here: with signature f of
a fault, ``z = f.p / |f|`` is standard normal when nothing is wrong, ``f.p / |f|^2`` is the size of the fault, and
``z^2`` is what the objective loses when the fault is granted (Mah & Tamhane 1982; Narasimhan & Mah 1987).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy.linalg import cho_factor, cho_solve

from .critical import chi2_limit, chi2_p, familywise_limit, sidak_limit
from .lookalike import classes

__all__ = [
    "GlobalTest",
    "NodalTest",
    "SignatureTests",
    "global_test",
    "nodal_test",
    "principal_component_test",
    "share_checked",
    "signature_tests",
]

Array = npt.NDArray[np.float64]

TOO_GOOD = 0.999
INTERVAL = 1.959963984540054


@dataclass(frozen=True)
class GlobalTest:
    """Test of all readings together.

    Attributes
    ----------
    objective : float
    checks : int
    limit, p : float
        nan without checks.
    status : str
        ``agrees``, ``disagrees``, ``suspiciously good`` (p above 0.999) or ``no check possible``.
    level : float
    """

    objective: float
    checks: int
    limit: float
    p: float
    status: str
    level: float


def global_test(parity: Array, level: float) -> GlobalTest:
    """Test whether the readings agree with the balances within their sigmas (Reilly & Carpani 1963).

    Parameters
    ----------
    parity : ndarray, shape (r,)
    level : float

    Returns
    -------
    GlobalTest
        Without checks it is ``no check possible``, never a pass.
    """
    r = parity.size
    objective = float(parity @ parity)
    if r == 0:
        return GlobalTest(objective, 0, float("nan"), float("nan"), "no check possible", level)
    limit, p = chi2_limit(level, r), chi2_p(objective, r)
    status = "disagrees" if objective > limit else "suspiciously good" if p > TOO_GOOD else "agrees"
    return GlobalTest(objective, r, limit, p, status, level)


@dataclass(frozen=True)
class SignatureTests:
    """Tests of single faults.

    Attributes
    ----------
    z, size, sigma, low, high, leftover : ndarray, shape (k,)
        Test value (with the sign of the size), least-squares size, its standard uncertainty and 95 % interval, and
        the objective that remains if the fault is granted; nan where nothing checks the fault.
    limit : float
        For the largest |z| of all; nan where there is none.
    correction : str
        How the number of tests was taken into account.
    distinct : int
        Test values that are not parallel.
    tied : tuple of tuple of int
        Faults whose test values are the same whatever is read.
    worst : int
        Index of the largest |z|, the lowest of a tie; -1 where there is none.
    """

    z: Array
    size: Array
    sigma: Array
    low: Array
    high: Array
    leftover: Array
    limit: float
    correction: str
    distinct: int
    tied: tuple[tuple[int, ...], ...]
    worst: int


def signature_tests(
    parity: Array, signatures: Array, level: float, correction: Literal["exact", "sidak"] = "exact"
) -> SignatureTests:
    """Test each fault alone.

    Parameters
    ----------
    parity : ndarray, shape (r,)
    signatures : ndarray, shape (r, k)
    level : float
        That any of the tests alarms when nothing is wrong.
    correction : {"exact", "sidak"}
        Exact limit under the true correlation, or the conservative one for independent tests.

    Returns
    -------
    SignatureTests
    """
    norm = np.linalg.norm(signatures, axis=0)
    live = norm > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        projected = signatures.T @ parity
        z = np.where(live, projected / norm, np.nan)
        size = np.where(live, projected / norm**2, np.nan)
        sigma = np.where(live, 1.0 / norm, np.nan)
    objective = float(parity @ parity)
    if not live.any():
        nan = float("nan")
        return SignatureTests(z, size, sigma, size, size, z, nan, correction, 0, (), -1)
    alike = classes(signatures)
    distinct = len(alike.members)
    limit = familywise_limit(signatures, level).limit if correction == "exact" else sidak_limit(level, distinct)
    # Test values of one class are equal but for rounding, so the lowest index of the class stands for it.
    first = np.array([m[0] for m in alike.members])
    worst = int(first[int(np.argmax(np.round(np.abs(z[first]), 12)))])
    return SignatureTests(
        z, size, sigma, size - INTERVAL * sigma, size + INTERVAL * sigma, np.maximum(objective - z**2, 0.0),
        limit, correction, distinct, alike.tied, worst,
    )  # fmt: skip


@dataclass(frozen=True)
class NodalTest:
    """Tests of single balances.

    Attributes
    ----------
    z : ndarray, shape (m,)
        Closure over its spread (Reilly & Carpani 1963; Mah, Stanley & Downing 1976); nan where the spread is zero.
    z_max_power : ndarray, shape (m,)
        Maximum-power form (Crowe 1989); nan where it is not defined.
    limit, limit_max_power : float
    """

    z: Array
    z_max_power: Array
    limit: float
    limit_max_power: float


def nodal_test(closure: Array, covariance: Array, level: float) -> NodalTest:
    """Test each balance alone.

    Parameters
    ----------
    closure : ndarray, shape (m,)
        Of independent balances over measured variables.
    covariance : ndarray, shape (m, m)
        Of the closures.
    level : float

    Returns
    -------
    NodalTest
    """
    spread = np.sqrt(np.diag(covariance))
    live = spread > 0
    z = np.full(closure.size, np.nan)
    power = z.copy()
    z[live] = closure[live] / spread[live]
    nan = float("nan")
    if not live.any():
        return NodalTest(z, power, nan, nan)
    correlation = covariance[np.ix_(live, live)] / np.outer(spread[live], spread[live])
    factor = cho_factor(correlation, lower=True)
    inverse = cho_solve(factor, np.eye(int(live.sum())))
    power[live] = (inverse @ z[live]) / np.sqrt(np.diag(inverse))
    lower = np.tril(factor[0])
    limit = familywise_limit(lower.T, level).limit
    limit_power = familywise_limit(np.linalg.inv(lower), level).limit
    return NodalTest(z, power, limit, limit_power)


def principal_component_test(closure: Array, covariance: Array) -> tuple[Array, Array]:
    """Scores of the closures on the principal components of their covariance (Tong & Crowe 1995).

    Parameters
    ----------
    closure : ndarray, shape (m,)
    covariance : ndarray, shape (m, m)

    Returns
    -------
    eigenvalues, scores : ndarray, shape (m,)
        Ascending eigenvalues; each score is standard normal when nothing is wrong, their squares add up to the
        objective. Signs are arbitrary, and so are the scores of equal eigenvalues.
    """
    values, vectors = np.linalg.eigh(covariance)
    return values, (vectors.T @ closure) / np.sqrt(values)


def share_checked(signatures: Array, sigma: Array) -> Array:
    """Share of an error of each reading that shows (redundancy number), shape (n,); adds up to the checks.

    Parameters
    ----------
    signatures : ndarray, shape (r, n)
        Per unit of each reading.
    sigma : ndarray, shape (n,)
        Own standard uncertainties.
    """
    return np.clip(np.linalg.norm(signatures * sigma, axis=0) ** 2, 0.0, 1.0)
