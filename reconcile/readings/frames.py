"""From a pandas frame, as libraries deliver it, to raw columns."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from .assemble import RawTable, assemble
from .cells import detect_marks, telling_cells
from .columns import NOTE_NAMES
from .long_table import pivot_long
from .options import ReadOptions
from .table import ReadingsTable

if TYPE_CHECKING:
    import pandas as pd

    from ..errors import Problems

__all__ = ["cell_text", "finish", "raw_from_frame"]


def raw_from_frame(frame: pd.DataFrame, name: str, options: ReadOptions) -> RawTable:
    """Turn a frame into raw columns: numbers and stamps as they are, everything else as text.

    Parameters
    ----------
    frame : DataFrame
        An index that is not a plain count becomes the first column.
    name : str
        Name for messages.
    options : ReadOptions
    """
    import pandas as pd

    if not isinstance(frame.index, pd.RangeIndex):
        frame = frame.reset_index()
    header = [str(c) for c in frame.columns]
    columns = [_column(frame.iloc[:, i]) for i in range(len(header))]
    raw = RawTable(name, header, columns)
    texts = [c for h, c in zip(header, columns, strict=True) if isinstance(c, list) and h.casefold() not in NOTE_NAMES]
    raw.marks = detect_marks(
        telling_cells(texts), decimal=options.decimal, thousands=options.thousands, comma_is_usual=False
    )
    return raw


def _column(series: pd.Series[Any]) -> Any:
    import pandas as pd

    kind = series.dtype
    if isinstance(kind, pd.DatetimeTZDtype) or kind.kind == "M":
        return pd.DatetimeIndex(series)
    if pd.api.types.is_numeric_dtype(kind) and kind.kind != "c":
        return series.to_numpy(dtype=np.float64, na_value=np.nan)
    return [cell_text(v) for v in series.tolist()]


def cell_text(value: Any) -> str:
    """Return a cell as the text that a CSV file would hold; nothing for what is missing."""
    import datetime as dt

    if value is None or value != value or value is _nat():
        return ""
    if isinstance(value, bool):
        return "1" if value else "0"
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, (dt.datetime, dt.date)):
        return value.isoformat()
    return str(value)


def _nat() -> Any:
    import pandas as pd

    return pd.NaT


def finish(raw: RawTable, options: ReadOptions, problems: Problems) -> ReadingsTable:
    """Make the table, turning a long one into a wide one first."""
    if options.shape == "long":
        return pivot_long(raw, options, problems)
    return assemble(raw, options, problems)
