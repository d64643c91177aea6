"""The classical step-by-step methods for several gross errors, kept for comparison under their own names.

They work on the parity vector; with uncorrelated readings ``z_i = f_i'p / |f_i|`` is the measurement test of maximum
power (Mah & Tamhane 1982, AIChE J. 28, 828), and its square the generalised likelihood ratio (Narasimhan & Mah 1987,
AIChE J. 33, 1514). Each step looks at one more fault only, so a wrong first step is never taken back; `explain` looks
at sets.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import ndtri

from .lookalike import PARALLEL, classes

__all__ = ["Flagged", "collective_compensation", "serial_compensation", "serial_elimination"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Flagged:
    """What a step-by-step method flags in N trials.

    Attributes
    ----------
    flagged : ndarray of bool, shape (N, k)
    sizes : ndarray, shape (N, k)
        Estimated size of each flagged fault in its own unit; nan where not flagged.
    steps : ndarray of int, shape (N,)
        How many were flagged.
    """

    flagged: Bools
    sizes: Array
    steps: npt.NDArray[np.int64]


def _limit(level: float, count: int) -> float:
    """Two-sided limit at the level that Sidak 1967 gives to each of `count` tests."""
    return float(-ndtri(-0.5 * np.expm1(np.log1p(-level) / count)))


def _worst(z: Array) -> npt.NDArray[np.int64]:
    """Largest |z| of each row; what ties up to rounding is taken in order of index."""
    size = np.abs(z)
    return np.argmax(size >= size.max(axis=1, keepdims=True) * (1 - 1e-9), axis=1)


def _start(parity: Array, signatures: Array, scale: npt.ArrayLike | None) -> tuple[Array, Array, Bools]:
    p = np.array(parity, dtype=float, ndmin=2)
    f = np.asarray(signatures, dtype=float)
    alike = classes(f, scale=scale)
    checked = alike.label >= 0
    unit = np.where(checked, f / np.where(checked, alike.norms, 1.0), 0.0)
    return p, unit, checked


def serial_elimination(
    parity: Array, signatures: Array, *, level: float = 0.05, scale: npt.ArrayLike | None = None
) -> Flagged:
    """Serial elimination: drop the worst reading, adjust again, until none exceeds its limit.

    The limit is Sidak's over the readings that are still redundant. It stops when no redundancy is left (Ripps 1965;
    Serth & Heenan 1986, AIChE J. 32, 733). Dropping a reading is projecting its signature out of the parity space.

    Parameters
    ----------
    parity : ndarray, shape (N, r) or (r,)
    signatures : ndarray, shape (r, k)
    level : float
    scale : array of shape (k,), optional
        See `lookalike.classes`.

    Returns
    -------
    Flagged
        Sizes are those of all dropped readings together.
    """
    p, unit, checked = _start(parity, signatures, scale)
    n, k = p.shape[0], unit.shape[1]
    flagged = np.zeros((n, k), dtype=bool)
    # Trials that have dropped the same readings share what is left of the parity space.
    paths: list[tuple[frozenset[int], npt.NDArray[np.int64]]] = [(frozenset(), np.arange(n))]
    while paths:
        following: dict[frozenset[int], list[npt.NDArray[np.int64]]] = {}
        for dropped, trials in paths:
            z, alive = _tests_without(p[trials], unit, checked, sorted(dropped))
            if not alive.any():
                continue
            worst = _worst(z)
            over = np.abs(z[np.arange(trials.size), worst]) > _limit(level, int(alive.sum()))
            for j in np.unique(worst[over]):
                which = trials[over & (worst == j)]
                flagged[which, j] = True
                following.setdefault(dropped | {int(j)}, []).append(which)
        paths = [(s, np.concatenate(t)) for s, t in following.items()]
    return _with_joint_sizes(p, np.asarray(signatures, dtype=float), flagged)


def _tests_without(p: Array, unit: Array, checked: Bools, dropped: list[int]) -> tuple[Array, Bools]:
    left = unit
    if dropped:
        q = np.linalg.qr(unit[:, dropped])[0]
        left = unit - q @ (q.T @ unit)
        left -= q @ (q.T @ left)
    norm = np.linalg.norm(left, axis=0)
    alive = checked & (norm**2 > PARALLEL)
    alive[dropped] = False
    return np.where(alive, p @ left / np.where(alive, norm, 1.0), 0.0), alive


def serial_compensation(
    parity: Array,
    signatures: Array,
    *,
    level: float = 0.05,
    most: int | None = None,
    scale: npt.ArrayLike | None = None,
) -> Flagged:
    """Serial compensation: subtract the most likely fault with its estimated size, and test again.

    A size is estimated once and never revised (Narasimhan & Mah 1987). The limit is Sidak's over all candidates that
    are checked, at every step.

    Parameters
    ----------
    parity : ndarray, shape (N, r) or (r,)
    signatures : ndarray, shape (r, k)
    level : float
    most : int, optional
        Most faults to look for; the number of checks when left out.
    scale : array of shape (k,), optional
        See `lookalike.classes`.

    Returns
    -------
    Flagged
    """
    return _compensate(parity, signatures, level, most, scale, jointly=False)


def collective_compensation(
    parity: Array,
    signatures: Array,
    *,
    level: float = 0.05,
    most: int | None = None,
    scale: npt.ArrayLike | None = None,
) -> Flagged:
    """Serial identification with collective compensation: as serial, but all sizes are estimated again at every step.

    Keller, Darouach & Krzakala 1994; Jiang & Bagajewicz 1999, Ind. Eng. Chem. Res. 38, 2119. A candidate whose
    signature depends on those of the faults found already is passed over: its size could not be estimated beside
    theirs.

    Parameters
    ----------
    parity, signatures, level, most, scale
        See `serial_compensation`.

    Returns
    -------
    Flagged
    """
    return _compensate(parity, signatures, level, most, scale, jointly=True)


def _compensate(
    parity: Array, signatures: Array, level: float, most: int | None, scale: npt.ArrayLike | None, *, jointly: bool
) -> Flagged:
    p, unit, checked = _start(parity, signatures, scale)
    n, k = p.shape[0], unit.shape[1]
    flagged = np.zeros((n, k), dtype=bool)
    sizes = np.full((n, k), np.nan)
    if not checked.any():
        return Flagged(flagged, sizes, flagged.sum(axis=1))
    limit = _limit(level, int(checked.sum()))
    norms = np.linalg.norm(signatures, axis=0)
    rest, active = p.copy(), np.arange(n)
    for _ in range(min(most if most is not None else p.shape[1], int(checked.sum()))):
        open_ = checked & ~flagged[active]
        if jointly:
            open_ &= _estimable(unit, flagged[active])
        z = np.where(open_, rest[active] @ unit, 0.0)
        worst = _worst(z)
        value = z[np.arange(active.size), worst]
        over = np.abs(value) > limit
        active, worst, value = active[over], worst[over], value[over]
        if active.size == 0:
            break
        flagged[active, worst] = True
        if jointly:
            for pattern, trials in _patterns(flagged, active):
                q = np.linalg.qr(unit[:, pattern])[0]
                rest[trials] = p[trials] - (p[trials] @ q) @ q.T
        else:
            sizes[active, worst] = value / norms[worst]
            rest[active] -= value[:, None] * unit[:, worst].T
    if jointly:
        return _with_joint_sizes(p, np.asarray(signatures, dtype=float), flagged)
    return Flagged(flagged, sizes, flagged.sum(axis=1))


def _patterns(flagged: Bools, trials: npt.NDArray[np.int64]) -> list[tuple[Bools, npt.NDArray[np.int64]]]:
    unique, where = np.unique(flagged[trials], axis=0, return_inverse=True)
    return [(row, trials[where.ravel() == i]) for i, row in enumerate(unique)]


def _estimable(unit: Array, flagged: Bools) -> Bools:
    out = np.ones_like(flagged)
    for pattern, trials in _patterns(flagged, np.arange(flagged.shape[0])):
        if pattern.any():
            q = np.linalg.qr(unit[:, pattern])[0]
            left = unit - q @ (q.T @ unit)
            out[trials] = np.einsum("rk,rk->k", left, left) > PARALLEL
    return out


def _with_joint_sizes(p: Array, f: Array, flagged: Bools) -> Flagged:
    sizes = np.full(flagged.shape, np.nan)
    norms = np.linalg.norm(f, axis=0)
    for pattern, trials in _patterns(flagged, np.arange(flagged.shape[0])):
        if pattern.any():
            solved = np.linalg.lstsq(f[:, pattern] / norms[pattern], p[trials].T, rcond=None)[0]
            sizes[np.ix_(trials, np.flatnonzero(pattern))] = solved.T / norms[pattern]
    return Flagged(flagged, sizes, flagged.sum(axis=1))
