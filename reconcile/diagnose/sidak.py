"""Limits for several independent tests at once (Šidák 1967, J. Am. Stat. Assoc. 62, 626)."""

from __future__ import annotations

import math

from scipy.special import ndtri

from .refusal import Refusal

__all__ = ["probability", "sidak_level", "sidak_limit"]


def sidak_level(level: float, count: int) -> float:
    """Level of each of `count` independent tests that together alarm with probability `level`.

    Parameters
    ----------
    level : float
        Within (0, 1).
    count : int
        At least 1.

    Returns
    -------
    float
        ``1 - (1 - level)**(1 / count)``.

    Raises
    ------
    Refusal
        If the level lies outside (0, 1) or there is no test.
    """
    probability(level, "level")
    if count < 1:
        raise Refusal("no-test", f"a limit for {count} tests has no meaning", "at least one test is needed")
    return -math.expm1(math.log1p(-level) / count)


def sidak_limit(level: float, count: int) -> float:
    """Two-sided normal limit of each of `count` tests at their Šidák level.

    Exact for independent tests; never too low for correlated ones, which is Šidák's inequality. Mah & Tamhane 1982
    (AIChE J. 28, 828) brought it to the measurement test.
    """
    return float(-ndtri(0.5 * sidak_level(level, count)))


def probability(value: float, name: str) -> None:
    """Refuse what is not strictly between 0 and 1."""
    if not 0 < value < 1:
        raise Refusal(f"{name}-out-of-range", f"a {name} lies between 0 and 1, not {value!r}")
