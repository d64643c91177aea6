"""Columns that were calculated from others, or copied: they look like readings and add no check."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations, product

import numpy as np
import numpy.typing as npt

from ..errors import Location, Notice
from .table import ReadingsTable, Status

__all__ = ["DerivedColumn", "find_derived", "mark_derived"]

_LEAST_ROWS = 8
_MOST_DECIMALS = 9
_MANY = 30


@dataclass(frozen=True)
class DerivedColumn:
    """A column that follows from others to the last digit.

    Attributes
    ----------
    tag : str
    formula : str
        E.g. ``S - C``.
    kind : {"copy", "factor", "sum", "ratio", "product"}
    sources : tuple of str
        Columns it follows from. A sum can be read the other way round: any one of its columns may be the calculated one.
    rows : int
        Rows in which it holds: all that have all the numbers.
    """

    tag: str
    formula: str
    kind: str
    sources: tuple[str, ...]
    rows: int

    @property
    def notice(self) -> Notice:
        """Words for the report."""
        what = "copied" if self.kind == "copy" else "calculated"
        words = (
            f"{self.tag} equals {self.formula} to the last digit in {self.rows} of {self.rows} rows: looks {what} in the "
            "spreadsheet. It adds no check; declare it as calculated, or leave it out"
        )
        return Notice("reading-calculated", words, Location(tag=self.tag))


def find_derived(table: ReadingsTable, *, max_terms: int = 3) -> tuple[DerivedColumn, ...]:
    """Look for columns that others give to the last digit, in every row.

    Tried are copies, constant factors, sums and differences of up to `max_terms` columns, ratios (also in percent) and
    products of two. Needed are at least 8 rows and readings that move: two precise meters may agree to the last
    digit now and then, but not always.

    Parameters
    ----------
    table : ReadingsTable
    max_terms : int
        For many columns (over 30) not more than 2 are tried.
    """
    values = np.where(table.usable, table.values, np.nan)
    moving = [j for j in range(values.shape[1]) if _moves(values[:, j])]
    decimals = {j: _decimals(values[:, j]) for j in moving}
    search = _Search(table.columns, values, moving, decimals)
    search.pairs()
    for terms in range(2, (min(max_terms, 2) if len(moving) > _MANY else max_terms) + 1):
        search.sums(terms)
    search.ratios()
    return tuple(search.found)


def mark_derived(table: ReadingsTable, found: Sequence[DerivedColumn] | Sequence[str]) -> ReadingsTable:
    """Return a table in which the good cells of these columns are `Status.DERIVED`, so that no balance uses them."""
    tags = {f if isinstance(f, str) else f.tag: "" if isinstance(f, str) else f.formula for f in found}
    mask = np.zeros(table.values.shape, dtype=bool)
    reasons = {}
    for tag, formula in tags.items():
        j = table.index(tag)
        mask[:, j] = table.usable[:, j]
        words = f"calculated as {formula}" if formula else "declared as calculated"
        reasons.update({(i, j): words for i in np.flatnonzero(mask[:, j]).tolist()})
    return table.with_status(mask, Status.DERIVED, reasons)


def _moves(x: npt.NDArray[np.float64]) -> bool:
    x = x[np.isfinite(x)]
    return x.size >= _LEAST_ROWS and np.unique(x).size >= 4


def _decimals(x: npt.NDArray[np.float64]) -> int:
    """Return the number of decimals that the numbers of a column show."""
    x = x[np.isfinite(x)]
    for d in range(_MOST_DECIMALS):
        if np.all(np.abs(np.round(x, d) - x) <= 1e-12 * np.maximum(np.abs(x), 1.0)):
            return d
    return _MOST_DECIMALS


class _Search:
    def __init__(
        self, tags: Sequence[str], values: npt.NDArray[np.float64], moving: list[int], decimals: dict[int, int]
    ) -> None:
        self.tags, self.values, self.moving, self.decimals = tags, values, moving, decimals
        self.found: list[DerivedColumn] = []
        self.done: set[int] = set()
        # A few complete rows rule out nearly everything at once; where there are none, each group has to be tried.
        whole = np.flatnonzero(np.isfinite(values[:, moving]).all(axis=1)) if moving else np.zeros(0, dtype=int)
        self.probe = values[whole[[0, whole.size // 2, -1]]] if whole.size else None

    def holds(self, j: int, guess: npt.NDArray[np.float64]) -> int:
        """Return in how many rows a column is the guess rounded to its decimals; 0 if not in all."""
        y = self.values[:, j]
        both = np.isfinite(y) & np.isfinite(guess)
        if int(both.sum()) < _LEAST_ROWS or np.unique(y[both]).size < 4:
            return 0
        unit = 0.5 * 10.0 ** -self.decimals[j] if self.decimals[j] < _MOST_DECIMALS else 0.0
        scale = np.maximum(np.abs(y[both]), np.abs(guess[both]))
        close = np.abs(y[both] - guess[both]) <= unit * (1 + 1e-9) + 1e-9 * scale
        return int(both.sum()) if close.all() else 0

    def add(self, j: int, formula: str, kind: str, sources: Sequence[int], rows: int) -> None:
        self.done.add(j)
        self.found.append(DerivedColumn(self.tags[j], formula, kind, tuple(self.tags[s] for s in sources), rows))

    def pairs(self) -> None:
        for a, b in combinations(self.moving, 2):
            if a in self.done or b in self.done:
                continue
            # The one with fewer decimals is the rounded copy; of two alike, the later one.
            y, x = (a, b) if self.decimals[a] < self.decimals[b] else (b, a)
            rows = self.holds(y, self.values[:, x])
            if rows:
                self.add(y, self.tags[x], "copy", [x], rows)
                continue
            both = np.isfinite(self.values[:, y]) & np.isfinite(self.values[:, x])
            xs, ys = self.values[both, x], self.values[both, y]
            if xs.size < _LEAST_ROWS or not float(xs @ xs):
                continue
            factor = float(f"{float(xs @ ys / (xs @ xs)):.6g}")
            # A factor has to be told from chance: the column must show more digits than the factor explains.
            if factor and self._digits(y) >= 3:
                rows = self.holds(y, factor * self.values[:, x])
                if rows:
                    self.add(y, f"{factor:g} * {self.tags[x]}", "factor", [x], rows)

    def _digits(self, j: int) -> float:
        x = self.values[:, j]
        spread = float(np.nanmax(x) - np.nanmin(x)) * 10.0 ** self.decimals[j]
        return float(np.log10(max(spread, 1.0))) + 1.0

    def sums(self, terms: int) -> None:
        for group in self._likely_sums(terms):
            if self.done.intersection(group):
                continue
            block = self.values[:, group]
            rows = np.flatnonzero(np.isfinite(block).all(axis=1))
            if rows.size < _LEAST_ROWS:
                continue
            # The least exact column decides how far off a sum may be; the first row already rules nearly all out.
            slack = sum(0.5 * 10.0 ** -self.decimals[j] for j in group) + 1e-9 * float(np.abs(block[rows[0]]).max())
            for signs in product((1.0, -1.0), repeat=terms):
                signed = np.array([1.0, *signs])
                if abs(float(block[rows[0]] @ signed)) > slack:
                    continue
                if self._sum(group, signed):
                    break

    def _likely_sums(self, terms: int) -> list[tuple[int, ...]]:
        """Groups of columns that add up to zero with some signs in the rows of the probe."""
        groups = list(combinations(self.moving, terms + 1))
        if self.probe is None or not groups:
            return groups
        index = np.array(groups)
        half = np.zeros(self.values.shape[1])
        half[self.moving] = [0.5 * 10.0 ** -self.decimals[j] for j in self.moving]
        x = self.probe[:, index]
        slack = half[index].sum(axis=1) + 1e-9 * np.abs(x).max(axis=2)
        found = np.zeros(len(groups), dtype=bool)
        for signs in product((1.0, -1.0), repeat=terms):
            found |= (np.abs(x @ np.array([1.0, *signs])) <= slack).all(axis=0)
        return [groups[i] for i in np.flatnonzero(found)]

    def _sum(self, group: tuple[int, ...], signed: npt.NDArray[np.float64]) -> bool:
        # signed @ block == 0; the calculated one shows the fewest decimals, and of those stands last.
        order = sorted(range(len(group)), key=lambda i: (self.decimals[group[i]], -group[i]))
        i = order[0]
        rest = [k for k in range(len(group)) if k != i]
        weights = -signed[rest] / signed[i]
        guess = self.values[:, [group[k] for k in rest]] @ weights
        rows = self.holds(group[i], guess)
        if not rows:
            return False
        parts = sorted(zip(weights.tolist(), [group[k] for k in rest], strict=True), key=lambda p: -p[0])
        text = " ".join(f"{'+' if w > 0 else '-'} {self.tags[j]}" for w, j in parts)
        text = text.removeprefix("+ ")
        self.add(group[i], text, "sum", [group[k] for k in rest], rows)
        return True

    def _worth(self, j: int, a: int, b: int) -> bool:
        """Rule out nearly all triples by one row."""
        block = self.values[:, [j, a, b]]
        row = int(np.argmax(np.isfinite(block).all(axis=1)))
        z, x, y = block[row].tolist()
        if not np.isfinite([z, x, y]).all() or y == 0.0:
            return True
        unit = 10.0 ** -self.decimals[j]
        return any(abs(z - guess) <= unit + 1e-8 * abs(z) for guess in (x / y, 100.0 * x / y, x * y))

    def _likely_ratios(self, j: int) -> list[tuple[int, int]]:
        """Pairs of columns whose ratio or product is column j in the rows of the probe."""
        if self.probe is None:
            return [(a, b) for a in self.moving for b in self.moving]
        z = self.probe[:, j, None, None]
        x, y = self.probe[:, self.moving, None], self.probe[:, None, self.moving]
        slack = 10.0 ** -self.decimals[j] + 1e-8 * np.abs(z)
        near = [np.abs(z - guess) <= slack for guess in (x / y, 100.0 * x / y, x * y)]
        # A zero divisor says nothing of a ratio in that row.
        found = np.logical_or.reduce([(n | (y == 0.0)).all(axis=0) for n in near])
        return [(self.moving[a], self.moving[b]) for a, b in zip(*np.nonzero(found), strict=True)]

    def ratios(self) -> None:
        with np.errstate(divide="ignore", invalid="ignore"):
            for j in self.moving:
                if self._digits(j) < 3:
                    continue
                for a, b in self._likely_ratios(j):
                    if j in self.done or j in (a, b) or a == b:
                        continue
                    x, y = self.values[:, a], self.values[:, b]
                    if not self._worth(j, a, b):
                        continue
                    tries = [(x / y, f"{self.tags[a]} / {self.tags[b]}", "ratio")]
                    tries.append((100.0 * tries[0][0], f"100 * {self.tags[a]} / {self.tags[b]}", "ratio"))
                    if a < b:
                        tries.append((x * y, f"{self.tags[a]} * {self.tags[b]}", "product"))
                    for guess, formula, kind in tries:
                        rows = self.holds(j, np.where(np.isfinite(guess), guess, np.nan))
                        if rows:
                            self.add(j, formula, kind, [a, b], rows)
                            break
