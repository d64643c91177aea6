"""Square systems solved to the last digits although they are nearly singular: residuals in twice the precision.

Balances of two almost equal components differ by little, and that little decides. An ordinary factorisation keeps
only the digits that are left after cancellation; iterative refinement with a residual of twice the working precision
restores them all (Wilkinson 1963; Higham 2002, *Accuracy and Stability of Numerical Algorithms*, chapter 12). The
residual is a sum of products of short slices, each exact in ordinary arithmetic (Ozaki, Ogita, Oishi & Rump 2012).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy.linalg import lu, lu_factor, lu_solve

from .eliminate import Elimination

__all__ = ["SharpForm", "SharpSolver", "residual"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

ROUNDS = 12
DIGITS = 53
"""Binary digits of a double."""
SLICES = 6
"""More than twice the digits of a double, below the largest entry of a line."""
SINGULAR = 1e-13
"""Pivots smaller than this beside the largest coefficient leave refinement nothing to hold on to."""
ROUNDING = 1e-14
"""Entries smaller than this beside the largest are zero."""


def _slices(matrix: Array, axis: int, bits: int) -> list[Array]:
    """Matrices with short mantissas that add up to this one, on one grid along each line of the axis."""
    out: list[Array] = []
    rest = matrix
    while np.any(rest) and len(out) < SLICES:
        largest = np.abs(rest).max(axis=axis, keepdims=True)
        grid = np.ldexp(1.0, np.frexp(largest)[1] + DIGITS - bits)
        part = (rest + grid) - grid
        out.append(part)
        rest = rest - part
    return out


def residual(left: Array, right: Array, target: Array) -> Array:
    """``target - left @ right``, in twice the working precision and then rounded once.

    Parameters
    ----------
    left, right, target : ndarray, shapes (m, k), (k, n) and (m, n)

    Returns
    -------
    ndarray, shape (m, n)
    """
    bits = (DIGITS - int(np.ceil(np.log2(max(left.shape[1], 2))))) // 2 - 1
    high, low = target.copy(), np.zeros_like(target)
    second = _slices(right, 0, bits)
    for a in _slices(left, 1, bits):
        for b in second:
            term = -(a @ b)
            total = high + term
            back = total - high
            low += (high - (total - back)) + (term - back)
            high = total
    return high + low


class SharpSolver:
    """A factorised square matrix whose solutions are good to the last digits.

    Parameters
    ----------
    matrix : ndarray, shape (k, k)
        Not singular; condition up to about 1e14.
    """

    def __init__(self, matrix: Array) -> None:
        self.matrix = matrix
        self.factors = lu_factor(matrix, check_finite=False)

    def solve(self, right: Array) -> Array:
        """Solve for several right-hand sides.

        Parameters
        ----------
        right : ndarray, shape (k, n)

        Returns
        -------
        ndarray, shape (k, n)
        """
        x: Array = lu_solve(self.factors, right, check_finite=False)
        before = np.inf
        for _ in range(ROUNDS):
            step = lu_solve(self.factors, residual(self.matrix, x, right), check_finite=False)
            size = float(np.abs(step).max(initial=0.0))
            if not size < 0.5 * before:
                break
            x, before = x + step, size
        return x


@dataclass(frozen=True)
class SharpForm:
    """Balances solved for the pivots among unmeasured and measured variables, to the last digits.

    Attributes
    ----------
    solver : SharpSolver
        Of the chosen rows.
    rows : ndarray of int
        The chosen rows.
    unmeasured : ndarray, shape (m, n_u)
    pivots : ndarray of int
        Unmeasured variables among the pivots.
    """

    solver: SharpSolver
    rows: Ints
    unmeasured: Array
    pivots: Ints

    @classmethod
    def of(cls, unmeasured: Array, pivots: Ints, measured: Array, measured_pivots: Ints) -> SharpForm | None:
        """Choose as many rows as there are pivots, and factorise; None where they are too near to singular for that."""
        block = np.hstack([unmeasured[:, pivots], measured[:, measured_pivots]])
        swaps, _, upper = lu(block)
        diagonal = np.abs(np.diag(upper))
        if diagonal.size < block.shape[1] or diagonal.min() < SINGULAR * np.abs(block).max():
            return None
        rows = np.argmax(swaps, axis=0)[: block.shape[1]].astype(np.int64)
        return cls(SharpSolver(block[rows]), rows, unmeasured, pivots)

    def apply(self, columns: Array) -> tuple[Array, Array]:
        """Turn columns of the original rows, shape (m, k), into columns of the solved ones.

        Returns
        -------
        above : ndarray, shape (n_u, k)
            Rows that give the unmeasured variables; zero for those that are no pivots.
        below : ndarray, shape (r, k)
            Independent rows over measured variables.
        """
        solved = self.solver.solve(columns[self.rows])
        above = np.zeros((self.unmeasured.shape[1], columns.shape[1]))
        above[self.pivots] = solved[: self.pivots.size]
        return above, solved[self.pivots.size :]

    def constants(self, rhs: Array, *, rows: Array, above: Array, below: Array) -> tuple[Array, Array]:
        """Right-hand sides of `apply` for those of the original rows, given the scales that units ask for."""
        upper, lower = self.apply((rows * rhs)[:, None])
        return above * upper[:, 0], below * lower[:, 0]

    def elimination(self, rough: Elimination) -> Elimination:
        """The same elimination of the unmeasured variables to the last digits."""
        rest = np.setdiff1d(np.arange(self.unmeasured.shape[1]), self.pivots)
        recover, _ = self.apply(np.eye(len(self.unmeasured)))
        null = -self.apply(self.unmeasured[:, rest])[0]
        null[np.abs(null) < ROUNDING * np.abs(null).max(initial=0.0)] = 0.0
        null[rest, np.arange(rest.size)] = 1.0
        return replace(rough, recover=recover, null=null, observable=~np.any(null != 0, axis=1))
