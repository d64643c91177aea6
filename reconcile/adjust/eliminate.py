"""Unmeasured variables out of the balances, by a rank-revealing orthogonal factorisation.

With ``A_u`` (m x n_u) the columns of the unmeasured variables, ``keep`` spans the left null space of ``A_u``:
``keep @ A_u = 0``, so ``keep @ A_m`` is what the balances say of measured variables alone (projection matrix:
Crowe, Garcia Campos & Hrymak 1983). The same factorisation tells which unmeasured variables are observable.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.linalg import lu, qr, solve_triangular
from scipy.sparse.csgraph import connected_components

__all__ = ["Elimination", "balanced_scales", "cleaned", "dependent_rows", "eliminate", "independent_form"]

Array = npt.NDArray[np.float64]

RANK_TOLERANCE = 1e-11
"""Relative size of a pivot below which a direction counts as absent."""


@dataclass(frozen=True)
class Elimination:
    """What the elimination of the unmeasured variables leaves.

    Attributes
    ----------
    keep : ndarray, shape (m - rank, m)
        Orthonormal rows with ``keep @ A_u = 0``.
    recover : ndarray, shape (n_u, m)
        ``u = recover @ (b - A_m x)``; undetermined directions are set to zero.
    null : ndarray, shape (n_u, n_u - rank)
        Basis of the null space of ``A_u``: directions that no balance determines.
    observable : ndarray of bool, shape (n_u,)
        Whether the balances and readings determine the variable.
    pivots : ndarray of int, shape (rank,)
        Unmeasured variables that the balances are solved for; the others span the null space.
    """

    keep: Array
    recover: Array
    null: Array
    observable: npt.NDArray[np.bool_]
    pivots: npt.NDArray[np.int64]

    @property
    def rank(self) -> int:
        """How many balances the unmeasured variables use up."""
        return self.pivots.size


def balanced_scales(matrix: Array) -> tuple[Array, Array]:
    """Scales of rows and columns that bring the coefficients to comparable size, so that units do not matter.

    Powers of two: scaling then rounds nothing, and rows that differ by very little keep their difference.

    Parameters
    ----------
    matrix : ndarray, shape (m, n)

    Returns
    -------
    rows, columns : ndarray, shapes (m,) and (n,)
        ``rows[:, None] * matrix * columns`` has geometric means of rows and columns near 1 and no row with a
        largest entry far from 1.
    """
    i, j = np.nonzero(matrix)
    size = np.log2(np.abs(matrix[i, j]))
    m, n = matrix.shape
    row, column = np.zeros(m), np.zeros(n)
    in_row, in_column = np.maximum(np.bincount(i, minlength=m), 1), np.maximum(np.bincount(j, minlength=n), 1)
    for _ in range(10):
        column = -np.bincount(j, size + row[i], minlength=n) / in_column
        row = -np.bincount(i, size + column[j], minlength=m) / in_row
    column = np.round(column)
    largest = np.full(m, -np.inf)
    np.maximum.at(largest, i, size + column[j])
    exponent = -np.round(np.where(np.isfinite(largest), largest, 0.0))
    rows, columns = (np.ldexp(np.ones(e.size), e.astype(np.int64)) for e in (exponent, column))
    return np.asarray(rows, dtype=float), np.asarray(columns, dtype=float)


def eliminate(unmeasured: Array) -> Elimination:
    """Project the unmeasured variables out of the rows.

    Parameters
    ----------
    unmeasured : ndarray, shape (m, n_u)
        Their columns in the (linearised) balances, rows scaled to comparable size.

    Returns
    -------
    Elimination
    """
    m, n = unmeasured.shape
    scale = np.linalg.norm(unmeasured, axis=0)
    scale[scale == 0] = 1.0
    # Rows without unmeasured variables are kept as they are, to the last bit.
    touched = np.flatnonzero(np.any(unmeasured != 0, axis=1))
    alone = np.flatnonzero(np.all(unmeasured == 0, axis=1))
    if touched.size == 0:
        return Elimination(np.eye(m), np.zeros((n, m)), np.eye(n), np.zeros(n, dtype=bool), np.zeros(0, dtype=np.int64))
    q, r, order = qr(unmeasured[touched] / scale, pivoting=True)
    rank = _rank(np.abs(np.diag(r)))
    top, rest = order[:rank], order[rank:]
    recover = np.zeros((n, m))
    recover[np.ix_(top, touched)] = solve_triangular(r[:rank, :rank], q[:, :rank].T)
    null = np.zeros((n, n - rank))
    if rest.size:
        tied = -solve_triangular(r[:rank, :rank], r[:rank, rank:])
        tied[np.abs(tied) < 1e-10 * max(1.0, np.abs(tied).max(initial=0.0))] = 0.0
        null[top] = tied
        null[rest, np.arange(rest.size)] = 1.0
    recover /= scale[:, None]
    null /= scale[:, None]
    keep = np.zeros((m - rank, m))
    keep[np.arange(alone.size), alone] = 1.0
    mixed = q[:, rank:].T
    keep[alone.size :, touched] = np.where(np.abs(mixed) < 1e-15, 0.0, mixed)
    return Elimination(keep, recover, null, ~np.any(null != 0, axis=1), top.astype(np.int64))


def _rank(diagonal: Array) -> int:
    if diagonal.size == 0 or diagonal[0] == 0:
        return 0
    return int(np.sum(diagonal > RANK_TOLERANCE * diagonal[0]))


def independent_form(rows: Array, sigma: Array) -> tuple[Array, Array, npt.NDArray[np.int64]]:
    """Turn rows into an equivalent set of independent rows with an identity block.

    Column pivots are chosen for the rows weighted with sigma, so that measured variables that are known worst
    are expressed by the others; row pivoting keeps nearly dependent rows exact.

    Parameters
    ----------
    rows : ndarray, shape (m, n)
        Rows over measured variables, possibly dependent.
    sigma : ndarray, shape (n,)
        Standard uncertainties.

    Returns
    -------
    form : ndarray, shape (r, n)
        Independent rows; the columns of the pivots hold an identity matrix.
    transform : ndarray, shape (r, m)
        ``form = transform @ rows`` up to rounding.
    pivots : ndarray of int, shape (r,)
        Columns of the identity block.
    """
    m, n = rows.shape
    length = 2.0 ** np.round(np.log2(np.maximum(np.linalg.norm(rows, axis=1), 1e-300)))
    live = np.any(rows != 0, axis=1)
    if m == 0 or n == 0 or not live.any():
        return np.zeros((0, n)), np.zeros((0, m)), np.zeros(0, dtype=np.int64)
    scaled = rows[live] / length[live, None]
    order, rank, rest = np.arange(n), 0, scaled
    while rest.size:
        weighted = rest * sigma[order[rank:]]
        upper, next_ = qr(weighted / np.linalg.norm(weighted, axis=1)[:, None], mode="r", pivoting=True)
        order = np.concatenate([order[:rank], order[rank:][next_]])
        rank += _rank(np.abs(np.diag(upper)))
        p, lower, u = lu(scaled[:, order])
        # Rows that only look dependent because sigmas differ by many orders still show here, where no sigma counts.
        rest = u[rank:, rank:]
        rest = rest[np.linalg.norm(rest, axis=1) > RANK_TOLERANCE]
    lead, rest = u[:rank, :rank], u[:rank, rank:]
    step = solve_triangular(lower[:rank, :rank], p.T[:rank], lower=True, unit_diagonal=True)
    pivots = order[:rank].astype(np.int64)
    form = np.zeros((rank, n))
    form[:, order[rank:]] = solve_triangular(lead, rest) if rest.size else rest
    transform = np.zeros((rank, m))
    transform[:, live] = solve_triangular(lead, step) / length[live]
    return cleaned(form, pivots), transform, pivots


def cleaned(form: Array, pivots: npt.NDArray[np.int64]) -> Array:
    """The form with its identity block exact, and zero where there is only rounding."""
    tail = form.copy()
    tail[:, pivots] = 0.0
    tail[np.abs(tail) < 1e-14 * np.abs(tail).max(initial=0.0)] = 0.0
    tail[:, pivots] = np.eye(pivots.size)
    return tail


def dependent_rows(rows: Array) -> Array:
    """Find rows that other rows imply, the later one of each set named.

    Parameters
    ----------
    rows : ndarray, shape (m, n)

    Returns
    -------
    ndarray, shape (d, m)
        Each row holds the coefficients of one vanishing combination ``out @ rows = 0``, sparse where possible;
        its last non-zero entry is 1 and belongs to the row that the earlier ones imply.
    """
    m = rows.shape[0]
    if m == 0:
        return np.zeros((0, 0))
    size = np.linalg.norm(rows, axis=1)
    size[size == 0] = 1.0
    scaled = rows / size[:, None]
    found = []
    for part in _apart(scaled):
        reduced = _dependent(scaled[np.ix_(part, np.any(scaled[part] != 0, axis=0))])
        spread = np.zeros((len(reduced), m))
        spread[:, part] = reduced
        found.append(spread)
    out = np.vstack(found) / size
    last = np.array([np.flatnonzero(row)[-1] for row in out], dtype=np.int64)
    out = out / out[np.arange(len(out)), last][:, None]
    return out[np.argsort(last)]


def _apart(rows: Array) -> list[npt.NDArray[np.int64]]:
    """Sets of rows that share no variable, so that none of one set follows from those of another."""
    i, j = np.nonzero(rows)
    m, n = rows.shape
    ties = sp.coo_array((np.ones(i.size), (i, m + j)), shape=(m + n, m + n))
    which = connected_components(ties, directed=False)[1][:m]
    order = np.argsort(which, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(which[order])) + 1)


def _dependent(rows: Array) -> Array:
    """`dependent_rows` for rows of length 1 that hang together, up to a factor of each combination."""
    m, n = rows.shape
    if m == 1:
        return np.ones((0 if n else 1, 1))
    few = qr(rows, mode="r", pivoting=True)[0]
    rank = _rank(np.abs(np.diag(few)))
    if rank == m:
        return np.zeros((0, m))
    if rank < m - rank:
        # Few rows imply many: cheaper from what the rows span than from what they leave.
        ahead = _echelon(rows.T)
        lead = np.array([np.flatnonzero(row)[0] for row in ahead if row.any()], dtype=np.int64)
        if lead.size == rank:
            follows = np.setdiff1d(np.arange(m), lead)
            out = np.zeros((follows.size, m))
            out[:, lead] = -ahead[:rank, follows].T
            out[np.arange(follows.size), follows] = 1.0
            return out
    q = qr(rows, pivoting=True)[0]
    return _echelon(q[:, rank:].T[:, ::-1])[:, ::-1]


def _echelon(rows: Array) -> Array:
    """Reduced echelon form with pivots as far to the left as possible."""
    work = rows.copy()
    row = 0
    for column in range(work.shape[1]):
        if row == len(work):
            break
        best = row + int(np.argmax(np.abs(work[row:, column])))
        if abs(work[best, column]) < 1e-9:
            continue
        work[[row, best]] = work[[best, row]]
        work[row] /= work[row, column]
        others = np.flatnonzero(work[:, column])
        others = others[others != row]
        work[others] -= np.outer(work[others, column], work[row])
        row += 1
    work[np.abs(work) < 1e-9] = 0.0
    return work
