"""The limit of the largest of several correlated test values, exact under their true correlation.

With signatures f_i of unit length in parity space, ``z_i = f_i . p`` and ``p ~ N(0, I_r)``. Given the direction u of p,
the largest is ``|p| m(u)`` with ``m(u) = max |f_i . u|``, so the radius integrates out in closed form:
``P(max |z_i| > c) = E[ S(c / m(u)) ]``, S being the upper tail of the chi distribution with r degrees of freedom. This is
smooth in c. Uniform directions would waste nearly all points when r is large, so directions are drawn where an alarm is
likely: a test i at random, its z_i from the normal tail beyond c0, the rest of p free (the mixture of Adler, Blanchet &
Liu 2012, Ann. Appl. Probab. 22, 1167). The density ratio of the two is ``2 k Phi(-c0) / sum_j S(c0 / |f_j . u|)``, hence

    P(max |z_i| > c) = 2 k Phi(-c0) E[ S(c / m(u)) / sum_j S(c0 / |f_j . u|) ],

whose terms lie between 1/k and 1 at c = c0. With c0 near the limit a few thousand points give it to two or three
decimals for any r and k.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, ndtr, ndtri

from .lookalike import classes
from .refusal import Refusal
from .sidak import probability, sidak_limit

__all__ = ["FamilywiseLimit", "familywise_limit", "familywise_limit_of_correlation"]

Array = npt.NDArray[np.float64]

POINTS = 1 << 13
SEED = 20260101
BATCHES = 8
"""Independent shifts of the point set; their scatter is the standard error."""

PILOTS = 3
"""Small rounds that find where to draw."""

TERMS = 1_000_000
"""Most tails to evaluate, points times tests: keeps a limit within a fraction of a second."""

DEPENDENT = 1e-7
"""Part of a unit signature outside the span of earlier ones, below which it counts as within it."""


@dataclass(frozen=True)
class FamilywiseLimit:
    """Limit of the largest of several test values.

    Attributes
    ----------
    limit : float
        Never above `sidak`, never below the limit of a single test.
    distinct : int
        Test values that are not parallel to one another.
    error : float
        Standard error of the limit from sampling directions; 0.0 where the limit has a closed form.
    sidak : float
        Limit that as many independent tests need, for comparison.
    """

    limit: float
    distinct: int
    error: float
    sidak: float


def familywise_limit(
    signatures: Array,
    level: float,
    *,
    scale: npt.ArrayLike | None = None,
    seed: int = SEED,
    points: int = POINTS,
) -> FamilywiseLimit:
    """Limit that the largest of several correlated test values exceeds with probability `level`.

    Closed forms are used where there are any: one distinct signature, or all of them orthogonal (Šidák 1967).

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
        Of any length. Zero signatures are left out, parallel ones count once.
    level : float
        Within (0, 1).
    scale : array of shape (k,), optional
        Length of each signature if it were fully checked, see `lookalike.classes`; what is shorter than 1e-10 of it
        counts as zero. The longest signature is taken when left out.
    seed : int
        Of the random shifts of the point set: the same seed gives the same limit, in any basis of parity space and
        whatever the signs of the signatures. Another order gives the same within the standard error.
    points : int
        Directions, at least 64; fewer are taken where there are so many tests that fewer do.

    Returns
    -------
    FamilywiseLimit

    Raises
    ------
    Refusal
        If the level lies outside (0, 1), or no signature is left.
    """
    probability(level, "level")
    f = np.asarray(signatures, dtype=float)
    units = classes(f, scale=scale).units
    if units.shape[1] == 0:
        raise Refusal("no-signature", "every signature is zero", "there is no test value to set a limit for")
    units = np.round(units, 12) + 0.0
    return _of_units(units.tobytes(), units.shape, level, seed, max(points, 64))


def familywise_limit_of_correlation(
    correlation: Array, level: float, *, seed: int = SEED, points: int = POINTS
) -> FamilywiseLimit:
    """`familywise_limit` for test values of which the correlation is known instead of the signatures.

    Parameters
    ----------
    correlation : ndarray, shape (k, k)
        Of any rank.
    level, seed, points
        See `familywise_limit`.

    Returns
    -------
    FamilywiseLimit

    Raises
    ------
    Refusal
        If the matrix is not a correlation matrix: symmetric, ones on the diagonal, no negative eigenvalue.
    """
    c = np.asarray(correlation, dtype=float)
    square = c.ndim == 2 and c.shape[0] == c.shape[1]
    if not square or not np.allclose(c, c.T, atol=1e-9) or not np.allclose(np.diag(c), 1.0, atol=1e-9):
        raise Refusal("not-a-correlation", "a correlation matrix is symmetric with ones on its diagonal")
    values, vectors = np.linalg.eigh(0.5 * (c + c.T))
    if values[0] < -1e-9 * len(c):
        raise Refusal("not-a-correlation", f"the matrix has a negative eigenvalue, {values[0]:.3g}")
    live = values > 1e-12 * len(c)
    return familywise_limit(np.sqrt(values[live])[:, None] * vectors[:, live].T, level, seed=seed, points=points)


@lru_cache(maxsize=256)
def _of_units(data: bytes, shape: tuple[int, int], level: float, seed: int, points: int) -> FamilywiseLimit:
    f = np.round(_canonical(np.frombuffer(data).reshape(shape)), 9) + 0.0
    return _of_canonical(f.tobytes(), (f.shape[0], f.shape[1]), level, seed, points)


@lru_cache(maxsize=256)
def _of_canonical(data: bytes, shape: tuple[int, int], level: float, seed: int, points: int) -> FamilywiseLimit:
    f = np.frombuffer(data).reshape(shape)
    k = shape[1]
    single, independent = sidak_limit(level, 1), sidak_limit(level, k)
    if k == 1:
        return FamilywiseLimit(single, 1, 0.0, independent)
    if shape[0] == k and np.allclose(f, np.eye(k), rtol=0.0, atol=1e-8):
        return FamilywiseLimit(independent, k, 0.0, independent)
    size = max(32, min(points, TERMS // k) // BATCHES)
    c0 = independent
    # Points are best spent where c0 is near the limit itself: a few small rounds find the neighbourhood.
    for pilot in range(1, PILOTS + 1):
        c0 = _solve(f, level, c0, max(32, size // 16), (seed, pilot))[0]
    limit, error = _solve(f, level, c0, size, (seed, 0))
    return FamilywiseLimit(limit, k, error, independent)


def _solve(f: Array, level: float, c0: float, size: int, seed: tuple[int, int]) -> tuple[float, float]:
    """Limit and its standard error from BATCHES batches of `size` directions drawn for c0."""
    r, k = f.shape
    tails = [_tails(f, c0, size, np.random.default_rng([*seed, b])) for b in range(BATCHES)]
    largest, weight = (np.concatenate(part) for part in zip(*tails, strict=True))

    def alarm(c: float) -> Array:
        """Probability of an alarm at the limit c, by each batch."""
        terms = chdtrc(r, (c / largest) ** 2) * weight
        return np.asarray(terms.reshape(BATCHES, size).mean(axis=1))

    limit = _decreasing_root(lambda c: float(alarm(c).mean()) - level, sidak_limit(level, 1), sidak_limit(level, k))
    step = 1e-3
    slope = float((alarm(limit - step) - alarm(limit + step)).mean()) / (2 * step)
    scatter = float(np.std(alarm(limit), ddof=1)) / math.sqrt(BATCHES)
    return limit, scatter / slope


def _tails(f: Array, c0: float, size: int, rng: np.random.Generator) -> tuple[Array, Array]:
    """m(u) and its weight for directions u of the mixture, both of shape (size,)."""
    r, k = f.shape
    # Systematic choice of the test, so that each gets its share of the points.
    test = np.minimum(((np.arange(size) + rng.random()) * (k / size)).astype(np.int64), k - 1)
    x = np.clip(_shifted(size, r, rng), 1e-15, 1 - 1e-15)
    p = ndtri(x)
    p[:, 0] = -ndtri(x[:, 0] * ndtr(-c0))
    # A reflection takes the first axis onto the signature of the test; its sign does not matter.
    w = f[:, test].T.copy()
    w[:, 0] += np.where(w[:, 0] < 0, -1.0, 1.0)
    p -= w * (2 * np.einsum("nr,nr->n", w, p) / np.einsum("nr,nr->n", w, w))[:, None]
    along = np.abs((p / np.linalg.norm(p, axis=1, keepdims=True)) @ f)
    # What lies across the direction has no tail worth a figure; 1e-9 only keeps the quotient finite.
    total = chdtrc(r, (c0 / np.maximum(along, 1e-9)) ** 2).sum(axis=1)
    return along.max(axis=1), 2 * k * float(ndtr(-c0)) / total


_PRIMES = np.array([n for n in range(2, 312) if all(n % d for d in range(2, int(n**0.5) + 1))], dtype=float)


def _shifted(size: int, dimensions: int, rng: np.random.Generator) -> Array:
    """Points of Richtmyer 1951 (multiples of square roots of primes), shifted at random; beyond 64 axes random ones."""
    axes = min(dimensions, _PRIMES.size)
    x = rng.random((size, dimensions)) if axes < dimensions else np.empty((size, dimensions))
    x[:, :axes] = np.mod(np.arange(1.0, size + 1)[:, None] * np.sqrt(_PRIMES[:axes]) + rng.random(axes), 1.0)
    return x


def _canonical(units: Array) -> Array:
    """The same unit signatures up to signs, in the basis that they themselves define, shape (rank, k).

    Signs: each signature gets the sign that makes its product with the first earlier one it is not orthogonal to
    positive. Basis: Gram-Schmidt in the given order. Neither depends on the basis of parity space.
    """
    f = units.copy()
    gram = f.T @ f
    for j in range(1, f.shape[1]):
        near = np.flatnonzero(np.abs(gram[:j, j]) > DEPENDENT)
        if near.size and gram[near[0], j] < 0:
            f[:, j] *= -1
            gram[:, j] *= -1
            gram[j, :] *= -1
    basis = np.empty((f.shape[0], 0))
    for j in range(f.shape[1]):
        rest = f[:, j] - basis @ (basis.T @ f[:, j])
        rest -= basis @ (basis.T @ rest)
        length = float(np.linalg.norm(rest))
        if length > DEPENDENT:
            basis = np.column_stack([basis, rest / length])
            if basis.shape[1] == f.shape[0]:
                break
    out = basis.T @ f
    return np.asarray(out / np.linalg.norm(out, axis=0))


def _decreasing_root(function: Callable[[float], float], low: float, high: float) -> float:
    """Root within [low, high] by regula falsi with the Illinois rule; the nearer end where there is none."""
    at_low, at_high = function(low), function(high)
    if at_low <= 0:
        return low
    if at_high >= 0:
        return high
    side = 0
    for _ in range(100):
        middle = (low * at_high - high * at_low) / (at_high - at_low)
        value = function(middle)
        if value == 0 or high - low < 1e-13 * high:
            return middle
        if value > 0:
            moved, low, at_low = middle - low, middle, value
            at_high *= 0.5 if side > 0 else 1.0
            side = 1
        else:
            moved, high, at_high = high - middle, middle, value
            at_low *= 0.5 if side < 0 else 1.0
            side = -1
        if moved < 1e-14 * high:
            return middle
    return middle
