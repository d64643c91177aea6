"""One chunk of a log as numbers: by the compiled parser where nothing is odd, else cell by cell, with true lines."""

from __future__ import annotations

import io
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Problems
from ..readings.assemble import assemble
from ..readings.cells import BLANKS
from ..readings.csv_fast import BLANK_WORDS
from ..readings.csv_source import raw_from_records
from ..readings.frames import raw_from_frame
from ..readings.options import CappedProblems
from ..readings.table import ReadingsTable
from .heads import INTERVALS, Unsuited
from .pieces import Piece, records_of

__all__ = ["Rows", "rows_of"]

Array = npt.NDArray[np.float64]
_ISO = re.compile(r"\d{4}-\d{2}-\d{2}[T ]\d{2}:\d{2}(?::\d{2}(?:\.\d{1,6})?)?")
_ISO_UTC = re.compile(_ISO.pattern + "Z")


@dataclass(frozen=True)
class Rows:
    """Rows of a chunk.

    Attributes
    ----------
    values : ndarray, shape (k, N)
        In the unit of each meter; nan where there is no usable number.
    labels : ndarray of str, shape (N,)
    stamps : ndarray of int, shape (N,), or None
        Nanoseconds since 1970.
    reasons : dict of (row, position) to str
        Of cells that are not plainly missing or good.
    counts : Counter of (tag, words)
        Cells without a usable number.
    """

    values: Array
    labels: npt.NDArray[np.str_]
    stamps: npt.NDArray[np.int64] | None
    reasons: dict[tuple[int, int], str]
    counts: Counter[tuple[str, str]]


def rows_of(pieces: Sequence[Piece], tags: Sequence[str], first: int) -> Rows:
    """Read the pieces of a chunk.

    Parameters
    ----------
    pieces : sequence of Piece
    tags : sequence of str
        In this order.
    first : int
        Number of the first row in the whole log, counted from 0.

    Raises
    ------
    InputError
        With every mistake in the chunk.
    """
    parts, problems, start = [], Problems(), first
    for piece in pieces:
        try:
            parts.append(_quick(piece, tags, start) or _exact(piece, tags, start))
        except InputError as error:
            for p in error.problems:
                row = None if p.where.row is None else p.where.row + piece.row
                problems.add(p.code, p.message, p.hint, replace(p.where, row=row))
        start += piece.rows
    problems.raise_if_any()
    if len(parts) == 1:
        return parts[0]
    reasons: dict[tuple[int, int], str] = {}
    counts: Counter[tuple[str, str]] = Counter()
    at = 0
    for part in parts:
        reasons.update({(i + at, j): words for (i, j), words in part.reasons.items()})
        counts.update(part.counts)
        at += part.values.shape[1]
    stamps = [p.stamps for p in parts if p.stamps is not None]
    return Rows(
        np.hstack([p.values for p in parts]),
        np.concatenate([p.labels for p in parts]),
        np.concatenate(stamps) if len(stamps) == len(parts) else None,
        reasons,
        counts,
    )


def _numbered(first: int, count: int) -> npt.NDArray[np.str_]:
    return np.arange(first + 1, first + 1 + count).astype(np.str_)


# ------------------------------------------------------------------ the quick way


def _quick(piece: Piece, tags: Sequence[str], first: int) -> Rows | None:
    """Numbers by a compiled parser; None as soon as anything is odd."""
    try:
        import pyarrow as pa
    except ImportError:
        return None
    layout = piece.layout
    table = piece.data if layout.encoding == "" else _parse(piece)
    if table is None or table.num_rows != piece.rows:
        return None
    columns = [table.column(layout.tags[t]) for t in tags]
    if any(not (pa.types.is_floating(c.type) or pa.types.is_integer(c.type)) for c in columns):
        return None
    values = np.empty((len(tags), piece.rows))
    for row, column in zip(values, columns, strict=True):
        row[:] = column.cast(pa.float64()).to_numpy()
    if np.isinf(values).any():
        return None
    stamps, labels = None, _numbered(first, piece.rows)
    if layout.time is not None:
        found = _stamps(table.column(layout.time), layout.table)
        if found is None or (found[0].size > 1 and np.any(np.diff(found[0]) <= 0)):
            return None
        stamps, labels = found
    if layout.label is not None:
        texts = table.column(layout.label)
        if not pa.types.is_string(texts.type) or texts.null_count:
            return None
        labels = np.array([t.strip() for t in texts.to_pylist()], dtype=np.str_)
    gone = np.isnan(values).sum(axis=1)
    counts = Counter({(t, "no value"): int(n) for t, n in zip(tags, gone, strict=True) if n})
    return Rows(values, labels, stamps, {}, counts)


