"""Reads a sheet of a spreadsheet workbook: xlsx, xls, ods (extra ``excel``)."""

from __future__ import annotations

import hashlib
import io
from pathlib import Path
from typing import Any

from ..errors import MissingExtra, did_you_mean
from .csv_source import raw_from_records, read_bytes
from .csv_text import Records
from .frames import cell_text, finish
from .options import CappedProblems, ReadOptions
from .table import ReadingsTable

__all__ = ["read_workbook"]


def read_workbook(path: str | Path, **options: Any) -> ReadingsTable:
    """Read one sheet; the only one that is filled, unless `sheet` names one.

    Line numbers in messages are row numbers of the sheet.

    Parameters
    ----------
    path : str or Path
    **options
        Fields of `ReadOptions`.

    Raises
    ------
    InputError
    MissingExtra
        Without python-calamine.
    """
    settings = ReadOptions.build(options)
    try:
        from python_calamine import CalamineError, CalamineWorkbook
    except ImportError:
        raise MissingExtra("python-calamine", "excel", f"reading {path}") from None
    problems = CappedProblems(str(path))
    data = read_bytes(Path(path), problems)
    try:
        book = CalamineWorkbook.from_filelike(io.BytesIO(data))
    except CalamineError as error:
        problems.add("file-unreadable", f"this is not a workbook ({error})", "save it again, or as CSV")
        problems.raise_if_any()
    filled = {}
    for sheet in book.sheet_names:
        rows = book.get_sheet_by_name(sheet).to_python(skip_empty_area=False)
        if any(any(_text(c).strip() for c in row) for row in rows):
            filled[sheet] = rows
    name = _choose(settings.sheet, list(book.sheet_names), list(filled), problems)
    problems.raise_if_any()
    records = Records()
    for number, row in enumerate(filled[name], start=1):
        texts = [_text(c) for c in row]
        if any(t.strip() for t in texts):
            records.rows.append(texts)
            records.lines.append(number)
        else:
            records.blank += 1
    # Numbers of a workbook have no marks; what is text in it is read as in a file parted by commas.
    raw = raw_from_records(records, str(path), ",", settings, problems)
    raw.source_hash = hashlib.sha256(data).hexdigest()
    digest = f"sha256 {raw.source_hash[:12]}..."
    raw.echo.insert(0, f"{path}: workbook, {len(data)} bytes, {digest}; sheet {name!r} of {len(book.sheet_names)}")
    return finish(raw, settings, problems)


def _text(value: Any) -> str:
    # A workbook knows only floats: 2.0 in the cell is 2 for people.
    if isinstance(value, float) and value.is_integer() and abs(value) < 1e15:
        return str(int(value))
    return cell_text(value)


def _choose(wanted: str | None, names: list[str], filled: list[str], problems: CappedProblems) -> str:
    if wanted is not None:
        if wanted in filled:
            return wanted
        if wanted in names:
            problems.add("sheet-empty", f"sheet {wanted!r} is empty", f"filled sheets: {', '.join(filled) or 'none'}")
        else:
            hint = did_you_mean(wanted, names) or f"sheets: {', '.join(names)}"
            problems.add("sheet-missing", f"there is no sheet {wanted!r}", hint)
        return ""
    if len(filled) == 1:
        return filled[0]
    if filled:
        words = f"{len(filled)} sheets are filled: {', '.join(filled)}"
        problems.add("sheet-unclear", words, f"declare sheet = {filled[0]!r} or another")
    else:
        problems.add("file-empty", "all sheets are empty", "save the workbook again")
    return ""
