"""Readings that are in memory already: a table, or a value per meter."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Any

import numpy as np

from ..errors import InputError, Problem
from .table import ReadingsTable, Status

__all__ = ["from_values"]


def from_values(readings: Any) -> ReadingsTable:
    """Make a table of readings from values in memory.

    Parameters
    ----------
    readings : pandas.DataFrame, or mapping of tag to number or sequence
        A column a meter, a row a snapshot; nan or None where there is no reading. An index of stamps becomes
        the time of the snapshots.

    Returns
    -------
    ReadingsTable

    Raises
    ------
    InputError
        If a value is not a number or the columns differ in length.
    """
    time = labels = None
    if hasattr(readings, "columns") and hasattr(readings, "index"):
        import pandas as pd

        columns = [str(c) for c in readings.columns]
        data: Mapping[str, Any] = {c: readings.iloc[:, i].to_numpy() for i, c in enumerate(columns)}
        if isinstance(readings.index, pd.DatetimeIndex):
            time = readings.index
        elif not isinstance(readings.index, pd.RangeIndex):
            labels = [str(v) for v in readings.index]
    else:
        data = {str(k): v for k, v in readings.items()}
        columns = list(data)
    arrays = []
    for tag in columns:
        try:
            arrays.append(np.atleast_1d(np.array(data[tag], dtype=float)))
        except (TypeError, ValueError):
            raise InputError(
                Problem(
                    "not-a-number",
                    f"the values of {tag!r} are not all numbers",
                    "give numbers, nan where none was read",
                )
            ) from None
    if len({a.shape for a in arrays}) > 1:
        sizes = ", ".join(f"{t}: {a.size}" for t, a in zip(columns, arrays, strict=True))
        raise InputError(Problem("uneven-columns", f"the meters have different numbers of readings ({sizes})"))
    values = np.column_stack(arrays) if arrays else np.zeros((0, 0))
    values = np.where(np.isfinite(values), values, np.nan)
    status = np.where(np.isfinite(values), Status.GOOD, Status.MISSING).astype(np.int8)
    digest = hashlib.sha256(",".join(columns).encode() + np.ascontiguousarray(values).tobytes()).hexdigest()
    return ReadingsTable(tuple(columns), values, status, time=time, labels=labels, source_hash=digest)
