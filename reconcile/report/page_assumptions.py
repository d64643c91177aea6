"""What the page says was assumed: sigmas, shared errors, known values, what was left out, settings, cautions."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from .campaign import grouped_notices
from .markup import Markup, element, join
from .numbers import plain
from .page_end import typical
from .tables import html_table

if TYPE_CHECKING:
    from ..case.spec import CaseSpec
    from ..model import Model
    from ..results import Result
    from ..trajectory import Trajectory

__all__ = ["assumptions", "assumptions_of_any"]

MOST_DECIDED = 60


def assumptions(result: Result) -> Markup:
    """Sigmas and where they come from, what errors share, what was left out, settings, cautions."""
    usable = [i for i in range(result.size) if i not in result.table.failed]
    used = {r.tag: r.sigma_before for r in result.snapshot(typical(result)).readings} if usable else {}
    decided = [(result.labels[i], d.words) for i, d in sorted(result.decisions.items())]
    return assumptions_of_any(result, used, decided)


def assumptions_of_any(
    found: Result | Trajectory,
    used: Mapping[str, float],
    decided: Sequence[tuple[str, str]] = (),
    more: Sequence[str] = (),
) -> Markup:
    """Assumptions of every kind of answer.

    Parameters
    ----------
    found : Result or Trajectory
    used : mapping of tag to float
        Sigmas that readings entered with, in their units.
    decided : sequence of (label, words)
        What was decided about suspects.
    more : sequence of str
        Sentences that belong to the settings.
    """
    parts: list[Markup | None] = [
        element("div", *(element("p", element("strong", "Caution: "), c) for c in found.cautions), class_="caution")
        if found.cautions
        else None,
        _sigmas(found.model, found.spec, used),
        _shared(found.spec),
        _known(found.model),
        _left_out(found.excluded, found.statuses, decided),
    ]
    settings = found.settings
    facts = [
        f"Tests may take {100 * settings.level:g} % false alarms.",
        f"The smallest detectable fault is noticed with {100 * settings.power:g} % chance.",
        f"Before any reading a given meter is at fault with probability {settings.fault_rate:g}; explanations weigh it.",
        f"Before any reading a given node leaks with probability {settings.leak_rate:g}.",
        "Errors of different meters are taken as independent unless they share a cause above, and as normal.",
    ]
    if found.model.has_relative:
        at = "the adjusted value" if settings.percent_at == "adjusted" else "the reading"
        facts.append(f"Sigmas in percent are evaluated at {at}.")
    parts.append(element("ul", *(element("li", f) for f in (*facts, *more))))
    if found.notices:
        parts.append(element("h3", "Notices"))
        parts.append(element("ul", *(element("li", n) for n in grouped_notices(found.notices))))
    return join(*parts)


def _sigmas(model: Model, spec: CaseSpec | None, used: Mapping[str, float]) -> Markup:
    rows: list[tuple[str, ...]] = []
    for r in model.readings:
        if r.kind == "cause":
            continue
        meter = spec.meters.get(r.tag) if spec is not None else None
        said = " and ".join(p.text for p in meter.sigma.components) if meter is not None else ""
        guess = " (a guess)" if meter is not None and meter.sigma.marked_guess else ""
        sigma = used.get(r.tag, math.nan)
        rows.append(
            (
                r.tag.removeprefix("known:"),
                " + ".join(n for n, _ in r.reads),
                r.unit,
                plain(sigma, sigma),
                (said or "-") + guess,
                r.origin if r.origin != said else "",
            )
        )
    header: tuple[str, ...] = ("meter", "reads", "unit", "sigma used", "as stated", "from")
    if not any(row[-1] for row in rows):
        header, rows = header[:-1], [row[:-1] for row in rows]
    return html_table("Sigmas and where they come from", header, rows, name="sigmas-table", left=(0, 1, 2, 4, 5))


def _shared(spec: CaseSpec | None) -> Markup | None:
    rows = []
    tied = spec.trajectory.constant_errors if spec is not None and spec.trajectory is not None else ()
    for shared in (*(spec.shared_errors.values() if spec is not None else ()), *tied):
        sizes = dict.fromkeys(" and ".join(p.text for p in s.components) for s in shared.sigma)
        kind = "the same in all windows" if shared in tied else "fully together"
        if shared.correlations is not None:
            kind = "with the stated correlations"
        rows.append((shared.name, ", ".join(shared.meters), "; ".join(sizes), kind))
    if not rows:
        return element("p", "No errors are shared: the covariance of the readings is diagonal.")
    return html_table(
        "Errors that readings share", ("cause", "meters", "sigma", "how"), rows, name="shared-table", left=(0, 1, 2, 3)
    )


def _known(model: Model) -> Markup | None:
    faults = set(model.fault_columns.tolist())
    rows = [(model.names[c], plain(v), model.units[c]) for c, v in sorted(model.fixed.items()) if c not in faults]
    if not rows:
        return None
    return html_table("Taken as exactly known", ("variable", "value", "unit"), rows, name="known-table", left=(0, 2))


def _left_out(
    excluded: Mapping[str, str], statuses: Mapping[tuple[int, str], str], decided: Sequence[tuple[str, str]]
) -> Markup | None:
    parts: list[Markup | None] = []
    if excluded:
        parts.append(
            html_table(
                "Meters left out",
                ("meter", "because"),
                list(excluded.items()),
                name="excluded-table",
                left=(0, 1),
            )
        )
    if decided:
        note = f"{len(decided) - MOST_DECIDED} more." if len(decided) > MOST_DECIDED else None
        parts.append(
            html_table(
                "Decided about suspects",
                ("snapshot", "what"),
                decided[:MOST_DECIDED],
                name="decided-table",
                left=(0, 1),
                note=note,
            )
        )
    if statuses:
        counted = Counter((tag, why) for (_, tag), why in statuses.items())
        rows = [(tag, why, str(n)) for (tag, why), n in sorted(counted.items())]
        parts.append(
            html_table("Readings not used", ("meter", "why", "snapshots"), rows, name="unused-table", left=(0, 1))
        )
    return join(*parts) if parts else None
