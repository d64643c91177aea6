"""One way in for every source: a suffix or a URL scheme chooses the reader; plugins may add readers."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping, Sequence
from glob import glob, has_magic
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import InputError, Location, Notice, Problem, Problems, did_you_mean
from .options import ReadOptions
from .table import ReadingsTable, join_rows
from .time import check_zone_of

__all__ = ["READERS", "Reader", "read_readings", "reader_for"]

Reader = Callable[..., ReadingsTable]


def _csv(target: str, **options: Any) -> ReadingsTable:
    from .long_table import read_long_csv

    if options.get("shape") == "long":
        return read_long_csv(target, **options)
    from .csv_source import read_csv

    return read_csv(target, **options)


def _parquet(target: str, **options: Any) -> ReadingsTable:
    from .parquet_source import read_parquet

    return read_parquet(target, **options)


def _workbook(target: str, **options: Any) -> ReadingsTable:
    from .workbook_source import read_workbook

    return read_workbook(target, **options)


def _database(target: str, **options: Any) -> ReadingsTable:
    from .sql_source import read_sql

    return read_sql(target, **options)


READERS: dict[str, Reader] = {
    ".csv": _csv,
    ".tsv": _csv,
    ".txt": _csv,
    ".dat": _csv,
    ".parquet": _parquet,
    ".pq": _parquet,
    ".xlsx": _workbook,
    ".xlsm": _workbook,
    ".xlsb": _workbook,
    ".xls": _workbook,
    ".ods": _workbook,
    ".sqlite": _database,
    ".sqlite3": _database,
    ".db": _database,
    "sqlite:": _database,
    "postgresql:": _database,
    "mysql:": _database,
    "mariadb:": _database,
    "mssql:": _database,
    "oracle:": _database,
}


def reader_for(target: str, readers: Mapping[str, Reader]) -> Reader:
    """Return the reader of a file or URL.

    Raises
    ------
    InputError
        ``source-unknown``, listing what can be read.
    """
    if "://" in target:
        # postgresql+psycopg://... is read as postgresql:
        scheme = target.split("://", 1)[0].split("+", 1)[0].casefold() + ":"
        if scheme in readers:
            return readers[scheme]
        known = sorted(k for k in readers if k.endswith(":"))
        words = f"nothing reads {scheme}// ({_hide(target)})"
        raise InputError(Problem("source-unknown", words, did_you_mean(scheme, known) or f"known: {', '.join(known)}"))
    suffix = Path(target).suffix.casefold()
    if suffix in readers:
        return readers[suffix]
    known = sorted(k for k in readers if k.startswith("."))
    words = f"nothing reads files ending in {suffix!r}" if suffix else "the file has no suffix that says what it is"
    hint = did_you_mean(suffix, known) or f"known: {', '.join(known)}"
    raise InputError(Problem("source-unknown", words, hint, Location(file=target)))


def _hide(url: str) -> str:
    """Return a URL without its password."""
    head, _, tail = url.partition("://")
    login, at, host = tail.rpartition("@")
    if at and ":" in login:
        login = login.split(":", 1)[0] + ":***"
    return f"{head}://{login}{at}{host}"


def read_readings(
    target: str | Path | Sequence[str | Path],
    *,
    readers: Mapping[str, Reader] | None = None,
    **options: Any,
) -> ReadingsTable:
    """Read measured data from a file, several files, or a database.

    Parameters
    ----------
    target : str, Path or sequence of them
        A file, a pattern such as ``logs/*.csv``, a list of files, or the URL of a database. Several files need
        the same readings; their rows are put in time order.
    readers : mapping of suffix or scheme to callable, optional
        Further readers, e.g. of plugins; they win over the built-in ones.
    **options
        Fields of `ReadOptions`.

    Returns
    -------
    ReadingsTable

    Raises
    ------
    InputError
        With every problem of every file.
    MissingExtra
        When an optional library is needed that is not installed.
    """
    known = {**READERS, **(readers or {})}
    ReadOptions.build(options)
    if isinstance(target, (str, Path)):
        text = str(target)
        if "://" in text or not has_magic(text) or Path(text).exists():
            return reader_for(text, known)(text, **options)
        names = sorted(glob(text, recursive=True))
        if not names:
            raise InputError(Problem("file-missing", f"no file matches {text!r}", "check folder and pattern"))
    else:
        names = [str(t) for t in target]
        if not names:
            raise InputError(Problem("file-missing", "the list of files is empty", "name at least one"))
    if len(names) == 1:
        return reader_for(names[0], known)(names[0], **options)
    return _join(_read_all(names, known, options), options)


def _read_all(names: Sequence[str], readers: Mapping[str, Reader], options: Mapping[str, Any]) -> list[ReadingsTable]:
    parts, problems = [], Problems()
    for name in names:
        try:
            parts.append(reader_for(name, readers)(name, **options))
        except InputError as error:
            problems.extend(error.problems)
    problems.raise_if_any()
    return parts


def _join(parts: Sequence[ReadingsTable], options: Mapping[str, Any]) -> ReadingsTable:
    problems = Problems()
    first = parts[0]
    for part in parts[1:]:
        _same_columns(first, part, problems)
        for tag, unit in part.units.items():
            if first.units.get(tag, unit) != unit:
                words = f"{tag} is in {unit}, but in {first.units[tag]} in {first.sources[0]}"
                problems.add("unit-differs", words, "convert one of the files", Location(file=part.sources[0], tag=tag))
        if (part.time is None) != (first.time is None):
            bare = first if first.time is None else part
            words = "the file has no stamps, other files of the list have"
            problems.add("time-missing", words, "add the column of stamps", Location(file=bare.sources[0]))
        elif part.time is not None and first.time is not None:
            check_zone_of(first.time, first.sources[0], part.time, part.sources[0], problems)
    problems.raise_if_any()
    ordered = [part.select(first.columns) for part in parts]
    digest = hashlib.sha256("".join(p.source_hash for p in ordered).encode()).hexdigest()
    if first.time is None:
        return join_rows(ordered, digest)
    ordered.sort(key=lambda p: (p.time.min() if p.time is not None and len(p) else np.inf, p.sources))
    digest = hashlib.sha256("".join(p.source_hash for p in ordered).encode()).hexdigest()
    return _in_order(join_rows(ordered, digest), options)


def _same_columns(first: ReadingsTable, other: ReadingsTable, problems: Problems) -> None:
    place = Location(file=other.sources[0])
    for tag in first.columns:
        if tag not in other.columns:
            words = f"column {tag!r} of {first.sources[0]} is not in this file"
            hint = (
                did_you_mean(tag, [c for c in other.columns if c not in first.columns])
                or "add it, or leave the file out"
            )
            problems.add("columns-differ", words, hint, place)
    for tag in other.columns:
        if tag not in first.columns:
            problems.add(
                "columns-differ", f"column {tag!r} is not in {first.sources[0]}", "list it under ignore", place
            )


def _in_order(table: ReadingsTable, options: Mapping[str, Any]) -> ReadingsTable:
    """Put the rows of several files in time order; a stamp that two files have is refused, or decided as declared."""
    from dataclasses import replace

    from .time_order import order_rows

    assert table.time is not None
    settings = ReadOptions.build({**options, "sort": True})
    problems = Problems()
    stamps = np.asarray(table.time.asi8)
    order = np.argsort(stamps, kind="stable")
    same = np.flatnonzero(np.diff(stamps[order]) == 0)
    if same.size and settings.duplicates == "refuse":
        a, b = int(order[same[0]]), int(order[same[0] + 1])
        here, there = table.where(a), table.where(b)
        words = f"stamp {table.time[b]} is there already, in {here}"
        if same.size > 1:
            words += f"; {same.size} such stamps in all"
        problems.add("duplicate-stamp", words, "remove one, or declare duplicates = first or last", there)
        problems.raise_if_any()
    rows, notices = order_rows(table.time, settings, table.where, problems)
    problems.raise_if_any()
    # Files that follow one another are not worth a word; rows that had to be interleaved are.
    kept = tuple(n for n in notices if n.code != "rows-sorted")
    if np.any(np.diff(stamps) < 0):
        kept += (Notice("files-overlap", "the files overlap in time; their rows were interleaved"),)
    table = table if rows is None else table.take(rows)
    return replace(table, notices=table.notices + kept)
