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

from ..errors import PluginError, SolveError
from ..system import Equations
from .accelerate import Acceleration
from .dense import Adjuster, prepare

__all__ = ["Problem", "Rival", "Solution", "solve"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

MAX_STEPS = 100
FADED = 1e-15
"""Share of its typical size below which the value of an unmeasured variable is rounding."""


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
class Rival:
    """Another answer that closes the same balances.

    Attributes
    ----------
    objective : float
        What it leaves; compare with the square of the parity vector.
    column : int
        Where it differs most, in sigmas.
    value : float
        Its value there.
    """

    objective: float
    column: int
    value: float


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
    steps : int
        Linearisations that were needed.
    rival : Rival or None
        Another answer, where one was looked for and found.
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
    rival: Rival | None = None


def solve(
    problem: Problem, *, names: Callable[[int], str], row_names: Callable[[int], str], start: Array | None = None
) -> Solution:
    """Adjust one snapshot.

    Parameters
    ----------
    problem : Problem
    names, row_names : callable
        Give the name of a column and of a row, for messages.
    start : ndarray, shape (n,), optional
        Where to start products and functions from; computed from the readings when left out.

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
    taken = np.zeros(problem.start.size, dtype=bool)
    taken[problem.columns[present]] = True
    taken[problem.fixed] = True
    free = np.flatnonzero(~taken)
    x = _start(problem, present, free) if start is None else start
    # Sigmas start at the readings; absent ones do not count, so any value serves.
    values = np.where(np.isfinite(problem.readings), problem.readings, 0.0)
    step = _Linearised(problem, present, free, names, row_names)
    if not problem.value_dependent and problem.equations(values).is_linear:
        return step.at(np.where(np.isfinite(x), x, 0.0), values).solution(1)
    if start is None and not problem.equations(values).is_linear:
        x = _close_unmeasured(problem.equations(values), x, free)
    return _iterate(step, x, values)


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


@dataclass(frozen=True)
class _Pass:
    """One linearisation, and where it leads."""

    x: Array
    target: Array
    parity: Array
    adjuster: Adjuster
    jacobian: Array
    equations: Equations
    sigma: Array
    step: _Linearised

    def spread_of_terms(self) -> Array:
        """Largest spread of a term of each row: the size of a row in which every value is zero, as of what is absent."""
        spread = np.zeros(self.x.size)
        spread[self.step.measured] = np.linalg.norm(self.adjuster.cover, axis=1)
        spread[self.step.free] = np.nan_to_num(np.linalg.norm(self.adjuster.cover_unmeasured, axis=1))
        spread = np.maximum(spread, 1e-9 * self.step.size)
        return (np.abs(self.jacobian) * spread).max(axis=1, initial=0.0)

    def solution(self, steps: int) -> Solution:
        s = self.step
        return Solution(
            self.target, self.parity, self.adjuster, s.present, s.free, self.equations, self.jacobian, self.sigma, steps
        )


class _Linearised:
    """Solves the snapshot with the balances linearised, and the sigmas taken, at a given point."""

    def __init__(
        self,
        problem: Problem,
        present: Ints,
        free: Ints,
        names: Callable[[int], str],
        row_names: Callable[[int], str],
    ) -> None:
        self.problem, self.present, self.free, self.names, self.row_names = problem, present, free, names, row_names
        self.measured = problem.columns[present]
        self.y = problem.readings[present]
        # Typical sizes of unmeasured variables, for those that are zero at the solution.
        self.size = np.zeros(problem.start.size)

    def at(self, x: Array, values: Array) -> _Pass:
        problem, free = self.problem, self.free
        sigma = problem.sigma(values)
        _check_sigma(sigma[self.present], lambda i: self.names(int(self.measured[i])))
        equations = problem.equations(values)
        closure = equations.closure(x)
        # A value that is only rounding is none: scaling would make a coefficient of it count.
        jacobian = equations.jacobian(np.where(np.abs(x) < FADED * self.size, 0.0, x)).toarray()
        if not np.all(np.isfinite(closure)) or not np.all(np.isfinite(jacobian)):
            bad = np.flatnonzero(~np.isfinite(closure) | ~np.isfinite(jacobian).all(axis=1))
            raise SolveError(
                f"balance {self.row_names(int(bad[0]))!r} is not a finite number at the current values",
                code="not-finite",
                hint="check units and expected values",
            )
        try:
            adjuster = prepare(jacobian[:, self.measured], jacobian[:, free], sigma[self.present])
        except (ValueError, np.linalg.LinAlgError) as error:
            raise SolveError(
                "the balances lose their meaning on the way to an answer: coefficients vanish or grow without end",
                code="no-convergence",
                hint="check units and values, or state expected values under design:",
            ) from error
        target = x.copy()
        if equations.is_linear:
            known = jacobian @ x - closure - jacobian[:, problem.fixed] @ x[problem.fixed]
            adjusted, parity = adjuster.adjust(self.y[None], known)
            target[self.measured] = adjusted[0]
            target[free] = adjuster.unmeasured(adjusted, known)[0]
        else:
            # In steps, not in values: a coefficient that fades at the solution then counts for nothing, and undetermined
            # directions stay where they are.
            moved, parity = adjuster.adjust((self.y - x[self.measured])[None], -closure)
            target[self.measured] += moved[0]
            target[free] += adjuster.unmeasured(moved, -closure)[0]
        return _Pass(x, target, parity[0], adjuster, jacobian, equations, sigma, self)


def _iterate(step: _Linearised, x: Array, values: Array) -> Solution:
    """Repeat the linearised solution until balances, values and sigmas have settled."""
    problem, measured, free = step.problem, step.measured, step.free
    x = np.where(np.isfinite(x), x, 0.0)
    penalty = np.zeros(problem.equations(values).shape[0])
    size = np.zeros(x.size)
    size[measured], size[free] = problem.sigma(values)[step.present], np.maximum(np.abs(x[free]), 1e-6)
    step.size[free] = size[free]
    memory = Acceleration(size)
    for count in range(1, MAX_STEPS + 1):
        with np.errstate(all="ignore"):
            now = step.at(x, values)
        s = now.sigma[step.present]
        direction = now.target - x
        in_sigma = np.abs(direction[measured] / s).max(initial=0.0)
        terms = now.equations.largest_term(x)
        if in_sigma < 1e-5:
            terms = np.maximum(terms, now.spread_of_terms())
        closure = np.abs(now.equations.closure(x)) / np.maximum(terms, 1e-300)
        relative = np.abs(direction[free]) / np.maximum(np.abs(x[free]), 1e-9)
        settled = in_sigma < 1e-7 and relative[now.adjuster.observable].max(initial=0.0) < 1e-8
        if count > 1 and settled and closure.max(initial=0.0) < 1e-11:
            return now.solution(count)
        penalty = np.maximum(penalty, 2.0 * np.abs(now.adjuster.rows_to_parity.T @ now.parity))
        if in_sigma < 1e-5 and closure.max(initial=0.0) < 1e-8:
            # So near to the end the merit function is all rounding, and the full step is the right one.
            x = now.target
        else:
            x = _next_point(now, direction, penalty, memory)
        if problem.settle:
            values = x[problem.columns]
    worst = int(np.argmax(closure))
    weight = np.abs(now.jacobian[worst]) * np.maximum(np.abs(x), 1e-12)
    weight[problem.fixed] = 0.0
    most = int(np.argmax(weight))
    raise SolveError(
        f"no consistent answer in {MAX_STEPS} steps: balance {step.row_names(worst)!r} closes to {closure[worst]:.1e} of its "
        f"largest term, values still move by {in_sigma:.1e} sigma; nothing is exported. Most influential: "
        f"{step.names(most)} at {x[most]:.6g}",
        code="no-convergence",
        hint="check its unit and value, or state an expected value under design:",
    )


def _next_point(now: _Pass, direction: Array, penalty: Array, memory: Acceleration) -> Array:
    """Damped step from one linearisation, or a leap over several where that lowers the merit function."""
    merit = _Merit(now, penalty)
    length = merit.search(direction)
    if length < 1.0:
        memory.forget()
        return np.asarray(now.x + length * direction)
    leap = memory.propose(now.x, direction)
    if leap is not None and merit(leap) <= merit(now.x):
        return leap
    return now.target


def _close_unmeasured(equations: Equations, x: Array, free: Ints) -> Array:
    """Move only the unmeasured variables towards closed balances, linear rows first, then all of them."""
    products = np.zeros(equations.shape[0], dtype=bool)
    products[np.diff(equations.products.indptr) > 0] = True
    for coefficient, _ in equations.calls:
        products[np.diff(coefficient.indptr) > 0] = True
    for rows in (np.flatnonzero(~products), *([np.arange(equations.shape[0])] * 5)):
        if not rows.size or not free.size:
            continue
        try:
            with np.errstate(all="ignore"):
                closure = equations.closure(x)
                jacobian = equations.jacobian(x)[rows][:, free].toarray()
        except PluginError:
            return x
        if not np.all(np.isfinite(closure)) or not np.all(np.isfinite(jacobian)):
            return x
        size = np.maximum(np.abs(x[free]), 1e-3)
        weight = 1.0 / np.maximum(equations.largest_term(x)[rows], 1e-12)
        step = size * (np.linalg.pinv(weight[:, None] * jacobian * size, rcond=1e-10) @ (-weight * closure[rows]))
        limit = np.abs(step / (3.0 * size)).max(initial=0.0)
        x = x.copy()
        x[free] += step / max(1.0, limit)
    return x


class _Merit:
    """Exact-penalty merit function of one step: objective and closures together."""

    def __init__(self, now: _Pass, penalty: Array) -> None:
        self.now, self.penalty = now, penalty
        self.s = now.sigma[now.step.present]

    def __call__(self, z: Array) -> float:
        with np.errstate(all="ignore"):
            off = (self.now.step.y - z[self.now.step.measured]) / self.s
            try:
                closure = self.now.equations.closure(z)
            except PluginError:  # a function of a domain does not reach that far: the step is too long
                return np.inf
            value = 0.5 * (off**2).sum() + (self.penalty * np.abs(closure)).sum()
        return float(value) if np.isfinite(value) else np.inf

    def search(self, direction: Array) -> float:
        """Longest of 1, 1/2, 1/4, ... that lowers the merit function enough."""
        x, measured = self.now.x, self.now.step.measured
        before = self(x)
        off = (self.now.step.y - x[measured]) / self.s
        slope = -(off * (direction[measured] / self.s)).sum()
        slope -= (self.penalty * np.abs(self.now.equations.closure(x))).sum()
        length = 1.0
        floor = 1e-12 * max(1.0, abs(before))
        while length > 1e-6:
            if self(x + length * direction) <= before + 1e-4 * length * min(slope, 0.0) + floor:
                return length
            length *= 0.5
        return length
