"""Snapshots ready for the balances, with all that is known of how each came about."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from ..readings.table import ReadingsTable, Status
from ..readings.windows import LeftOut, ZeroCheck
from .decisions import Entry

__all__ = ["Alternative", "Interval", "Prepared", "digest"]


@dataclass(frozen=True)
class Interval:
    """A cell of which only an interval is known; `upper` may be inf, `lower` -inf: then nothing is entered."""

    snapshot: int
    tag: str
    lower: float
    upper: float
    status: Status

    @property
    def closed(self) -> bool:
        """Whether both ends are known."""
        return bool(np.isfinite(self.lower) and np.isfinite(self.upper))

    @property
    def middle(self) -> float:
        """Middle of the interval."""
        return 0.5 * (self.lower + self.upper)

    @property
    def sigma(self) -> float:
        """Standard uncertainty if nothing is known but the ends: rectangular, (b - a)/sqrt(12) (GUM 4.3.7)."""
        return (self.upper - self.lower) / np.sqrt(12.0)


@dataclass(frozen=True)
class Alternative:
    """Another way to read the log in one cell, and the value that it would have given."""

    snapshot: int
    tag: str
    rule: str
    value: float
    scatter: float
    words: str


@dataclass(frozen=True)
class Prepared:
    """Snapshots ready for the balances.

    Attributes
    ----------
    table : ReadingsTable
        A row a snapshot, those left out included; columns are the meters, in their units; with `sigma` and `scatter`.
    left_out : mapping of snapshot to LeftOut
    spans : tuple of (start, end)
        First and last stamp of each snapshot, as text; the same where it is one row; empty without stamps.
    hashes : tuple of str
        Of what each snapshot is made of.
    log : tuple of Entry
    zero_checks : tuple of ZeroCheck
    intervals : tuple of Interval
    alternatives : tuple of Alternative
    segments : mapping of tag to (W,) int64
        Number of recalibrations before each snapshot.
    closed : mapping of snapshot to tuple of str
        Streams that a line-up closes there.
    line_ups : mapping of snapshot to str
        Names of the line-ups that hold there.
    edges : (W, 3) float64, optional
        Of windows of a log with stamps, in seconds: first stamp; end of what the rows stand for; stamp of the row behind,
        nan where there is none. The row behind comes later than the end only where rows are missing.
    """

    table: ReadingsTable
    left_out: Mapping[int, LeftOut] = field(default_factory=dict)
    spans: tuple[tuple[str, str], ...] = ()
    hashes: tuple[str, ...] = ()
    log: tuple[Entry, ...] = ()
    zero_checks: tuple[ZeroCheck, ...] = ()
    intervals: tuple[Interval, ...] = ()
    alternatives: tuple[Alternative, ...] = ()
    segments: Mapping[str, npt.NDArray[np.int64]] = field(default_factory=dict)
    closed: Mapping[int, tuple[str, ...]] = field(default_factory=dict)
    line_ups: Mapping[int, str] = field(default_factory=dict)
    edges: npt.NDArray[np.float64] | None = None

    @property
    def used(self) -> npt.NDArray[np.bool_]:
        """Snapshots that balances are made of, shape (W,)."""
        out = np.ones(len(self.table), dtype=bool)
        out[list(self.left_out)] = False
        return out

    @property
    def estimated(self) -> tuple[tuple[int, int], ...]:
        """Cells (snapshot, column) that count as readings although nobody read them; intervals are not among them."""
        entered = {(c.snapshot, self.table.index(c.tag)) for c in self.intervals}
        cells = zip(*np.nonzero(self.table.status == Status.ESTIMATED), strict=True)
        return tuple((int(i), int(j)) for i, j in cells if (int(i), int(j)) not in entered)


def digest(table: ReadingsTable, a: int, b: int, long: Sequence[int] = (), *more: Any) -> str:
    """Hash of the cells that a snapshot is made of.

    Parameters
    ----------
    table : ReadingsTable
    a, b : int
        First row, and one past the last.
    long : sequence of int
        Columns of differences; they include the row at the end.
    *more : array_like
        What else belongs to it.
    """
    state = hashlib.sha256(repr(table.columns).encode())
    if not long:
        state.update(np.ascontiguousarray(table.values[a:b]).tobytes())
        state.update(np.ascontiguousarray(table.status[a:b]).tobytes())
    for j in range(len(table.columns)) if long else ():
        end = min(b, len(table) - 1) + 1 if j in long else b
        state.update(np.ascontiguousarray(table.values[a:end, j]).tobytes())
        state.update(np.ascontiguousarray(table.status[a:end, j]).tobytes())
    for name in ("lower", "upper"):
        ends = getattr(table, name)
        if ends is not None:
            state.update(np.ascontiguousarray(ends[a:b]).tobytes())
    for array in more:
        state.update(np.ascontiguousarray(array, dtype=np.float64).tobytes())
    return state.hexdigest()[:16]
