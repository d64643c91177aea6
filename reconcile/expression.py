"""Vector expressions over the variables of a system, sparse inside.

An expression is ``A x + c + C (x_i * x_j) + F f(B x + d)``: affine part, products of two variables and
calls of functions that a domain supplies with their derivatives. Rows are the entries of the vector.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .errors import PluginError

__all__ = ["Balance", "Call", "Expression", "stack"]

Array = npt.NDArray[np.float64]

REMEMBERED = 8
"""Points at which the values of a function are kept."""


@dataclass(frozen=True, eq=False)
class Call:
    """A vectorised function of affine arguments, with its partial derivatives.

    Attributes
    ----------
    function : callable
        ``function(*arguments) -> (k,)``.
    derivatives : callable
        ``derivatives(*arguments) -> sequence of (k,)``, one for each argument.
    matrices : tuple of csr_array, each shape (k, n)
        Linear part of each argument.
    constants : tuple of ndarray, each shape (k,)
        Constant part of each argument.
    writer : str
        Domain that supplied the function, for error messages.
    """

    function: Callable[..., Any]
    derivatives: Callable[..., Any]
    matrices: tuple[sp.csr_array, ...]
    constants: tuple[Array, ...]
    writer: str

    @property
    def size(self) -> int:
        """Number of values the call gives."""
        return self.constants[0].size

    def arguments(self, x: Array) -> list[Array]:
        """Arguments at x, each of shape (k,)."""
        # A case may have appended columns that the function does not know of.
        return [m @ x[: m.shape[1]] + c for m, c in zip(self.matrices, self.constants, strict=True)]

    def value(self, x: Array) -> Array:
        """Values at x, shape (k,); not to be written to."""
        key = x.tobytes()
        known = self._remembered.get(key)
        if known is None:
            known = self._ask(self.function, x, lambda out: np.broadcast_to(np.array(out, dtype=float), (self.size,)))
            if len(self._remembered) >= REMEMBERED:
                self._remembered.clear()
            self._remembered[key] = known
        return known

    @cached_property
    def _remembered(self) -> dict[bytes, Array]:
        """Values at the latest points: closure, scale and merit of one step ask for the same ones."""
        return {}

    @cached_property
    def _pattern(self) -> Pattern:
        return Pattern.of(self.matrices)

    def __getstate__(self) -> dict[str, Any]:
        return {k: v for k, v in self.__dict__.items() if k not in ("_remembered", "_pattern")}

    def jacobian(self, x: Array) -> sp.csr_array:
        """Derivatives with respect to x, shape (k, n)."""

        def slopes(parts: Any) -> list[Array]:
            each = [np.broadcast_to(np.asarray(p, dtype=float), (self.size,)) for p in parts]
            if len(each) != len(self.matrices):
                raise ValueError(f"{len(each)} derivatives for {len(self.matrices)} arguments")
            return each

        each = self._ask(self.derivatives, x, slopes)
        terms = [s.repeat(np.diff(m.indptr)) * m.data for s, m in zip(each, self.matrices, strict=True)]
        return self._pattern.filled(terms, x.size)

    def _ask(self, function: Callable[..., Any], x: Array, shaped: Callable[[Any], Any]) -> Any:
        """Call a function of the domain; whatever goes wrong in there is reported under the domain's name."""
        try:
            return shaped(function(*self.arguments(x)))
        except Exception as error:
            raise PluginError(
                self.writer,
                f"its function {getattr(function, '__name__', 'without a name')!r} failed: "
                f"{type(error).__name__}: {error}",
                hint="the arguments may be outside its range: check the readings, or state expected values under design:",
            ) from error


@dataclass(frozen=True)
class Pattern:
    """Where the entries of a sum of sparse matrices stand, worked out once for any values of theirs."""

    indptr: npt.NDArray[np.integer[Any]]
    indices: npt.NDArray[np.integer[Any]]
    places: tuple[npt.NDArray[np.int64], ...]

    @classmethod
    def of(cls, matrices: Sequence[sp.csr_array]) -> Pattern:
        """Pattern of the sum of matrices with as many rows."""
        count, width = matrices[0].shape[0], max(m.shape[1] for m in matrices)
        rows = [np.repeat(np.arange(count, dtype=np.int64), np.diff(m.indptr)) for m in matrices]
        keys = np.concatenate([r * width + m.indices for r, m in zip(rows, matrices, strict=True)])
        found, place = np.unique(keys, return_inverse=True)
        ends = np.cumsum([m.nnz for m in matrices])[:-1]
        indptr = np.searchsorted(found, np.arange(count + 1, dtype=np.int64) * width)
        indices = (found % max(width, 1)).astype(matrices[0].indices.dtype)
        return cls(indptr.astype(indices.dtype), indices, tuple(np.split(place.ravel(), ends)))

    def filled(self, terms: Sequence[Array], columns: int) -> sp.csr_array:
        """Sum with these entries of each matrix, in their order, and with so many columns."""
        data = np.zeros(self.indices.size)
        for place, term in zip(self.places, terms, strict=True):
            np.add.at(data, place, term)
        return sp.csr_array((data, self.indices, self.indptr), shape=(self.indptr.size - 1, columns))


