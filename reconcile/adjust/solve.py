"""From readings to the adjusted values: repeated linearisation, and sigmas that follow the adjusted value.

A linear case with absolute sigmas needs one pass. Products and functions are linearised at the current point
(successive linearisation: Crowe 1986; Pai & Fisher 1988), each step damped by an exact-penalty merit function.
A sigma stated in percent is evaluated at the adjusted value until it settles.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import SolveError
from ..system import Equations
from .dense import Adjuster, prepare

__all__ = ["Problem", "Solution", "solve"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

MAX_STEPS = 100
MAX_SIGMA_ROUNDS = 50


@dataclass(frozen=True)
class Problem:
    """One snapshot as arrays.

    Attributes
    ----------
    equations : callable
        ``equations(values of the readings (k,)) -> Equations`` with n columns; depends on the values only where
        a shared error is stated in percent.
    sigma : callable
        ``sigma(values of the readings (k,)) -> (k,)``.
    columns : ndarray of int, shape (k,)
        Column of each reading.
    readings : ndarray, shape (k,)
        nan where a reading is absent.
    fixed : ndarray of int
        Columns that are exactly known.
    start : ndarray, shape (n,)
        Exact values of the fixed columns; typical values or nan elsewhere.
    value_dependent : bool
        Whether any sigma depends on the value of its reading.
    settle : bool
        Whether such sigmas follow the adjusted value until they settle; else they are taken at the reading.
    lower, upper : ndarray, shape (n,)
        Bounds; used to choose a start.
    """

    equations: Callable[[Array], Equations]
    sigma: Callable[[Array], Array]
    columns: Ints
    readings: Array
    fixed: Ints
    start: Array
    value_dependent: bool
    settle: bool
    lower: Array
    upper: Array


@dataclass(frozen=True)
class Solution:
    """An adjusted snapshot.

    Attributes
    ----------
    x : ndarray, shape (n,)
        All columns; undetermined ones at an arbitrary value that satisfies the balances.
    parity : ndarray, shape (r,)
    adjuster : Adjuster
        Prepared at the solution; measured columns are `present`, unmeasured ones `free`.
    present : ndarray of int
        Indices of the readings that took part.
    free : ndarray of int
        Columns that were not read.
    equations : Equations
    jacobian : ndarray, shape (m, n)
        At the solution.
    sigma : ndarray, shape (k,)
        Sigma of every reading as it was used.
    steps, rounds : int
        Linearisations in the last round, and rounds of sigma.
    """

    x: Array
    parity: Array
    adjuster: Adjuster
    present: Ints
    free: Ints
    equations: Equations
    jacobian: Array
    sigma: Array
    steps: int
    rounds: int


def solve(problem: Problem, *, names: Callable[[int], str], row_names: Callable[[int], str]) -> Solution:
    """Adjust one snapshot.

    Parameters
    ----------
    problem : Problem
    names, row_names : callable
        Give the name of a column and of a row, for messages.

    Returns
    -------
    Solution

    Raises
    ------
    SolveError
        If no consistent solution was reached; the message names the worst balance and the most influential
        variable. Nothing half-solved is returned.
    """
    present = np.flatnonzero(np.isfinite(problem.readings))
    measured = problem.columns[present]
    taken = np.zeros(problem.start.size, dtype=bool)
    taken[measured] = True
    taken[problem.fixed] = True
    free = np.flatnonzero(~taken)
    values = np.where(np.isfinite(problem.readings), problem.readings, 0.0)
    x = _start(problem, present, free)
    solution = None
    for round_ in range(1, MAX_SIGMA_ROUNDS + 1):
        sigma = problem.sigma(values)
        _check_sigma(sigma[present], lambda i: names(int(measured[i])))
        equations = problem.equations(values)
        solution = _linearise(problem, equations, sigma, present, free, x, round_, names, row_names)
        x = solution.x
        if not (problem.settle and problem.value_dependent):
            return solution
        new = x[problem.columns]
        change = np.abs(problem.sigma(new)[present] - sigma[present]) / sigma[present]
        values = new
        if change.max(initial=0.0) < 1e-12:
            return solution
    if solution is not None and change.max() < 1e-6:
        return solution
    raise SolveError(
        f"sigmas stated in percent did not settle in {MAX_SIGMA_ROUNDS} rounds",
        code="sigma-unsettled",
        hint="state an absolute part for meters that read near zero",
    )


def _check_sigma(sigma: Array, name: Callable[[int], str]) -> None:
    bad = np.flatnonzero(~(sigma > 0) | ~np.isfinite(sigma))
    if bad.size:
        raise SolveError(
            f"the sigma of {name(int(bad[0]))} vanishes, since it is stated in percent of a value near zero",
            code="sigma-vanishes",
            hint="add an absolute part, e.g. sigma: [1 % of reading, 0.1 kg/h]",
        )


def _start(problem: Problem, present: Ints, free: Ints) -> Array:
    """Readings where there are some; then typical values; then anything of the right size inside the bounds."""
    x = problem.start.copy()
    x[problem.columns[present]] = problem.readings[present]
    empty = free[~np.isfinite(x[free])]
    typical = np.abs(problem.readings[present])
    scale = float(np.median(typical[typical > 0])) if np.any(typical > 0) else 1.0
    low, high = problem.lower[empty], problem.upper[empty]
    guess = np.where(
        np.isfinite(low) & np.isfinite(high),
        0.5 * (np.where(np.isfinite(low), low, 0.0) + np.where(np.isfinite(high), high, 0.0)),
        scale,
    )
    x[empty] = np.clip(guess, low, high)
    return x


def _linearise(
    problem: Problem,
    equations: Equations,
    sigma: Array,
    present: Ints,
    free: Ints,
    x: Array,
    round_: int,
    names: Callable[[int], str],
    row_names: Callable[[int], str],
) -> Solution:
    measured = problem.columns[present]
    y, s = problem.readings[present], sigma[present]

    def pass_at(x: Array) -> tuple[Adjuster, Array, Array, Array]:
        jacobian = equations.jacobian(x).toarray()
        rhs = jacobian @ x - equations.closure(x)
        known = rhs - jacobian[:, problem.fixed] @ x[problem.fixed]
        adjuster = prepare(jacobian[:, measured], jacobian[:, free], s)
        if equations.is_linear:
            reference = known
        else:  # undetermined directions stay where they are instead of jumping to zero
            reference = known - jacobian[:, free] @ x[free]
        xm, parity = adjuster.adjust(y[None], known)
        new = x.copy()
        new[measured] = xm[0]
        moved = adjuster.unmeasured(xm, reference)[0]
        new[free] = moved if equations.is_linear else x[free] + moved
        return adjuster, new, parity[0], jacobian

    if equations.is_linear:
        x = np.where(np.isfinite(x), x, 0.0)
        adjuster, x, parity, jacobian = pass_at(x)
        return Solution(x, parity, adjuster, present, free, equations, jacobian, sigma, 1, round_)

    x = _close_unmeasured(equations, x, free)
    penalty = np.zeros(equations.shape[0])
    small = 0
    for step in range(1, MAX_STEPS + 1):
        with np.errstate(all="ignore"):
            adjuster, target, parity, jacobian = _guarded(pass_at, x, equations, row_names)
        direction = target - x
        multiplier = np.abs(adjuster.rows_to_parity.T @ parity)
        penalty = np.maximum(penalty, 2.0 * multiplier)
        length = _line_search(equations, x, direction, measured, y, s, penalty)
        x = x + length * direction
        closure = np.abs(equations.closure(x)) / np.maximum(equations.largest_term(x), 1e-300)
        in_sigma = np.abs(length * direction[measured] / s).max(initial=0.0)
        relative = np.abs(length * direction[free]) / np.maximum(np.abs(x[free]), 1e-9)
        det = adjuster.observable
        small = (
            small + 1
            if (
                length == 1.0
                and closure.max(initial=0.0) < 1e-11
                and in_sigma < 1e-7
                and relative[det].max(initial=0.0) < 1e-8
            )
            else 0
        )
        if small:
            adjuster, target, parity, jacobian = pass_at(x)
            return Solution(target, parity, adjuster, present, free, equations, jacobian, sigma, step, round_)
    worst = int(np.argmax(closure))
    weight = np.abs(jacobian[worst]) * np.maximum(np.abs(x), 1e-12)
    weight[problem.fixed] = 0.0
    raise SolveError(
        f"balance {row_names(worst)!r} was not closed after {MAX_STEPS} steps (worst {closure[worst]:.1e} of its "
        f"largest term); nothing is exported. Most influential: {names(int(np.argmax(weight)))} at {x[np.argmax(weight)]:.6g}",
        code="no-convergence",
        hint="check its unit and value, or state an expected value under design:",
    )


def _guarded(
    pass_at: Callable[[Array], tuple[Adjuster, Array, Array, Array]],
    x: Array,
    equations: Equations,
    row_names: Callable[[int], str],
) -> tuple[Adjuster, Array, Array, Array]:
    try:
        return pass_at(x)
    except ValueError as error:
        bad = np.flatnonzero(~np.isfinite(equations.closure(x)))
        where = f" in balance {row_names(int(bad[0]))!r}" if bad.size else ""
        raise SolveError(
            f"the balances are not finite{where} at the current values ({error})",
            code="not-finite",
            hint="check units and expected values",
        ) from error


def _close_unmeasured(equations: Equations, x: Array, free: Ints) -> Array:
    """Move only the unmeasured variables towards closed balances, linear rows first, then all of them."""
    products = np.zeros(equations.shape[0], dtype=bool)
    products[np.diff(equations.products.indptr) > 0] = True
    for coefficient, _ in equations.calls:
        products[np.diff(coefficient.indptr) > 0] = True
    for rows in (np.flatnonzero(~products), *([np.arange(equations.shape[0])] * 5)):
        if not rows.size or not free.size:
            continue
        with np.errstate(all="ignore"):
            closure = equations.closure(x)
            jacobian = equations.jacobian(x)[rows][:, free].toarray()
        if not np.all(np.isfinite(closure)) or not np.all(np.isfinite(jacobian)):
            return x
        size = np.maximum(np.abs(x[free]), 1e-3)
        weight = 1.0 / np.maximum(equations.largest_term(x)[rows], 1e-12)
        step = size * (np.linalg.pinv(weight[:, None] * jacobian * size, rcond=1e-10) @ (-weight * closure[rows]))
        limit = np.abs(step / (3.0 * size)).max(initial=0.0)
        x = x.copy()
        x[free] += step / max(1.0, limit)
    return x


def _line_search(
    equations: Equations, x: Array, direction: Array, measured: Ints, y: Array, s: Array, penalty: Array
) -> float:
    """Longest of 1, 1/2, 1/4, ... that lowers the exact-penalty merit function enough."""

    def merit(z: Array) -> float:
        with np.errstate(all="ignore"):
            value = 0.5 * (((y - z[measured]) / s) ** 2).sum() + (penalty * np.abs(equations.closure(z))).sum()
        return float(value) if np.isfinite(value) else np.inf

    before = merit(x)
    objective_slope = -(((y - x[measured]) / s) * (direction[measured] / s)).sum()
    slope = objective_slope - (penalty * np.abs(equations.closure(x))).sum()
    length = 1.0
    floor = 1e-13 * max(1.0, abs(before))
    while length > 1e-6:
        if merit(x + length * direction) <= before + 1e-4 * length * min(slope, 0.0) + floor:
            return length
        length *= 0.5
    return length
