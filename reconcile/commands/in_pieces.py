"""Command run for a log too long for memory: parts, a bar that shows how far, and a short account at the end."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from ..report.layout import table, to_ascii, wrap
from .common import DONE, FAULTS_FOUND, ascii_only

if TYPE_CHECKING:
    from ..batch import StreamedRun
    from ..run import Case

__all__ = ["run_in_pieces"]

MOST_METERS = 12


def run_in_pieces(
    case: Case,
    readings: str | Path | None,
    out: Path,
    reasons: dict[str, str],
    formats: tuple[str, ...],
    *,
    jobs: int,
    chunk: int | None,
    restart: bool,
    strict: bool,
    as_json: bool,
) -> int | None:
    """Work through a long log in pieces; None where it is short, or has to go through memory (which is said)."""
    from ..batch import STREAM_FROM, Unsuited, run_streamed

    try:
        with _bar() as progress:
            done = run_streamed(
                case,
                readings,
                out,
                exclude=reasons,
                formats=formats,
                jobs=jobs,
                chunk=chunk,
                restart=restart,
                least=0 if chunk is not None or restart else STREAM_FROM,
                progress=progress,
            )
    except Unsuited as error:
        if str(error):
            click.echo(f"Not worked through in pieces: {error}. All rows are held in memory.", err=True)
        return None
    if as_json:
        click.echo(json.dumps(done.summary, indent=2, ensure_ascii=False))
    else:
        click.echo(_account(done))
    if done.taken_up:
        click.echo(f"{done.taken_up} snapshots were there already, from a run that was interrupted.", err=True)
    click.echo(f"Wrote {len(done.files)} files to {out}.", err=as_json)
    return FAULTS_FOUND if strict and done.suspicious else DONE


def _account(done: StreamedRun) -> str:
    """Verdict, meters with the largest test values, notices."""
    summary: dict[str, Any] = done.summary
    parts = [summary["title"], "", wrap(summary["verdict"], "")]
    if done.flagged:
        rows = [
            (f.meter, str(f.snapshots), f"{f.largest_z:+.2f}", str(f.longest_run), f.run_first)
            for f in done.flagged[:MOST_METERS]
        ]
        header = ("LARGEST TEST VALUE", "snapshots", "z", "run", "from")
        parts += ["", table(header, rows, left=(0, 4))]
        parts.append(
            wrap("run: most snapshots one after another beyond the limit with this meter's test value the largest.")
        )
    if summary["left_out"]:
        parts += ["", "LEFT OUT", *(wrap(f"{tag}: {why}") for tag, why in summary["left_out"].items())]
    if summary["notices"]:
        parts += ["", "NOTICES", *(wrap(f"{n['message']} [{n['code']}]") for n in summary["notices"])]
    parts += [wrap(f"Caution: {caution}", "") for caution in summary["cautions"]]
    text = "\n".join(parts).rstrip() + "\n"
    return to_ascii(text) if ascii_only() else text


@contextmanager
def _bar() -> Iterator[Callable[[int, int], None] | None]:
    """A bar with rate and remaining time on the error stream; nothing where that is no terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    begun, done, first = time.monotonic(), 0, 0
    bar: Any = None

    def rate(_: object) -> str:
        return f"{(done - first) / max(time.monotonic() - begun, 1e-9):,.0f} snapshots/s"

    def progress(now: int, size: int) -> None:
        nonlocal bar, done, first
        if bar is None:
            first = now
            bar = click.progressbar(length=size, label="Adjusting", file=sys.stderr, item_show_func=rate)
            bar.__enter__()
        step, done = now - done, now
        bar.update(step, now)

    try:
        yield progress
    finally:
        if bar is not None:
            bar.__exit__(None, None, None)
