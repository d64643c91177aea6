"""Whether products leave one answer or two: a nonlinear snapshot solved once more from another start.

Successive linearisation finds an answer near its start. Another start that ends elsewhere proves that there are two;
one that ends at the same place proves nothing, but is what can be done without searching everywhere.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from ..errors import PluginError, SolveError
from .solve import Problem, Rival, Solution, solve

__all__ = ["solve_and_check"]

Array = npt.NDArray[np.float64]

SAME = 1e-6
"""Answers that differ by less than this share of a sigma are one."""
READINGS_MOVE = 3.0
"""How many sigmas from the readings the second start is."""
UNREAD_MOVE = 3.0
"""By what factor unread variables are larger or smaller in the second start; of the other sign if they may."""


def solve_and_check(problem: Problem, *, names: Callable[[int], str], row_names: Callable[[int], str]) -> Solution:
    """Adjust one snapshot, and say so where a second start ends at another answer.

    Of two answers the one inside the bounds counts, then the one nearer to the readings; the other is its `rival`.

    Parameters
    ----------
    problem, names, row_names
        See `solve`.

    Returns
    -------
    Solution

    Raises
    ------
    SolveError
        If the first start finds no consistent answer.
    """
    first = solve(problem, names=names, row_names=row_names)
    if first.equations.is_linear:
        return first
    try:
        second = solve(problem, names=names, row_names=row_names, start=_elsewhere(problem, first))
    except (SolveError, PluginError):  # no answer from there is no evidence of a second one
        return first
    apart = _distance(first, second, problem)
    if apart.max(initial=0.0) <= SAME:
        return first
    better, other = sorted([first, second], key=lambda s: (_outside(problem, s), float(s.parity @ s.parity)))
    if _outside(problem, other) and not _outside(problem, better):
        return better
    column = int(np.argmax(apart))
    return replace(better, rival=Rival(float(other.parity @ other.parity), column, float(other.x[column])))


def _elsewhere(problem: Problem, first: Solution) -> Array:
    """A start away from the answer on both sides, the same for everybody."""
    # Multiples of the golden ratio fall on both sides of one half in an order without a period.
    side = np.where(np.modf((1 + np.arange(first.x.size)) * 0.6180339887498949)[0] < 0.5, -1.0, 1.0)
    x = first.x.copy()
    read = problem.columns[first.present]
    x[read] = problem.readings[first.present] + READINGS_MOVE * side[read] * first.sigma[first.present]
    mirror = np.where((problem.lower < 0) & (problem.upper > 0), -1.0, 1.0)
    x[first.free] *= (mirror * UNREAD_MOVE**side)[first.free]
    moved = np.concatenate([read, first.free])
    x[moved] = np.clip(x[moved], problem.lower[moved], problem.upper[moved])
    return x


def _distance(first: Solution, second: Solution, problem: Problem) -> Array:
    """How far two answers are apart, in sigmas; by what the balances determine in both, shape (n,)."""
    out = np.zeros(first.x.size)
    move = np.abs(first.x - second.x)
    read = problem.columns[first.present]
    out[read] = move[read] / first.sigma[first.present]
    known = first.adjuster.observable & second.adjuster.observable
    free = first.free[known]
    spread = np.linalg.norm(first.adjuster.cover_unmeasured[known], axis=1)
    out[free] = move[free] / np.maximum(spread + np.abs(first.x[free]), 1e-9)
    return out


def _outside(problem: Problem, solution: Solution) -> bool:
    """Whether any determined value lies clearly outside its bounds."""
    columns = np.concatenate([problem.columns[solution.present], solution.free[solution.adjuster.observable]])
    x = solution.x[columns]
    slack = 1e-9 * (1.0 + np.abs(x))
    return bool(np.any((x < problem.lower[columns] - slack) | (x > problem.upper[columns] + slack)))
