"""Reconciles measured flows with conservation laws and says which instrument to distrust."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from ._version import __version__
from .errors import InputError, MissingExtra, Notice, PluginError, ReconcileError, SolveError, did_you_mean
from .hookspecs import Domain, Section, hookimpl

if TYPE_CHECKING:
    from .corrected import load_corrected
    from .expression import Expression
    from .network import OUTSIDE, Network
    from .report.page import write_page
    from .results import Result
    from .run import Case, load_case
    from .system import System, stack
    from .trajectory import Trajectory

# The numeric rooms are loaded when they are first asked for, so that `reconcile --help` starts at once.
_LAZY = {
    "Network": "network",
    "OUTSIDE": "network",
    "Expression": "expression",
    "System": "system",
    "stack": "system",
    "Case": "run",
    "Result": "results",
    "Trajectory": "trajectory",
    "load_case": "run",
    "load_corrected": "corrected",
    "write_page": "report.page",
}

__all__ = [
    "OUTSIDE",
    "Case",
    "Domain",
    "Expression",
    "InputError",
    "MissingExtra",
    "Network",
    "Notice",
    "PluginError",
    "ReconcileError",
    "Result",
    "Section",
    "SolveError",
    "System",
    "Trajectory",
    "__version__",
    "did_you_mean",
    "hookimpl",
    "load_case",
    "load_corrected",
    "stack",
    "write_page",
]


def __getattr__(name: str) -> Any:
    if name in _LAZY:
        from importlib import import_module

        return getattr(import_module(f".{_LAZY[name]}", __name__), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
