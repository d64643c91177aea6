"""The system of balances that domains write: variables, rows, and possible faults.

``A x + C (x_i * x_j) + F f(B x + d) = b``, sparse. A *fault* is a variable that is normally zero: a domain
writes it into its balances like any other, and its column is then the direction in which that fault would
push the readings, at whatever point the balances are linearised.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .expression import Balance, Call, Expression, Pattern, stack

__all__ = ["Equations", "FaultKind", "Prior", "System", "stack"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class FaultKind:
    """What a kind of fault is called and how it is told.

    Attributes
    ----------
    kind : str
        Short name, e.g. ``leak``.
    says : str
        Sentence part with ``{item}``, ``{size}`` and ``{unit}``, e.g. ``{size} {unit} lost at {item}``.
    separate : str
        What a person could do to confirm or exclude it; may use ``{item}``.
    rate : float or None
        Prior probability that it is there; None leaves it to the case.
    """

    kind: str
    says: str
    separate: str = ""
    rate: float | None = None


@dataclass(frozen=True)
class Block:
    """A block of variables that were declared together."""

    quantity: str
    items: tuple[str, ...]
    unit: str
    start: int
    writer: str
    fault: FaultKind | None

    @property
    def stop(self) -> int:
        """First column behind the block."""
        return self.start + len(self.items)

    def name(self, column: int) -> str:
        """Name of a column of this block."""
        return f"{self.items[column - self.start]}.{self.quantity}"


@dataclass(frozen=True)
class Rows:
    """A block of balances that were required together."""

    names: tuple[str, ...]
    kind: str
    unit: str
    nodes: tuple[str, ...]
    writer: str
    start: int

    @property
    def stop(self) -> int:
        """First row behind the block."""
        return self.start + len(self.names)


@dataclass(frozen=True)
class Prior:
    """Prior knowledge of variables: a reading that no instrument gave."""

    columns: npt.NDArray[np.int64]
    values: Array
    sigmas: Array
    origin: str


@dataclass(frozen=True)
class Equations:
    """The finished system as arrays: what the numeric rooms read.

    Attributes
    ----------
    linear : csr_array, shape (m, n)
    rhs : ndarray, shape (m,)
    products : csr_array, shape (m, p)
    pairs : ndarray of int, shape (p, 2)
    calls : tuple of (csr_array, Call)
    """

    linear: sp.csr_array
    rhs: Array
    products: sp.csr_array
    pairs: npt.NDArray[np.int64]
    calls: tuple[tuple[sp.csr_array, Call], ...] = ()

    @property
    def shape(self) -> tuple[int, int]:
        """(rows, variables)."""
        return self.linear.shape

    @property
    def is_linear(self) -> bool:
        """Whether there are neither products nor function calls."""
        return self.products.nnz == 0 and not self.calls

    def closure(self, x: Array) -> Array:
        """How far each balance is from zero at x, shape (m,)."""
        out = self.linear @ x - self.rhs
        if self.products.nnz:
            out = out + self.products @ (x[self.pairs[:, 0]] * x[self.pairs[:, 1]])
        for coefficient, call in self.calls:
            out = out + coefficient @ call.value(x)
        return out

    def jacobian(self, x: Array) -> sp.csr_array:
        """Exact derivatives of the closures at x, shape (m, n); not to be written to."""
        if self.is_linear:
            return self.linear
        out = self.linear
        if self.products.nnz:
            slopes = [x[self.pairs[:, 1]], x[self.pairs[:, 0]]]
            out = out + self.products @ self._of_pairs.filled(slopes, self.shape[1])
        for coefficient, call in self.calls:
            out = out + coefficient @ call.jacobian(x)
        return sp.csr_array(out)

    @cached_property
    def _of_pairs(self) -> Pattern:
        """Where the derivatives of the products by their first and by their second variable stand."""
        each = np.arange(len(self.pairs) + 1)
        shape = (len(self.pairs), self.shape[1])
        return Pattern.of(
            [sp.csr_array((np.ones(len(self.pairs)), column, each), shape=shape) for column in self.pairs.T]
        )

    def largest_term(self, x: Array) -> Array:
        """Largest absolute term of each balance at x, shape (m,): the scale a closure is judged by."""
        parts = [_row_max(self.linear, x), np.abs(self.rhs)]
        if self.products.nnz:
            parts.append(_row_max(self.products, x[self.pairs[:, 0]] * x[self.pairs[:, 1]]))
        parts.extend(_row_max(f, c.value(x)) for f, c in self.calls)
        return np.max(parts, axis=0)

    def split_terms(self, x: Array) -> tuple[Array, Array]:
        """Sums of the positive and of the negative terms of each balance at x, each of shape (m,)."""
        positive, negative = np.maximum(-self.rhs, 0.0), np.minimum(-self.rhs, 0.0)
        parts = [(self.linear, x)]
        if self.products.nnz:
            parts.append((self.products, x[self.pairs[:, 0]] * x[self.pairs[:, 1]]))
        parts.extend((f, c.value(x)) for f, c in self.calls)
        for matrix, values in parts:
            terms = matrix.data * values[matrix.indices]
            rows = np.repeat(np.arange(matrix.shape[0]), np.diff(matrix.indptr))
            np.add.at(positive, rows, np.maximum(terms, 0.0))
            np.add.at(negative, rows, np.minimum(terms, 0.0))
        return positive, negative


def _row_max(matrix: sp.csr_array, x: Array) -> Array:
    terms = np.abs(matrix.data * x[matrix.indices])
    out = np.zeros(matrix.shape[0])
    rows = np.repeat(np.arange(matrix.shape[0]), np.diff(matrix.indptr))
    np.maximum.at(out, rows, terms)
    return out


class System:
    """Collects variables and balances from domains.

    Examples
    --------
    >>> system = System()
    >>> flow = system.variables("flow", ["feed", "light", "heavy"], unit="kg/h", lower=0)
    >>> _ = system.require(flow["feed"] - flow["light"] - flow["heavy"] == 0, names=["splitter"], kind="mass")
    >>> system.equations.shape
    (1, 3)
    """

    def __init__(self) -> None:
        self.blocks: list[Block] = []
        self.row_blocks: list[Rows] = []
        self.priors: list[Prior] = []
        self.fixed: dict[int, float] = {}
        self._bounds: list[tuple[Array, Array]] = []
        self._starts: list[Array] = []
        self._balances: list[Expression] = []
        self._columns: dict[str, dict[str, int]] = {}
        self._count = 0
        self._writer = ""

    @contextlib.contextmanager
    def written_by(self, writer: str) -> Iterator[None]:
        """Mark everything declared inside the block as written by this domain."""
        before, self._writer = self._writer, writer
        try:
            yield
        finally:
            self._writer = before

    @property
    def size(self) -> int:
        """Number of variables, faults included."""
        return self._count

    def variables(
        self,
        quantity: str,
        items: Sequence[str],
        *,
        unit: str,
        lower: float | Array = -np.inf,
        upper: float | Array = np.inf,
        start: float | Array = np.nan,
    ) -> Expression:
        """Declare one variable per item, named ``item.quantity``.

        Parameters
        ----------
        quantity : str
            What is measured: flow, pressure, ... ; may contain dots.
        items : sequence of str
            Streams, nodes or other things that have this quantity.
        unit : str
            Unit of all of them.
        lower, upper : float or array of shape (k,)
            Physical bounds.
        start : float or array of shape (k,)
            A typical value to start a nonlinear solution from; nan leaves it to the program.

        Returns
        -------
        Expression
            The k variables as a vector.

        Raises
        ------
        ValueError
            If a variable of that name is there already.
        """
        return self._declare(quantity, items, unit, lower, upper, start, None)

    def faults(
        self,
        kind: str,
        items: Sequence[str],
        *,
        unit: str,
        says: str,
        separate: str = "",
        lower: float = -np.inf,
        upper: float = np.inf,
        rate: float | None = None,
    ) -> Expression:
        """Declare possible faults: variables that are zero unless that fault is there.

        Parameters
        ----------
        kind : str
            Short name of the kind of fault, e.g. ``leak``; the variables are named ``item.leak``.
        items : sequence of str
            Where it could be.
        unit : str
            Unit of its size.
        says : str
            How an explanation names it; see `FaultKind`.
        separate : str
            What would confirm or exclude it.
        lower, upper : float
            0 on one side makes the fault one-sided.
        rate : float, optional
            Prior probability of each; the case file's `settings` decide when it is not given.

        Returns
        -------
        Expression
            The k fault variables as a vector, to be written into balances.
        """
        return self._declare(kind, items, unit, lower, upper, 0.0, FaultKind(kind, says, separate, rate))

    def _declare(
        self,
        quantity: str,
        items: Sequence[str],
        unit: str,
        lower: float | Array,
        upper: float | Array,
        start: float | Array,
        fault: FaultKind | None,
    ) -> Expression:
        names = tuple(items)
        k = len(names)
        taken = self._columns.setdefault(quantity, {})
        new = dict(zip(names, range(self._count, self._count + k), strict=True))
        if len(new) != k:
            double = next(n for n in names if names.count(n) > 1)
            raise ValueError(f"variable {double}.{quantity} is declared twice in one block")
        clash = taken.keys() & new.keys()
        if clash:
            name = min(clash)
            raise ValueError(
                f"variable {name}.{quantity} is written by both {self.block_of(taken[name]).writer!r} "
                f"and {self._writer!r}; one of the two must choose another name or read the other's"
            )
        taken.update(new)
        self.blocks.append(Block(quantity, names, unit, self._count, self._writer, fault))
        self._bounds.append((np.broadcast_to(lower, k).astype(float), np.broadcast_to(upper, k).astype(float)))
        self._starts.append(np.broadcast_to(start, k).astype(float))
        first, self._count = self._count, self._count + k
        return self._select(np.arange(first, first + k), names)

    def _select(self, columns: npt.NDArray[np.int64], items: tuple[str, ...]) -> Expression:
        k = columns.size
        matrix = sp.csr_array((np.ones(k), (np.arange(k), columns)), shape=(k, self._count))
        return Expression(self, matrix, np.zeros(k), sp.csr_array((k, 0)), np.zeros((0, 2), dtype=np.int64), (), items)

    def find(self, quantity: str, items: Sequence[str] | None = None) -> Expression | None:
        """Variables of a quantity that another domain declared, or None where it is not there.

        Parameters
        ----------
        quantity : str
            E.g. ``flow``.
        items : sequence of str, optional
            Which ones, in this order; all declared ones when left out.

        Returns
        -------
        Expression or None
        """
        known = self._columns.get(quantity, {})
        wanted = tuple(known) if items is None else tuple(items)
        if not wanted or any(w not in known for w in wanted):
            return None
        return self._select(np.array([known[w] for w in wanted], dtype=np.int64), wanted)

    def apply(
        self, function: Callable[..., Any], *arguments: Expression, derivatives: Callable[..., Any]
    ) -> Expression:
        """Use a function of the subject (steam properties, a pressure-drop law) in a balance.

        Parameters
        ----------
        function : callable
            ``function(*arrays of shape (k,)) -> (k,)``.
        *arguments : Expression
            Affine, all of the same size k.
        derivatives : callable
            ``derivatives(*arrays of shape (k,)) -> sequence of (k,)``, one partial derivative for each argument.

        Returns
        -------
        Expression
            With k entries.

        Raises
        ------
        ValueError
            If an argument is not affine or the sizes differ.
        """
        if not arguments or any(not a.is_affine for a in arguments):
            raise ValueError("a function takes affine expressions as arguments")
        k = arguments[0].size
        if any(a.size != k for a in arguments):
            raise ValueError("all arguments of a function must have the same number of entries")
        call = Call(
            function,
            derivatives,
            tuple(a.linear for a in arguments),
            tuple(a.constant for a in arguments),
            self._writer,
        )
        identity = sp.csr_array(sp.eye_array(k))
        return Expression(
            self,
            sp.csr_array((k, self._count)),
            np.zeros(k),
            sp.csr_array((k, 0)),
            np.zeros((0, 2), dtype=np.int64),
            ((identity, call),),
        )

    def require(
        self,
        balance: Balance,
        *,
        names: Sequence[str] | None = None,
        kind: str,
        unit: str = "",
        nodes: Sequence[str] | None = None,
    ) -> Rows:
        """Require that a balance holds.

        Parameters
        ----------
        balance : Balance
            What ``left == right`` gives; one row per entry.
        names : sequence of str, optional
            A name for each row, unique in the system; ``kind 1``, ``kind 2``, ... when left out.
        kind : str
            What is balanced: mass, volume, charge, carbon, ...
        unit : str
            Unit of the balance.
        nodes : sequence of str, optional
            Node of each row; the names when left out.

        Returns
        -------
        Rows
            The block of rows.

        Raises
        ------
        ValueError
            If the number of names or nodes does not fit.
        """
        if not isinstance(balance, Balance):
            raise TypeError("require() takes a comparison, e.g. require(inflow - outflow == 0, ...)")
        expression = balance.expression
        if expression.system is not self:
            raise ValueError("the balance belongs to another system")
        k = expression.size
        first = sum(len(r.names) for r in self.row_blocks)
        labels = tuple(names) if names is not None else tuple(f"{kind} {i + 1}" for i in range(k))
        where = tuple(nodes) if nodes is not None else labels
        if len(labels) != k or len(where) != k:
            raise ValueError(f"{k} balances need {k} names and nodes, got {len(labels)} and {len(where)}")
        block = Rows(labels, kind, unit, where, self._writer, first)
        self.row_blocks.append(block)
        self._balances.append(expression)
        self.__dict__.pop("equations", None)
        return block

    def fix(self, variables: Expression, values: float | Array) -> None:
        """Declare variables as exactly known."""
        for column, value in zip(*_single(variables, values), strict=True):
            self.fixed[int(column)] = float(value)

    def prior(self, variables: Expression, values: float | Array, sigmas: float | Array, *, origin: str) -> None:
        """Declare prior knowledge with its own sigma; it then counts as a reading.

        Parameters
        ----------
        variables : Expression
            A block of single variables, k entries.
        values, sigmas : float or array of shape (k,)
            In the unit of the variables; sigmas above zero.
        origin : str
            Where the knowledge comes from, for the report.
        """
        columns, value = _single(variables, values)
        sigma = np.broadcast_to(np.asarray(sigmas, dtype=float), columns.shape)
        if not np.all(sigma > 0):
            raise ValueError("a prior needs a sigma above zero; use fix() for what is exactly known")
        self.priors.append(Prior(columns, value, sigma, origin))

    @cached_property
    def equations(self) -> Equations:
        """All balances as arrays; made once, when first asked for."""
        n = self._count
        if not self._balances:
            empty = sp.csr_array((0, n))
            return Equations(empty, np.zeros(0), sp.csr_array((0, 0)), np.zeros((0, 2), dtype=np.int64))
        total = stack(self._balances) if len(self._balances) > 1 else self._balances[0]
        linear = sp.csr_array((total.linear.data, total.linear.indices, total.linear.indptr), shape=(total.size, n))
        linear.sum_duplicates()
        linear.eliminate_zeros()
        pairs, where = np.unique(total.pairs, axis=0, return_inverse=True)
        products = total.products.tocoo()
        merged = sp.csr_array(
            (products.data, (products.row, where.ravel()[products.col])), shape=(total.size, len(pairs))
        )
        merged.eliminate_zeros()
        return Equations(linear, -total.constant, merged, pairs.reshape(-1, 2), total.calls)

    @property
    def lower(self) -> Array:
        """Lower bounds, shape (n,)."""
        return np.concatenate([b[0] for b in self._bounds]) if self._bounds else np.zeros(0)

    @property
    def upper(self) -> Array:
        """Upper bounds, shape (n,)."""
        return np.concatenate([b[1] for b in self._bounds]) if self._bounds else np.zeros(0)

    @property
    def starts(self) -> Array:
        """Typical values given by domains, shape (n,); nan where none was given."""
        return np.concatenate(self._starts) if self._starts else np.zeros(0)

    def column(self, name: str) -> int:
        """Column of a variable by its name ``item.quantity``.

        Raises
        ------
        KeyError
            If there is no such variable.
        """
        item, _, quantity = name.partition(".")
        return self._columns[quantity][item]

    def block_of(self, column: int) -> Block:
        """Block that a column belongs to."""
        starts = [b.start for b in self.blocks]
        return self.blocks[int(np.searchsorted(starts, column, side="right")) - 1]

    def name(self, column: int) -> str:
        """Name of a column."""
        return self.block_of(column).name(column)

    def unit(self, column: int) -> str:
        """Unit of a column."""
        return self.block_of(column).unit

    def names(self) -> list[str]:
        """Names of all columns."""
        return [f"{item}.{b.quantity}" for b in self.blocks for item in b.items]

    def units(self) -> Mapping[str, str]:
        """Unit of every variable by its name, possible faults left out."""
        return {f"{item}.{b.quantity}": b.unit for b in self.blocks if b.fault is None for item in b.items}

    def row_names(self) -> list[str]:
        """Names of all rows."""
        return [name for r in self.row_blocks for name in r.names]

    def rows_of(self, row: int) -> Rows:
        """Block that a row belongs to."""
        starts = [r.start for r in self.row_blocks]
        return self.row_blocks[int(np.searchsorted(starts, row, side="right")) - 1]


def _single(variables: Expression, values: float | Array) -> tuple[npt.NDArray[np.int64], Array]:
    """Columns of a block of single variables, and one value for each."""
    m = variables.linear
    plain = variables.is_affine and np.all(np.diff(m.indptr) == 1) and np.all(m.data == 1.0)
    if not plain or np.any(variables.constant != 0):
        raise ValueError("only single variables can be fixed or given a prior, not sums of them")
    columns = m.indices.astype(np.int64)
    return columns, np.broadcast_to(np.asarray(values, dtype=float), columns.shape).astype(float)
