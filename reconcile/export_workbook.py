"""The tables of a corrected data set as one workbook for people: a sheet a table."""

from __future__ import annotations

import datetime
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from .errors import InputError, MissingExtra, Problem

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["write_workbook"]

MOST_ROWS = 1_048_576
"""Rows of a sheet, its header included (ECMA-376 applications; from memory)."""


def write_workbook(tables: Mapping[str, pd.DataFrame], path: Path) -> None:
    """Write tables into a workbook, the same bytes for the same tables.

    Parameters
    ----------
    tables : mapping of sheet name to DataFrame
    path : path

    Raises
    ------
    InputError
        If a table has more rows than a sheet takes.
    MissingExtra
        If the library that writes workbooks is not installed.
    """
    try:
        from xlsxwriter import Workbook
    except ImportError:
        raise MissingExtra("xlsxwriter", "excel", "writing a workbook") from None
    for name, frame in tables.items():
        if len(frame) >= MOST_ROWS:
            raise InputError(
                Problem(
                    "sheet-too-long",
                    f"table {name} has {len(frame)} rows, and a sheet takes {MOST_ROWS - 1}",
                    "leave --xlsx out; CSV and Parquet have no such limit",
                )
            )
    # Tags may begin with an equals sign; a cell that holds one is a text and never a formula.
    book = Workbook(str(path), {"strings_to_formulas": False, "strings_to_urls": False, "strings_to_numbers": False})
    book.set_properties({"created": datetime.datetime(1980, 1, 1)})
    bold = book.add_format({"bold": True})
    for name, frame in tables.items():
        sheet = book.add_worksheet(name)
        for j, column in enumerate(frame.columns):
            sheet.write_string(0, j, str(column), bold)
            for i, value in enumerate(frame[column].tolist(), start=1):
                if value is None or value != value:
                    continue
                if isinstance(value, bool):
                    sheet.write_boolean(i, j, value)
                elif isinstance(value, (int, float)) and abs(value) != float("inf"):
                    sheet.write_number(i, j, value)
                else:
                    sheet.write_string(i, j, str(value))
            sheet.set_column(j, j, max(10, min(40, len(str(column)) + 2)))
        sheet.freeze_panes(1, 1)
    book.close()
