"""Command start: from a table of readings to the skeleton of a case."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from ..errors import InputError, Problem
from .common import ascii_only, errors_to_exit_codes, plugin_option

__all__ = ["start"]


@click.command()
@click.argument("readings")
@click.option(
    "--out", type=click.Path(path_type=Path), help="File to write; case.yaml beside the readings when left out."
)
@click.option(
    "--option", "options", multiple=True, metavar="NAME=VALUE", help="How to read it, e.g. decimal=, or sheet=Log."
)
@plugin_option
@errors_to_exit_codes
def start(readings: str, out: Path | None, options: tuple[str, ...], plugins: tuple[Path, ...]) -> None:
    """Write the skeleton of a case for READINGS: a file, a pattern, or the URL of a database."""
    from ..domains import load_plugins
    from ..report.start import render_start
    from ..start import start_case

    if out is None:
        out = Path("case.yaml") if "://" in readings else Path(readings).parent / "case.yaml"
    readers = {k: v for _, offered in load_plugins(plugins).each("reconcile_sources") for k, v in offered.items()}
    made = start_case(readings, out, readers=readers, **_options(options))
    click.echo(render_start(made, ascii_only=ascii_only()), nl=False)


def _options(given: tuple[str, ...]) -> dict[str, Any]:
    """Options of reading from ``name=value``; lists are parted by commas, except a lone comma, which is a decimal mark."""
    from ..readings.options import ReadOptions

    lists = {n for n, f in ReadOptions.__dataclass_fields__.items() if "Sequence" in str(f.type)}
    flags = {n for n, f in ReadOptions.__dataclass_fields__.items() if "bool" in str(f.type)}
    out: dict[str, Any] = {}
    for text in given:
        name, equals, value = text.partition("=")
        if not equals:
            raise InputError(Problem("option-value", f"option {text!r} has no value", "write e.g. --option decimal=,"))
        if name in flags:
            if value.casefold() not in ("true", "false"):
                raise InputError(Problem("option-value", f"option {name} is {value!r}", "write true or false"))
            out[name] = value.casefold() == "true"
        else:
            out[name] = [v.strip() for v in value.split(",")] if name in lists else value
    return out
