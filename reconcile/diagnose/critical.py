"""Critical values of the tests, and the size of fault that they notice.

Chi-squared and normal tails come from scipy.special. The familywise limit is exact under the true correlation
of the test values: with signatures f_i of unit length in parity space, ``z_i = f_i . p`` and p ~ N(0, I_r), so
``P(max |z_i| > c) = E[ P(chi_r > c / m(u)) ]`` with u uniform on the sphere and ``m(u) = max |f_i . u|``. Only
directions are sampled; the radius is integrated exactly, which makes the estimate smooth in c.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, chdtri, chndtr, ndtri

__all__ = [
    "FamilywiseLimit",
    "chi2_limit",
    "chi2_p",
    "expected_statistic_noncentrality",
    "familywise_limit",
    "noncentrality",
    "sidak_level",
    "sidak_limit",
    "smallest_detectable",
]

Array = npt.NDArray[np.float64]

DEFAULT_POINTS = 1 << 14
DEFAULT_SEED = 20260101


def chi2_limit(level: float, checks: int) -> float:
    """Limit that a chi-squared variable with `checks` degrees of freedom exceeds with probability `level`."""
    _probability(level, "level")
    return float(chdtri(checks, level)) if checks > 0 else math.nan


def chi2_p(value: float, checks: int) -> float:
    """Probability that a chi-squared variable exceeds `value`; nan without checks."""
    return float(chdtrc(checks, value)) if checks > 0 else math.nan


def sidak_level(level: float, count: int) -> float:
    """Level of each of `count` independent tests that together alarm with probability `level` (Šidák 1967)."""
    _probability(level, "level")
    return float(-math.expm1(math.log1p(-level) / count))


def sidak_limit(level: float, count: int) -> float:
    """Two-sided normal limit at the Šidák level: conservative where the tests are correlated."""
    return float(-ndtri(0.5 * sidak_level(level, count)))


def noncentrality(level: float, power: float, df: int) -> float:
    """Noncentrality at which a chi-squared test of size `level` rejects with probability `power`.

    Parameters
    ----------
    level, power : float
        Within (0, 1), power above level.
    df : int

    Returns
    -------
    float
        0.0 where the power equals the level. For ``df = 1`` its square root is Baarda's delta_0 (Baarda 1968).

    Raises
    ------
    ValueError
        If level or power lie outside (0, 1), or the power is below the level.
    """
    _probability(level, "level")
    _probability(power, "power")
    if power < level:
        raise ValueError(f"a power of {power} lies below the level {level}: every fault is noticed that often")
    limit = chi2_limit(level, df)
    return _root(lambda nc: float(chndtr(limit, df, nc)) - (1.0 - power), 0.0, 10.0)


@lru_cache(maxsize=256)
def _delta(level: float, power: float, df: int) -> float:
    return math.sqrt(noncentrality(level, power, df))


def smallest_detectable(length: float, level: float, power: float, df: int = 1) -> float:
    """Smallest size of a fault that a test notices.

    Parameters
    ----------
    length : float
        Length of the fault's signature per unit of its size; 0 gives inf.
    level, power : float
        Size of the test, and chance of noticing the fault.
    df : int
        1 where this fault alone is asked for; the number of checks for the test of all readings.

    Returns
    -------
    float
        In the unit of the fault.
    """
    return _delta(level, power, df) / length if length > 0 else math.inf


def expected_statistic_noncentrality(level: float, df: int) -> float:
    """Noncentrality at which the expected statistic equals the limit, about half power: the other definition."""
    return chi2_limit(level, df) - df


@dataclass(frozen=True)
class FamilywiseLimit:
    """Limit of the largest of several test values.

    Attributes
    ----------
    limit : float
    distinct : int
        Test values that are not parallel to one another.
    error : float
        Standard error of the limit from sampling directions; 0 where it is exact.
    sidak : float
        Limit that independent tests would need, for comparison.
    """

    limit: float
    distinct: int
    error: float
    sidak: float


def familywise_limit(
    signatures: Array, level: float, *, seed: int = DEFAULT_SEED, points: int = DEFAULT_POINTS
) -> FamilywiseLimit:
    """Limit that the largest of several correlated test values exceeds with probability `level`.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
        Any length; zero columns are left out, parallel ones count once.
    level : float
    seed : int
        Of the random shift of the point set; the same seed gives the same limit.
    points : int
        Directions; each is used with its opposite by symmetry.

    Returns
    -------
    FamilywiseLimit

    Raises
    ------
    ValueError
        If no signature is left.
    """
    _probability(level, "level")
    f = _distinct(np.asarray(signatures, dtype=float))
    if f.shape[1] == 0:
        raise ValueError("no test value is left: every signature is zero")
    return _limit(f.tobytes(), f.shape, level, seed, points)


@lru_cache(maxsize=128)
def _limit(data: bytes, shape: tuple[int, int], level: float, seed: int, points: int) -> FamilywiseLimit:
    f = np.frombuffer(data).reshape(shape)
    k = shape[1]
    independent = sidak_limit(level, k)
    single = sidak_limit(level, 1)
    if k == 1:
        return FamilywiseLimit(single, 1, 0.0, independent)
    # Only the space that the signatures span matters.
    u, s, _ = np.linalg.svd(f, full_matrices=False)
    f = u[:, s > 1e-9 * s[0]].T @ f
    r = f.shape[0]
    if r == 1:
        return FamilywiseLimit(single, 1, 0.0, independent)
    if np.allclose(f.T @ f, np.eye(k), atol=1e-12):
        return FamilywiseLimit(independent, k, 0.0, independent)
    batches = 8
    each = [_largest(f, points // batches, seed + b) for b in range(batches)]
    m = np.concatenate(each)

    def excess(c: float, sample: Array) -> float:
        return float(np.mean(chdtrc(r, (c / sample) ** 2)))

    limit = _root(lambda c: excess(c, m) - level, single, independent)
    slope = (excess(limit + 1e-4, m) - excess(limit - 1e-4, m)) / 2e-4
    scatter = np.std([excess(limit, e) for e in each], ddof=1) / math.sqrt(batches)
    return FamilywiseLimit(min(limit, independent), k, float(abs(scatter / slope)), independent)


def _largest(f: Array, points: int, seed: int) -> Array:
    """m(u) over a randomly shifted Kronecker point set mapped to directions."""
    r = f.shape[0]
    shift = np.random.default_rng(seed).random(r)
    x = np.mod(np.arange(1, points + 1)[:, None] * _alphas(r) + shift, 1.0)
    z = ndtri(np.clip(x, 1e-15, 1 - 1e-15))
    u = z / np.linalg.norm(z, axis=1, keepdims=True)
    return np.abs(u @ f).max(axis=1)


def _alphas(r: int) -> Array:
    """Powers of the root of x^(r+1) = x + 1: a badly approximable direction in r dimensions."""
    root = 2.0
    for _ in range(64):
        root = (1.0 + root) ** (1.0 / (r + 1))
    return np.mod(root ** -np.arange(1.0, r + 1.0), 1.0)


def _distinct(f: Array) -> Array:
    """Unit signatures without zeros and without parallel ones, rounded so that the cache can recognise them."""
    norm = np.linalg.norm(f, axis=0)
    unit = f[:, norm > 0] / norm[norm > 0]
    kept: list[int] = []
    for i in range(unit.shape[1]):
        if not kept or np.abs(unit[:, kept].T @ unit[:, i]).max() < 1 - 1e-9:
            kept.append(i)
    return np.ascontiguousarray(unit[:, kept])


def _probability(value: float, name: str) -> None:
    if not 0 < value < 1:
        raise ValueError(f"a {name} lies within 0 and 1, not {value}")


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    """Root of a decreasing function by bracketing and bisection to full precision."""
    while function(high) > 0:
        low, high = high, 2.0 * high
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        if function(middle) > 0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)
