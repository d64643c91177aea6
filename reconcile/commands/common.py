"""What commands share: arguments, exit codes, what the terminal can show."""

from __future__ import annotations

import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

import click

from ..errors import ReconcileError

__all__ = ["DONE", "FAULTS_FOUND", "ascii_only", "case_argument", "errors_to_exit_codes", "plugin_option"]

DONE, FAULTS_FOUND = 0, 1

case_argument = click.argument("case", type=click.Path(path_type=Path))
plugin_option = click.option(
    "--plugin", "plugins", multiple=True, type=click.Path(path_type=Path), help="Load a plugin from a Python file."
)


def errors_to_exit_codes(function: Callable[..., int | None]) -> Callable[..., None]:
    """Turn an error that the program raised on purpose into its message and its exit code."""

    @wraps(function)
    def run(*args: Any, **kwargs: Any) -> None:
        try:
            code = function(*args, **kwargs)
        except ReconcileError as error:
            click.echo(str(error), err=True)
            sys.exit(error.exit_code)
        sys.exit(code or DONE)

    return run


def ascii_only() -> bool:
    """Whether the terminal cannot show characters beyond ASCII."""
    encoding = (getattr(sys.stdout, "encoding", None) or "ascii").lower()
    return "utf" not in encoding