def _parse(piece: Piece) -> Any:
    import pyarrow as pa
    from pyarrow import csv

    layout = piece.layout
    if layout.marks.thousands or len(set(layout.header)) != len(layout.header):
        return None
    data = piece.data
    if layout.encoding.casefold() not in ("utf-8", "utf8", "ascii"):
        data = data.decode(layout.encoding, errors="replace").encode("utf-8")
    numeric = set(layout.tags.values())
    blanks = [*BLANK_WORDS, *(b for b in layout.options.blanks if b.casefold() not in BLANKS)]
    try:
        return csv.read_csv(
            io.BytesIO(data),
            read_options=csv.ReadOptions(column_names=layout.header, use_threads=False, block_size=len(data) + 16),
            parse_options=csv.ParseOptions(delimiter=layout.delimiter, ignore_empty_lines=False),
            convert_options=csv.ConvertOptions(
                column_types={h: pa.float64() if i in numeric else pa.string() for i, h in enumerate(layout.header)},
                null_values=blanks,
                strings_can_be_null=False,
                decimal_point=layout.marks.decimal,
            ),
        )
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        return None


def _stamps(column: Any, sample: ReadingsTable) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.str_]] | None:
    """Stamps and their text, where they are all written alike and need no zone; else None."""
    import pyarrow as pa
    import pyarrow.compute as pc

    if sample.time is None or column.null_count:
        return None
    zone = None if sample.time.tz is None else str(sample.time.tz)
    if zone not in (None, "UTC"):
        return None
    if pa.types.is_timestamp(column.type):
        if column.type.tz != zone:
            return None
        parsed = column
    elif pa.types.is_string(column.type):
        first = column[0].as_py()
        lengths = pc.utf8_length(column)
        pattern = _ISO if zone is None else _ISO_UTC
        if not pattern.fullmatch(first) or pc.min(lengths).as_py() != pc.max(lengths).as_py():
            return None
        try:
            parsed = column.cast(pa.timestamp("us", zone))
        except pa.ArrowInvalid:
            return None
    else:
        return None
    try:
        nanoseconds = np.asarray(parsed.cast(pa.timestamp("ns")).cast(pa.int64()).to_numpy())
    except pa.ArrowInvalid:
        return None
    if np.any(nanoseconds % 1_000_000_000):
        return None
    texts = pa.array(nanoseconds // 1_000_000_000, pa.timestamp("s")).cast(pa.string()).to_pylist()
    return nanoseconds, np.array(texts if zone is None else [t + "+00:00" for t in texts], dtype=np.str_)


# ------------------------------------------------------------------ the exact way


def _exact(piece: Piece, tags: Sequence[str], first: int) -> Rows:
    """Cell by cell, as the way through memory reads it."""
    layout = piece.layout
    problems = CappedProblems(layout.name)
    if layout.encoding == "":
        raw = raw_from_frame(piece.data.to_pandas(), layout.name, layout.options)
    else:
        try:
            text = piece.data.decode(layout.encoding)
        except UnicodeDecodeError as error:
            line = piece.line + piece.data.count(b"\n", 0, error.start)
            problems.add(
                "encoding", f"the file starts as {layout.encoding}, but this line is not", "export it again",
                Location(layout.name, line),
            )  # fmt: skip
            problems.raise_if_any()
        records = records_of(piece, text, problems)
        problems.raise_if_any()
        raw = raw_from_records(records, layout.name, layout.delimiter, layout.options, problems)
        raw.marks = layout.marks
    table = assemble(raw, layout.options, problems)
    if len(table) != piece.rows:
        problems.add(
            "rows-lost",
            f"{piece.rows} lines from here on give {len(table)} rows: blank rows, or cells with line breaks in them?",
            "remove them",
            Location(layout.name, piece.line),
        )
        problems.raise_if_any()
    table = table.select(tags)
    if (
        table.lower is not None
        and table.upper is not None
        and np.any(np.isfinite(table.lower) & np.isfinite(table.upper))
    ):
        raise Unsuited(INTERVALS)
    named = table.labels is not None or table.time is not None
    labels = np.array([table.label(i) for i in range(len(table))], dtype=np.str_) if named else None
    usable = table.usable
    counts: Counter[tuple[str, str]] = Counter()
    reasons = {}
    for i, j in zip(*np.nonzero(~usable), strict=True):
        words = table.reason(int(i), int(j))
        counts[tags[j], words] += 1
        if words != "no value":
            reasons[int(i), int(j)] = words
    return Rows(
        np.ascontiguousarray(np.where(usable, table.values, np.nan).T),
        _numbered(first, len(table)) if labels is None else labels,
        None if table.time is None else np.asarray(table.time.as_unit("ns").asi8),
        reasons,
        counts,
    )
