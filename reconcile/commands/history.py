"""Command history: what many snapshots say together."""

from __future__ import annotations

import json
from pathlib import Path

import click

from .common import ascii_only, case_argument, errors_to_exit_codes, plugin_option

__all__ = ["history"]


@click.command()
@case_argument
@plugin_option
@click.option("--readings", metavar="FILE", help="Readings (a file, pattern or URL), instead of those the case names.")
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
@errors_to_exit_codes
def history(case: Path, plugins: tuple[Path, ...], readings: str | None, as_json: bool) -> None:
    """Say what all snapshots of CASE tell together: small steady faults, drifts, sigmas, flow levels."""
    from ..report.history import render_history
    from ..run import load_case

    found = load_case(case, plugins=plugins).run(readings).history
    if as_json:
        click.echo(json.dumps(found.to_dict(), indent=2, ensure_ascii=False))
    else:
        click.echo(render_history(found, ascii_only=ascii_only()), nl=False)
