"""Streams and meters from a table file (CSV or a spreadsheet), one a row, with the keys of the case file as columns."""

from __future__ import annotations

import csv
import io
from pathlib import Path as FilePath
from typing import Any

from ..errors import Location, MissingExtra, Problems, did_you_mean
from .places import Path, Places

__all__ = ["read_table"]

_SPREADSHEETS = (".xlsx", ".xlsm", ".xlsb", ".xls", ".ods")
_LISTS = ("sigma", "accuracy", "expanded")
Row = tuple[int | None, list[str]]


def read_table(
    section: str,
    file: str,
    folder: FilePath,
    *,
    names: tuple[str, ...],
    keys: tuple[str, ...],
    any_key: bool,
    places: Places,
    problems: Problems,
) -> dict[str, Any] | None:
    """Read a table as the block that would stand in the case file.

    Parameters
    ----------
    section : str
        ``streams`` or ``meters``.
    file : str
        As written in the case.
    folder : path
        Folder of the case.
    names : tuple of str
        Columns that may hold the name; one of them must be there.
    keys : tuple of str
        Columns that have a meaning.
    any_key : bool
        Whether other columns may have one, too.
    places : Places
        Gets the place of every row and cell. A column number counts cells, not characters.
    problems : Problems

    Returns
    -------
    dict or None
        None if the file could not be read.
    """
    before = len(problems.found)
    path = folder / file
    rows = _rows(section, file, path, places, problems)
    if rows is None:
        return None
    if not rows:
        problems.add("file-empty", f"table {file!r} is empty", f"its first row names the columns: {names[0]}, ...",
                     Location(file))  # fmt: skip
        return None
    first_line, header = rows[0]
    columns: dict[str, int] = {}
    for i, cell in enumerate(header):
        where = Location(file, first_line, i + 1 if first_line else None)
        if not cell:
            if any(len(r) > i and r[i] for _, r in rows[1:]):
                problems.add("column-unnamed", f"column {i + 1} of {file} has no name", "name it or empty it", where)
        elif cell in columns:
            problems.add(
                "duplicate-key",
                f"column {cell!r} stands twice (columns {columns[cell] + 1} and {i + 1})",
                "rename or remove one of the two",
                where,
            )
        elif cell in (*names, *keys) or any_key:
            columns[cell] = i
        else:
            hint = did_you_mean(cell, (*names, *keys)) or f"columns here: {', '.join((names[0], *keys))}"
            problems.add("unknown-key", f"unknown column {cell!r} in the table of {section}", hint, where)
    name_column = next((columns[n] for n in names if n in columns), None)
    if name_column is None:
        if len(problems.found) == before:
            problems.add(
                "missing-key",
                f"the table of {section} has no column {names[0]!r}",
                f"found: {', '.join(columns) or 'none'}",
                Location(file, first_line),
            )
        return None
    data: dict[str, Any] = {}
    seen: dict[str, Location] = {}
    for number, (line, cells) in enumerate(rows[1:], start=1):
        if not any(cells):
            continue
        name = cells[name_column] if name_column < len(cells) else ""
        where = Location(file, line, name_column + 1 if line else None, number, name or None)
        if not name:
            problems.add("name-missing", f"this row of {section} has no {names[0]}", "fill the cell", where)
            continue
        if name in seen:
            problems.add(
                "duplicate-key",
                f"{name!r} stands here and in row {seen[name].row}",
                "rename or remove one of the two",
                where,
            )
            continue
        seen[name] = where
        if len(cells) > len(header) and any(cells[len(header) :]):
            problems.add(
                "row-too-long",
                f"row of {name!r} has {len(cells)} cells, the header {len(header)}",
                "put a cell that holds the delimiter in quotes",
                where,
            )
            continue
        data[name] = _block((section, name), cells, columns, names, where, places)
    return data


def _block(
    path: Path, cells: list[str], columns: dict[str, int], names: tuple[str, ...], where: Location, places: Places
) -> dict[str, Any]:
    """Turn one row into a block; blank cells are keys that were not written."""
    block: dict[str, Any] = {}
    places.tables[path] = where
    for key, i in columns.items():
        text = cells[i] if i < len(cells) else ""
        if key in names or not text:
            continue
        parts = [p.strip() for p in text.split(";") if p.strip()]
        block[key] = parts if key in _LISTS and len(parts) > 1 else text
        places.tables[*path, key] = Location(
            where.file, where.line, i + 1 if where.line else None, where.row, where.tag
        )
    if "source" in block and "target" in block and "path" not in block:
        block["path"] = f"{block.pop('source')} -> {block.pop('target')}"
        places.tables[*path, "path"] = places.tables[*path, "source"]
    return block


def _rows(section: str, file: str, path: FilePath, places: Places, problems: Problems) -> list[Row] | None:
    """Rows of text cells with their line, None for a spreadsheet; the header is the first."""
    where = places.where((section,))
    if not path.is_file():
        problems.add(
            "file-missing",
            f"{section}: there is no file {file!r} beside the case",
            "check the name, or write the block itself here",
            where,
        )
        return None
    if path.suffix.lower() in _SPREADSHEETS:
        return _spreadsheet(file, path, problems)
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        problems.add("not-utf8", f"{section}: table {file!r} is not UTF-8 text ({error.reason})",
                     "save it with encoding UTF-8", Location(file))  # fmt: skip
        return None
    head = text.split("\n", 1)[0]
    delimiter = max(",;\t", key=head.count)
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter, skipinitialspace=True)
    rows: list[Row] = []
    begins = 1
    try:
        for cells in reader:
            # A row begins behind the last line of the one before it; quoted cells may hold line breaks.
            rows.append((begins, [c.strip() for c in cells]))
            begins = reader.line_num + 1
    except csv.Error as error:
        problems.add("table-unreadable", f"table {file!r}: {error}", "check the quotes", Location(file, begins))
        return None
    return rows


def _spreadsheet(file: str, path: FilePath, problems: Problems) -> list[Row] | None:
    try:
        from python_calamine import CalamineError, CalamineWorkbook
    except ImportError:
        raise MissingExtra("python-calamine", "excel", f"reading {file}") from None
    try:
        sheet = CalamineWorkbook.from_path(str(path)).get_sheet_by_index(0).to_python()
    except (CalamineError, OSError) as error:
        problems.add(
            "table-unreadable", f"table {file!r} is no spreadsheet ({error})", "check the file", Location(file)
        )
        return None
    return [(None, [_cell(c) for c in row]) for row in sheet]


def _cell(value: Any) -> str:
    if isinstance(value, float) and value.is_integer():
        return str(int(value))
    return str(value).strip()
