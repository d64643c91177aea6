"""Many snapshots at once: grouped by which readings are absent, each group one adjuster and one matrix product."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from ..errors import PluginError, ReconcileError, SolveError
from ..system import Equations
from .answers import solve_and_check
from .dense import Adjuster
from .solve import Problem, Rival, Solution, solve

__all__ = ["Group", "Table", "adjust_table"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Group:
    """Snapshots that share one linearisation: the same readings absent, the same sigmas.

    Attributes
    ----------
    rows : ndarray of int
        Which snapshots.
    x : ndarray, shape (len(rows), n)
        All columns; undetermined ones at an arbitrary value that satisfies the balances.
    parity : ndarray, shape (len(rows), r)
    adjuster : Adjuster
    present : ndarray of int
        Readings in the order of the adjuster's measured columns; absent ones may be among them (see `absent`).
    absent : ndarray of int
        Readings that were not there.
    columns : ndarray of int
        Column of every reading.
    free : ndarray of int
        Columns of the adjuster's unmeasured variables.
    equations : Equations
    jacobian : ndarray, shape (m, n)
    sigma : ndarray, shape (k,)
        Sigma of every reading as used.
    steps : int
        Linearisations that were needed.
    rival : Rival or None
        Another answer that closes the balances of these snapshots, where a second start found one.
    """

    rows: Ints
    x: Array
    parity: Array
    adjuster: Adjuster
    present: Ints
    absent: Ints
    columns: Ints
    free: Ints
    equations: Equations
    jacobian: Array
    sigma: Array
    steps: int
    rival: Rival | None = None

    @property
    def checks(self) -> int:
        """Independent checks in these snapshots."""
        return self.adjuster.checks

    @cached_property
    def cover(self) -> Array:
        """Factor F of the covariance of all columns, shape (n, q): cov = F F'; nan rows cannot be calculated."""
        a = self.adjuster
        # One column at least, so that nan has a place even where the balances force every determined value.
        out = np.zeros((self.x.shape[1], max(a.cover.shape[1], 1)))
        out[self.columns[self.present], : a.cover.shape[1]] = a.cover
        out[self.free, : a.cover.shape[1]] = a.cover_unmeasured
        out[~self.determined] = np.nan
        return out

    @cached_property
    def response(self) -> Array:
        """How much each column moves per unit of each reading, shape (n, k); zero for absent readings."""
        a = self.adjuster
        inner = a.q2.T if not a.gain.size else a.q2.T - a.gain @ a.q1.T
        measured = (a.sigma[:, None] * a.q2) @ (inner / a.sigma)
        out = np.zeros((self.x.shape[1], self.columns.size))
        out[np.ix_(self.columns[self.present], self.present)] = measured
        out[np.ix_(self.free, self.present)] = -a.through @ measured
        out[:, self.absent] = 0.0
        return out

    @cached_property
    def determined(self) -> Bools:
        """Whether each column is determined by readings and balances, shape (n,)."""
        out = np.ones(self.x.shape[1], dtype=bool)
        out[self.columns[self.present]] = ~self.adjuster.undetermined
        out[self.free] = self.adjuster.observable
        return out

    @cached_property
    def checked(self) -> Bools:
        """Whether each reading is checked by others, shape (k,); False for absent readings."""
        out = np.zeros(self.columns.size, dtype=bool)
        out[self.present] = self.adjuster.redundant
        out[self.absent] = False
        return out

    @cached_property
    def signatures(self) -> Array:
        """Parity shift per unit bias of each reading, shape (r, k); zero for absent readings."""
        out = np.zeros((self.checks, self.columns.size))
        out[:, self.present] = self.adjuster.signatures
        out[:, self.absent] = 0.0
        return out

    def signatures_of(self, columns: Ints) -> Array:
        """Parity shift per unit of fault variables, shape (r, number of columns)."""
        return self.adjuster.signature_of_columns(self.jacobian[:, columns])


@dataclass(frozen=True)
class Table:
    """Adjusted snapshots.

    Attributes
    ----------
    groups : tuple of Group
    failed : dict of int to ReconcileError
        Snapshots for which no consistent answer was found, and why.
    size : int
        Number of snapshots.
    """

    groups: tuple[Group, ...]
    failed: Mapping[int, ReconcileError]
    size: int

    def placed(self, rows: Ints, size: int, failed: Mapping[int, ReconcileError] | None = None) -> Table:
        """Return the same snapshots as those rows of a larger table, beside others that were not adjusted."""
        groups = tuple(replace(g, rows=rows[g.rows]) for g in self.groups)
        moved = {int(rows[i]): error for i, error in self.failed.items()}
        return Table(groups, {**moved, **(failed or {})}, size)

    @cached_property
    def group_of(self) -> Ints:
        """Group of each snapshot, -1 where it failed."""
        out = np.full(self.size, -1, dtype=np.int64)
        for g, group in enumerate(self.groups):
            out[group.rows] = g
        return out