def _widen(matrix: sp.csr_array, columns: int) -> sp.csr_array:
    """Same matrix with more (empty) columns; shares its data."""
    if matrix.shape[1] == columns:
        return matrix
    return sp.csr_array((matrix.data, matrix.indices, matrix.indptr), shape=(matrix.shape[0], columns))


@dataclass(frozen=True)
class Balance:
    """``left == right``, written as an expression that must be zero."""

    expression: Expression


@dataclass(frozen=True, eq=False)
class Expression:
    """A vector of expressions in the variables of one system.

    Supports ``+ - *``, ``/`` by numbers, ``M @ v`` with a numpy or scipy matrix, indexing (by position or
    by item name), ``sum()`` and ``==``. The product of two affine expressions gives bilinear terms.

    Attributes
    ----------
    system : object
        The system the variables belong to.
    linear : csr_array, shape (k, n)
        Linear part.
    constant : ndarray, shape (k,)
        Constant part.
    products : csr_array, shape (k, p)
        Coefficients of the products.
    pairs : ndarray of int, shape (p, 2)
        Columns i, j of each product x_i * x_j.
    calls : tuple of (csr_array of shape (k, q), Call)
        Coefficients of function values.
    items : tuple of str
        Names of the entries where the expression is a block of variables, else empty.
    """

    system: Any
    linear: sp.csr_array
    constant: Array
    products: sp.csr_array
    pairs: npt.NDArray[np.int64]
    calls: tuple[tuple[sp.csr_array, Call], ...] = ()
    items: tuple[str, ...] = field(default=(), repr=False)

    __array_ufunc__ = None
    __array_priority__ = 1000
    __hash__ = None  # type: ignore[assignment]

    @property
    def size(self) -> int:
        """Number of entries k."""
        return self.constant.size

    @property
    def is_affine(self) -> bool:
        """Whether the expression has neither products nor function calls."""
        return self.products.nnz == 0 and not self.calls

    def _coerce(self, other: Any) -> Expression:
        if isinstance(other, Expression):
            if other.system is not self.system:
                raise ValueError("expressions of two different systems cannot be combined")
            return other
        values = np.atleast_1d(np.asarray(other, dtype=float))
        if values.ndim != 1:
            raise ValueError("an expression combines with numbers or one-dimensional arrays")
        return _constant(self.system, values)

    def __add__(self, other: Any) -> Expression:
        left, right = _same_size(self, self._coerce(other))
        columns = max(left.linear.shape[1], right.linear.shape[1])
        return Expression(
            left.system,
            sp.csr_array(_widen(left.linear, columns) + _widen(right.linear, columns)),
            left.constant + right.constant,
            sp.csr_array(sp.hstack([left.products, right.products])),
            np.concatenate([left.pairs, right.pairs]),
            left.calls + right.calls,
        )

    __radd__ = __add__

    def __neg__(self) -> Expression:
        return self._scaled(-np.ones(1))

    def __sub__(self, other: Any) -> Expression:
        return self + (-self._coerce(other))

    def __rsub__(self, other: Any) -> Expression:
        return self._coerce(other) + (-self)

    def __mul__(self, other: Any) -> Expression:
        if not isinstance(other, Expression):
            values = np.atleast_1d(np.asarray(other, dtype=float))
            if values.ndim != 1:
                raise ValueError("an expression is scaled by a number or a one-dimensional array")
            return self._scaled(values)
        left, right = _same_size(self, self._coerce(other))
        if left.is_affine and right.is_affine:
            return _multiply(left, right)
        raise ValueError(
            "only affine expressions can be multiplied; give the product a variable of its own with a balance"
        )

    __rmul__ = __mul__

    def __truediv__(self, other: Any) -> Expression:
        if isinstance(other, Expression):
            raise TypeError("division by a variable is not a balance; multiply the balance out instead")
        return self._scaled(1.0 / np.atleast_1d(np.asarray(other, dtype=float)))

    def __rmatmul__(self, matrix: Any) -> Expression:
        m = sp.csr_array(matrix) if sp.issparse(matrix) else sp.csr_array(np.atleast_2d(np.asarray(matrix, float)))
        if m.shape[1] != self.size:
            raise ValueError(f"matrix has {m.shape[1]} columns, but the expression has {self.size} entries")
        return Expression(
            self.system,
            sp.csr_array(m @ self.linear),
            m @ self.constant,
            sp.csr_array(m @ self.products),
            self.pairs,
            tuple((sp.csr_array(m @ f), c) for f, c in self.calls),
        )

    def __getitem__(self, key: Any) -> Expression:
        rows = self._rows(key)
        return Expression(
            self.system,
            self.linear[rows],
            self.constant[rows],
            self.products[rows],
            self.pairs,
            tuple((f[rows], c) for f, c in self.calls),
            tuple(self.items[i] for i in rows) if self.items else (),
        )

    def __eq__(self, other: Any) -> Balance:  # type: ignore[override]
        return Balance(self - other)

    def sum(self) -> Expression:
        """Sum of all entries, an expression with one entry."""
        return np.ones((1, self.size)) @ self

    def _rows(self, key: Any) -> npt.NDArray[np.int64]:
        names = [key] if isinstance(key, str) else key
        if isinstance(names, (list, tuple)) and names and all(isinstance(n, str) for n in names):
            position = {name: i for i, name in enumerate(self.items)}
            missing = [n for n in names if n not in position]
            if missing:
                raise KeyError(f"no entry named {missing[0]!r} in this expression")
            return np.array([position[n] for n in names], dtype=np.int64)
        return np.atleast_1d(np.arange(self.size)[key])

    def _scaled(self, factor: Array) -> Expression:
        if factor.size == 1 or factor.size == self.size:
            d = sp.diags_array(np.broadcast_to(factor, (self.size,)).astype(float))
        elif self.size == 1:
            return sp.csr_array(factor.reshape(-1, 1)) @ self
        else:
            raise ValueError(f"{factor.size} factors do not fit an expression with {self.size} entries")
        return Expression(
            self.system,
            sp.csr_array(d @ self.linear),
            self.constant * factor,
            sp.csr_array(d @ self.products),
            self.pairs,
            tuple((sp.csr_array(d @ f), c) for f, c in self.calls),
        )


