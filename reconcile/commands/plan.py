"""Commands before the experiment: coverage, place, rehearse."""

from __future__ import annotations

import json
from pathlib import Path

import click

from .common import ascii_only, case_argument, errors_to_exit_codes, plugin_option

__all__ = ["coverage", "place", "rehearse"]


@click.command()
@case_argument
@plugin_option
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
@errors_to_exit_codes
def coverage(case: Path, plugins: tuple[Path, ...], as_json: bool) -> None:
    """Say what the meters of CASE can show, before any reading is taken."""
    from ..report.coverage import render_coverage
    from ..run import load_case

    found = load_case(case, plugins=plugins).coverage
    click.echo(json.dumps(found.to_dict(), indent=2) if as_json else render_coverage(found))


@click.command()
@case_argument
@plugin_option
@click.option("--find", metavar="TAG", help="Goal: notice a smaller fault of this meter or possible fault.")
@click.option("--narrow", metavar="VALUE", help="Goal: a smaller uncertainty of a variable, figure or formula.")
@click.option("--separate", multiple=True, metavar="TAG", help="Goal: tell these faults apart; give two or more.")
@click.option("--determine", metavar="VARIABLE", help="Goal: make this variable calculable.")
@click.option("--offer", "offers", multiple=True, metavar="TEXT", help="'variable = sigma unit; price'.")
@click.option("--count", type=int, default=1, show_default=True, help="How many meters to add together: 1 or 2.")
@errors_to_exit_codes
def place(
    case: Path,
    plugins: tuple[Path, ...],
    find: str | None,
    narrow: str | None,
    separate: tuple[str, ...],
    determine: str | None,
    offers: tuple[str, ...],
    count: int,
) -> None:
    """Rank the meters that could be added to CASE, for one goal."""
    from ..planner import place_meters
    from ..report.planning import render_placements
    from ..run import load_case

    loaded = load_case(case, plugins=plugins)
    found = place_meters(
        loaded, find=find, narrow=narrow, separate=separate, determine=determine, offers=offers, count=count
    )
    click.echo(render_placements(found, ascii_only=ascii_only()), nl=False)


@click.command()
@case_argument
@plugin_option
@click.option("--inject", multiple=True, metavar="TEXT", help="'TAG' or 'TAG = size unit'; every fault when left out.")
@click.option("--sigmas", type=float, help="Size in sigmas of each meter; the smallest detectable when left out.")
@click.option("--trials", type=int, default=2000, show_default=True)
@click.option("--seed", type=int, default=1, show_default=True)
@errors_to_exit_codes
def rehearse(
    case: Path, plugins: tuple[Path, ...], inject: tuple[str, ...], sigmas: float | None, trials: int, seed: int
) -> None:
    """Inject faults into CASE many times, and count what is noticed and named."""
    from ..planner import rehearse_case
    from ..report.planning import render_rehearsal
    from ..run import load_case

    loaded = load_case(case, plugins=plugins)
    found = rehearse_case(loaded, inject=inject, sigmas=sigmas, trials=trials, seed=seed)
    click.echo(render_rehearsal(found, ascii_only=ascii_only()), nl=False)
