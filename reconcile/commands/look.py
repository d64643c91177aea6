"""Commands that only look: check, domains, schema."""

from __future__ import annotations

import json
from pathlib import Path

import click

from .common import case_argument, errors_to_exit_codes, plugin_option

__all__ = ["check", "domains", "schema"]


@click.command()
@case_argument
@plugin_option
@click.option("--readings", metavar="FILE", help="Readings (a file, pattern or URL), instead of those the case names.")
@errors_to_exit_codes
def check(case: Path, plugins: tuple[Path, ...], readings: str | None) -> None:
    """Read and check everything of CASE; run nothing."""
    from ..report.echo import describe_case
    from ..run import load_case

    loaded = load_case(case, plugins=plugins)
    click.echo(describe_case(loaded, readings))


@click.command()
@plugin_option
@errors_to_exit_codes
def domains(plugins: tuple[Path, ...]) -> None:
    """List the domains that are installed, and plugins that were left out."""
    from ..domains import load_plugins

    loaded = load_plugins(plugins)
    for name, info in loaded.domains.items():
        origin = f"{info.plugin}, {info.distribution}" if info.distribution else info.plugin
        click.echo(f"{name:12} {info.domain.version:6} {info.domain.summary}  ({origin})")
    for notice in loaded.notices:
        click.echo(str(notice), err=True)


@click.command()
@plugin_option
@errors_to_exit_codes
def schema(plugins: tuple[Path, ...]) -> None:
    """Print the JSON Schema of case files, the options of the installed domains included."""
    from ..assemble import option_models
    from ..case.schema import json_schema
    from ..domains import load_plugins

    click.echo(json.dumps(json_schema(option_models(load_plugins(plugins))), indent=2))
