"""Many snapshots on the page: an overview, then each in detail, as far as a page should hold them."""

from __future__ import annotations

from typing import TYPE_CHECKING

from . import figures
from .campaign import why_not
from .history import history_section
from .markup import Markup, element, join
from .numbers import plain
from .page_snapshot import explanations_part, figure_part, snapshot_name, snapshot_parts
from .tables import html_table
from .words import MARKS, p_value, short_name, verdict_sentences

if TYPE_CHECKING:
    from ..results import Result

__all__ = ["BYTES_OF_A_ROW", "MOST_BYTES", "one_at_a_time", "over_time", "overview", "together"]

MOST_DETAILS, MOST_WITH_PRODUCTS, MOST_BYTES = 200, 40, 4_300_000
"""A page holds no more than so many snapshots in detail (fewer where each has to be solved again for its explanations),
and no more than so much text in all."""

MOST_UNFOLDED, BYTES_OF_A_ROW = 40, 320
"""Longer tables of snapshots are folded; about so much text does a row of them take."""

_ORDER = {"does not agree": 0, "watch": 1, "cannot tell": 2, "agrees": 3}


def over_time(result: Result) -> Markup:
    """Evidence and readings of all snapshots as figures."""
    drawn = figures.series(result)
    shown = {row[0] for f in drawn for row in f.rows}
    some = len(shown) < len(result.tags)
    note = (
        f"Of {len(result.tags)} meters those {len(shown)} are drawn that moved most where readings disagree."
        if some
        else None
    )
    return join(
        figure_part(figures.evidence(result)),
        element("p", note, class_="note") if note and drawn else None,
        *(figure_part(f) for f in drawn),
    )


def overview(result: Result, shown: frozenset[int]) -> Markup:
    """All snapshots in one table that can be sorted.

    Parameters
    ----------
    result : Result
    shown : frozenset of int
        Snapshots that stand in detail elsewhere in the page; their labels lead there.

    Returns
    -------
    Markup
    """
    rows: list[tuple[object, ...]] = []
    marked = []
    for i, label in enumerate(result.labels):
        if i in result.table.failed:
            rows.append((label, "-", "-", "-", "-", f"– {why_not(result, i)}", result.table.failed[i].message))
            continue
        word = result.words[i]
        if word in ("watch", "does not agree"):
            marked.append(i)
        named = short_name(result.snapshot(i))[0] if result.suspicious[i] else ""
        rows.append(
            (
                element("a", label, href=f"#snapshot-{i + 1}") if i in shown else label,
                f"{result.objective[i]:.2f}",
                plain(result.limit[i], 0.01),
                str(result.checks[i]),
                p_value(result.p_value[i]),
                f"{MARKS[word]} {word}",
                named.replace("known:", "").replace("shared:", ""),
            )
        )
    header = ("snapshot", "χ²", "limit", "checks", "p", "word", "most likely, or why not")
    note = (
        f"χ² sums the squares of what the checks find; the limit is exceeded by chance in "
        f"{100 * result.settings.level:g} % of sound snapshots."
    )
    table = html_table(
        "All snapshots", header, rows, name="snapshots-table", left=(0, 5, 6), sortable=True, note=note, marked=marked
    )
    if result.size > MOST_UNFOLDED:
        return element("details", element("summary", f"Table of all {result.size} snapshots"), table)
    return table


def together(result: Result) -> Markup | None:
    """What all snapshots say together; nothing where they are too few."""
    history = result.history
    if not history.enough:
        return None
    text = "\n".join(history_section(history)[2:]).strip("\n")
    return join(
        *(figure_part(f) for f in figures.bias_tracks(result)),
        figure_part(figures.error_against_flow(result)),
        element("pre", text, tabindex="0", aria_label="What all snapshots say together"),
    )


def one_at_a_time(result: Result, room: int) -> tuple[Markup, frozenset[int]]:
    """Each snapshot in detail, folded, and which these are; a slider where scripts run.

    Parameters
    ----------
    result : Result
    room : int
        Characters that the details may take; one snapshot is shown whatever it takes.

    Returns
    -------
    markup : Markup
    shown : frozenset of int
    """
    usable = [i for i in range(result.size) if i not in result.table.failed]
    linear = result.model.equations.is_linear
    most = MOST_DETAILS if linear else MOST_WITH_PRODUCTS
    ranked = sorted(usable, key=lambda i: (_ORDER[result.words[i]], i))[:most]
    first = ranked[0]
    parts: dict[int, Markup] = {}
    size = 0
    for i in ranked:
        part = _detail(result, i, opened=i == first, mixups=linear or i == first)
        size += len(part)
        if parts and size > room:
            break
        parts[i] = part
    order = sorted(parts)
    chooser = element(
        "div",
        element("label", "Snapshot", for_="which"),
        element(
            "input", type="range", id="which", min="0", max=str(len(order) - 1), step="1", value=str(order.index(first))
        ),
        element("output", snapshot_name(result, first), for_="which"),
        class_="chooser",
        hidden=True,
    )
    missing = result.size - len(result.table.failed) - len(parts)
    said = (
        join(
            f"{len(parts)} of {result.size} snapshots are here in detail, those that disagree before the others; ",
            element("code", "reconcile run --snapshot"),
            " prints any other.",
        )
        if missing
        else f"All {len(parts)} snapshots in detail."
    )
    whole = join(element("p", said, class_="soft"), chooser if len(order) > 1 else None, *(parts[i] for i in order))
    return whole, frozenset(order)


def _detail(result: Result, index: int, *, opened: bool, mixups: bool) -> Markup:
    word = result.words[index]
    name = f"snapshot-{index + 1}"
    prefix = f"{name}-"
    inner = [element("p", " ".join(verdict_sentences(result.snapshot(index))), class_="lead")]
    for part, title, markup in snapshot_parts(result, index, prefix):
        inner.append(element("h3", title, id=f"{prefix}{part}"))
        inner.append(markup)
    inner.append(element("h3", "Explanations", id=f"{prefix}explanations"))
    inner.append(explanations_part(result, index, mixups=mixups))
    return element(
        "details",
        element("summary", f"{snapshot_name(result, index)}: {MARKS[word]} {word}"),
        *inner,
        class_="snapshot",
        id=name,
        data_label=f"{snapshot_name(result, index)}: {MARKS[word]} {word}",
        open=opened,
    )
