"""Commands for authors of domains: new-domain, check-domain."""

from __future__ import annotations

from pathlib import Path

import click

from .common import DONE, FAULTS_FOUND, errors_to_exit_codes, plugin_option

__all__ = ["check_domain", "new_domain"]


@click.command("new-domain")
@click.argument("name")
@click.option("--into", type=click.Path(path_type=Path), default=Path(), help="Folder to write into.")
@click.option("--author", default="A. Author", show_default=True, help="Author of the distribution.")
@errors_to_exit_codes
def new_domain(name: str, into: Path, author: str) -> None:
    """Write a small distribution that brings the domain NAME: package, example, tests.

    It installs, runs its example and passes its tests before a line of it is changed. The example shows why meters
    with one calibration are stated as such: inflow 500.0, side flow 8.3, outflow 508.6 mL/min. With independent
    errors of 2.5 mL/min at the large meters (chi-squared 0.007) an error of the side flow is noticed from 11.5 mL/min
    on, which is useless; with 2.45 of it shared and 0.5 their own (chi-squared 0.17), from 2.4 mL/min on.
    """
    from ..domains import load_plugins
    from ..scaffold import new_domain as write

    folder = write(name, into, load_plugins(), author=author)
    click.echo(f"Wrote {folder}. Next:")
    for line in (f"cd {folder}", "pip install -e '.[dev]'", "reconcile run example", "pytest"):
        click.echo(f"  {line}")


@click.command("check-domain")
@click.argument("trials", nargs=-1, required=True, type=click.Path(path_type=Path))
@plugin_option
@click.option("--runs", type=click.IntRange(min=20), default=2000, show_default=True, help="Runs without a fault.")
@click.option("--seed", type=int, default=1, show_default=True)
@errors_to_exit_codes
def check_domain(trials: tuple[Path, ...], plugins: tuple[Path, ...], runs: int, seed: int) -> int:
    """Put a domain on trial: TRIALS are conformance files of one domain. Exit code 1 when a check fails."""
    from ..testing.conformance import conformance_of_files

    found = conformance_of_files(trials, plugins, seed=seed, runs=runs)
    click.echo(str(found))
    return DONE if found.ok else FAULTS_FOUND
