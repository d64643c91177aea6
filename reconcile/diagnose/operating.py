"""One fault at several operating points: constant, or growing with the reading.

A leak, an unmetered steady user and a zero offset are the same at every flow; an error of scale is proportional to the
true value. Over snapshots each is one column of the stacked evidence, ``t_s = f_s b`` or ``t_s = f_s g v_s`` with the value
v_s that the other readings imply (the reading with the fault taken out), so that competing models are compared by what
they leave of the sum of squares. The error of v_s itself is neglected: the fitted scale is off by about its square over the
mean square of v_s (errors in variables).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .critical import chi2_limit, chi2_p, noncentrality
from .refusal import Refusal

__all__ = ["Fit", "LevelPlan", "Stack", "both_terms", "fit_column", "plan_level", "stack_columns"]

Array = npt.NDArray[np.float64]

MAX_RATIO = 1e3


@dataclass(frozen=True)
class Stack:
    """Sums over snapshots that a regression of the evidence on columns needs.

    Attributes
    ----------
    square : float
        Sum of squares of all parity vectors.
    checks : int
        All their checks together.
    product : ndarray, shape (c,)
        Products of each column with the evidence.
    gram : ndarray, shape (c, c)
        Products of the columns with each other.
    """

    square: float
    checks: int
    product: Array
    gram: Array


@dataclass(frozen=True)
class Fit:
    """A model of one fault.

    Attributes
    ----------
    size, sigma : float
    left, limit, p : float
        Sum of squares that remains, with its limit and p-value.
    checks : int
        Checks that remain.
    survives : bool
        Whether it is not rejected; with no check left nothing can reject it.
    """

    size: float
    sigma: float
    left: float
    limit: float
    p: float
    checks: int
    survives: bool


def stack_columns(parts: Sequence[tuple[Array, Array, Array]]) -> Stack:
    """Sum up the evidence and the columns of all models.

    Parameters
    ----------
    parts : sequence of (parity (n, r), signatures (r, c), weight (n, c))
        Column j of snapshot s is ``weight[s, j] * signatures[:, j]``: weight 1 for a constant fault, the value of
        the reading for one of scale.

    Returns
    -------
    Stack
    """
    if not parts:
        raise Refusal("no-check", "no snapshot has a check")
    c = parts[0][1].shape[1]
    square, checks, product, gram = 0.0, 0, np.zeros(c), np.zeros((c, c))
    for parity, signatures, weight in parts:
        square += float((parity**2).sum())
        checks += parity.size
        product += ((parity @ signatures) * weight).sum(axis=0)
        gram += (weight.T @ weight) * (signatures.T @ signatures)
    return Stack(square, checks, product, gram)


def fit_column(stack: Stack, column: int, level: float = 0.05) -> Fit:
    """Fit one fault.

    Parameters
    ----------
    stack : Stack
    column : int
    level : float

    Returns
    -------
    Fit
        With nan size where the column is zero: nothing checks that fault.
    """
    information = stack.gram[column, column]
    rest = stack.checks - 1
    if not information > 0:
        return _judged(np.nan, np.nan, stack.square, stack.checks, level)
    size = stack.product[column] / information
    left = max(float(stack.square - stack.product[column] * size), 0.0)
    return _judged(float(size), float(information**-0.5), left, rest, level)


def both_terms(stack: Stack, columns: tuple[int, int], level: float = 0.05) -> tuple[Fit, Fit]:
    """Fit two faults together, each with its size; nan sizes where the evidence cannot tell them apart.

    Parameters
    ----------
    stack : Stack
    columns : (int, int)
    level : float

    Returns
    -------
    first, second : Fit
        The same leftover in both.
    """
    chosen = list(columns)
    gram = stack.gram[np.ix_(chosen, chosen)]
    scale = np.sqrt(np.diag(gram))
    if not np.all(scale > 0) or abs(gram[0, 1]) >= (1 - 1e-9) * scale[0] * scale[1]:
        empty = _judged(np.nan, np.nan, stack.square, stack.checks, level)
        return empty, empty
    inverse = np.linalg.inv(gram / np.outer(scale, scale)) / np.outer(scale, scale)
    size = inverse @ stack.product[chosen]
    left = max(float(stack.square - stack.product[chosen] @ size), 0.0)
    one, two = (
        _judged(float(b), float(np.sqrt(v)), left, stack.checks - 2, level)
        for b, v in zip(size, np.diag(inverse), strict=True)
    )
    return one, two


def _judged(size: float, sigma: float, left: float, checks: int, level: float) -> Fit:
    limit = chi2_limit(level, checks)
    return Fit(size, sigma, left, limit, chi2_p(left, checks), max(checks, 0), checks <= 0 or bool(left <= limit))


@dataclass(frozen=True)
class LevelPlan:
    """Values at which one more snapshot would tell a constant fault from one of scale.

    Attributes
    ----------
    below, above : float
        Tells at or below the one, at or above the other; nan where no value on that side does.
    needed : float
        Sum of squares by which the wrong one of the two would then be missed on average.
    """

    below: float
    above: float
    needed: float


def plan_level(
    values: Array, norms: Array, offset: float, *, next_norm: float, level: float = 0.05, power: float = 0.9
) -> LevelPlan:
    """At which value one more snapshot tells a constant fault from a proportional one, with a chosen chance.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Values of the reading so far (implied by the others).
    norms : ndarray, shape (n,)
        Length of the fault's signature in each snapshot: evidence per unit of its size.
    offset : float
        Size of the constant fault that was found.
    next_norm : float
        Length in the snapshot to come.
    level, power : float
        Size of the test that rejects the wrong model, and chance that it does.

    Returns
    -------
    LevelPlan
        Values between zero and 1000 times the largest so far are considered; both directions must be told, whichever
        of the two is true.
    """
    v, w = np.asarray(values, dtype=float), np.asarray(norms, dtype=float) ** 2
    needed = noncentrality(level, power, 1)
    centre = float((w @ np.abs(v)) / w.sum())
    scale = float((w @ v) * offset / (w @ v**2)) if np.any(v) else np.nan

    def told(u: float) -> float:
        """Smaller of the two noncentralities at a value of the next reading."""
        one = next_norm**2
        s0, s1, s2 = w.sum() + one, w @ np.abs(v) + one * u, w @ v**2 + one * u**2
        left, other = max(s0 - s1**2 / max(s2, 1e-300), 0.0), max(s2 - s1**2 / s0, 0.0)
        return float(min(offset**2 * left, scale**2 * other))

    if not np.isfinite(scale) or centre <= 0:
        return LevelPlan(np.nan, np.nan, needed)
    below = _edge(told, centre, 0.0, needed)
    above = _edge(told, centre, MAX_RATIO * float(np.abs(v).max()), needed)
    return LevelPlan(below, above, needed)


def _edge(told: Callable[[float], float], near: float, far: float, needed: float) -> float:
    """Value nearest to `near`, on the way to `far`, from which on the models are told apart."""
    if told(far) < needed:
        return np.nan
    for _ in range(200):
        middle = 0.5 * (near + far)
        if middle in (near, far):
            break
        if told(middle) < needed:
            near = middle
        else:
            far = middle
    return far