def adjust_table(
    problem: Problem,
    readings: Array,
    *,
    names: Callable[[int], str],
    row_names: Callable[[int], str],
    sigmas: Array | None = None,
    scatter: Array | None = None,
) -> Table:
    """Adjust every row of a table of readings.

    Parameters
    ----------
    problem : Problem
        What all snapshots share; its own readings are ignored.
    readings : ndarray, shape (N, k)
        nan where a reading is absent.
    names, row_names : callable
        For messages.
    sigmas : ndarray, shape (N, k), optional
        Standard uncertainty of single cells that have their own; nan where the problem's law holds.
    scatter : ndarray, shape (N, k), optional
        What adds to that law in quadrature; 0 where nothing does.

    Returns
    -------
    Table
    """
    if sigmas is not None or scatter is not None:
        return _by_sigma(problem, readings, sigmas, scatter, names, row_names)
    present = np.isfinite(readings)
    everything = problem.equations(np.nan_to_num(readings[0])) if len(readings) else None
    if everything is not None and everything.is_linear and not problem.value_dependent:
        return _linear(problem, readings, present, names, row_names)
    groups, failed = [], {}
    for i in range(len(readings)):
        try:
            solution = solve_and_check(replace(problem, readings=readings[i]), names=names, row_names=row_names)
        except (SolveError, PluginError) as error:
            failed[i] = error
            continue
        groups.append(_single(i, solution, problem.columns, np.flatnonzero(~present[i])))
    return Table(tuple(groups), failed, len(readings))


def _by_sigma(
    problem: Problem,
    readings: Array,
    sigmas: Array | None,
    scatter: Array | None,
    names: Callable[[int], str],
    row_names: Callable[[int], str],
) -> Table:
    """Rows with the same sigmas of their own share everything else, too."""
    own = np.full(readings.shape, np.nan) if sigmas is None else sigmas
    more = np.zeros(readings.shape) if scatter is None else np.nan_to_num(scatter)
    # What an absent reading would have had does not keep rows apart.
    absent = ~np.isfinite(readings)
    own, more = np.where(absent, np.nan, own), np.where(absent, 0.0, more)
    kinds, which = np.unique(np.hstack([np.nan_to_num(own, nan=-1.0), more]), axis=0, return_inverse=True)
    which = which.ravel()
    groups: list[Group] = []
    failed: dict[int, ReconcileError] = {}
    for kind in range(len(kinds)):
        rows = np.flatnonzero(which == kind)
        part = adjust_table(
            with_sigmas(problem, own[rows[0]], more[rows[0]]), readings[rows], names=names, row_names=row_names
        )
        part = part.placed(rows, len(readings))
        groups.extend(part.groups)
        failed.update(part.failed)
    return Table(tuple(groups), failed, len(readings))


def with_sigmas(problem: Problem, own: Array, more: Array) -> Problem:
    """Return a problem with other sigmas.

    Parameters
    ----------
    problem : Problem
    own : ndarray, shape (k,)
        Sigmas that replace its law; nan where that holds.
    more : ndarray, shape (k,)
        What adds to the law in quadrature.
    """
    law, stated = problem.sigma, np.isfinite(own)
    if not stated.any() and not more.any():
        return problem
    return replace(problem, sigma=lambda values: np.where(stated, own, np.hypot(law(values), more)))


def _single(row: int, s: Solution, columns: Ints, absent: Ints) -> Group:
    return Group(
        np.array([row]), s.x[None], s.parity[None], s.adjuster, s.present, absent, columns, s.free,
        s.equations, s.jacobian, s.sigma, s.steps, s.rival,
    )  # fmt: skip


def _linear(
    problem: Problem,
    readings: Array,
    present: Bools,
    names: Callable[[int], str],
    row_names: Callable[[int], str],
) -> Table:
    """One factorisation for all; absent readings are projected out pattern by pattern."""
    ever = present.any(axis=0)
    template = np.where(ever, 0.0, np.nan)
    whole = solve(replace(problem, readings=template), names=names, row_names=row_names)
    known = whole.equations.rhs - whole.jacobian[:, problem.fixed] @ problem.start[problem.fixed]
    used = present[:, ever]
    patterns, which = np.unique(used, axis=0, return_inverse=True)
    which = which.ravel()
    groups = []
    for p, pattern in enumerate(patterns):
        rows = np.flatnonzero(which == p)
        adjuster = whole.adjuster if pattern.all() else whole.adjuster.without(~pattern)
        xm, parity = adjuster.adjust(readings[rows][:, ever], known)
        x = np.tile(np.nan_to_num(problem.start), (rows.size, 1))
        x[:, problem.columns[ever]] = xm
        x[:, whole.free] = adjuster.unmeasured(xm, known)
        absent = np.flatnonzero(~(ever & present[rows[0]]))
        groups.append(
            Group(
                rows,
                x,
                parity,
                adjuster,
                whole.present,
                absent,
                problem.columns,
                whole.free,
                whole.equations,
                whole.jacobian,
                whole.sigma,
                1,
            )
        )
    return Table(tuple(groups), {}, len(readings))
