"""What the head of a log says about all of it: columns, marks, stamps; or why the log has to be read whole."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from ..errors import InputError, Location, MissingExtra, Problem
from ..readings.assemble import RawTable, assemble
from ..readings.cells import Marks, clean
from ..readings.columns import Roles, match_columns
from ..readings.csv_source import find_header, is_units_row, raw_from_records
from ..readings.csv_text import choose_delimiter, decode, split_records
from ..readings.options import CappedProblems, ReadOptions
from ..readings.table import ReadingsTable

__all__ = ["CSV", "INTERVALS", "PARQUET", "Layout", "Unsuited", "head_of", "parquet_library", "vanished"]

INTERVALS = "some values are known as intervals only (below a limit), which are entered one by one"

HEAD = 1 << 22
SAMPLE = 5000
CSV = (".csv", ".tsv", ".txt", ".dat")
PARQUET = (".parquet", ".pq")


class Unsuited(Exception):
    """The input cannot be worked through in pieces; the message says why. The way through memory still can."""


@dataclass(frozen=True)
class Layout:
    """What the head of a file says about all of it.

    Attributes
    ----------
    name : str
    header : list of str
    tags : dict of tag to position
    time, label : int or None
    delimiter, encoding : str
    marks : Marks
    body_line : int
        Line of the first row, counted from 1.
    options : ReadOptions
        With everything that was found out filled in.
    table : ReadingsTable
        The first rows, as the way through memory would read them.
    """

    name: str
    header: list[str]
    tags: dict[str, int]
    time: int | None
    label: int | None
    delimiter: str
    encoding: str
    marks: Marks
    body_line: int
    options: ReadOptions
    table: ReadingsTable


def vanished(path: Path, error: OSError) -> InputError:
    """Words for a file that cannot be read."""
    return InputError(
        Problem(
            "source-vanished",
            f"the file cannot be read any more ({error.strerror or error})",
            "bring it back and give the same command: finished parts are kept",
            Location(file=str(path)),
        )
    )


def head_of(path: Path, settings: ReadOptions) -> Layout:
    """Look at the first rows of a file.

    Raises
    ------
    Unsuited
        If the file has to be read whole.
    """
    suffix = path.suffix.casefold()
    if suffix not in (*CSV, *PARQUET):
        raise Unsuited(f"files ending in {suffix!r} are read whole")
    return _head_of_parquet(path, settings) if suffix in PARQUET else _head_of_csv(path, settings)


def _finished(raw: RawTable, settings: ReadOptions) -> tuple[Roles, ReadingsTable]:
    problems = CappedProblems(raw.file)
    roles = match_columns(raw.header, raw.columns, settings, raw.file, raw.header_line, problems)
    try:
        problems.raise_if_any()
        table = assemble(raw, settings, problems)
    except InputError:
        # The way through memory finds these mistakes, and all others with them.
        raise Unsuited("the first rows have mistakes in them") from None
    if any(position is None for position in roles.tags.values()):
        raise Unsuited("a meter has no column")
    return roles, table


def _known(settings: ReadOptions, header: Sequence[str], roles: Roles, marks: Marks) -> ReadOptions:
    named = {i for i in roles.tags.values() if i is not None} | {i for i in (roles.time, roles.label) if i is not None}
    return replace(
        settings,
        decimal=marks.decimal,
        thousands=marks.thousands,
        units_row=False,
        encoding="utf-8",
        time_column=None if roles.time is None else header[roles.time],
        label_column=None if roles.label is None else header[roles.label],
        keep=(),
        ignore=tuple(h for i, h in enumerate(header) if i not in named),
    )


def _layout(raw: RawTable, settings: ReadOptions, delimiter: str, encoding: str, body_line: int) -> Layout:
    roles, table = _finished(raw, settings)
    words = next((line for line in table.echo if line.startswith("time: column")), "")
    if roles.time is not None and settings.day_first is None and ("day first" in words or "month first" in words):
        raise Unsuited("whether the day or the month comes first is judged on all stamps; declare day_first")
    tags = {t: i for t, i in roles.tags.items() if i is not None}
    header = [clean(h) for h in raw.header]
    known = _known(settings, header, roles, raw.marks)
    return Layout(
        raw.file, header, tags, roles.time, roles.label, delimiter, encoding, raw.marks, body_line, known, table
    )


def _head_of_csv(path: Path, settings: ReadOptions) -> Layout:
    try:
        with path.open("rb") as file:
            head = file.read(HEAD)
    except OSError as error:
        raise vanished(path, error) from None
    if len(head) == HEAD:
        head = head[: head.rfind(b"\n") + 1]
    if head.count(b"\r") != head.count(b"\r\n"):
        raise Unsuited("its lines end in carriage returns")
    problems = CappedProblems(str(path))
    decoded = decode(head, settings.encoding, problems)
    if decoded is None or decoded.encoding.replace("_", "-").casefold() not in (
        "utf-8",
        "utf8",
        "ascii",
        "cp1252",
        "latin-1",
    ):
        raise Unsuited("its encoding is not a plain one")
    delimiter = settings.delimiter or choose_delimiter(decoded.text, problems, settings.expected)
    records = split_records(decoded.text, delimiter or ",", problems, limit=SAMPLE)
    if problems or delimiter is None or len(records.rows) < 2:
        raise Unsuited("the first rows have mistakes in them")
    top = find_header(records.rows, settings.expected)
    header = [clean(c) for c in records.rows[top]]
    if {"date", "time"} <= {h.casefold() for h in header}:
        raise Unsuited("day and time of day stand in two columns")
    first = top + 1
    if settings.units_row or (settings.units_row is None and is_units_row(header, records.rows[first])):
        first += 1
    lines = records.lines[first:]
    if not lines or lines != list(range(lines[0], lines[0] + len(lines))):
        raise Unsuited("there are blank lines, or cells with line breaks, in it")
    raw = raw_from_records(records, str(path), delimiter, settings, problems)
    if problems or len(raw.header) != len(header):
        raise Unsuited("the first rows have mistakes in them")
    return _layout(raw, settings, delimiter, decoded.encoding, lines[0])


def _head_of_parquet(path: Path, settings: ReadOptions) -> Layout:
    parquet = parquet_library(path)
    from ..readings.frames import raw_from_frame

    try:
        file = parquet.ParquetFile(path)
        batch = next(file.iter_batches(batch_size=SAMPLE), None)
    except Exception:
        raise Unsuited("it is no parquet file") from None
    if batch is None:
        raise Unsuited("it has no rows")
    frame = batch.to_pandas()
    raw = raw_from_frame(frame, str(path), settings)
    if list(raw.header) != [str(n) for n in batch.schema.names]:
        raise Unsuited("its index is not a plain count")
    if any(isinstance(c, list) for i, c in enumerate(raw.columns) if raw.header[i] in (settings.expected or ())):
        raise Unsuited("readings stand in it as text")
    return _layout(raw, settings, "", "", 1)


def parquet_library(path: Path) -> Any:
    """Module that reads and writes parquet files; `MissingExtra` where it is not installed."""
    try:
        from pyarrow import parquet
    except ImportError:
        raise MissingExtra("pyarrow", "parquet", f"reading {path}") from None
    return parquet
