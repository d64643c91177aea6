"""What was understood of a case and its readings, before anything is computed."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .campaign import grouped_notices, plan_in_words
from .layout import table, wrap
from .numbers import plain

if TYPE_CHECKING:
    from pathlib import Path

    from ..run import Case

__all__ = ["describe_case"]


def describe_case(case: Case, readings: str | Path | None = None) -> str:
    """Describe a checked case and, where there are any, its readings.

    Parameters
    ----------
    case : Case
    readings : path or URL, optional
        Instead of those the case names.

    Returns
    -------
    str

    Raises
    ------
    InputError
        If the readings do not fit the case.
    """
    network, model, spec = case.parts.network, case.model, case.parts.spec
    out = [f"{spec.path}: no mistakes found.", "", case.title, ""]
    rows = [
        (node, ", ".join(network.entering(node)) or "-", ", ".join(network.leaving(node)) or "-")
        for node in network.nodes
    ]
    out.append(table(("NODE", "in", "out"), rows, left=(0, 1, 2)))
    crossing = [s for s, a, b in zip(network.streams, network.source, network.target, strict=True) if a < 0 or b < 0]
    out.append(wrap(f"crossing the boundary: {', '.join(crossing) or 'nothing'}"))
    forgotten = [f for d in spec.domains for f in case.plugins.domains[d].domain.forgotten]
    if forgotten:
        out.append(wrap(f"often forgotten: {', '.join(forgotten)}"))
    lines = []
    for r in model.readings:
        if r.kind == "cause":
            continue
        relative = f"{100 * r.relative:.3g} % of reading" if r.relative else ""
        absolute = f"{plain(r.absolute, r.absolute)} {r.unit}" if r.absolute else ""
        lines.append(
            (
                r.tag,
                " + ".join(n for n, _ in r.reads),
                r.unit,
                " and ".join(x for x in (relative, absolute) if x),
                r.origin,
            )
        )
    out += ["", table(("READING", "reads", "unit", "sigma", "from"), lines, left=(0, 1, 2, 3, 4))]
    out.append("")
    out.append(
        f"  {model.system.equations.shape[0]} balances, {len(model.shown)} variables, "
        f"{len(model.meters)} meters, domains: {', '.join(spec.domains)}"
    )
    if readings is not None or case.readings_path() is not None:
        prepared = case.prepare(readings)
        out += ["", "READINGS", *(f"  {line}" for line in prepared.table.echo)]
        out += plan_in_words(prepared)
        out += [wrap(line) for line in grouped_notices(prepared.table.notices)]
    out += [wrap(str(n)) for n in case.parts.notices]
    return "\n".join(out)
