"""Commands that explain: one node worked by hand."""

from __future__ import annotations

from pathlib import Path

import click

from ..errors import InputError, Problem
from .common import ascii_only, errors_to_exit_codes, plugin_option

__all__ = ["explain"]


@click.group()
def explain() -> None:
    """Explain how numbers came about, so that they can be done again on paper."""


@explain.command()
@click.argument("name")
@click.argument("case", type=click.Path(path_type=Path), default=Path())
@plugin_option
@click.option("--readings", type=click.Path(path_type=Path), help="Readings, instead of those the case names.")
@click.option("--snapshot", type=int, default=1, show_default=True, help="Which snapshot, counted from 1.")
@errors_to_exit_codes
def node(name: str, case: Path, plugins: tuple[Path, ...], readings: Path | None, snapshot: int) -> None:
    """Work the balances of node NAME of CASE by hand; CASE is this folder when left out."""
    from ..report.by_hand import explain_node
    from ..report.layout import to_ascii
    from ..run import load_case

    result = load_case(case, plugins=plugins).run(readings)
    if not 1 <= snapshot <= result.size:
        raise InputError(
            Problem(
                "unknown-snapshot", f"there is no snapshot {snapshot}", f"count from 1; the readings hold {result.size}"
            )
        )
    text = explain_node(result, name, snapshot - 1)
    click.echo(to_ascii(text) if ascii_only() else text, nl=False)
