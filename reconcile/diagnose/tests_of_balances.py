"""Tests of single balances from their closures, and of the principal components of the closures.

The closures r of balances over measured variables have the covariance V. They are tested one by one (nodal test), in
the form of maximum power, which asks what the closure of one balance says beyond those of all others, and on the
principal axes of V.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import solve_triangular
from scipy.linalg.lapack import dpstrf

from .critical import familywise_limit, sidak_limit

__all__ = ["NodalTest", "PrincipalComponentTest", "nodal_test", "principal_component_test"]

Array = npt.NDArray[np.float64]

ZERO = 1e-10
"""Spread of a closure, relative to what its readings could give it, below which it is rounding."""

DEPENDENT = 1e-10
"""Variance of a closure given the others, relative to its own, below which the others determine it."""

TAKES_PART = 1e-7
"""Coefficient, in standard deviations, above which a balance takes part in a dependency."""

REPEATED = 1e-9
"""Relative difference below which two eigenvalues count as equal."""


@dataclass(frozen=True)
class NodalTest:
    """Tests of single balances.

    Attributes
    ----------
    z : ndarray, shape (m,) or (N, m)
        Closure over its spread (Reilly & Carpani 1963; Mah, Stanley & Downing 1976); nan where no reading moves it.
    z_max_power : ndarray, shape (m,) or (N, m)
        Maximum-power form (Crowe 1989); its square is what the objective loses when the balance is left out (Crowe
        1992). nan where leaving it out changes nothing, because the other balances imply it.
    limit, limit_max_power : float
        For the largest |z| of each form; nan where there is none.
    checks : int
        Number of independent closures.
    dependent : tuple of int
        Balances that take part in a dependency among the closures.
    """

    z: Array
    z_max_power: Array
    limit: float
    limit_max_power: float
    checks: int
    dependent: tuple[int, ...]


def nodal_test(closure: Array, covariance: Array, level: float, *, scale: npt.ArrayLike | None = None) -> NodalTest:
    """Test each balance alone.

    Parameters
    ----------
    closure : ndarray, shape (m,) or (N, m)
    covariance : ndarray, shape (m, m)
        Of the closures; it may be singular.
    level : float
        Chance that any of the tests of one form alarms when nothing is wrong.
    scale : array of shape (m,), optional
        Standard deviation that each closure would have if nothing cancelled; a spread below 1e-10 of it counts as
        zero. When left out, only exact zeros do.

    Returns
    -------
    NodalTest
    """
    r = np.asarray(closure, dtype=float)
    v = np.asarray(covariance, dtype=float)
    spread = np.sqrt(np.clip(np.diag(v), 0.0, None))
    natural = spread if scale is None else np.broadcast_to(np.asarray(scale, dtype=float), spread.shape)
    live = np.flatnonzero((spread > ZERO * natural) & (spread > 0))
    z = np.full(r.shape, np.nan)
    power = z.copy()
    nan = float("nan")
    if live.size == 0:
        return NodalTest(z, power, nan, nan, 0, ())
    z[..., live] = r[..., live] / spread[live]
    # Correlations instead of V: balances in different units weigh alike. Pivots pick independent balances.
    packed, pivots, rank, _ = dpstrf(
        v[np.ix_(live, live)] / np.outer(spread[live], spread[live]), tol=DEPENDENT, lower=1
    )
    order = live[pivots - 1]
    packed = np.tril(packed)
    factor, rest = packed[:rank, :rank], packed[rank:, :rank]
    inverse = solve_triangular(factor, np.eye(rank), lower=True)
    # What a dependent balance is made of: its row of the factor in terms of the independent ones.
    coefficients = np.abs(rest @ inverse) > TAKES_PART
    free = ~coefficients.any(axis=0)
    evidence = z[..., order[:rank]] @ inverse.T
    power[..., order[:rank][free]] = evidence @ (inverse[:, free] / np.linalg.norm(inverse[:, free], axis=0))
    dependent = tuple(sorted(int(i) for i in (*order[rank:], *order[:rank][~free])))
    # Both families in the order of the balances, so that the limits do not hang on the pivots.
    signatures = np.vstack([factor, rest]).T[:, np.argsort(order)]
    limit = familywise_limit(signatures, level).limit
    kept = np.flatnonzero(free)[np.argsort(order[:rank][free])]
    limit_power = familywise_limit(inverse[:, kept], level).limit if kept.size else nan
    return NodalTest(z, power, limit, limit_power, int(rank), dependent)


@dataclass(frozen=True)
class PrincipalComponentTest:
    """Closures on the principal components of their covariance.

    Attributes
    ----------
    eigenvalues : ndarray, shape (q,)
        Of the covariance, ascending, without those that are zero.
    scores : ndarray, shape (q,) or (N, q)
        Standard normal and independent when nothing is wrong; their squares add up to the objective. Signs are
        arbitrary.
    vectors : ndarray, shape (m, q)
        Share of each closure in each component.
    repeated : tuple of tuple of int
        Components with equal eigenvalues: only the sum of squares of their scores has a meaning, single scores depend
        on an arbitrary choice of axes.
    limit : float
        For the largest |score| of all (Šidák 1967: exact, since they are independent); nan without components.
    """

    eigenvalues: Array
    scores: Array
    vectors: Array
    repeated: tuple[tuple[int, ...], ...]
    limit: float


def principal_component_test(closure: Array, covariance: Array, level: float = 0.05) -> PrincipalComponentTest:
    """Test the closures on the principal components of their covariance (Tong & Crowe 1995, AIChE J. 41, 1712).

    Components depend on the units of the balances, unlike every other test here.

    Parameters
    ----------
    closure : ndarray, shape (m,) or (N, m)
    covariance : ndarray, shape (m, m)
        It may be singular.
    level : float

    Returns
    -------
    PrincipalComponentTest
    """
    r = np.asarray(closure, dtype=float)
    values, vectors = np.linalg.eigh(np.asarray(covariance, dtype=float))
    live = values > ZERO * max(values.max(initial=0.0), 0.0)
    values, vectors = values[live], vectors[:, live]
    scores = (r @ vectors) / np.sqrt(values)
    groups: list[list[int]] = []
    for i, value in enumerate(values):
        if i and value - values[i - 1] <= REPEATED * value:
            groups[-1].append(i)
        else:
            groups.append([i])
    repeated = tuple(tuple(g) for g in groups if len(g) > 1)
    limit = sidak_limit(level, values.size) if values.size else float("nan")
    return PrincipalComponentTest(values, scores, vectors, repeated, limit)
