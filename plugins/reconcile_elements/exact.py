"""Rank and null space in exact fractions, so that "independent" is yes or no and not a matter of a tolerance."""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from math import gcd, lcm

__all__ = ["null_space", "rank"]


def rank(matrix: Sequence[Sequence[Fraction]]) -> int:
    """Return the exact rank of a matrix of fractions."""
    return len(_reduce(matrix)[1])


def null_space(matrix: Sequence[Sequence[Fraction]], columns: int) -> list[list[int]]:
    """Return a basis of the exact null space in the smallest whole numbers.

    Each basis vector uses as few columns as the echelon form allows: one free column and the pivots. The first
    non-zero coefficient is negative.

    Parameters
    ----------
    matrix : sequence of sequence of Fraction
        Shape (m, columns); may have no rows.
    columns : int
        Number of columns.

    Returns
    -------
    list of list of int
        ``columns - rank`` vectors.
    """
    echelon, pivots = _reduce(matrix)
    basis = []
    for free in (c for c in range(columns) if c not in pivots):
        vector = [Fraction(0)] * columns
        vector[free] = Fraction(1)
        for row, pivot in zip(echelon, pivots, strict=False):
            vector[pivot] = -row[free]
        basis.append(_whole(vector))
    return basis


def _reduce(matrix: Sequence[Sequence[Fraction]]) -> tuple[list[list[Fraction]], list[int]]:
    """Reduced row echelon form and its pivot columns."""
    rows = [[Fraction(v) for v in row] for row in matrix]
    pivots: list[int] = []
    for column in range(len(rows[0]) if rows else 0):
        at = len(pivots)
        found = next((r for r in range(at, len(rows)) if rows[r][column]), None)
        if found is None:
            continue
        rows[at], rows[found] = rows[found], rows[at]
        lead = rows[at][column]
        rows[at] = [v / lead for v in rows[at]]
        for r, row in enumerate(rows):
            if r != at and row[column]:
                factor = row[column]
                rows[r] = [v - factor * p for v, p in zip(row, rows[at], strict=True)]
        pivots.append(column)
        if len(pivots) == len(rows):
            break
    return rows, pivots


def _whole(vector: Sequence[Fraction]) -> list[int]:
    scale = lcm(*(v.denominator for v in vector))
    whole = [int(v * scale) for v in vector]
    common = gcd(*whole)
    first = next(v for v in whole if v)
    return [-v // common if first > 0 else v // common for v in whole]