def _constant(system: Any, values: Array) -> Expression:
    k = values.size
    return Expression(system, sp.csr_array((k, 0)), values, sp.csr_array((k, 0)), np.zeros((0, 2), dtype=np.int64))


def _same_size(left: Expression, right: Expression) -> tuple[Expression, Expression]:
    if left.size == right.size:
        return left, right
    if left.size == 1:
        return np.ones((right.size, 1)) @ left, right
    if right.size == 1:
        return left, np.ones((left.size, 1)) @ right
    raise ValueError(f"expressions with {left.size} and {right.size} entries cannot be combined")


def _multiply(left: Expression, right: Expression) -> Expression:
    """Entry-wise product of two affine expressions of equal size: expands every row without a loop."""
    columns = max(left.linear.shape[1], right.linear.shape[1])
    a, b = _widen(left.linear, columns), _widen(right.linear, columns)
    count_a, count_b = np.diff(a.indptr), np.diff(b.indptr)
    each = count_a * count_b
    row = np.repeat(np.arange(left.size), each)
    within = np.arange(each.sum()) - np.repeat(np.cumsum(each) - each, each)
    from_a = a.indptr[row] + within // np.maximum(count_b[row], 1)
    from_b = b.indptr[row] + within % np.maximum(count_b[row], 1)
    i, j = a.indices[from_a], b.indices[from_b]
    pairs, where = np.unique(np.column_stack([np.minimum(i, j), np.maximum(i, j)]), axis=0, return_inverse=True)
    coefficient = a.data[from_a] * b.data[from_b]
    products = sp.csr_array((coefficient, (row, where.ravel())), shape=(left.size, len(pairs)))
    linear = sp.diags_array(right.constant) @ a + sp.diags_array(left.constant) @ b
    return Expression(
        left.system,
        sp.csr_array(linear),
        left.constant * right.constant,
        products,
        pairs.astype(np.int64).reshape(-1, 2),
    )


def stack(expressions: Sequence[Expression]) -> Expression:
    """Put expressions below one another.

    Parameters
    ----------
    expressions : sequence of Expression
        At least one; all of the same system.

    Returns
    -------
    Expression
        With as many entries as all of them together.
    """
    if not expressions:
        raise ValueError("nothing to stack")
    system = expressions[0].system
    if any(e.system is not system for e in expressions):
        raise ValueError("expressions of two different systems cannot be combined")
    total = sum(e.size for e in expressions)
    columns = max(e.linear.shape[1] for e in expressions)
    calls, before = [], 0
    for e in expressions:
        for coefficient, call in e.calls:
            ends = np.clip(np.arange(total + 1) - before, 0, e.size)
            inner = (coefficient.data, coefficient.indices, coefficient.indptr[ends])
            calls.append((sp.csr_array(inner, shape=(total, coefficient.shape[1])), call))
        before += e.size
    return Expression(
        system,
        sp.csr_array(sp.vstack([_widen(e.linear, columns) for e in expressions])),
        np.concatenate([e.constant for e in expressions]),
        sp.csr_array(sp.block_diag([e.products for e in expressions])),
        np.concatenate([e.pairs for e in expressions]),
        tuple(calls),
    )
