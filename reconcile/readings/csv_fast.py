"""The quick way through a large clean CSV file; gives up (None) as soon as anything is odd.

What it returns is what the exact path would return; what it cannot be sure of, it leaves to that path.
"""

from __future__ import annotations

import io
from typing import Any

import numpy as np

from ..errors import Problems
from .assemble import RawTable
from .cells import BLANKS, clean, detect_marks, telling_cells
from .columns import match_columns
from .csv_text import Decoded, split_records
from .options import ReadOptions

__all__ = ["read_fast"]

_SAMPLE = 2000
BLANK_WORDS = ("", "NA", "N/A", "n/a", "NaN", "nan", "NAN", "null", "NULL", "None", "none", "-", "\u2013", "\u2014")


def read_fast(decoded: Decoded, delimiter: str, name: str, options: ReadOptions) -> RawTable | None:
    """Read a large file with the compiled parser of pyarrow, if it is installed.

    Returns
    -------
    RawTable or None
        None without that library, and when the file has
        quotation marks, blank lines, uneven rows, text among numbers, doubtful marks.
    """
    from .csv_source import find_header, is_units_row

    text = decoded.text
    if '"' in text or text.count("\r") != text.count("\r\n"):
        return None
    problems = Problems(name)
    sample = split_records(text, delimiter, problems, limit=_SAMPLE)
    if problems or sample.blank or sample.comments or len(sample.rows) < 3:
        return None
    top = find_header(sample.rows, options.expected)
    header = [clean(c) for c in sample.rows[top]]
    units = None
    skip = top + 1
    if options.units_row or (options.units_row is None and is_units_row(header, sample.rows[skip])):
        units = sample.rows[skip]
        skip += 1
    body = sample.rows[skip:]
    if not body or any(len(r) != len(header) for r in body) or len(set(header)) != len(header) or "" in header:
        return None
    columns = [list(c) for c in zip(*body, strict=True)]
    roles = match_columns(header, columns, options, name, None, problems)
    if problems or top or {"date", "time"} <= {h.casefold() for h in header}:
        return None
    numeric = {i for i in roles.tags.values() if i is not None}
    cells = telling_cells(columns[i] for i in numeric)
    marks = detect_marks(cells, decimal=options.decimal, thousands=options.thousands, comma_is_usual=delimiter == ";")
    if marks.conflict or marks.undecided or marks.three_digits or marks.thousands:
        return None
    rows = text.count("\n") + (not text.endswith("\n")) - skip
    blanks = [*BLANK_WORDS, *(b for b in options.blanks if b.casefold() not in BLANKS)]
    parsed = _parse(text, delimiter, header, numeric, skip, marks.decimal, blanks)
    if parsed is None or any(len(c) != rows for c in parsed):
        return None
    if any(isinstance(c, np.ndarray) and np.isinf(c).any() for c in parsed):
        return None
    raw = RawTable(name, header, parsed, np.arange(skip + 1, skip + 1 + rows), 1, units, marks)
    raw.echo.append(f"decimal mark {marks.decimal!r}, thousands mark none")
    raw.echo.append("header on line 1" + (", units on line 2" if units else ""))
    return raw


def _parse(
    text: str, delimiter: str, header: list[str], numeric: set[int], skip: int, decimal: str, blanks: list[str]
) -> list[Any] | None:
    data = text.encode("utf-8")
    try:
        import pyarrow as pa
        from pyarrow import csv
    except ImportError:
        return None
    types = {h: pa.float64() if i in numeric else pa.string() for i, h in enumerate(header)}
    try:
        table = csv.read_csv(
            io.BytesIO(data),
            read_options=csv.ReadOptions(column_names=header, skip_rows=skip, use_threads=False),
            parse_options=csv.ParseOptions(delimiter=delimiter, quote_char=False, ignore_empty_lines=False),
            convert_options=csv.ConvertOptions(
                column_types=types, null_values=blanks, strings_can_be_null=False, decimal_point=decimal
            ),
        )
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError):
        return None
    return [table.column(i).to_numpy() if i in numeric else table.column(i).to_pylist() for i in range(len(header))]
