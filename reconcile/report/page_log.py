"""The way from the log to the snapshots on the page: what was left out, estimated, bounded, and read one way of two."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from .campaign import not_used, plan_in_words, why_not
from .log_parts import log_parts
from .markup import Markup, element, join
from .numbers import plain
from .tables import html_table

if TYPE_CHECKING:
    from ..campaign.decisions import Entry
    from ..results import Result

__all__ = ["log_section"]

MOST_LEFT_OUT, MOST_DECISIONS, UNFOLDED = 60, 100, 12


def log_section(result: Result) -> Markup | None:
    """What the way from the log to the snapshots decided; nothing where there was nothing to decide.

    Parameters
    ----------
    result : Result

    Returns
    -------
    Markup or None
    """
    prepared = result.prepared
    plan = [" ".join(line.split()) for line in plan_in_words(prepared)] if prepared is not None else []
    parts: list[Markup | None] = [
        element("ul", *(element("li", f"{line[0].upper()}{line[1:]}.") for line in plan)) if plan else None,
        _without_values(result),
    ]
    for part in log_parts(result):
        table = html_table(
            part.title + part.of, part.header, part.rows, name=f"log-{part.name}", left=part.left,
            note=" ".join(part.notes),
        )  # fmt: skip
        parts.append(table)
    units = {r.tag: r.unit for r in result.model.readings}
    parts.append(_decisions(prepared.log if prepared is not None else (), units))
    whole = join(*parts)
    return whole or None


def _without_values(result: Result) -> Markup | None:
    """Snapshots left out or not solved, and why."""
    failed = sorted(result.table.failed.items())
    if not failed:
        return None
    rows = [(result.labels[i], why_not(result, i), e.message) for i, e in failed[:MOST_LEFT_OUT]]
    return html_table(
        f"Snapshots without adjusted values: {', '.join(not_used(result))}",
        ("snapshot", "word", "why"),
        rows,
        name="failed-table",
        left=(0, 1, 2),
        note=f"{len(failed) - MOST_LEFT_OUT} more; evidence.csv of --out lists them."
        if len(failed) > MOST_LEFT_OUT
        else None,
    )


def _decisions(log: Sequence[Entry], units: Mapping[str, str]) -> Markup | None:
    """Every decision with its place in the source, as log.csv has them."""
    if not log:
        return None
    rows = [_cells(e, e.unit or units.get(e.meter, "")) for e in log[:MOST_DECISIONS]]
    header = (
        "rule",
        "meter",
        "snapshot",
        "where",
        "before",
        "after",
        "counted or found",
        "unit",
        "otherwise",
        "in words",
    )
    kept = [k for k in range(len(header)) if any(row[k] for row in rows)]
    words = (0, 1, 2, 3, 7, 9)
    table = html_table(
        "Log of decisions",
        [header[k] for k in kept],
        [[row[k] for k in kept] for row in rows],
        name="decisions-table",
        left=[j for j, k in enumerate(kept) if k in words],
        note=f"{len(log) - MOST_DECISIONS} more; log.csv of --out lists them." if len(log) > MOST_DECISIONS else None,
    )
    if len(log) <= UNFOLDED:
        return table
    return element("details", element("summary", f"Log of {len(log)} decisions"), table)


def _cells(e: Entry, unit: str) -> tuple[str, ...]:
    at = e.source.replace("\\", "/").rsplit("/", 1)[-1]
    if e.line is not None:
        at += f":{e.line}"
    elif e.row is not None:
        at += f" row {e.row}"
    amount = plain(e.amount, e.sigma) if math.isfinite(e.amount) else ""
    if amount and math.isfinite(e.sigma) and e.sigma > 0:
        amount += f" ± {plain(e.sigma, e.sigma)}"
    before, after, otherwise = (f"{v:.6g}" if math.isfinite(v) else "" for v in (e.before, e.after, e.otherwise))
    return (e.rule, e.meter, e.snapshot, at, before, after, amount, unit if amount else "", otherwise, e.words)
