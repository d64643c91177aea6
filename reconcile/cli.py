"""The command line: parse, call, print. Everything here is one library call away."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any, Literal

import click

from ._version import __version__
from .errors import InputError, Problem, ReconcileError

__all__ = ["main"]

DONE, FAULTS_FOUND = 0, 1


@click.group(
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    epilog="Exit codes: 0 done; 1 done, and faults were found (--strict); 2 bad input; 3 could not be solved; "
    "4 a plugin failed.",
)
@click.version_option(__version__, prog_name="reconcile")
def main() -> None:
    """Reconcile measured flows: adjust readings to the balances, and say which instrument to distrust."""
    for stream in (sys.stdout, sys.stderr):
        # A terminal that cannot show a character gets a plain one instead of a traceback.
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")


def _errors_to_exit_codes(function: Callable[..., int | None]) -> Callable[..., None]:
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


_case = click.argument("case", type=click.Path(path_type=Path))
_plugin = click.option(
    "--plugin", "plugins", multiple=True, type=click.Path(path_type=Path), help="Load a plugin from a Python file."
)


@main.command()
@_case
@_plugin
@click.option("--readings", type=click.Path(path_type=Path), help="Readings, instead of those the case names.")
@click.option("--out", type=click.Path(path_type=Path), help="Write the corrected data set into this folder.")
@click.option("--parquet", is_flag=True, help="Write the tables of --out as Parquet, too.")
@click.option("--exclude", multiple=True, metavar="TAG", help="Leave a meter out; needs --because, one for each.")
@click.option("--because", multiple=True, metavar="TEXT", help="Why the meter is left out; stands in the result.")
@click.option(
    "--suspects",
    type=click.Choice(["flag", "exclude", "compensate"]),
    default="flag",
    show_default=True,
    help="What the adjusted values do about a suspect where the evidence names one.",
)
@click.option("--strict", is_flag=True, help="Exit with 1 when readings disagree.")
@click.option("--json", "as_json", is_flag=True, help="Print the summary as JSON.")
@click.option("--snapshot", type=int, help="Print this snapshot in detail, counted from 1.")
@_errors_to_exit_codes
def run(
    case: Path,
    plugins: tuple[Path, ...],
    readings: Path | None,
    out: Path | None,
    parquet: bool,
    exclude: tuple[str, ...],
    because: tuple[str, ...],
    suspects: Literal["flag", "exclude", "compensate"],
    strict: bool,
    as_json: bool,
    snapshot: int | None,
) -> int:
    """Adjust the readings of CASE, test them, explain what disagrees."""
    from .export import write
    from .report.text import render
    from .run import load_case

    if len(because) != len(exclude):
        raise InputError(
            Problem(
                "no-reason",
                f"{len(exclude)} meters are left out, but {len(because)} reasons are given",
                'write --exclude TAG --because "..." for each',
            )
        )
    loaded = load_case(case, plugins=plugins)
    reasons = dict(zip(exclude, because, strict=True))
    result = loaded.run(readings, exclude=reasons, suspects=suspects)
    if as_json:
        click.echo(json.dumps(result.to_dict(), indent=2, ensure_ascii=False))
    else:
        click.echo(render(result, snapshot=None if snapshot is None else snapshot - 1, ascii_only=_ascii_only()))
        if exclude:
            from .report.compare import render_comparison

            click.echo(render_comparison(loaded.run(readings), result))
    if out is not None:
        files = write(result, out, formats=("csv", "parquet") if parquet else ("csv",))
        click.echo(f"Wrote {len(files)} files to {out}.", err=as_json)
    return FAULTS_FOUND if strict and result.suspicious.any() else DONE


def _ascii_only() -> bool:
    encoding = (getattr(sys.stdout, "encoding", None) or "ascii").lower()
    return "utf" not in encoding


@main.command()
@_case
@_plugin
@click.option("--readings", type=click.Path(path_type=Path), help="Readings, instead of those the case names.")
@_errors_to_exit_codes
def check(case: Path, plugins: tuple[Path, ...], readings: Path | None) -> None:
    """Read and check everything of CASE; run nothing."""
    from .report.echo import describe_case
    from .run import load_case

    loaded = load_case(case, plugins=plugins)
    click.echo(describe_case(loaded, readings))


@main.command()
@_case
@_plugin
@click.option("--json", "as_json", is_flag=True, help="Print as JSON.")
@_errors_to_exit_codes
def coverage(case: Path, plugins: tuple[Path, ...], as_json: bool) -> None:
    """Say what the meters of CASE can show, before any reading is taken."""
    from .report.coverage import render_coverage
    from .run import load_case

    found = load_case(case, plugins=plugins).coverage
    click.echo(json.dumps(found.to_dict(), indent=2) if as_json else render_coverage(found))


@main.command()
@_case
@_plugin
@click.option("--find", metavar="TAG", help="Goal: notice a smaller fault of this meter or possible fault.")
@click.option("--narrow", metavar="VALUE", help="Goal: a smaller uncertainty of a variable, figure or formula.")
@click.option("--separate", multiple=True, metavar="TAG", help="Goal: tell these faults apart; give two or more.")
@click.option("--determine", metavar="VARIABLE", help="Goal: make this variable calculable.")
@click.option("--offer", "offers", multiple=True, metavar="TEXT", help="'variable = sigma unit; price'.")
@click.option("--count", type=int, default=1, show_default=True, help="How many meters to add together: 1 or 2.")
@_errors_to_exit_codes
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
    from .planner import place_meters
    from .report.planning import render_placements
    from .run import load_case

    loaded = load_case(case, plugins=plugins)
    found = place_meters(
        loaded, find=find, narrow=narrow, separate=separate, determine=determine, offers=offers, count=count
    )
    click.echo(render_placements(found, ascii_only=_ascii_only()), nl=False)


@main.command()
@_case
@_plugin
@click.option("--inject", multiple=True, metavar="TEXT", help="'TAG' or 'TAG = size unit'; every fault when left out.")
@click.option("--sigmas", type=float, help="Size in sigmas of each meter; the smallest detectable when left out.")
@click.option("--trials", type=int, default=2000, show_default=True)
@click.option("--seed", type=int, default=1, show_default=True)
@_errors_to_exit_codes
def rehearse(
    case: Path, plugins: tuple[Path, ...], inject: tuple[str, ...], sigmas: float | None, trials: int, seed: int
) -> None:
    """Inject faults into CASE many times, and count what is noticed and named."""
    from .planner import rehearse_case
    from .report.planning import render_rehearsal
    from .run import load_case

    loaded = load_case(case, plugins=plugins)
    found = rehearse_case(loaded, inject=inject, sigmas=sigmas, trials=trials, seed=seed)
    click.echo(render_rehearsal(found, ascii_only=_ascii_only()), nl=False)


@main.command()
@_plugin
@_errors_to_exit_codes
def domains(plugins: tuple[Path, ...]) -> None:
    """List the domains that are installed, and plugins that were left out."""
    from .domains import load_plugins

    loaded = load_plugins(plugins)
    for name, info in loaded.domains.items():
        origin = f"{info.plugin}, {info.distribution}" if info.distribution else info.plugin
        click.echo(f"{name:12} {info.domain.version:6} {info.domain.summary}  ({origin})")
    for notice in loaded.notices:
        click.echo(str(notice), err=True)


@main.command()
@_plugin
@_errors_to_exit_codes
def schema(plugins: tuple[Path, ...]) -> None:
    """Print the JSON Schema of case files, the options of the installed domains included."""
    from .assemble import option_models
    from .case.schema import json_schema
    from .domains import load_plugins

    click.echo(json.dumps(json_schema(option_models(load_plugins(plugins))), indent=2))
