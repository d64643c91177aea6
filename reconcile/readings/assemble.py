"""From columns of text or numbers, whatever the source, to one table: which column is what, and what each cell says."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from ..errors import Location, Notice, Problems
from .cells import CellReader, Marks, clean
from .columns import Roles, match_columns
from .options import ReadOptions
from .table import ReadingsTable, Status
from .time import TimeColumn, localise, parse_times
from .time_order import order_rows

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["RawTable", "assemble"]

Column = Any  # list of str, (N,) float64, or DatetimeIndex


@dataclass
class RawTable:
    """Columns as a source delivers them.

    Attributes
    ----------
    file : str
        Name for messages.
    header : list of str
    columns : list of (list of str, float64 array or DatetimeIndex), each of length N
    lines : sequence of int, optional
        Line of each row in the file.
    header_line : int, optional
    units : list of str, optional
        Row of units, a cell a column.
    marks : Marks
        Decimal and thousands marks of text cells.
    echo : list of str
        What the source was found to be.
    notices : list of Notice
    source_hash : str
    """

    file: str
    header: list[str]
    columns: list[Column]
    lines: npt.NDArray[np.int64] | Sequence[int] | None = None
    header_line: int | None = None
    units: list[str] | None = None
    marks: Marks = field(default_factory=Marks)
    echo: list[str] = field(default_factory=list)
    notices: list[Notice] = field(default_factory=list)
    source_hash: str = ""

    @property
    def rows(self) -> int:
        """Number of rows, N."""
        return len(self.columns[0]) if self.columns else 0

    def where(self, row: int, column: int | None = None, tag: str | None = None) -> Location:
        """Return the place of a cell, row and column counted from 0."""
        line = None if self.lines is None else int(self.lines[row])
        return Location(self.file, line, None if column is None or line is None else column + 1, row + 1, tag)


def assemble(raw: RawTable, options: ReadOptions, problems: Problems) -> ReadingsTable:
    """Turn raw columns into a table of readings.

    Parameters
    ----------
    raw : RawTable
    options : ReadOptions
    problems : Problems
        Receives everything that is wrong.

    Raises
    ------
    InputError
        With all problems at once.
    """
    roles = match_columns(raw.header, raw.columns, options, raw.file, raw.header_line, problems)
    if raw.rows == 0:
        problems.add("no-rows", "there is a header, but no row of readings", "", Location(raw.file, raw.header_line))
    tags = list(roles.tags)
    n = raw.rows
    values = np.full((n, len(tags)), np.nan)
    status = np.full((n, len(tags)), int(Status.MISSING), dtype=np.int8)
    cells = _Cells(raw, options, problems)
    for j, tag in enumerate(tags):
        position = roles.tags[tag]
        if position is not None:
            values[:, j], status[:, j] = cells.read(j, position, tag)
    stamps = _times(raw, roles, options, problems)
    table = ReadingsTable(
        columns=tuple(tags),
        values=values,
        status=status,
        time=stamps.index,
        labels=_labels(raw, roles),
        reasons=cells.reasons,
        lower=cells.interval("lower", values.shape),
        upper=cells.interval("upper", values.shape),
        units=_units(raw, roles),
        extra={name: _as_text(raw.columns[i]) for name, i in roles.keep.items()},
        sources=(raw.file,),
        lines=None if raw.lines is None else np.asarray(raw.lines, dtype=np.int64),
        source_hash=raw.source_hash,
    )
    notices = [*raw.notices, *roles.notices, *cells.notices(), *stamps.notices]
    if stamps.index is not None:
        rows, found = order_rows(stamps.index, options, raw.where, problems)
        notices.extend(found)
        if rows is not None:
            table = table.take(rows)
    problems.raise_if_any()
    echo = [*raw.echo, *_echo(table, raw, roles, cells, stamps)]
    return replace(table, notices=tuple(notices), echo=tuple(echo))


class _Cells:
    """Reads cells column by column and remembers what was odd."""

    def __init__(self, raw: RawTable, options: ReadOptions, problems: Problems) -> None:
        self.raw = raw
        self.problems = problems
        self.reader = CellReader(raw.marks, options.blanks, options.bad_words, options.censored)
        self.reasons: dict[tuple[int, int], str] = {}
        self.lower: dict[tuple[int, int], float] = {}
        self.upper: dict[tuple[int, int], float] = {}
        self.blanks: Counter[str] = Counter()
        self.formulas: dict[tuple[int, str], str] = {}

    def read(self, j: int, position: int, tag: str) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.int8]]:
        column = self.raw.columns[position]
        if isinstance(column, np.ndarray) and column.dtype.kind in "fiub":
            return self._numeric(column.astype(np.float64), position, tag)
        if not isinstance(column, list):
            self.problems.add(
                "column-not-numeric",
                f"column {tag!r} holds dates, not readings",
                "declare time_column, or list the column under keep or ignore",
                Location(self.raw.file, self.raw.header_line, tag=tag),
            )
            return np.full(len(column), np.nan), np.ones(len(column), dtype=np.int8)
        parsed = self.reader.column(column)
        filled = len(column) - sum(parsed.blank_words.values())
        if parsed.faults and len(parsed.faults) == filled and filled > 1 and parsed.faults[0][1] == "text-in-number":
            text = clean(column[parsed.faults[0][0]])
            self.problems.add(
                "column-not-numeric",
                f"column {tag!r} holds no number in any row (the first cell is {text!r})",
                "list it under keep (as remarks) or ignore, or declare it as label_column or time_column",
                Location(self.raw.file, self.raw.header_line, None, None, tag),
            )
        else:
            for row, code, message, hint in parsed.faults:
                place = self.raw.where(row, position, tag)
                self.problems.add(code, f"column {tag!r}: {message}", hint, place)
        self.blanks.update(parsed.blank_words)
        self.reasons.update({(row, j): words for row, words in parsed.reasons.items()})
        self.lower.update({(row, j): value for row, value in parsed.lower.items()})
        self.upper.update({(row, j): value for row, value in parsed.upper.items()})
        self.formulas.update({(row, tag): text for row, text in parsed.failed_formulas.items()})
        return parsed.values, parsed.status

    def _numeric(
        self, column: npt.NDArray[np.float64], position: int, tag: str
    ) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.int8]]:
        missing = np.isnan(column)
        for row in np.flatnonzero(np.isinf(column)).tolist():
            hint = "leave the cell empty if there is no reading"
            place = self.raw.where(row, position, tag)
            self.problems.add("not-finite", f"column {tag!r}: {column[row]} is not a finite number", hint, place)
        self.blanks[""] += int(missing.sum())
        return column, np.where(missing, int(Status.MISSING), int(Status.GOOD)).astype(np.int8)

    def interval(self, name: str, shape: tuple[int, ...]) -> npt.NDArray[np.float64] | None:
        entries: dict[tuple[int, int], float] = getattr(self, name)
        if not entries:
            return None
        out = np.full(shape, np.nan)
        for place, value in entries.items():
            out[place] = value
        return out

    def notices(self) -> list[Notice]:
        out = []
        for (row, tag), text in list(self.formulas.items())[:5]:
            words = f"column {tag!r}: {text!r} treated as missing; the cell's formula failed in the spreadsheet"
            out.append(Notice("spreadsheet-error", words, self.raw.where(row, tag=tag)))
        if len(self.formulas) > 5:
            words = f"{len(self.formulas)} cells in all hold a spreadsheet's error and are treated as missing"
            out.append(Notice("spreadsheet-error", words, Location(self.raw.file)))
        return out


def _times(raw: RawTable, roles: Roles, options: ReadOptions, problems: Problems) -> TimeColumn:
    if roles.time is None:
        return TimeColumn(None)
    column = raw.columns[roles.time]
    if isinstance(column, list):
        return parse_times(column, options, raw.where, problems)
    if isinstance(column, np.ndarray):
        return parse_times([repr(float(v)) for v in column], options, raw.where, problems)
    return _stamped(column, options, raw, problems)


def _stamped(index: pd.DatetimeIndex, options: ReadOptions, raw: RawTable, problems: Problems) -> TimeColumn:
    """Take stamps that the source delivers as such."""
    for row in np.flatnonzero(np.asarray(index.isna())).tolist():
        problems.add("stamp-missing", "the row has no stamp", "remove the row, or give it one", raw.where(row))
    if index.hasnans:
        return TimeColumn(None)
    if index.tz is not None:
        index = index.tz_convert(options.zone) if options.zone else index
        return TimeColumn(index, f"stamps of the source, shown in {index.tz}")
    if options.zone is None:
        return TimeColumn(index, "stamps of the source, no zone in it and none declared")
    local, notices = localise(index, options.zone, options.repeated_hour, raw.where, problems)
    return TimeColumn(local, f"stamps of the source, zone {options.zone} as declared", notices)


def _as_text(column: Column) -> npt.NDArray[Any]:
    if isinstance(column, list):
        return np.array([clean(c) for c in column], dtype=object)
    return np.array(column, dtype=object)


def _labels(raw: RawTable, roles: Roles) -> list[str] | None:
    return None if roles.label is None else [str(t) for t in _as_text(raw.columns[roles.label])]


def _units(raw: RawTable, roles: Roles) -> dict[str, str]:
    units = dict(roles.units)
    if raw.units is not None:
        for tag, position in roles.tags.items():
            if position is not None and position < len(raw.units):
                word = clean(raw.units[position]).strip("[]()")
                if word:
                    units[tag] = word
    return units


def _echo(table: ReadingsTable, raw: RawTable, roles: Roles, cells: _Cells, stamps: TimeColumn) -> list[str]:
    lines = [f"rows: {len(table)}"]
    if roles.time is not None and table.time is not None and len(table):
        name = raw.header[roles.time]
        lines.append(f"time: column {name!r}, {stamps.words}; {table.time[0]} to {table.time[-1]}")
    elif roles.label is not None:
        lines.append(f"names of snapshots: column {raw.header[roles.label]!r}")
    else:
        lines.append("time: no column; rows are numbered")
    lines.append(f"readings: {_listed(table.columns)}")
    if table.units:
        lines.append(f"units: {_listed([f'{tag} {unit}' for tag, unit in table.units.items()])}")
    others = [*roles.keep, *roles.ignored]
    if others:
        lines.append(f"kept as text: {_listed(list(roles.keep))}; left out: {_listed(roles.ignored)}")
    counts = table.count()
    blanks = sum(cells.blanks.values())
    words = [f"{blanks} blank ({_listed([repr(b) for b in cells.blanks if cells.blanks[b]])})"] if blanks else []
    for status in (Status.CENSORED_LOW, Status.CENSORED_HIGH, Status.BAD_SOURCE):
        if counts.get(status):
            words.append(f"{counts[status]} {status.name.lower().replace('_', ' ')}")
    lines.append(f"cells: {counts.get(Status.GOOD, 0)} numbers" + "".join(f", {w}" for w in words))
    if len(table):
        first = [f"{t} = {v:.10g}" for t, v in zip(table.columns, table.values[0], strict=True)]
        lines.append(f"first row: {_listed(first)}")
    return lines


def _listed(names: Sequence[str], most: int = 8) -> str:
    if not names:
        return "none"
    shown = ", ".join(names[:most])
    return shown if len(names) <= most else f"{shown} and {len(names) - most} more"
