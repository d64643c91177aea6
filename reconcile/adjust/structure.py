"""Why something cannot be checked or calculated, and which further reading would change that."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import numpy.typing as npt

from .eliminate import Elimination, dependent_rows, eliminate

__all__ = ["additions_to_calculate", "additions_to_check", "checks", "ties"]

Array = npt.NDArray[np.float64]

MAX_TRIALS = 400


def checks(measured: Array, unmeasured: Array) -> Array:
    """Independent checks as sparse combinations of the original rows.

    Parameters
    ----------
    measured : ndarray, shape (m, n)
    unmeasured : ndarray, shape (m, n_u)

    Returns
    -------
    ndarray, shape (r, m)
        Each combination is free of unmeasured variables; rows that are free of them already come out alone.
    """
    m = measured.shape[0]
    free = ~np.any(unmeasured != 0, axis=1) if unmeasured.size else np.ones(m, dtype=bool)
    alone = np.eye(m)[free]
    mixed = np.flatnonzero(~free)
    combined = np.zeros((0, m))
    if mixed.size:
        found = dependent_rows(unmeasured[mixed])
        combined = np.zeros((len(found), m))
        combined[:, mixed] = found
    every = np.vstack([alone, combined])
    live = np.any(np.abs(every @ measured) > 1e-9 * np.abs(measured).max(initial=1.0), axis=1)
    every = every[live]
    implied = dependent_rows(every @ measured)
    drop = [int(np.flatnonzero(row)[-1]) for row in implied]
    return np.delete(every, drop, axis=0)


def ties(elimination: Elimination, variable: int) -> dict[int, float]:
    """Smallest combination of undetermined variables that is known although each alone is not.

    Parameters
    ----------
    elimination : Elimination
    variable : int
        Index of an unobservable unmeasured variable.

    Returns
    -------
    dict of int to float
        Unmeasured variables and coefficients of a known combination that holds `variable`; empty where no
        balance ties it to a reading.
    """
    open_ = np.flatnonzero(~elimination.observable)
    null = elimination.null[open_]
    scale = np.abs(null).max(axis=0)
    known = dependent_rows(null / np.where(scale > 0, scale, 1.0))
    position = int(np.flatnonzero(open_ == variable)[0])
    holding = [row for row in known if abs(row[position]) > 1e-9]
    if not holding:
        return {}
    row = min(holding, key=np.count_nonzero)
    row = row / row[position]
    return {int(open_[i]): float(row[i]) for i in np.flatnonzero(row)}


def additions_to_check(measured: Array, unmeasured: Array, reading: int, limit: int = 3) -> list[tuple[int, ...]]:
    """Smallest sets of unmeasured variables that would make a reading checked if they were read.

    Parameters
    ----------
    measured, unmeasured : ndarray, shapes (m, n) and (m, n_u)
    reading : int
        Index of the unchecked reading.
    limit : int
        At most so many sets.

    Returns
    -------
    list of tuple of int
        Single variables where one is enough, else pairs; empty where neither helps.
    """

    def helps(extra: tuple[int, ...]) -> bool:
        rest = np.delete(unmeasured, list(extra), axis=1)
        column = eliminate(rest).keep @ measured[:, reading]
        return bool(np.linalg.norm(column) > 1e-9 * np.linalg.norm(measured[:, reading]))

    return _smallest(unmeasured.shape[1], helps, limit)


def additions_to_calculate(unmeasured: Array, variable: int, limit: int = 3) -> list[tuple[int, ...]]:
    """Smallest sets of other unmeasured variables that would make one observable if they were read."""

    def helps(extra: tuple[int, ...]) -> bool:
        if variable in extra:
            return False
        keep = [i for i in range(unmeasured.shape[1]) if i not in extra]
        return bool(eliminate(unmeasured[:, keep]).observable[keep.index(variable)])

    return _smallest(unmeasured.shape[1], helps, limit)


def _smallest(count: int, helps: object, limit: int) -> list[tuple[int, ...]]:
    assert callable(helps)
    trials = 0
    singles: list[tuple[int, ...]] = []
    for i in range(count):
        trials += 1
        if trials > MAX_TRIALS:
            return singles[:limit]
        if helps((i,)):
            singles.append((i,))
    if singles:
        return singles[:limit]
    pairs: list[tuple[int, ...]] = []
    for pair in combinations(range(count), 2):
        trials += 1
        if trials > MAX_TRIALS or len(pairs) >= limit:
            break
        if helps(pair):
            pairs.append(pair)
    return pairs
