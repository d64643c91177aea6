"""From raw files to clean tables: sources, statuses, times, counters, windows. Knows nothing of networks."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from .table import ReadingsTable, Status

if TYPE_CHECKING:
    from .csv_source import read_csv

__all__ = ["ReadingsTable", "Status", "read_csv"]

_LAZY = {"read_csv": "csv_source"}


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        from importlib import import_module

        return getattr(import_module(f".{_LAZY[name]}", __name__), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
