"""The command line: one group, its commands in `commands`. Everything here is one library call away."""

from __future__ import annotations

import os
import sys

import click

from ._version import __version__
from .commands.explain import explain
from .commands.history import history
from .commands.look import check, domains, schema
from .commands.new_domain import check_domain, new_domain
from .commands.plan import coverage, place, rehearse
from .commands.run import run
from .commands.start import start

__all__ = ["main"]

# The matrices are small: threads inside their products only wait for one another. Set before numpy is loaded.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")


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


for command in (
    run,
    explain,
    check,
    coverage,
    place,
    rehearse,
    history,
    domains,
    schema,
    start,
    new_domain,
    check_domain,
):
    main.add_command(command)
