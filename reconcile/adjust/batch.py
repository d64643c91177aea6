"""Very many snapshots of one linear case: a few thin matrix products a block, and no factorisation for absent readings.

A block is BLOCK snapshots, one a column. With the adjuster of the complete readings, residuals ``R = K Y - k`` give the
parity vectors ``T = R^-T R``, the scaled adjustments ``E = Q1 T`` and the adjusted values ``X = Y - sigma E``.

An absent reading gets a placeholder, whose unknown error is then removed: with ``N = Q1 Q1'`` and M the absent readings,
``N_MM delta = E_M``, after which the snapshot is treated like a complete one. What it does to test values and
uncertainties follows from the Cholesky factor of ``N_MM`` too (a rank-k downdate); this is the same as projecting the
readings out, see `dense.Adjuster.without`, which still decides wherever ``N_MM`` is nearly singular.

Blocks are computed one by one, so a snapshot's numbers depend only on which block it is in, not on how many there are.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt
from scipy.linalg import solve_triangular

from .dense import Adjuster
from .solve import Problem, solve

__all__ = ["BLOCK", "Batch", "BatchResult", "is_linear"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Bools = npt.NDArray[np.bool_]

BLOCK = 2048
"""Snapshots in a block: its work arrays stay in the cache of one core."""

SPAN = 16 * BLOCK
"""Snapshots whose patterns of absent readings are worked out together: many blocks share them."""

TOGETHER = 4096
"""Patterns whose uncertainties are worked out at once: what that takes does not grow with their number."""

TIE = 1e-9
"""Relative difference between two test values below which they count as equal."""

SAFE = 1e4
"""Condition of the absent readings beyond which the exact projection decides."""

ZERO, CLEAR = 1e-11, 1e-8
"""Share of a test that is left: nothing below the first, certainly something above the second."""

REMEMBERED = 20_000
"""Patterns of absent readings that needed the exact projection, kept for later blocks."""


@dataclass(frozen=True)
class BatchResult:
    """Adjusted snapshots, one a column.

    Attributes
    ----------
    values : ndarray, shape (v, N)
        The columns asked for, nan where they cannot be calculated.
    objective : ndarray, shape (N,)
    checks : ndarray of int, shape (N,)
    suspect : ndarray of int, shape (N,)
        Reading with the largest |z| among those tested, the first of a tie; -1 where none is checked.
    largest : ndarray, shape (N,)
        Its z, with sign; nan where none is checked.
    z : ndarray, shape (q, N), or None
        Test values of the readings tested, nan where they are not checked.
    pattern : ndarray of int, shape (N,)
        Which pattern of absent readings.
    absent, checked : ndarray of bool, shape (P, k)
        Readings of each pattern that are absent, and those that others check.
    sigmas : ndarray, shape (P, v)
        Standard uncertainties of the columns asked for.
    """

    values: Array
    objective: Array
    checks: Ints
    suspect: Ints
    largest: Array
    z: Array | None
    pattern: Ints
    absent: Bools
    checked: Bools
    sigmas: Array


def is_linear(problem: Problem) -> bool:
    """Whether one linearisation serves all snapshots: no products, and sigmas that do not follow the values."""
    return not problem.value_dependent and problem.equations(np.zeros(problem.columns.size)).is_linear


COMPLETE, HARD = -1, -2
"""Patterns that belong to no group: nothing is absent, or the exact projection decides."""


@dataclass
class _Patterns:
    """What absent readings do, for P patterns: whose group they belong to, at which place there, and what is left."""

    keys: list[int] | list[bytes]
    absent: Bools
    checks: Ints
    scale: Array
    sigmas: Array
    group_of: Ints
    place: Ints
    groups: list[_Alike] = field(default_factory=list)
    of_tests: Array = field(default_factory=lambda: np.zeros((0, 0)))
    untested: Bools = field(default_factory=lambda: np.zeros(0, dtype=bool))
    partial: Bools = field(default_factory=lambda: np.zeros(0, dtype=bool))
    unknown: list[tuple[int, Bools]] = field(default_factory=list)


@dataclass(frozen=True)
class _Alike:
    """Patterns with the same number of absent readings, and the factors that put values in their places."""

    index: Ints
    inverse: list[list[Array]]


@dataclass(frozen=True)
class _Exact:
    """One pattern by the exact projection."""

    bias: Array
    checks: int
    scale: Array
    sigmas: Array


class Batch:
    """A linear case prepared for any number of snapshots.

    Parameters
    ----------
    problem : Problem
        What all snapshots share; its own readings are ignored.
    given : ndarray of bool, shape (k,)
        Readings that may be there; the others are treated as not measured.
    shown : ndarray of int, shape (v,)
        Columns to return.
    tested : ndarray of int, shape (q,)
        Readings that may be suspected.
    names, row_names : callable
        For messages.

    Raises
    ------
    ValueError
        If the case is not linear.
    """

    def __init__(
        self,
        problem: Problem,
        given: Bools,
        shown: Ints,
        tested: Ints,
        *,
        names: Callable[[int], str],
        row_names: Callable[[int], str],
    ) -> None:
        if not is_linear(problem):
            raise ValueError("only a linear case with sigmas that do not depend on the values has one linearisation")
        whole = solve(replace(problem, readings=np.where(given, 0.0, np.nan)), names=names, row_names=row_names)
        a = whole.adjuster
        known = whole.equations.rhs - whole.jacobian[:, problem.fixed] @ problem.start[problem.fixed]
        self.adjuster, self.present, self.given = a, whole.present, np.asarray(given, dtype=bool)
        self.readings = int(problem.columns.size)
        self.form, self.target = np.ascontiguousarray(a.form), (a.transform @ known)[:, None]
        self.to_parity = np.zeros((a.checks, a.checks))
        self.to_parity[:, a.order] = solve_triangular(a.triangle, np.eye(a.checks), trans="T")
        self.to_scaled = np.ascontiguousarray(a.q1 @ self.to_parity)
        self.to_move = a.sigma[:, None] * self.to_scaled
        self.typical = np.nan_to_num(problem.start[problem.columns[self.present]])
        self._prepare_shown(problem, whole.free, known, shown)
        self._prepare_tests(tested)
        self._remembered: dict[bytes, _Exact] = {}

    def _prepare_shown(self, problem: Problem, free: Ints, known: Array, shown: Ints) -> None:
        """What gives the columns asked for, their uncertainties, and what an absent reading adds to these."""
        a = self.adjuster
        place = {int(c): i for i, c in enumerate(problem.columns[self.present])}
        unread = {int(c): i for i, c in enumerate(free)}
        self.direct = np.array([place.get(int(c), -1) for c in shown], dtype=np.int64)
        self.calculated = np.array([unread.get(int(c), -1) for c in shown], dtype=np.int64)
        self.constant = np.nan_to_num(problem.start[shown])
        u = self.calculated[self.calculated >= 0]
        self.recover = np.ascontiguousarray(-(a.elimination.recover[u] @ a.measured))
        self.recovered = (a.elimination.recover[u] @ known)[:, None]
        self.base_sigmas = self._sigmas(a)
        length = np.linalg.norm(a.q1, axis=1)
        self.seen = a.redundant & (length > 0)
        self.length = np.where(self.seen, length, 1.0)
        unit = np.where(self.seen, 1.0, 0.0)[:, None] * a.q1 / self.length[:, None]
        self.alike = unit @ unit.T
        # Covariances with each reading, from Q2 and so without cancellation; over the length of the reading's own test.
        other = a.q2 @ a.q2.T
        spread = self._of_shown(a.sigma[:, None] * other, a.cover_unmeasured @ a.q2.T)
        self.spread = np.ascontiguousarray((spread / self.length).T)

    def _of_shown(self, measured: Array, unmeasured: Array) -> Array:
        """Rows of the columns asked for, from rows of measured and of unmeasured ones; zero where exactly known."""
        out = np.zeros((self.direct.size, measured.shape[1]))
        out[self.direct >= 0] = measured[self.direct[self.direct >= 0]]
        out[self.calculated >= 0] = unmeasured[self.calculated[self.calculated >= 0]]
        return out

    def _sigmas(self, a: Adjuster) -> Array:
        """Uncertainties of the columns asked for; nan where they cannot be calculated."""
        out = np.linalg.norm(self._of_shown(a.cover, a.cover_unmeasured), axis=1)
        lost = np.zeros(out.size, dtype=bool)
        lost[self.direct >= 0] = a.undetermined[self.direct[self.direct >= 0]]
        lost[self.calculated >= 0] = ~a.observable[self.calculated[self.calculated >= 0]]
        out[lost] = np.nan
        return out

    def _prepare_tests(self, tested: Ints) -> None:
        place = {int(i): j for j, i in enumerate(self.present)}
        kept = [int(i) for i in tested if int(i) in place]
        self.tested = np.array(kept, dtype=np.int64)
        self.tested_rows = np.array([place[i] for i in kept], dtype=np.int64)
        self.tested_of = np.array([list(tested).index(i) for i in kept], dtype=np.int64)
        self.tests = len(tested)
        self.base_scale = np.where(self.seen, 1.0 / self.length, 0.0)

    # ------------------------------------------------------------------ adjustment

    def adjust(self, readings: Array, *, tests: bool = False) -> BatchResult:
        """Adjust snapshots.

        Parameters
        ----------
        readings : ndarray, shape (k, N)
            One snapshot a column, base units, nan where a reading is absent.
        tests : bool
            Whether to return the test values of all readings tested.

        Returns
        -------
        BatchResult
        """
        count = readings.shape[1]
        values = np.empty((self.direct.size, count))
        objective, largest = np.empty(count), np.empty(count)
        checks, suspect, pattern = (np.empty(count, dtype=np.int64) for _ in range(3))
        z = np.full((self.tests, count), np.nan) if tests else None
        codes: dict[int | bytes, int] = {}
        found: list[tuple[Bools, Bools, Array]] = []
        for span in range(0, count, SPAN):
            until = min(span + SPAN, count)
            patterns, which = self._patterns(np.isnan(readings[self.present, span:until]))
            for start in range(span, until, BLOCK):
                part = slice(start, min(start + BLOCK, until))
                y = np.ascontiguousarray(readings[self.present, part])
                own = which[part.start - span : part.stop - span]
                self._block(y, patterns, own, values[:, part], objective[part], largest[part], suspect[part],
                            None if z is None else z[:, part])  # fmt: skip
            checks[span:until] = patterns.checks[which]
            before = len(codes)
            # Numbers in the order in which blocks show the patterns.
            _, first = np.unique(which, return_index=True)
            shown = np.argsort(first // BLOCK, kind="stable")
            number = np.empty(len(patterns.keys), dtype=np.int64)
            number[shown] = [codes.setdefault(patterns.keys[p], len(codes)) for p in shown.tolist()]
            new = shown[number[shown] >= before]
            found.append((patterns.absent[new], patterns.scale[new] > 0, patterns.sigmas[new]))
            pattern[span:until] = number[which]
        absent = np.ones((len(codes), self.readings), dtype=bool)
        checked = np.zeros((len(codes), self.readings), dtype=bool)
        sigmas = np.empty((len(codes), self.direct.size))
        if found:
            absent[:, self.present], checked[:, self.present], sigmas[:] = (
                np.concatenate(parts) for parts in zip(*found, strict=True)
            )
        return BatchResult(values, objective, checks, suspect, largest, z, pattern, absent, checked, sigmas)

    def _block(
        self,
        y: Array,
        patterns: _Patterns,
        which: Ints,
        values: Array,
        objective: Array,
        largest: Array,
        suspect: Ints,
        z: Array | None,
    ) -> None:
        gone = np.isnan(y)
        if gone.any():
            self._fill(y, gone, patterns, which)
        residual = self.form @ y - self.target
        parity = self.to_parity @ residual
        np.einsum("rn,rn->n", parity, parity, out=objective)
        x = y - self.to_move @ residual
        x -= self.to_move @ (self.form @ x - self.target)
        self._show(x, patterns, which, values)
        self._test(self.to_scaled[self.tested_rows] @ residual, patterns, which, largest, suspect, z)

    def _show(self, x: Array, patterns: _Patterns, which: Ints, values: Array) -> None:
        if np.array_equal(self.direct, np.arange(len(x))):
            values[:] = x
        else:
            values[:] = self.constant[:, None]
            values[self.direct >= 0] = x[self.direct[self.direct >= 0]]
            values[self.calculated >= 0] = self.recover @ x + self.recovered
        snapshots = np.flatnonzero(patterns.partial[which])
        if snapshots.size:
            own = which[snapshots]
            for j, unknown in patterns.unknown:
                values[j, snapshots[unknown[own]]] = np.nan

    def _test(
        self, scaled: Array, patterns: _Patterns, which: Ints, largest: Array, suspect: Ints, z: Array | None
    ) -> None:
        if not self.tested.size:
            largest[:], suspect[:] = np.nan, -1
            return
        scale = patterns.of_tests
        scaled *= scale if scale.shape[1] == 1 else scale.take(which, axis=1)
        size = np.abs(scaled)
        most = np.maximum.reduce(size, axis=0)
        first = _first(size >= most * (1 - TIE))
        none = patterns.untested[which]
        largest[:] = np.where(none, np.nan, scaled[first, np.arange(first.size)])
        suspect[:] = np.where(none, -1, self.tested[first])
        if z is not None:
            z[self.tested_of] = np.where((scale > 0)[:, which], scaled, np.nan)

    def _without(self, absent: Bools) -> Adjuster:
        gone = np.asarray(absent, dtype=bool)[self.present]
        return self.adjuster.without(gone) if gone.any() else self.adjuster

    def cover(self, absent: Bools) -> Array:
        """Factor F of the covariance of the columns asked for, shape (v, q): cov = F F'; nan rows are not known.

        Parameters
        ----------
        absent : ndarray of bool, shape (k,)
            Readings that are not there.
        """
        a = self._without(absent)
        out = self._of_shown(a.cover, a.cover_unmeasured)
        out[np.isnan(self._sigmas(a))] = np.nan
        return out

    def signatures(self, absent: Bools) -> Array:
        """Parity shift per unit bias of the readings tested, shape (r, q); zero for absent and unchecked ones."""
        a = self._without(absent)
        out = np.zeros((a.checks, self.tests))
        out[:, self.tested_of] = np.where(a.redundant[self.tested_rows], a.signatures[:, self.tested_rows], 0.0)
        return out

    # ------------------------------------------------------------------ absent readings

    def _patterns(self, gone: Bools) -> tuple[_Patterns, Ints]:
        """Distinct patterns of a block, and which one each snapshot has."""
        n, count = gone.shape
        words = -(-n // 64)
        if not gone.any():
            none = np.zeros((1, n), dtype=bool)
            return self._table(none, [0] if words == 1 else [bytes(8 * words)]), np.zeros(count, dtype=np.int64)
        packed = np.zeros((count, 8 * words), dtype=np.uint8)
        packed[:, : -(-n // 8)] = np.packbits(gone, axis=0, bitorder="little").T
        codes = packed.view(np.uint64)
        if words == 1:
            found, first, which = np.unique(codes[:, 0], return_index=True, return_inverse=True)
            return self._table(gone[:, first].T, found.tolist()), which.ravel()
        found, first, which = np.unique(codes, axis=0, return_index=True, return_inverse=True)
        return self._table(gone[:, first].T, [row.tobytes() for row in found]), which.ravel()

    def _table(self, absent: Bools, keys: list[int] | list[bytes]) -> _Patterns:
        count = len(absent)
        table = _Patterns(
            keys,
            absent,
            np.full(count, self.adjuster.checks, dtype=np.int64),
            np.tile(self.base_scale, (count, 1)),
            np.tile(self.base_sigmas, (count, 1)),
            np.full(count, COMPLETE, dtype=np.int64),
            np.zeros(count, dtype=np.int64),
        )
        number = absent.sum(axis=1)
        for k in np.unique(number[number > 0]).tolist():
            rows = np.flatnonzero(number == k)
            index = np.nonzero(absent[rows])[1].reshape(rows.size, k)
            inverse, hard = self._factor(index)
            for start in range(0, rows.size, TOGETHER):
                some = slice(start, start + TOGETHER)
                part = [[entry[some] for entry in row] for row in inverse]
                hard[some] |= self._downdate(table, rows[some], index[some], part)
            table.group_of[rows] = np.where(hard, HARD, len(table.groups))
            table.place[rows] = np.arange(rows.size)
            table.groups.append(_Alike(index, inverse))
            for p in rows[hard].tolist():
                exact = self._exact(absent[p])
                table.checks[p], table.scale[p], table.sigmas[p] = exact.checks, exact.scale, exact.sigmas
        table.of_tests = np.ascontiguousarray(table.scale[:, self.tested_rows].T)
        table.untested = ~np.asarray(np.any(table.of_tests > 0, axis=0))
        lost = np.isnan(table.sigmas)
        table.partial = np.asarray(lost.any(axis=1))
        table.unknown = [(j, np.ascontiguousarray(lost[:, j])) for j in np.flatnonzero(lost.any(axis=0)).tolist()]
        return table

    def _factor(self, index: Ints) -> tuple[list[list[Array]], Bools]:
        """Inverse Cholesky factors of the correlations of absent readings, P at once; and which are too near singular."""
        k = index.shape[1]
        hard = ~self.seen[index].all(axis=1)
        lower: list[list[Array]] = []
        for i in range(k):
            row: list[Array] = []
            for j in range(i + 1):
                s = self.alike[index[:, i], index[:, j]]
                for m in range(j):
                    s = s - row[m] * lower[j][m] if j < i else s - row[m] * row[m]
                if j < i:
                    row.append(s / lower[j][j])
                else:
                    hard |= s < 1.0 / SAFE
                    row.append(np.sqrt(np.maximum(s, 1.0 / SAFE)))
            lower.append(row)
        inverse: list[list[Array]] = []
        for i in range(k):
            entries: list[Array] = []
            for j in range(i):
                s = lower[i][j] * inverse[j][j]
                for m in range(j + 1, i):
                    s = s + lower[i][m] * inverse[m][j]
                entries.append(-s / lower[i][i])
            entries.append(1.0 / lower[i][i])
            inverse.append(entries)
        for j in range(k):
            whole = inverse[j][j] ** 2
            for i in range(j + 1, k):
                whole = whole + inverse[i][j] ** 2
            hard |= whole > SAFE
        return inverse, hard

    def _downdate(self, table: _Patterns, rows: Ints, index: Ints, inverse: list[list[Array]]) -> Bools:
        """Tests and uncertainties of patterns with the same number of absent readings; True where it is doubtful."""
        left = np.ones((rows.size, self.length.size))
        extra = np.zeros((rows.size, self.direct.size))
        k = index.shape[1]
        for i in range(k):
            seen, wide = (
                inverse[i][0][:, None] * self.alike[index[:, 0]],
                inverse[i][0][:, None] * self.spread[index[:, 0]],
            )
            for j in range(1, i + 1):
                seen += inverse[i][j][:, None] * self.alike[index[:, j]]
                wide += inverse[i][j][:, None] * self.spread[index[:, j]]
            seen *= seen
            left -= seen
            wide *= wide
            extra += wide
        there = self.seen & ~table.absent[rows]
        keep = there & (left >= CLEAR)
        table.scale[rows] = np.where(keep, self.base_scale / np.sqrt(np.where(keep, left, 1.0)), 0.0)
        table.sigmas[rows] = np.sqrt(self.base_sigmas**2 + extra)
        table.checks[rows] -= k
        return np.any(there & (left > ZERO) & (left < CLEAR), axis=1)

    def _exact(self, absent: Bools) -> _Exact:
        """One pattern by the projection that the adjuster itself uses."""
        key = np.packbits(absent).tobytes()
        found = self._remembered.get(key)
        if found is None:
            index = np.flatnonzero(absent)
            a = self.adjuster.without(index)
            left = np.linalg.norm(a.q1 @ a.turn, axis=1)
            scale = np.where(a.redundant, 1.0 / np.where(left > 0, left, 1.0), 0.0)
            found = _Exact(self.adjuster.sigma[index, None] * a.debias, a.checks, scale, self._sigmas(a))
            if len(self._remembered) >= REMEMBERED:
                self._remembered.clear()
            self._remembered[key] = found
        return found

    def _fill(self, y: Array, gone: Bools, patterns: _Patterns, which: Ints) -> None:
        """Put into the absent cells what the other readings ask for."""
        there = ~gone
        count = there.sum(axis=1)
        mean = np.where(there, y, 0.0).sum(axis=1) / np.maximum(count, 1)
        place = np.where(count > 0, mean, self.typical)
        np.copyto(y, np.broadcast_to(place[:, None], y.shape), where=gone)
        group = patterns.group_of[which]
        members = [np.flatnonzero(group == g) for g in range(len(patterns.groups))]
        hard = []
        exact = np.flatnonzero(group == HARD)
        for p in np.unique(which[exact]).tolist():
            own = exact[which[exact] == p]
            hard.append((np.flatnonzero(patterns.absent[p]), own, self._exact(patterns.absent[p]).bias))
        # The second round removes what rounding left where a placeholder was far off.
        for _ in range(2):
            residual = self.form @ y - self.target
            scaled = self.to_scaled @ residual
            for snapshots, alike in zip(members, patterns.groups, strict=True):
                self._remove(y, scaled, snapshots, patterns.place[which[snapshots]], alike)
            for index, own, bias in hard:
                y[index[:, None], own] -= bias @ (self.to_parity @ residual[:, own])

    def _remove(self, y: Array, scaled: Array, snapshots: Ints, local: Ints, group: _Alike) -> None:
        """Subtract the errors that make the scores of the absent readings vanish: two triangular products."""
        index, inverse = group.index, group.inverse
        if not snapshots.size:
            return
        k = index.shape[1]
        at = [index[local, j] for j in range(k)]
        error = [scaled[at[j], snapshots] / self.length[at[j]] for j in range(k)]
        half = []
        for i in range(k):
            s = inverse[i][0][local] * error[0]
            for j in range(1, i + 1):
                s = s + inverse[i][j][local] * error[j]
            half.append(s)
        for j in range(k):
            s = inverse[j][j][local] * half[j]
            for i in range(j + 1, k):
                s = s + inverse[i][j][local] * half[i]
            y[at[j], snapshots] -= self.adjuster.sigma[at[j]] / self.length[at[j]] * s


def _first(hit: Bools) -> Ints:
    """First True of each column; 0 where there is none. As `argmax`, along whole rows and so much faster."""
    count = len(hit)
    kind = np.min_scalar_type(count)
    first = np.where(hit, np.arange(count, dtype=kind)[:, None], kind.type(count)).min(axis=0)
    return np.where(first == count, 0, first).astype(np.int64)
