"""Steps of the triangularisation of a sequence: one window at a time, forwards, then backwards.

Notation of `sequence`: c states, f free variables of a window, n columns, p right-hand sides (the readings first, then
one for each possible fault whose signature is wanted).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.linalg import qr, solve_triangular

from .eliminate import RANK_TOLERANCE, balanced_scales, dependent_rows, independent_form

__all__ = ["Balances", "Block", "End", "Step", "Triangle", "back", "close", "forward", "solve_balances"]

ROUNDING = 1e-12
"""Share of its terms below which a sum is nothing but their rounding."""

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Balances:
    """Balances of one window, solved: ``rest = constant + of_state @ s + of_free @ v``.

    Attributes
    ----------
    constant : ndarray, shape (m,)
    of_state, of_free : ndarray, shapes (m, c) and (m, f)
    tied : ndarray of int
        Rows that say something of the state alone; such a window cannot be written in this form.
    """

    constant: Array
    of_state: Array
    of_free: Array
    tied: Ints
    _pivots: Ints
    _transform: Array
    _jacobian: Array

    def of_fault(self, column: int) -> Array:
        """Change of the rest per unit of a fault variable, shape (m,)."""
        out = np.zeros(self.constant.size)
        out[self._pivots] = -self._transform @ self._jacobian[:, column]
        return out


def solve_balances(jacobian: Array, rhs: Array, rest: Ints, state: Ints, sigma: Array) -> Balances:
    """Express what the balances determine by the state and by free variables.

    Parameters
    ----------
    jacobian : ndarray, shape (m, n)
    rhs : ndarray, shape (m,)
        What the rows of the `rest` and `state` columns add up to.
    rest, state : ndarray of int
        Columns of the variables of the window, and of its state.
    sigma : ndarray, shape (n,)
        Of what is read, nan elsewhere; what is known worst is expressed by the others.

    Returns
    -------
    Balances
    """
    a, b = jacobian[:, rest], jacobian[:, state]
    rows, columns = balanced_scales(a)
    spread = sigma[rest] / columns
    read = np.isfinite(spread)
    spread[~read] = 1e3 * np.max(spread[read], initial=1e-3)
    scaled = rows[:, None] * a * columns
    form, transform, pivots = independent_form(scaled, spread)
    form = columns[pivots, None] * form / columns
    transform = columns[pivots, None] * transform * rows
    free = np.setdiff1d(np.arange(rest.size), pivots)
    constant, of_state, of_free = (
        np.zeros(rest.size),
        np.zeros((rest.size, state.size)),
        np.zeros((rest.size, free.size)),
    )
    constant[pivots] = transform @ rhs
    of_state[pivots] = -transform @ b
    of_free[pivots] = -form[:, free]
    of_free[free, np.arange(free.size)] = 1.0
    tied = np.zeros(0, dtype=np.int64)
    if len(pivots) < len(a):
        implied = dependent_rows(scaled) * rows
        whole = np.abs(implied) @ np.abs(b)
        off = np.any(np.abs(implied @ b) > 1e-9 * np.maximum(whole, 1e-300), axis=1)
        tied = np.array([np.flatnonzero(r)[-1] for r in implied[off]], dtype=np.int64)
    return Balances(constant, of_state, of_free, tied, pivots, transform, jacobian)


@dataclass(frozen=True)
class Block:
    """One window: ``x = constant + of_state s + of_free v``, s the state behind it, and weighted readings.

    Attributes
    ----------
    constant, of_state, of_free : ndarray, shapes (n,), (n, c), (n, f)
    step, by_free, shift : ndarray, shapes (c, c), (c, f), (c, p)
        State before the window: ``step s + by_free v + shift``.
    rows_state, rows_free, target : ndarray, shapes (k, c), (k, f), (k, p)
        Readings over their sigmas.
    """

    constant: Array
    of_state: Array
    of_free: Array
    step: Array
    by_free: Array
    shift: Array
    rows_state: Array
    rows_free: Array
    target: Array


@dataclass(frozen=True)
class Triangle:
    """What the windows so far say of the state behind them: ``factor s = target``, unit variance."""

    factor: Array
    target: Array

    @classmethod
    def empty(cls, states: int, sides: int) -> Triangle:
        """Nothing is known yet."""
        return cls(np.zeros((0, states)), np.zeros((0, sides)))


@dataclass(frozen=True)
class Step:
    """How the free variables of a window follow from the state behind it: ``v = value - gain s + factor e``.

    Attributes
    ----------
    value : ndarray, shape (f,)
    gain, factor : ndarray, shapes (f, c) and (f, rank)
    null : ndarray, shape (f, f - rank)
        Directions that nothing determines.
    """

    value: Array
    gain: Array
    factor: Array
    null: Array


@dataclass(frozen=True)
class End:
    """State at one point of the sequence, all readings considered.

    Attributes
    ----------
    value : ndarray, shape (c,)
    cover : ndarray, shape (c, w)
        cov = cover cover'.
    null : ndarray, shape (c, d)
        Directions that nothing determines.
    """

    value: Array
    cover: Array
    null: Array

    @property
    def determined(self) -> Bools:
        """Whether each state is determined, shape (c,)."""
        return ~np.any(self.null != 0, axis=1)


def forward(block: Block, before: Triangle) -> tuple[Step, Triangle, Array]:
    """Take in one window.

    Returns
    -------
    step : Step
    behind : Triangle
    left : ndarray, shape (checks, p)
        The checks that the window completed: components of the parity vector and of the signatures.
    """
    free = np.vstack([_product(before.factor, block.by_free), block.rows_free])
    state = np.vstack([_product(before.factor, block.step), block.rows_state])
    target = np.vstack([before.target - before.factor @ block.shift, block.target])
    scale_free, scale_state = _scales(free), _scales(state)
    # Heavy rows first, so that weights of many orders of magnitude do not cost digits.
    order = np.argsort(
        -np.abs(np.hstack([free / scale_free, state / scale_state])).max(axis=1, initial=0.0), kind="stable"
    )
    free, state, target = free[order] / scale_free, state[order] / scale_state, target[order]
    f = free.shape[1]
    if f and len(free):
        q, upper, pivots = qr(free, pivoting=True)
        rank = int(np.sum(np.abs(np.diag(upper)) > RANK_TOLERANCE))
        state, target = q.T @ state, q.T @ target
        gain, factor, value, null = (
            np.zeros((f, state.shape[1])),
            np.zeros((f, rank)),
            np.zeros(f),
            np.zeros((f, f - rank)),
        )
        lead, top = upper[:rank, :rank], pivots[:rank]
        inverse = solve_triangular(lead, np.eye(rank))
        gain[top] = solve_triangular(lead, state[:rank]) * scale_state
        # What cancels to rounding is no dependence: it would lead from what is not known to what is.
        least = ROUNDING * np.abs(inverse).sum(axis=1)[:, None] * scale_state
        gain[top] = np.where(np.abs(gain[top]) <= least, 0.0, gain[top])
        value[top] = solve_triangular(lead, target[:rank, 0])
        factor[top] = inverse
        null[top], null[pivots[rank:], np.arange(f - rank)] = -solve_triangular(lead, upper[:rank, rank:]), 1.0
        step = Step(value / scale_free, gain / scale_free[:, None], factor / scale_free[:, None],
                    _clean(null) / scale_free[:, None])  # fmt: skip
        state, target = state[rank:], target[rank:]
    else:
        step = Step(np.zeros(f), np.zeros((f, state.shape[1])), np.zeros((f, 0)), np.eye(f))
    if not len(state):
        return step, Triangle(state, target), target[:0]
    # A state of which only rounding is left is not known any more; scaled up later, it would pass for a reading.
    state[:, np.linalg.norm(state, axis=0) <= RANK_TOLERANCE] = 0.0
    q, upper, pivots = qr(state, pivoting=True)
    rank = int(np.sum(np.abs(np.diag(upper)) > RANK_TOLERANCE))
    factor = np.zeros((rank, state.shape[1]))
    factor[:, pivots] = np.where(np.abs(upper[:rank]) <= ROUNDING, 0.0, upper[:rank])
    target = q.T @ target
    return step, Triangle(factor * scale_state, target[:rank]), target[rank:]


def close(last: Triangle) -> End:
    """State behind the last window."""
    c, rank = last.factor.shape[1], len(last.factor)
    value, cover, null = np.zeros(c), np.zeros((c, rank)), np.zeros((c, c - rank))
    if rank == 0:
        return End(value, cover, np.eye(c))
    scale = _scales(last.factor)
    q, upper, pivots = qr(last.factor / scale, pivoting=True)
    lead, top = upper[:rank, :rank], pivots[:rank]
    value[top] = solve_triangular(lead, q.T @ last.target[:, 0])
    cover[top] = solve_triangular(lead, np.eye(rank))
    null[top], null[pivots[rank:], np.arange(c - rank)] = -solve_triangular(lead, upper[:rank, rank:]), 1.0
    return End(value / scale, cover / scale[:, None], _clean(null) / scale[:, None])


def back(block: Block, step: Step, behind: End) -> tuple[End, Array, Bools, Array, Array]:
    """Give a window its values, once the state behind it is known.

    Returns
    -------
    before : End
        State before the window.
    x, determined : ndarray, shape (n,)
    cover : ndarray, shape (n, w)
    carry : ndarray, shape (c, c)
        How the state before the window follows the state behind it.
    """
    v = step.value - step.gain @ behind.value
    x = block.constant + block.of_state @ behind.value + block.of_free @ v
    slope = _difference(block.of_state, block.of_free, step.gain)
    cover = np.hstack([slope @ behind.cover, block.of_free @ step.factor])
    lost = np.hstack([_product(slope, behind.null), _product(block.of_free, step.null)])
    terms = np.hstack(
        [(np.abs(block.of_state) + np.abs(block.of_free) @ np.abs(step.gain)) @ np.abs(behind.null),
         np.abs(block.of_free) @ np.abs(step.null)]
    )  # fmt: skip
    determined = ~np.any(np.abs(lost) > 1e-9 * terms.max(axis=0, initial=0.0), axis=1)
    carry = _difference(block.step, block.by_free, step.gain)
    value = block.step @ behind.value + block.by_free @ v + block.shift[:, 0]
    spread = np.hstack([carry @ behind.cover, block.by_free @ step.factor])
    null = np.hstack([_product(carry, behind.null), _product(block.by_free, step.null)])
    return End(value, _compressed(spread), _directions(null)), x, determined, cover, carry


def _compressed(factor: Array) -> Array:
    """Factor of the same covariance with at most as many columns as rows."""
    if factor.shape[1] <= factor.shape[0]:
        return factor
    return np.asarray(qr(factor.T, mode="r")[0][: factor.shape[0]].T)


def _directions(null: Array) -> Array:
    """Basis of the space that the columns span, what is only rounding left out."""
    length = np.linalg.norm(null, axis=0)
    null = null[:, length > 0] / length[length > 0]
    if not null.size:
        return np.zeros((null.shape[0], 0))
    q, upper, _ = qr(null, mode="economic", pivoting=True)
    rank = int(np.sum(np.abs(np.diag(upper)) > 1e-9))
    return _clean(np.asarray(q[:, :rank]))


def _product(a: Array, b: Array) -> Array:
    """Product of two matrices, without what is left by rounding where its terms cancel."""
    out = a @ b
    return np.where(np.abs(out) <= ROUNDING * (np.abs(a) @ np.abs(b)), 0.0, out)


def _difference(a: Array, b: Array, c: Array) -> Array:
    """``a - b c``, likewise: a coefficient that is only rounding would lead from what is not known to what is."""
    out = a - b @ c
    return np.where(np.abs(out) <= ROUNDING * (np.abs(a) + np.abs(b) @ np.abs(c)), 0.0, out)


def _clean(null: Array) -> Array:
    out = null.copy()
    out[np.abs(out) < 1e-10 * np.abs(out).max(initial=0.0)] = 0.0
    return out


def _scales(matrix: Array) -> Array:
    length = np.linalg.norm(matrix, axis=0) if len(matrix) else np.zeros(matrix.shape[1])
    return np.where(length > 0, length, 1.0)
