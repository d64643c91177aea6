"""Reads CSV and its relatives: text first, numbers second, every doubt told with its cure.

Small files and odd ones go through the exact path: records with true line numbers, cells by a grammar. Large clean
files are read by a compiled parser, whose result is used only if nothing about the file is odd.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any

from ..errors import Location, Notice, Problems
from .assemble import RawTable, assemble
from .cells import BLANKS, clean, detect_marks, telling_cells
from .csv_text import DELIMITERS, Decoded, Records, choose_delimiter, decode, split_records
from .options import CappedProblems, ReadOptions
from .table import ReadingsTable
from .units_words import looks_like_unit

__all__ = ["FAST_FROM_BYTES", "parse_csv", "raw_from_records", "read_csv"]

FAST_FROM_BYTES = 2_000_000
_ODD_SPACES = "\u00a0\u2007\u202f"
_CLOCK = re.compile(r"\d{1,2}:\d{2}")
_NO_UNIT = ("", "-", "\u2013", "\u2014")


def read_csv(
    path: str | Path,
    *,
    expected: Sequence[str] | None = None,
    time_column: str | None = None,
    **options: Any,
) -> ReadingsTable:
    """Read a CSV file into a table of readings.

    Parameters
    ----------
    path : str or Path
    expected : sequence of str, optional
        Tags to look for, in the order wanted; None takes every column.
    time_column : str, optional
        Header of the column with stamps; found by its name if left out.
    **options
        Fields of `ReadOptions`.

    Returns
    -------
    ReadingsTable

    Raises
    ------
    InputError
        With all problems of the file at once.
    """
    settings = ReadOptions.build({"expected": expected, "time_column": time_column, **options})
    name = str(path)
    problems = CappedProblems(name)
    raw = read_bytes(Path(path), problems)
    return parse_csv(raw, name, settings, problems)


def read_bytes(path: Path, problems: Problems) -> bytes:
    """Return the bytes of a file; a missing, unreadable or empty one is an `InputError`."""
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        from ..errors import did_you_mean

        siblings = [p.name for p in path.parent.iterdir()] if path.parent.is_dir() else []
        problems.add("file-missing", "there is no such file", did_you_mean(path.name, siblings))
        problems.raise_if_any()
    except IsADirectoryError:
        problems.add("file-missing", "this is a folder, not a file", f"write e.g. {path}/*.csv for all its files")
    except OSError as error:
        problems.add("file-unreadable", f"the file cannot be read ({error.strerror})")
    else:
        if not raw.strip():
            problems.add("file-empty", "the file is empty", "export it again")
    problems.raise_if_any()
    return raw


def parse_csv(raw: bytes, name: str, options: ReadOptions, problems: Problems | None = None) -> ReadingsTable:
    """Read the bytes of a CSV file.

    Parameters
    ----------
    raw : bytes
    name : str
        Name for messages.
    options : ReadOptions
    problems : Problems, optional
        Collector to use.

    Raises
    ------
    InputError
    """
    problems = CappedProblems(name) if problems is None else problems
    decoded = decode(raw, options.encoding, problems)
    problems.raise_if_any()
    assert decoded is not None
    delimiter = options.delimiter or choose_delimiter(decoded.text, problems, options.expected)
    problems.raise_if_any()
    assert delimiter is not None
    digest = hashlib.sha256(raw).hexdigest()
    table: RawTable | None = None
    if len(raw) >= FAST_FROM_BYTES:
        from .csv_fast import read_fast

        table = read_fast(decoded, delimiter, name, options)
    if table is None:
        records = split_records(decoded.text, delimiter, problems)
        problems.raise_if_any()
        table = raw_from_records(records, name, delimiter, options, problems)
    table.source_hash = digest
    table.echo[:0] = _echo_file(decoded, delimiter, name, len(raw), digest)
    table.notices[:0] = _notices_file(decoded, table)
    return assemble(table, options, problems)


def _echo_file(decoded: Decoded, delimiter: str, name: str, size: int, digest: str) -> list[str]:
    mark = ", byte-order mark removed" if decoded.byte_order_mark else ""
    return [
        f"{name}: {size} bytes, sha256 {digest[:12]}..., {decoded.encoding}{mark}",
        f"cells parted by {DELIMITERS.get(delimiter, repr(delimiter))}",
    ]


def _notices_file(decoded: Decoded, table: RawTable) -> list[Notice]:
    out = []
    removed = []
    if decoded.byte_order_mark:
        removed.append("a byte-order mark")
    odd = sum(decoded.text.count(c) for c in _ODD_SPACES) if not decoded.text.isascii() else 0
    if odd:
        removed.append(f"{odd} non-breaking spaces" if odd > 1 else "1 non-breaking space")
    words = f"removed {' and '.join(removed)}" if removed else ""
    if table.units is not None:
        line = (table.header_line or 0) + 1
        words += f"{'; ' if words else ''}line {line} taken as units"
    if words:
        out.append(Notice("file-cleaned", f"{words}; check the echo", Location(table.file)))
    if decoded.guessed:
        words = f"the file is not UTF-8; read as {decoded.encoding}: check the names of tags, or declare encoding"
        out.append(Notice("encoding-guessed", words, Location(table.file)))
    return out


# ------------------------------------------------------------------ header and units


def raw_from_records(records: Records, name: str, delimiter: str, options: ReadOptions, problems: Problems) -> RawTable:
    """Find header, row of units and marks in records, and part them into columns.

    Parameters
    ----------
    records : Records
    name : str
        Name for messages.
    delimiter : str
    options : ReadOptions
    problems : Problems
        Receives rows that are too short or too long, headers that come again, one column where there should be more.
    """
    rows, lines = records.rows, records.lines
    if not rows:
        problems.add("file-empty", "the file has no header and no rows", "export it again")
        problems.raise_if_any()
    top = find_header(rows, options.expected)
    notices = []
    if top:
        words = f"{top} title row{'s' if top > 1 else ''} above the header left out"
        notices.append(Notice("title-rows", words, Location(name, lines[0])))
    header = [clean(c) for c in rows[top]]
    header_line = lines[top]
    body, body_lines = rows[top + 1 :], lines[top + 1 :]
    units = None
    if body and (options.units_row or (options.units_row is None and is_units_row(header, body[0]))):
        units, body, body_lines = body[0], body[1:], body_lines[1:]
    _one_column(header, delimiter, options, name, header_line, problems)
    width = len(header)
    while width > 1 and not header[width - 1] and not any(len(r) >= width and r[width - 1].strip() for r in body):
        width -= 1  # delimiters at the end of the lines
    header = header[:width]
    body = _even_rows(body, body_lines, header, width, delimiter, name, problems)
    columns: list[Any] = [list(c) for c in zip(*body, strict=True)] if body else [[] for _ in header]
    if options.time_column is None:
        units = merge_date_and_clock(header, columns, units)
    raw = RawTable(name, header, columns, body_lines, header_line, units, notices=notices)
    _find_marks(raw, delimiter, options, problems)
    raw.echo.append(f"decimal mark {raw.marks.decimal!r}, thousands mark {raw.marks.thousands or 'none'}")
    raw.echo.append(f"header on line {header_line}" + (f", units on line {header_line + 1}" if units else ""))
    if records.blank or records.comments:
        raw.echo.append(f"left out: {records.blank} blank lines, {records.comments} comment lines")
    return raw


def find_header(rows: Sequence[Sequence[str]], expected: Sequence[str] | None) -> int:
    """Return the position of the header: the first row, unless titles stand above it."""
    if expected:
        from .columns import _tag_of

        best, most = 0, 0
        for i, row in enumerate(rows[:10]):
            found = sum(_tag_of(clean(c), expected) is not None for c in row)
            if found > most:
                best, most = i, found
        if most:
            return best
    for i, row in enumerate(rows[:9]):
        below = rows[i + 1] if i + 1 < len(rows) else None
        filled = [clean(c) for c in row if clean(c)]
        # A merged title leaves blanks, and the row below it holds more names and no number.
        if below is None or len(filled) >= max(len(row), len(below)):
            return i
        names = [clean(c) for c in below if clean(c)]
        if len(names) <= len(filled) or any(_numeric(c) for c in names):
            return i
    return 0


def merge_date_and_clock(header: list[str], columns: list[Any], units: list[str] | None) -> list[str] | None:
    """Join a column of days and one of times of day into one of stamps, in place; return the row of units."""
    folded = [h.casefold() for h in header]
    if "date" not in folded or "time" not in folded:
        return units
    day, clock = folded.index("date"), folded.index("time")
    if not columns[day] or ":" in columns[day][0] or not _CLOCK.match(clean(columns[clock][0])):
        return units
    columns[day] = [f"{clean(a)} {clean(b)}" for a, b in zip(columns[day], columns[clock], strict=True)]
    header[day] = "date time"
    del header[clock], columns[clock]
    return None if units is None else [u for i, u in enumerate(units) if i != clock]


def _numeric(text: str) -> bool:
    return text[:1].isdigit() or (text[1:2].isdigit() and text[:1] in "+-.,<>")


def is_units_row(header: Sequence[str], row: Sequence[str]) -> bool:
    """Return True when the row under the header holds units and no number."""
    filled = [c for c in map(clean, row) if c not in _NO_UNIT]
    ones = filled.count("1")
    if any(c.casefold() in BLANKS or (_numeric(c) and c != "1") for c in filled):
        return False
    units = sum(looks_like_unit(c) for c in filled) - ones
    # The unit 1 looks like a number, so where it stands more than half of the cells have to be other units.
    return units > 0 and (2 * units > len(filled) if ones else 2 * units >= len(filled))


def _one_column(
    header: Sequence[str], delimiter: str, options: ReadOptions, name: str, line: int, problems: Problems
) -> None:
    if len(header) > 1 or (
        options.expected is not None and len(options.expected) == 1 and header[0] in options.expected
    ):
        return
    others = {d: header[0].count(d) for d in DELIMITERS if d != delimiter and d in header[0]}
    if not others:
        if options.expected is not None and len(options.expected) > 1:
            hint = "parted by spaces? Save it with commas, semicolons or tabs"
            problems.add("one-column", "only 1 column found", hint, Location(name, line))
        return
    other = max(others, key=lambda d: others[d])
    words = DELIMITERS[other] + ("s" if others[other] > 1 else "")
    problems.add(
        "one-column",
        f"only 1 column read with delimiter {delimiter!r}; there {'are' if others[other] > 1 else 'is'} "
        f"{others[other]} {words} in the header",
        f"delimiter = {other!r}?",
        Location(name, line),
    )
    problems.raise_if_any()


def _even_rows(
    body: Sequence[list[str]],
    lines: Sequence[int],
    header: Sequence[str],
    width: int,
    delimiter: str,
    name: str,
    problems: Problems,
) -> list[list[str]]:
    out = []
    for i, row in enumerate(body):
        if len(row) > width and not any(c.strip() for c in row[width:]):
            row = row[:width]
        if len(row) > width:
            pieces = [clean(c) for c in row]
            halves = sum(a.lstrip("+-").isdigit() and b.isdigit() for a, b in pairwise(pieces))
            hint = "put quotation marks around cells that hold the delimiter"
            if delimiter == "," and halves >= len(row) - width:
                hint = "decimal commas? Export with delimiter ';', or put quotation marks around the numbers"
            problems.add(
                "row-length", f"{len(row)} cells under a header of {width}", hint, Location(name, lines[i], None, i + 1)
            )
            row = row[:width]
        elif len(row) < width:
            problems.add(
                "row-length",
                f"{len(row)} cells under a header of {width}",
                "leave a cell empty, but keep its delimiter; was the file cut off?",
                Location(name, lines[i], None, i + 1),
            )
            row = row + [""] * (width - len(row))
        if row[0].strip() == header[0] and i and [clean(c) for c in row] == list(header):
            problems.add(
                "header-again",
                "the header comes again",
                "two files appended? Split them, or remove the row",
                Location(name, lines[i], None, i + 1),
            )
        out.append(row)
    return out


def _find_marks(raw: RawTable, delimiter: str, options: ReadOptions, problems: Problems) -> None:
    skip = {options.time_column, options.label_column, *options.keep, *options.ignore}
    from .columns import LABEL_NAMES, NOTE_NAMES, TIME_NAMES, looks_dated

    names = TIME_NAMES | NOTE_NAMES | LABEL_NAMES
    cells = telling_cells(
        column
        for name, column in zip(raw.header, raw.columns, strict=True)
        if name not in skip and name.casefold() not in names and not looks_dated(column)
    )
    raw.marks = detect_marks(
        cells, decimal=options.decimal, thousands=options.thousands, comma_is_usual=delimiter == ";"
    )
    marks = raw.marks
    if marks.undecided:
        plain = marks.example.replace(",", "")
        problems.add(
            "thousands-or-decimal",
            f"{marks.example!r} could be {marks.example.replace(',', '.')} or {plain}: all cells with a comma show "
            "three digits after it",
            "declare decimal = ',' or thousands = ','",
            Location(raw.file),
        )
    elif marks.three_digits and options.decimal is None:
        example = marks.example
        words = (
            f"{example!r} was read as {example.replace(',', '.')}, and could be {example.replace(marks.decimal, '')}: "
            f"all such cells show three digits after the mark; declare decimal or thousands"
        )
        raw.notices.append(Notice("thousands-or-decimal", words, Location(raw.file)))
    elif marks.thousands is not None and options.thousands is None:
        words = f"{marks.thousands!r} parts thousands, since {marks.decimal!r} is the decimal mark of other cells"
        raw.notices.append(Notice("thousands-mark", words, Location(raw.file)))
