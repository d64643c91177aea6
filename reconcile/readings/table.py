"""The clean table that every source of readings ends in.

Symbols: N snapshots (rows), k tags (columns). A cell is a number only where its status says that a
number was read; everything else is NaN with a status and, where there is more to say, a reason.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import IntEnum
from typing import TYPE_CHECKING, Any, cast

import numpy as np
import numpy.typing as npt

from ..errors import Location, Notice

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["STATUS_WORDS", "ReadingsTable", "Status", "join_rows"]


class Status(IntEnum):
    """What a cell is; stored as int8."""

    GOOD = 0
    MISSING = 1
    CENSORED_LOW = 2
    CENSORED_HIGH = 3
    SATURATED = 4
    FLAT = 5
    OFF = 6
    BAD_SOURCE = 7
    ESTIMATED = 8
    DERIVED = 9


STATUS_WORDS: dict[Status, str] = {
    Status.GOOD: "read",
    Status.MISSING: "no value",
    Status.CENSORED_LOW: "below a limit",
    Status.CENSORED_HIGH: "above a limit",
    Status.SATURATED: "at the end of the span",
    Status.FLAT: "frozen or last good value",
    Status.OFF: "equipment off",
    Status.BAD_SOURCE: "marked bad by its source or by a check",
    Status.ESTIMATED: "estimated, not read",
    Status.DERIVED: "calculated from other columns",
}

# Statuses whose number may stand in a balance as a measurement.
_USABLE = (Status.GOOD, Status.ESTIMATED)


def _frozen(array: npt.NDArray[Any]) -> npt.NDArray[Any]:
    view = array.view()
    view.flags.writeable = False
    return view


@dataclass(frozen=True, eq=False)
class ReadingsTable:
    """Readings as they were understood; frozen, its arrays read-only.

    Attributes
    ----------
    columns : tuple of str, length k
        Tags.
    values : (N, k) float64
        Readings in the unit of the source; NaN where there is no number.
    status : (N, k) int8
        `Status` of each cell.
    time : pandas.DatetimeIndex of length N, optional
        Stamps; with a zone if one was read or declared.
    labels : sequence of str of length N, optional
        Names of the snapshots where the source gives them.
    reasons : mapping of (row, column) to str
        Words for cells that are not plainly good; counted from 0. A cell without an entry has the words of its status.
    lower, upper : (N, k) float64, optional
        Interval of censored and saturated cells, NaN elsewhere; None when there is no such cell.
    sigma : (N, k) float64, optional
        Standard uncertainty of a cell's own, in the unit of its reading, where the law of its meter does not hold;
        NaN elsewhere.
    scatter : (N, k) float64, optional
        What adds to the meter's law in quadrature (scatter of a mean, an estimated interval); 0 where nothing does.
    units : mapping of str to str
        Unit of a tag as the source wrote it; only the tags for which it did.
    extra : mapping of str to array of length N
        Columns that are not readings (remarks, flags), as text.
    echo : tuple of str
        What was understood of the source, for people to check.
    notices : tuple of Notice
        What belongs in the report.
    sources : tuple of str
        Files or queries the rows come from.
    source_of : (N,) int, optional
        Index into `sources` of each row; None when there is one source.
    lines : (N,) int, optional
        Line of each row in its file, counted from 1.
    source_hash : str
        SHA-256 (hex) of the bytes read.
    """

    columns: tuple[str, ...]
    values: npt.NDArray[np.float64]
    status: npt.NDArray[np.int8]
    time: pd.DatetimeIndex | None = None
    labels: Sequence[str] | None = None
    reasons: Mapping[tuple[int, int], str] = field(default_factory=dict)
    lower: npt.NDArray[np.float64] | None = None
    upper: npt.NDArray[np.float64] | None = None
    sigma: npt.NDArray[np.float64] | None = None
    scatter: npt.NDArray[np.float64] | None = None
    units: Mapping[str, str] = field(default_factory=dict)
    extra: Mapping[str, npt.NDArray[Any]] = field(default_factory=dict)
    echo: tuple[str, ...] = ()
    notices: tuple[Notice, ...] = ()
    sources: tuple[str, ...] = ()
    source_of: npt.NDArray[np.int64] | None = None
    lines: npt.NDArray[np.int64] | None = None
    source_hash: str = ""

    def __post_init__(self) -> None:
        values = np.asarray(self.values, dtype=np.float64)
        status = np.asarray(self.status, dtype=np.int8)
        if values.ndim != 2 or values.shape[1] != len(self.columns):
            raise ValueError(f"values have shape {values.shape}, but there are {len(self.columns)} columns")
        if status.shape != values.shape:
            raise ValueError(f"status has shape {status.shape}, values have {values.shape}")
        for name in ("time", "labels", "source_of", "lines"):
            entry = getattr(self, name)
            if entry is not None and len(entry) != values.shape[0]:
                raise ValueError(f"{name} has {len(entry)} entries for {values.shape[0]} rows")
        object.__setattr__(self, "values", _frozen(values))
        object.__setattr__(self, "status", _frozen(status))
        for name in ("lower", "upper", "sigma", "scatter", "lines", "source_of"):
            entry = getattr(self, name)
            if entry is not None:
                object.__setattr__(self, name, _frozen(np.asarray(entry)))

    def __len__(self) -> int:
        return int(self.values.shape[0])

    @property
    def usable(self) -> npt.NDArray[np.bool_]:
        """(N, k) bool: True where a number stands that a balance may use."""
        return np.isin(self.status, [int(s) for s in _USABLE]) & np.isfinite(self.values)

    def index(self, tag: str) -> int:
        """Return the column number of a tag, counted from 0; KeyError if there is none."""
        try:
            return self.columns.index(tag)
        except ValueError:
            raise KeyError(tag) from None

    def column(self, tag: str) -> npt.NDArray[np.float64]:
        """Return the (N,) values of a tag."""
        return self.values[:, self.index(tag)]

    def label(self, row: int) -> str:
        """Return the name of a row (counted from 0): its label, else its time, else its number from 1."""
        if self.labels is not None:
            return str(self.labels[row])
        if self.time is not None:
            return str(self.time[row])
        return str(row + 1)

    def reason(self, row: int, column: int) -> str:
        """Return the words for a cell; empty for a plainly good one."""
        found = self.reasons.get((row, column))
        if found is not None:
            return found
        status = Status(int(self.status[row, column]))
        return "" if status is Status.GOOD else STATUS_WORDS[status]

    def where(self, row: int, tag: str | None = None) -> Location:
        """Return the place of a row (counted from 0) in its source."""
        file = None
        if self.sources:
            file = self.sources[0 if self.source_of is None else int(self.source_of[row])]
        line = None if self.lines is None else int(self.lines[row])
        return Location(file=file, line=line, row=row + 1, tag=tag)

    def count(self) -> dict[Status, int]:
        """Return how many cells have each status that occurs."""
        kinds, numbers = np.unique(self.status, return_counts=True)
        return {Status(int(s)): int(n) for s, n in zip(kinds, numbers, strict=True)}

    # ------------------------------------------------------------------ new tables from old ones

    def with_status(
        self,
        mask: npt.NDArray[np.bool_],
        status: Status,
        reasons: Mapping[tuple[int, int], str] | None = None,
        *,
        drop_values: bool = False,
        notices: Sequence[Notice] = (),
    ) -> ReadingsTable:
        """Return a table in which the masked cells have another status.

        Parameters
        ----------
        mask : (N, k) bool
        status : Status
        reasons : mapping of (row, column) to str, optional
            Words for the cells.
        drop_values : bool
            Put NaN in the masked cells.
        notices : sequence of Notice
            Added to those of the table.
        """
        new = self.status.copy()
        new[mask] = int(status)
        values = np.where(mask, np.nan, self.values) if drop_values else self.values
        merged = dict(self.reasons)
        merged.update(reasons or {})
        return replace(self, values=values, status=new, reasons=merged, notices=self.notices + tuple(notices))

    def take(self, rows: npt.ArrayLike) -> ReadingsTable:
        """Return a table of the given rows (indices or a mask), in that order."""
        chosen = np.asarray(rows)
        chosen = np.flatnonzero(chosen) if chosen.dtype == np.bool_ else chosen.astype(np.int64)
        reasons: dict[tuple[int, int], str] = {}
        if self.reasons:
            places: dict[int, list[tuple[int, str]]] = {}
            for (i, j), words in self.reasons.items():
                places.setdefault(i, []).append((j, words))
            for new, old in enumerate(chosen.tolist()):
                for j, words in places.get(old, ()):
                    reasons[new, j] = words
        return replace(
            self,
            values=self.values[chosen],
            status=self.status[chosen],
            time=None if self.time is None else self.time[chosen],
            labels=None if self.labels is None else [self.labels[i] for i in chosen.tolist()],
            reasons=reasons,
            lower=None if self.lower is None else self.lower[chosen],
            upper=None if self.upper is None else self.upper[chosen],
            sigma=None if self.sigma is None else self.sigma[chosen],
            scatter=None if self.scatter is None else self.scatter[chosen],
            extra={name: column[chosen] for name, column in self.extra.items()},
            source_of=None if self.source_of is None else self.source_of[chosen],
            lines=None if self.lines is None else self.lines[chosen],
        )

    def select(self, tags: Sequence[str]) -> ReadingsTable:
        """Return a table of the given tags, in that order."""
        chosen = [self.index(tag) for tag in tags]
        position = {old: new for new, old in enumerate(chosen)}
        return replace(
            self,
            columns=tuple(tags),
            values=self.values[:, chosen],
            status=self.status[:, chosen],
            reasons={(i, position[j]): words for (i, j), words in self.reasons.items() if j in position},
            lower=None if self.lower is None else self.lower[:, chosen],
            upper=None if self.upper is None else self.upper[:, chosen],
            sigma=None if self.sigma is None else self.sigma[:, chosen],
            scatter=None if self.scatter is None else self.scatter[:, chosen],
            units={tag: self.units[tag] for tag in tags if tag in self.units},
        )

    def to_frame(self) -> pd.DataFrame:
        """Return the values as a pandas frame, indexed by time, label or number."""
        import pandas as pd

        index: Any = self.time
        if index is None:
            index = pd.Index([self.label(i) for i in range(len(self))], name="snapshot")
        return pd.DataFrame(self.values, index=index, columns=list(self.columns))


def _stack_optional(parts: Sequence[ReadingsTable], name: str, empty: float = np.nan) -> npt.NDArray[np.float64] | None:
    arrays = [getattr(p, name) for p in parts]
    if all(a is None for a in arrays):
        return None
    return np.vstack([np.full(p.values.shape, empty) if a is None else a for a, p in zip(arrays, parts, strict=True)])


def join_rows(parts: Sequence[ReadingsTable], source_hash: str) -> ReadingsTable:
    """Return one table with the rows of several, in the order given.

    Parameters
    ----------
    parts : sequence of ReadingsTable
        At least one; same columns in the same order; with times in all or in none.
    source_hash : str
        Hash of all sources together.
    """
    first = parts[0]
    starts = np.cumsum([0] + [len(p) for p in parts])
    reasons: dict[tuple[int, int], str] = {}
    sources: list[str] = []
    source_of = []
    for part, start in zip(parts, starts[:-1].tolist(), strict=True):
        reasons.update({(i + start, j): words for (i, j), words in part.reasons.items()})
        own = np.zeros(len(part), dtype=np.int64) if part.source_of is None else part.source_of
        source_of.append(own + len(sources))
        sources.extend(part.sources or ("",))
    time = first.time
    if time is not None:
        for part in parts[1:]:
            time = cast(Any, time).append(part.time)
    labels = None
    if all(p.labels is not None for p in parts):
        labels = [label for p in parts for label in (p.labels or ())]
    lines = None
    if all(p.lines is not None for p in parts):
        lines = np.concatenate([np.asarray(p.lines) for p in parts])
    units: dict[str, str] = {}
    for part in parts:
        units.update(part.units)
    shared = [name for name in first.extra if all(name in p.extra for p in parts)]
    return ReadingsTable(
        columns=first.columns,
        values=np.vstack([p.values for p in parts]),
        status=np.vstack([p.status for p in parts]),
        time=time,
        labels=labels,
        reasons=reasons,
        lower=_stack_optional(parts, "lower"),
        upper=_stack_optional(parts, "upper"),
        sigma=_stack_optional(parts, "sigma"),
        scatter=_stack_optional(parts, "scatter", 0.0),
        units=units,
        extra={name: np.concatenate([p.extra[name] for p in parts]) for name in shared},
        echo=tuple(line for p in parts for line in p.echo),
        notices=tuple(notice for p in parts for notice in p.notices),
        sources=tuple(sources),
        source_of=np.concatenate(source_of),
        lines=lines,
        source_hash=source_hash,
    )
