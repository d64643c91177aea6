"""Critical values of the tests, and the size of fault that they notice.

Chi-squared and normal tails come from scipy.special. Two definitions of what a test can notice are in use and give
different numbers: the noncentrality that a chosen power needs (`noncentrality`, `smallest_detectable`; Baarda 1968), and
the smaller one at which the expected statistic reaches its limit (`expected_statistic_noncentrality`). The limit for the
largest of several correlated test values is in `familywise`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import lru_cache

from scipy.special import chdtrc, chdtri, chndtr

from .familywise import FamilywiseLimit, familywise_limit, familywise_limit_of_correlation
from .refusal import Refusal
from .sidak import probability, sidak_level, sidak_limit

__all__ = [
    "FamilywiseLimit",
    "chi2_limit",
    "chi2_p",
    "expected_statistic_noncentrality",
    "familywise_limit",
    "familywise_limit_of_correlation",
    "noncentrality",
    "sidak_level",
    "sidak_limit",
    "smallest_detectable",
]


def chi2_limit(level: float, checks: int) -> float:
    """Limit that a chi-squared variable with `checks` degrees of freedom exceeds with probability `level`.

    Parameters
    ----------
    level : float
        Within (0, 1).
    checks : int

    Returns
    -------
    float
        nan without checks: there is nothing to compare with a limit.
    """
    probability(level, "level")
    return float(chdtri(checks, level)) if checks > 0 else math.nan


def chi2_p(value: float, checks: int) -> float:
    """Probability that a chi-squared variable with `checks` degrees of freedom exceeds `value`; nan without checks."""
    return float(chdtrc(checks, value)) if checks > 0 else math.nan


def noncentrality(level: float, power: float, df: int) -> float:
    """Noncentrality at which a chi-squared test of size `level` rejects with probability `power`.

    Parameters
    ----------
    level, power : float
        Within (0, 1), power not below level.
    df : int
        Degrees of freedom, at least 1.

    Returns
    -------
    float
        0.0 where the power equals the level. For ``df = 1`` its square root is Baarda's delta_0 (Baarda 1968).

    Raises
    ------
    Refusal
        If level or power lie outside (0, 1), the power is below the level, or there are no degrees of freedom.
    """
    probability(level, "level")
    probability(power, "power")
    if df < 1:
        raise Refusal("no-check", "without a check no fault is noticed, whatever its size")
    if power < level:
        raise Refusal(
            "power-below-level",
            f"a power of {power:g} lies below the level {level:g}",
            "a test at this level alarms that often without any fault; ask for a higher power",
        )
    if power == level:
        return 0.0
    limit = chi2_limit(level, df)
    return _root(lambda nc: 1.0 - power - float(chndtr(limit, df, nc)), 0.0, 10.0)


@lru_cache(maxsize=256)
def _delta(level: float, power: float, df: int) -> float:
    return math.sqrt(noncentrality(level, power, df))


def smallest_detectable(signature_norm: float, level: float, power: float, df: int = 1) -> float:
    """Smallest size of a fault that a test notices with a chosen chance.

    Parameters
    ----------
    signature_norm : float
        Length of the fault's signature per unit of its size.
    level, power : float
        Size of the test, and chance of noticing the fault.
    df : int
        1 where this fault alone is tested for; the number of checks for the test of all readings together.

    Returns
    -------
    float
        In the unit of the fault; inf where the signature is zero, nan where it is not known.
    """
    delta = _delta(level, power, df)
    if math.isnan(signature_norm):
        return math.nan
    return delta / signature_norm if signature_norm > 0 else math.inf


def expected_statistic_noncentrality(level: float, df: int) -> float:
    """Noncentrality at which the EXPECTED chi-squared statistic equals its limit: the other definition of sensitivity.

    It is ``limit - df`` (van der Heijden et al. 1994, Biotechnol. Bioeng., part III), about half power and smaller than
    `noncentrality` at the usual 0.8 or 0.9. Use it only to compare with figures that were computed this way.

    Parameters
    ----------
    level : float
    df : int

    Returns
    -------
    float
        0.0 where the statistic is expected above its limit without any fault; nan without checks.
    """
    return max(chi2_limit(level, df) - df, 0.0) if df > 0 else math.nan


def _root(function: Callable[[float], float], low: float, high: float) -> float:
    """Root of an increasing function, bracketed by doubling and bisected until no float lies between."""
    while function(high) < 0:
        low, high = high, 2.0 * high
    while True:
        middle = 0.5 * (low + high)
        if not low < middle < high:
            return middle
        if function(middle) < 0:
            low = middle
        else:
            high = middle
