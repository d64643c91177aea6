"""The rest of the page: what cannot be known, and what an auditor wants to do again."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from ..coverage import Coverage, coverage_in
from ..snapshot import signatures
from . import figures
from .by_hand import explain_node, nodes_of
from .markup import Markup, element, join
from .page_snapshot import figure_part, snapshot_name
from .tables import html_table
from .words import suspects_of

if TYPE_CHECKING:
    from ..case.spec import CaseSpec
    from ..results import Result
    from ..run import Case
    from ..trajectory import Trajectory

__all__ = ["appendix", "appendix_of_any", "figures_of_knowledge", "typical", "unknowable"]

MOST_ALIKE, MOST_COLUMNS, MOST_ROWS = 12, 16, 40
WORTH_IT = 0.95
"""A meter is recommended if it lowers what it is for to less than this share."""


def typical(result: Result) -> int:
    """Snapshot that stands for the network: the first that does not agree, else the one with the most readings."""
    usable = [i for i in range(result.size) if i not in result.table.failed]
    off = [i for i in usable if result.words[i] in ("does not agree", "watch")]
    if off:
        return off[0]
    return max(usable, key=lambda i: (int(np.isfinite(result.readings[i]).sum()), -i))


# ------------------------------------------------------------------ what cannot be known


def unknowable(result: Result, case: Case | None = None) -> Markup:
    """What no reading here can show, what each check is worth, and which faults look alike."""
    index = typical(result)
    found = coverage_in(result.title, result.model_of(index), result.group(index), result.settings)
    points = _sentences(found)
    of = "" if result.size == 1 else f"The figures are for {snapshot_name(result, index)}."
    intro = (
        element("ul", *(element("li", p) for p in points))
        if points
        else element(
            "p", "Every reading is checked by others, every variable can be calculated, and no two faults look alike."
        )
    )
    return join(
        intro,
        element("p", of, class_="note") if of else None,
        *(figure_part(f) for f in figures_of_knowledge(result, index, case)),
    )


def figures_of_knowledge(result: Result, index: int, case: Case | None = None) -> list[figures.Figure | None]:
    """Figures of what one snapshot's readings can show: worth of checks, look-alikes, meters that would help.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    case : Case, optional
        Needed for meters that would help.

    Returns
    -------
    list of Figure or None
    """
    found = coverage_in(result.title, result.model_of(index), result.group(index), result.settings)
    return [figures.detectability(found), _alike(result, index), _advice(result, index, case)]


def _sentences(found: Coverage) -> list[str]:
    out = []
    if found.checks == 0:
        out.append("No check is possible: the balances leave nothing to compare, so no fault would be noticed.")
    for x in found.lines:
        if x.share == 0:
            would = f" Reading {_any_of(x.needs)} would change that." if x.needs else ""
            out.append(f"Nothing in this network would notice an error of {x.item}.{would}")
    for v in found.unread:
        if v.klass == "cannot be calculated":
            would = f" It could be if {_any_of(v.needs)} were read." if v.needs else ""
            out.append(f"{v.name} cannot be calculated" + (f": {v.reason}." if v.reason else ".") + would)
    if found.classes:
        groups = [" = ".join(n.removeprefix("known:") for n in tied) for tied in found.classes]
        rest = f"; and {len(groups) - 12} groups more" if len(groups) > 12 else ""
        out.append(
            f"Whatever the readings are, no reading here tells these faults apart: {'; '.join(groups[:12])}{rest}."
        )
    for text in found.dependent:
        out.append(f"{text[0].upper()}{text[1:]}: true, but no further check.")
    return out


def _any_of(sets: tuple[tuple[str, ...], ...]) -> str:
    return ", or ".join(" and ".join(s) for s in sets[:3])


def _alike(result: Result, index: int) -> figures.Figure | None:
    """Faults that explanations name, then those that have a look-alike; no more than a page can show."""
    model = result.model_of(index)
    shifts = signatures(model, result.group(index))
    names = [c.name for c in model.candidates]
    correlation = figures.correlation_of(shifts)
    named = [names.index(x.name) for x in suspects_of(result.snapshot(index))]
    size = np.abs(np.where(np.isfinite(correlation), correlation, 0.0))
    np.fill_diagonal(size, 0.0)
    live = np.flatnonzero(np.isfinite(np.diag(correlation)))
    order = [*named, *sorted((int(i) for i in live), key=lambda i: (-round(float(size[i].max(initial=0.0)), 6), i))]
    chosen = sorted(dict.fromkeys(order[: MOST_ALIKE * 2]))
    if len(chosen) > MOST_ALIKE:
        keep = list(dict.fromkeys(order))[:MOST_ALIKE]
        chosen = sorted(keep)
    picked = np.array(chosen, dtype=np.int64)
    shown = [names[i].removeprefix("known:").removeprefix("shared:") for i in chosen]
    return figures.look_alikes(shown, correlation[np.ix_(picked, picked)])


def _advice(result: Result, index: int, case: Case | None) -> figures.Figure | None:
    """Meters that would tell the suspects apart, or make the least checked reading better checked."""
    if case is None:
        return None
    from ..errors import ReconcileError
    from ..planner import place_meters

    tied = [x.name for x in suspects_of(result.snapshot(index)) if x.tied_with][:6]
    try:
        found = place_meters(case, separate=tied) if len(tied) >= 2 else None
    except ReconcileError:
        # Without expected values nothing can be planned; `reconcile place` says what is missing.
        return None
    helps = found is not None and any(p.effect and p.after < WORTH_IT * p.before for p in found.ranked)
    return figures.placements(found, 8) if found is not None and helps else None


# ------------------------------------------------------------------ appendix


def appendix(result: Result) -> Markup:
    """Streams, the matrix of the balances, a node worked by hand, words, versions and hashes."""
    usable = [i for i in range(result.size) if i not in result.table.failed]
    parts: list[Markup | None] = []
    if usable:
        index = typical(result)
        parts += [_matrix(result, index), _checks(result, index), _by_hand(result, index)]
    return join(*parts, appendix_of_any(result))


def appendix_of_any(found: Result | Trajectory) -> Markup:
    """Streams, words, versions and hashes: what the appendix of every kind of answer holds."""
    return join(_streams(found.spec), _glossary(), _provenance(found.provenance))


def _matrix(result: Result, index: int) -> Markup:
    model, group = result.model_of(index), result.group(index)
    m = model.system.equations.shape[0]
    shown = [int(c) for c in model.shown]
    matrix = group.jacobian[:m][:, shown]
    used = np.flatnonzero(np.abs(matrix).sum(axis=0) > 0)
    names = [model.names[shown[k]] for k in used]
    linear = group.equations.is_linear
    note = (
        "Each row times the variables is zero."
        if linear
        else f"Derivatives at the adjusted values of {snapshot_name(result, index)}: this case has products or functions."
    )
    title = element("h3", "The balance matrix")
    if len(used) <= MOST_COLUMNS and m <= MOST_ROWS:
        rows = [
            (model.row_names[i], *(f"{matrix[i, k]:.4g}".removesuffix(".0") if matrix[i, k] else "·" for k in used))
            for i in range(m)
        ]
        table = html_table(
            "Balances (rows) and variables (columns)", ("balance", *names), rows, name="matrix-table", note=note
        )
        return join(title, table)
    rows_ = []
    for i in range(m):
        terms = [f"{matrix[i, k]:+.4g} {names[j]}" for j, k in enumerate(used) if matrix[i, k]]
        rows_.append((model.row_names[i], "  ".join(terms)))
    table = html_table("Balances, row by row", ("balance", "terms"), rows_, name="matrix-table", left=(0, 1), note=note)
    return join(title, table)


def _checks(result: Result, index: int) -> Markup | None:
    found = result.snapshot(index).checks_in_words
    if not found:
        return None
    return join(
        element("h3", "Independent checks"),
        element("p", "What the readings say twice; χ² is made of these alone."),
        element("ul", *(element("li", c.replace("known:", "")) for c in found)),
    )


def _by_hand(result: Result, index: int) -> Markup | None:
    nodes = nodes_of(result)
    if not nodes:
        return None
    s = result.snapshot(index)
    ratios = {b.node: abs(b.ratio) for b in s.balances if b.node in nodes and math.isfinite(b.ratio)}
    node = max(ratios, key=lambda n: ratios[n]) if ratios else nodes[0]
    others = [n for n in nodes if n != node]
    why = "whose balance is furthest from closing" if ratios else "that comes first in the case"
    rest: tuple[object, ...] = ()
    if others:
        rest = (f" The same for {', '.join(others[:6])}: ", element("code", "reconcile explain node NAME CASE"), ".")
    text = element("pre", explain_node(result, node, index), tabindex="0", aria_label=f"Node {node} worked by hand")
    return join(
        element("h3", "One node worked by hand"),
        element("p", f"The node {why}, so that its numbers can be done again.", *rest),
        text,
    )


def _streams(spec: CaseSpec | None) -> Markup | None:
    if spec is None or not spec.streams:
        return None
    rows = [(n, s.source, s.target) for n, s in spec.streams.items()]
    return join(
        element("h3", "Streams"),
        html_table(
            "Streams as drawn in the case", ("stream", "from", "to"), rows, name="streams-table", left=(0, 1, 2)
        ),
    )


_WORDS = {
    "agrees": "The p-value of χ² is 5 % or more.",
    "watch": "The p-value of χ² is between 5 and 0.1 %.",
    "does not agree": "The p-value of χ² is below 0.1 %, or one reading stands out by itself.",
    "cannot tell": "No check is possible, or what fits cannot be told apart.",
    "checked (redundant)": "Other readings would show an error of this one, at least in part.",
    "calculated (observable)": "No meter reads it, but readings and balances determine it.",
    "share checked": "How much of an error of this reading would show; the rest goes into the adjusted values.",
    "spread, ±, sigma": "One standard uncertainty, k = 1. About two of three errors are smaller.",
    "z": "The evidence for a bias of this reading alone, in standard deviations.",
    "suspect": "The evidence names this one.",
    "tied": "It fits, and so does something else; no reading here separates them.",
    "sound so far": "Nothing here speaks against it.",
}


def _glossary() -> Markup:
    pairs = [x for word, text in _WORDS.items() for x in (element("dt", word), element("dd", text))]
    return join(element("h3", "Words"), element("dl", *pairs))


def _provenance(provenance: Mapping[str, Any]) -> Markup | None:
    if not provenance:
        return None
    rows = [
        (k.replace("_", " "), v if isinstance(v, str) else json.dumps(v, ensure_ascii=False, sort_keys=True))
        for k, v in provenance.items()
        if v
    ]
    return join(
        element("h3", "Versions and hashes"),
        html_table("What this page was made of", ("what", "value"), rows, name="provenance-table", left=(0, 1)),
    )
