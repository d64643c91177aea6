"""From raw files to clean tables: sources, statuses, times, counters, windows. Knows nothing of networks."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from .table import ReadingsTable, Status

if TYPE_CHECKING:
    from .counters import CounterRule, counter_increments
    from .csv_source import read_csv
    from .dead_time import estimate_dead_time, shift_times
    from .derived import find_derived, mark_derived
    from .lab import join_lab
    from .levels import LevelTable
    from .sources import read_readings
    from .validity import SignalLimits, check_signals, run_mask
    from .windows import WindowRules, make_windows, sigma_of_mean

# Loaded when first asked for: a small file without stamps is read without pandas.
_LAZY = {
    "CounterRule": "counters",
    "LevelTable": "levels",
    "SignalLimits": "validity",
    "WindowRules": "windows",
    "check_signals": "validity",
    "counter_increments": "counters",
    "estimate_dead_time": "dead_time",
    "find_derived": "derived",
    "join_lab": "lab",
    "make_windows": "windows",
    "mark_derived": "derived",
    "read_csv": "csv_source",
    "read_readings": "sources",
    "run_mask": "validity",
    "shift_times": "dead_time",
    "sigma_of_mean": "windows",
}

__all__ = [
    "CounterRule",
    "LevelTable",
    "ReadingsTable",
    "SignalLimits",
    "Status",
    "WindowRules",
    "check_signals",
    "counter_increments",
    "estimate_dead_time",
    "find_derived",
    "join_lab",
    "make_windows",
    "mark_derived",
    "read_csv",
    "read_readings",
    "run_mask",
    "shift_times",
    "sigma_of_mean",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        from importlib import import_module

        return getattr(import_module(f".{_LAZY[name]}", __name__), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
