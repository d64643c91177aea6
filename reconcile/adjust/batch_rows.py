"""Very many snapshots of a linear case in which every snapshot has sigmas of its own, as with sigmas in percent.

Structure of arrays: each entry of ``V = K S K'``, of its Cholesky factor and of its inverse is a vector over the snapshots
of a block. With scores ``d = K' V^-1 (K y - k)`` the adjusted values are ``x = y - S d``, test values ``d_i / sqrt(h_i)``
with ``h = diag(H)``, ``H = K' V^-1 K``, and variances ``s - s^2 h``. Absent readings M get a placeholder and the same
correction as in `batch`, ``H_MM delta = d_M``. Sigmas that follow the adjusted value are a fixed point, repeated for all
snapshots of a block until it stands still.

V has the condition of the balances squared, and ``s - s^2 h`` cancels where a meter is far worse than its balances: a
snapshot in which either costs more than seven digits is not trusted, and left to the adjuster that solves one at a time.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from .batch import BLOCK, CLEAR, SAFE, TIE, ZERO, BatchResult
from .solve import Problem, solve

__all__ = ["RowBatch"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

PIVOT = 1e-8
"""Smallest pivot of V, scaled to ones on its diagonal, that is trusted."""

LEFT = 1e-8
"""Smallest share of a variance that may be left by ``s - s^2 h``."""

SETTLED = 1e-11
"""Change of the adjusted values, in sigmas, at which sigmas that follow them have settled."""

ROUNDS = 40


@dataclass
class _State:
    """A block at its sigmas: factor of V, its inverse, and which snapshots are not to be trusted."""

    s: Array
    lower: Array
    inverse: Array
    bad: Bools


class RowBatch:
    """A linear case whose sigmas depend on the values, prepared for any number of snapshots.

    Parameters
    ----------
    problem : Problem
        Its equations must not depend on the values.
    given : ndarray of bool, shape (k,)
        Readings that may be there.
    nominal : ndarray, shape (k,)
        Typical values of the readings, base units: for placeholders and for the choice of pivots.
    shown, tested : ndarray of int
        As in `batch.Batch`.
    names, row_names : callable
        For messages.

    Raises
    ------
    SolveError
        If a sigma vanishes at the typical values.
    """

    def __init__(
        self,
        problem: Problem,
        given: Bools,
        nominal: Array,
        shown: Ints,
        tested: Ints,
        *,
        names: Callable[[int], str],
        row_names: Callable[[int], str],
    ) -> None:
        sigma = problem.sigma(nominal)
        fixed = replace(
            problem, sigma=lambda _: sigma, value_dependent=False, readings=np.where(given, nominal, np.nan)
        )
        whole = solve(fixed, names=names, row_names=row_names)
        a = whole.adjuster
        known = whole.equations.rhs - whole.jacobian[:, problem.fixed] @ problem.start[problem.fixed]
        self.problem, self.present, self.readings = problem, whole.present, int(problem.columns.size)
        self.nominal, self.nominal_variance = nominal, (sigma[self.present] ** 2)[:, None]
        self.form, self.target = np.ascontiguousarray(a.form), (a.transform @ known)[:, None]
        self.across = np.ascontiguousarray(a.form.T)
        self.redundant, self.undetermined = a.redundant, a.undetermined
        r = a.form.shape[0]
        self.row, self.column = np.tril_indices(r)
        self.products = np.ascontiguousarray(a.form[self.row] * a.form[self.column])
        twice = np.where(self.row == self.column, 1.0, 2.0)[:, None]
        self.squares = np.ascontiguousarray((self.products * twice).T)
        place = {int(c): i for i, c in enumerate(problem.columns[self.present])}
        unread = {int(c): i for i, c in enumerate(whole.free)}
        self.direct = np.array([place.get(int(c), -1) for c in shown], dtype=np.int64)
        calculated = np.array([unread.get(int(c), -1) for c in shown], dtype=np.int64)
        self.constant = np.nan_to_num(problem.start[shown])
        self.is_calculated = calculated >= 0
        u = calculated[self.is_calculated]
        self.recover = np.ascontiguousarray(-(a.elimination.recover[u] @ a.measured))
        self.recovered = (a.elimination.recover[u] @ known)[:, None]
        self._find_forced(a.form, a.pivots)
        self.unknown = np.zeros(shown.size, dtype=bool)
        self.unknown[self.is_calculated] = ~a.observable[u]
        where = {int(i): j for j, i in enumerate(self.present)}
        kept = [int(i) for i in tested if int(i) in where]
        self.tested = np.array(kept, dtype=np.int64)
        self.tested_rows = np.array([where[i] for i in kept], dtype=np.int64)

    def _find_forced(self, form: Array, pivots: Ints) -> None:
        """Variables that the balances alone determine: their variance is zero, whatever the sigmas."""
        n = form.shape[1]
        free = np.setdiff1d(np.arange(n), pivots)
        null = np.zeros((n, free.size))  # all directions that close the balances
        null[free, np.arange(free.size)] = 1.0
        null[pivots] = -form[:, free]
        self.forced = np.abs(null).max(axis=1, initial=0.0) < 1e-12
        reach = np.abs(self.recover @ null).max(axis=1, initial=0.0)
        self.forced_unread = reach <= 1e-12 * np.maximum(np.abs(self.recover).max(axis=1, initial=0.0), 1e-300)

    @property
    def checks(self) -> int:
        """Independent checks of a complete snapshot."""
        return self.form.shape[0]

    def adjust(self, readings: Array) -> tuple[BatchResult, Bools]:
        """Adjust snapshots.

        Parameters
        ----------
        readings : ndarray, shape (k, N)
            One snapshot a column, base units, nan where a reading is absent.

        Returns
        -------
        result : BatchResult
            Every snapshot is a pattern of its own, since its sigmas are.
        left : ndarray of bool, shape (N,)
            Snapshots to be solved one at a time: nothing is said about them here.
        """
        count = readings.shape[1]
        shown = self.direct.size
        values, sigmas = np.full((shown, count), np.nan), np.full((count, shown), np.nan)
        objective, largest = np.full(count, np.nan), np.full(count, np.nan)
        checks, suspect = np.zeros(count, dtype=np.int64), np.full(count, -1, dtype=np.int64)
        absent = np.ones((count, self.readings), dtype=bool)
        checked = np.zeros((count, self.readings), dtype=bool)
        left = np.zeros(count, dtype=bool)
        for start in range(0, count, BLOCK):
            part = slice(start, min(start + BLOCK, count))
            y = np.ascontiguousarray(readings[self.present, part])
            gone = np.isnan(y)
            with np.errstate(all="ignore"):
                found = self._block(y, gone)
            bad, x, s, state, score, share, seen, extra, unread_extra = found
            left[part] = bad
            absent[part, self.present] = gone.T
            objective[part] = np.einsum("nb,nb->b", score, score * s)
            checks[part] = self.checks - gone.sum(axis=0)
            checked[part, self.present] = seen.T
            with np.errstate(all="ignore"):
                self._show(x, s, state, share, extra, unread_extra, values[:, part], sigmas[part], left[part])
                z = np.where(seen, score / np.sqrt(share), 0.0)[self.tested_rows]
            if self.tested.size:
                size = np.abs(z)
                most = size.max(axis=0)
                first = np.argmax(size >= most * (1 - TIE), axis=0)
                some = seen[self.tested_rows].any(axis=0)
                largest[part] = np.where(some, z[first, np.arange(first.size)], np.nan)
                suspect[part] = np.where(some, self.tested[first], -1)
        pattern = np.arange(count)
        return BatchResult(
            values, objective, checks, suspect, largest, None, pattern, absent, checked, sigmas
        ), left  # fmt: skip

    def _variances(self, y: Array, gone: Bools) -> Array:
        full = np.repeat(self.nominal[:, None], y.shape[1], axis=1)
        full[self.present] = np.where(gone, self.nominal[self.present, None], y)
        s = np.ascontiguousarray(self.problem.sigma(full.T).T[self.present])
        return np.where(gone, self.nominal_variance, s * s)

    def _block(self, y: Array, gone: Bools) -> tuple[Bools, Array, Array, _State, Array, Array, Bools, Array, Array]:
        filled = np.where(gone, self.nominal[self.present, None], y)
        values, before = filled, filled
        bad = np.zeros(y.shape[1], dtype=bool)
        index = _by_number(gone)
        for _ in range(ROUNDS):
            s = self._variances(values, gone)
            bad |= ~np.all((s > 0) & np.isfinite(s), axis=0)
            s = np.where(bad, self.nominal_variance, s)
            state = self._factor(s)
            filled, downdate = self._fill(filled, index, state)
            score = self.across @ _apply(state.inverse, self.form @ filled - self.target)
            x = filled - s * score
            x -= s * (self.across @ _apply(state.inverse, self.form @ x - self.target))
            moved = np.max(np.where(gone | bad, 0.0, np.abs(x - before) / np.sqrt(s)), axis=0, initial=0.0)
            before = x
            if not self.problem.settle or np.all((moved < SETTLED) | bad):
                break
            values = x
        else:
            bad |= moved >= SETTLED
        bad |= state.bad
        full = self.squares @ state.inverse[self.row, self.column]
        share, extra, unread_extra, hard = self._downdate(full, s, downdate, index)
        bad |= hard
        relative = share / np.where(full > 0, full, 1.0)
        there = self.redundant[:, None] & ~gone
        bad |= np.any(there & (relative > ZERO) & (relative < CLEAR), axis=0)
        seen = there & (relative >= CLEAR)
        # What is left where cancellation is too strong is for the other way to say.
        rest = 1.0 - s * full
        tested = self.redundant & ~self.forced
        bad |= np.any(tested[:, None] & ~(rest > LEFT), axis=0)
        extra += s * np.where(self.redundant[:, None], rest, 1.0)
        extra[self.forced] = 0.0
        return bad, x, s, state, score, share, seen, extra, unread_extra

    def _factor(self, s: Array) -> _State:
        """Cholesky factor and inverse of V for every snapshot of the block."""
        r, count = self.checks, s.shape[1]
        entries = self.products @ s
        v = np.zeros((r, r, count))
        v[self.row, self.column] = entries
        bad = np.zeros(count, dtype=bool)
        lower = np.zeros((r, r, count))
        for j in range(r):
            column = v[j:, j].copy()
            for m in range(j):
                column -= lower[j:, m] * lower[j, m]
            bad |= ~(column[0] > PIVOT * v[j, j])
            root = np.sqrt(np.maximum(column[0], PIVOT * v[j, j]))
            lower[j:, j] = column / root
            lower[j, j] = root
        half = np.zeros((r, r, count))  # inverse of the factor
        for j in range(r):
            half[j, j] = 1.0 / lower[j, j]
            for i in range(j + 1, r):
                total = lower[i, j] * half[j, j]
                for m in range(j + 1, i):
                    total = total + lower[i, m] * half[m, j]
                half[i, j] = -total / lower[i, i]
        inverse = np.zeros((r, r, count))
        for i in range(r):
            for m in range(i, r):
                inverse[i, : i + 1] += half[m, i] * half[m, : i + 1]
        for i in range(r):
            inverse[:i, i] = inverse[i, :i]
        return _State(s, lower, inverse, bad)

    def _fill(self, filled: Array, index: list[tuple[Ints, Ints]], state: _State) -> tuple[Array, list[_Downdate]]:
        """Put into the absent cells what the other readings ask for; twice, for what rounding leaves."""
        out = filled.copy()
        downdates = [self._columns(rows, gone, state) for rows, gone in index]
        for _ in range(2 if index else 0):
            score = self.across @ _apply(state.inverse, self.form @ out - self.target)
            for (rows, gone), d in zip(index, downdates, strict=True):
                k = gone.shape[0]
                half = [_sum(d.inverse[i][j] * score[gone[j], rows] for j in range(i + 1)) for i in range(k)]
                for j in range(k):
                    out[gone[j], rows] -= _sum(d.inverse[i][j] * half[i] for i in range(j, k))
        return out, downdates

    def _columns(self, rows: Ints, gone: Ints, state: _State) -> _Downdate:
        """Columns of H for the absent readings of snapshots that lack as many, and the factor of H_MM."""
        k = gone.shape[0]
        inner = state.inverse[:, :, rows]
        columns = []
        for j in range(k):
            own = self.form[:, gone[j]]
            columns.append(self.across @ _apply(inner, own))
        at = np.arange(rows.size)
        hard = np.zeros(rows.size, dtype=bool)
        size = [np.sqrt(np.maximum(columns[j][gone[j], at], 1e-300)) for j in range(k)]
        hard |= ~self.redundant[gone].all(axis=0)
        lower: list[list[Array]] = []
        for i in range(k):
            line: list[Array] = []
            for j in range(i + 1):
                v = columns[j][gone[i], at] / (size[i] * size[j])
                for m in range(j):
                    v = v - (line[m] * lower[j][m] if j < i else line[m] * line[m])
                if j < i:
                    line.append(v / lower[j][j])
                else:
                    hard |= ~(v > 1.0 / SAFE)
                    line.append(np.sqrt(np.maximum(v, 1.0 / SAFE)))
            lower.append(line)
        inverse: list[list[Array]] = []
        for i in range(k):
            entries: list[Array] = []
            for j in range(i):
                entries.append(-_sum(lower[i][m] * inverse[m][j] for m in range(j, i)) / lower[i][i])
            entries.append(1.0 / lower[i][i])
            inverse.append(entries)
        for j in range(k):
            hard |= _sum(inverse[i][j] ** 2 for i in range(j, k)) > SAFE
        return _Downdate(columns, [[inverse[i][j] / size[j] for j in range(i + 1)] for i in range(k)], hard)

    def _downdate(
        self, full: Array, s: Array, downdates: list[_Downdate], index: list[tuple[Ints, Ints]]
    ) -> tuple[Array, Array, Array, Bools]:
        """What absent readings take from the tests and add to the variances."""
        share, extra = full.copy(), np.zeros_like(full)
        unread = np.zeros((self.recover.shape[0], full.shape[1]))
        hard = np.zeros(full.shape[1], dtype=bool)
        for (rows, gone), d in zip(index, downdates, strict=True):
            hard[rows] |= d.hard
            moves = []
            for j in range(gone.shape[0]):
                move = -s[:, rows] * d.columns[j]
                move[gone[j], np.arange(rows.size)] += 1.0
                moves.append(move)
            for i in range(gone.shape[0]):
                share[:, rows] -= _sum(d.inverse[i][j] * d.columns[j] for j in range(i + 1)) ** 2
                both = _sum(d.inverse[i][j] * moves[j] for j in range(i + 1))
                extra[:, rows] += both**2
                unread[:, rows] += (self.recover @ both) ** 2
        return share, extra, unread, hard

    def _show(
        self, x: Array, s: Array, state: _State, share: Array, variance: Array, unread: Array, values: Array,
        sigmas: Array, left: Bools,
    ) -> None:  # fmt: skip
        values[:] = self.constant[:, None]
        sigmas[:] = 0.0
        measured = self.direct >= 0
        values[measured] = x[self.direct[measured]]
        sigmas[:, measured] = np.sqrt(variance[self.direct[measured]]).T
        if self.recover.size:
            values[self.is_calculated] = self.recover @ x + self.recovered
            calculated = np.empty((self.recover.shape[0], s.shape[1]))
            for u, row in enumerate(self.recover):
                cross = (self.form * row) @ s
                whole = (row**2) @ s
                rest = whole - np.einsum("rb,rb->b", cross, _apply(state.inverse, cross))
                if self.forced_unread[u]:
                    calculated[u] = 0.0
                    continue
                left |= ~(rest > LEFT * whole) & (not self.unknown[np.flatnonzero(self.is_calculated)[u]])
                calculated[u] = rest + unread[u]
            sigmas[:, self.is_calculated] = np.sqrt(calculated).T
        values[self.unknown] = np.nan
        sigmas[:, self.unknown] = np.nan


@dataclass
class _Downdate:
    """Columns of H for absent readings, and the inverse factor of H_MM."""

    columns: list[Array]
    inverse: list[list[Array]]
    hard: Bools


def _by_number(gone: Bools) -> list[tuple[Ints, Ints]]:
    """Snapshots by their number of absent readings, and which those are, shape (number, snapshots)."""
    number = gone.sum(axis=0)
    out = []
    for k in np.unique(number[number > 0]).tolist():
        rows = np.flatnonzero(number == k)
        out.append((rows, np.nonzero(gone[:, rows].T)[1].reshape(rows.size, k).T))
    return out


def _apply(matrix: Array, vector: Array) -> Array:
    """Matrix times vector for every snapshot."""
    out = matrix[:, 0] * vector[0] if len(vector) else np.zeros_like(vector)
    for s in range(1, len(vector)):
        out += matrix[:, s] * vector[s]
    return np.asarray(out)


def _sum(terms: object) -> Array:
    """Sum of arrays in the order given."""
    total: Array | None = None
    for term in terms:  # type: ignore[attr-defined]
        total = term if total is None else total + term
    assert total is not None
    return total
