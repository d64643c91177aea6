"""Command run: the main job."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Literal

import click

from ..errors import InputError, PluginError, Problem, SolveError
from .common import DONE, FAULTS_FOUND, ascii_only, case_argument, errors_to_exit_codes, plugin_option

if TYPE_CHECKING:
    from ..results import Result
    from ..run import Case
    from ..trajectory import Trajectory

__all__ = ["run"]


@click.command()
@case_argument
@plugin_option
@click.option("--readings", metavar="FILE", help="Readings (a file, pattern or URL), instead of those the case names.")
@click.option("--out", type=click.Path(path_type=Path), help="Write the corrected data set into this folder.")
@click.option("--parquet", is_flag=True, help="Write the tables of --out as Parquet, too.")
@click.option("--xlsx", is_flag=True, help="Write the tables of --out as one workbook for people, too.")
@click.option(
    "--report", is_flag=True, help="Write report.html, one page with everything: into --out, else beside the case."
)
@click.option(
    "--pictures",
    type=click.Choice(["svg", "png"]),
    help="Write its figures as files: into the folder 'pictures' there.",
)
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
@click.option("--jobs", type=click.IntRange(1), default=1, help="Pieces of a long log worked on at the same time.")
@click.option("--chunk", type=click.IntRange(1), metavar="ROWS", help="Work through the log in pieces of so many rows.")
@click.option("--restart", is_flag=True, help="Throw away the parts that an interrupted run left in --out.")
@errors_to_exit_codes
def run(
    case: Path,
    plugins: tuple[Path, ...],
    readings: str | None,
    out: Path | None,
    parquet: bool,
    xlsx: bool,
    report: bool,
    pictures: Literal["svg", "png"] | None,
    exclude: tuple[str, ...],
    because: tuple[str, ...],
    suspects: Literal["flag", "exclude", "compensate"],
    strict: bool,
    as_json: bool,
    snapshot: int | None,
    jobs: int,
    chunk: int | None,
    restart: bool,
) -> int:
    """Adjust the readings of CASE, test them, explain what disagrees.

    A log of 200,000 rows or more is worked through in pieces if --out is given: memory stays bounded, and the same
    command continues a run that was interrupted.
    """
    from ..export import write
    from ..report.text import render
    from ..run import load_case

    if len(because) != len(exclude):
        raise InputError(
            Problem(
                "no-reason",
                f"meters left out: {len(exclude)}; reasons given: {len(because)}",
                'write --exclude TAG --because "..." for each',
            )
        )
    loaded = load_case(case, plugins=plugins)
    reasons = dict(zip(exclude, because, strict=True))
    formats = ("csv", *(["parquet"] if parquet else []), *(["xlsx"] if xlsx else []))
    if loaded.parts.spec.trajectory is not None:
        if suspects != "flag":
            raise InputError(
                Problem(
                    "no-decisions",
                    f"windows that are tied by inventories know no --suspects {suspects} yet",
                    'leave a suspect out with --exclude TAG --because "..." instead',
                )
            )
        return _follow(loaded, readings, out, reasons, formats, report, pictures, strict=strict, as_json=as_json)
    page = report or pictures is not None
    if page and (chunk is not None or restart):
        raise InputError(
            Problem(
                "report-too-long",
                "a log that is worked through in pieces has no page and no pictures",
                "leave --chunk and --restart out, or make a page of a part of the log, or of windows of it",
            )
        )
    if out is not None and suspects == "flag" and snapshot is None and "xlsx" not in formats and not page:
        from .in_pieces import run_in_pieces

        code = run_in_pieces(
            loaded,
            readings,
            out,
            reasons,
            formats,
            jobs=jobs,
            chunk=chunk,
            restart=restart,
            strict=strict,
            as_json=as_json,
        )
        if code is not None:
            return code
    elif chunk is not None or restart:
        words = "--chunk and --restart need --out, and go with neither --suspects, --snapshot nor --xlsx"
        click.echo(f"Not worked through in pieces: {words}. All rows are held in memory.", err=True)
    result = loaded.run(readings, exclude=reasons, suspects=suspects)
    if as_json:
        click.echo(json.dumps(result.to_dict(), indent=2, ensure_ascii=False))
    else:
        click.echo(render(result, snapshot=None if snapshot is None else snapshot - 1, ascii_only=ascii_only()))
        if exclude:
            from ..report.compare import render_comparison

            click.echo(render_comparison(loaded.run(readings), result))
    if len(result.table.failed) == result.size:
        broken = [e for e in result.table.failed.values() if isinstance(e, PluginError)]
        raise (
            broken[0]
            if broken
            else SolveError("no snapshot could be solved; nothing is exported", code="nothing-solved")
        )
    if out is not None:
        files = write(result, out, formats=formats)
        click.echo(f"Wrote {len(files)} files to {out}.", err=as_json)
    _draw(result, loaded, out, report, pictures, as_json=as_json)
    return FAULTS_FOUND if strict and result.suspicious.any() else DONE


def _follow(
    loaded: Case,
    readings: str | None,
    out: Path | None,
    reasons: dict[str, str],
    formats: tuple[str, ...],
    report: bool,
    pictures: Literal["svg", "png"] | None,
    *,
    strict: bool,
    as_json: bool,
) -> int:
    """Run a case whose windows are tied by inventories, as one sequence."""
    from ..export import write
    from ..report.trajectory import render_trajectory

    found = loaded.run_trajectory(readings, exclude=reasons)
    if as_json:
        click.echo(json.dumps(found.to_dict(), indent=2, ensure_ascii=False))
    else:
        click.echo(render_trajectory(found, ascii_only=ascii_only()), nl=False)
    if out is not None:
        files = write(found, out, formats=formats)
        click.echo(f"Wrote {len(files)} files to {out}.", err=as_json)
    _draw(found, loaded, out, report, pictures, as_json=as_json)
    return FAULTS_FOUND if strict and found.test.status == "disagrees" else DONE


def _draw(
    found: Result | Trajectory,
    loaded: Case,
    out: Path | None,
    report: bool,
    pictures: Literal["svg", "png"] | None,
    *,
    as_json: bool,
) -> None:
    """Write the page and its figures, as far as they are asked for: into --out, else beside the case."""
    if not report and not pictures:
        return
    from ..report.page import write_figures, write_page

    folder = out if out is not None else loaded.parts.spec.path.parent
    if report:
        click.echo(f"Wrote {write_page(found, folder / 'report.html', case=loaded)}.", err=as_json)
    if pictures:
        drawn = write_figures(found, folder / "pictures", pictures, case=loaded)
        click.echo(f"Wrote {len(drawn)} pictures to {folder / 'pictures'}.", err=as_json)
