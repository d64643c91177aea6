"""One snapshot on the page: balances, readings, explanations."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

from ..mixups import mixups_of
from . import figures
from .campaign import not_simply_read
from .markup import Markup, element, join
from .numbers import plain, reading_numbers, signed
from .symbols import symbol_of
from .tables import html_table
from .text import figures_granted
from .words import (
    Suspect,
    explanations_in_words,
    percent,
    remarks_on_explanations,
    smearing_in_words,
    suspects_of,
)

if TYPE_CHECKING:
    from ..results import Result
    from ..snapshot import Snapshot

__all__ = ["explanations_part", "figure_part", "ranked_suspects", "snapshot_name", "snapshot_parts", "told_list"]

NAMED = frozenset({"suspect", "tied", "cannot tell"})


def figure_part(figure: figures.Figure | None, prefix: str = "", numbers_in: str | None = None) -> Markup | None:
    """Return a figure for the page; nothing where there is nothing to draw."""
    return None if figure is None else figure.html(prefix, numbers_in=numbers_in)


def snapshot_name(result: Result, index: int) -> str:
    """Label of a snapshot; a bare number gets its noun."""
    label = result.labels[index]
    return f"snapshot {label}" if label.isdigit() else label


def snapshot_parts(result: Result, index: int, prefix: str = "") -> list[tuple[str, str, Markup]]:
    """Sections of one snapshot: its balances and its readings.

    Parameters
    ----------
    result : Result
    index : int
        Counted from 0.
    prefix : str
        Put before all ids.

    Returns
    -------
    list of (id, title, markup)
    """
    return [
        ("balances", "Balances", _balances_part(result, index, prefix)),
        ("readings", "Readings", _readings_part(result, index, prefix)),
    ]


# ------------------------------------------------------------------ balances


def _balances_part(result: Result, index: int, prefix: str) -> Markup:
    s = result.snapshot(index)
    caption = "Balances before and after adjustment" + _of(result, index)
    formed = [b for b in s.balances if math.isfinite(b.before)]
    rows: list[tuple[str, ...]] = []
    marked: list[int] = []
    for b in formed:
        far = math.isfinite(b.ratio) and math.isfinite(s.nodal.limit) and abs(b.ratio) > s.nodal.limit
        if far:
            marked.append(len(rows))
        rows.append(
            (
                b.name,
                b.unit,
                plain(b.inflow, b.spread),
                plain(b.outflow, b.spread),
                signed(b.before, b.spread),
                plain(b.spread, b.spread),
                signed(b.ratio, 0.1),
                "beyond the limit" if far else "within" if math.isfinite(b.ratio) else "-",
                "closed" if abs(b.after) <= 1e-9 * max(b.scale, 1e-300) else f"{b.after:.1e}",
            )
        )
    note = (
        f"Closure is in minus out with the raw readings; spread is ±1 sigma of it. A ratio is compared with "
        f"{s.nodal.limit:.2f}, exact for {_balances_tested(len(s.nodal_rows))}. After adjustment every balance closes, "
        "whatever is wrong."
        if math.isfinite(s.nodal.limit)
        else "Closure is in minus out with the raw readings; spread is ±1 sigma of it."
    )
    header = ("balance", "unit", "in", "out", "closure", "± spread", "ratio", "word", "after")
    table = (
        html_table(
            caption,
            header,
            rows,
            name=f"{prefix}balances-table",
            left=(0, 1, 7, 8),
            sortable=True,
            note=note,
            marked=marked,
        )
        if formed
        else element("p", "No balance can be formed from readings alone: each holds something that is not read.")
    )
    open_ = [b.name for b in s.balances if not math.isfinite(b.before)]
    rest = (
        element(
            "details",
            element("summary", f"{len(open_)} balances hold something that is not read"),
            element("p", ", ".join(open_) + ". They close after adjustment."),
        )
        if open_ and len(open_) > 3
        else element("p", f"Not formed from readings alone: {', '.join(open_)}.", class_="note")
        if open_
        else None
    )
    numbers = None if result.size == 1 else f"Readings{_of(result, index)}"
    return join(
        table,
        rest,
        figure_part(figures.balances(result, index), prefix, caption),
        figure_part(figures.network(result, index), prefix, numbers),
    )


def _balances_tested(count: int) -> str:
    return "one balance" if count == 1 else f"the {count} balances that can be formed and are independent"


def _of(result: Result, index: int) -> str:
    return "" if result.size == 1 else f", {snapshot_name(result, index)}"


# ------------------------------------------------------------------ readings


def _readings_part(result: Result, index: int, prefix: str) -> Markup:
    s = result.snapshot(index)
    caption = "Readings" + _of(result, index)
    rows: list[tuple[str, ...]] = []
    marked: list[int] = []
    not_read = not_simply_read(result, index)
    for r in s.readings:
        if r.word in NAMED:
            marked.append(len(rows))
        rows.append(
            (
                r.tag.removeprefix("known:") + (f" {symbol_of(r.word)}" if r.word in NAMED else ""),
                r.unit,
                *reading_numbers(r),
                f"{100 * r.share:.0f} %",
                signed(r.z, 0.1),
                f"{symbol_of(r.word)} {r.word}" + (f", {not_read[r.tag]}" if r.tag in not_read else ""),
            )
        )
    header = (
        "meter", "unit", "raw", "adjusted", "± before", "± after", "moved", "in sigmas", "checked", "z", "word",
    )  # fmt: skip
    tested = s.meter_tests.distinct
    note = (
        f"± is one sigma; checked is the share of an error that would show. z is compared with {s.meter_tests.limit:.2f}, exact for "
        f"{'one test' if tested == 1 else f'the {tested} different tests of this network'}. A large adjustment alone is no "
        "evidence against a meter: what moves most has the largest sigma."
        if s.meter_tests.worst >= 0
        else "± is one sigma. No reading is checked by others."
    )
    parts = [
        html_table(
            caption,
            header,
            rows,
            name=f"{prefix}readings-table",
            left=(0, 1, 10),
            sortable=True,
            note=note,
            marked=marked,
        ),
        ranked_suspects(suspects_of(s), prefix, _of(result, index)),
        figure_part(figures.adjustments(result, index), prefix, caption),
        _unread(s, prefix, _of(result, index)),
        _derived(result, index, prefix),
    ]
    return join(*parts)


def ranked_suspects(named: Sequence[Suspect], prefix: str = "", of: str = "") -> Markup | None:
    """Table of suspects, the most probable first; nothing where none is named."""
    found = sorted(named, key=lambda x: -x.probability)[:8]
    if not found:
        return None
    rows = [
        (
            x.name.removeprefix("known:").removeprefix("shared:"),
            x.kind,
            signed(x.size, x.sigma),
            plain(x.sigma, x.sigma),
            x.unit,
            percent(x.probability),
            _few([t.removeprefix("known:").removeprefix("shared:") for t in x.tied_with]) or "none",
        )
        for x in found
    ]
    header = ("suspect", "kind", "size", "±", "unit", "probability", "rivals not excluded")
    return html_table(
        "Suspects, the most probable first" + of, header, rows, name=f"{prefix}suspects", left=(0, 1, 4, 6)
    )


def _few(names: list[str]) -> str:
    return ", ".join(names[:4]) + (f" and {len(names) - 4} more" if len(names) > 4 else "")


def _unread(s: Snapshot, prefix: str, of: str) -> Markup | None:
    unread = s.unread
    if not unread:
        return None
    why = any(v.reason for v in unread)
    header = ("variable", "unit", "value", "±", "how", *(["why"] if why else []))
    rows = [
        (v.name, v.unit, plain(v.adjusted, v.sigma), plain(v.sigma, v.sigma), v.klass, *([v.reason] if why else []))
        for v in unread
    ]
    return html_table(
        "What no meter reads" + of, header, rows, name=f"{prefix}unread", left=(0, 1, 4, 5), sortable=True
    )


def _derived(result: Result, index: int, prefix: str) -> Markup | None:
    values = result.figure_values(index)
    if not values:
        return None
    rows = [
        (
            f.name,
            "as adjusted",
            plain(f.value, f.sigma),
            plain(f.sigma, f.sigma),
            plain(f.raw, f.raw_sigma),
            plain(f.raw_sigma, f.raw_sigma),
            f.reason or ", ".join(f"{k.removeprefix('known:')} {percent(v)}" for k, v in list(f.shares.items())[:3]),
        )
        for f in values
    ]
    rows += [
        (name, f"granting {names}", value, sigma, "", "", "")
        for name, value, sigma, names in figures_granted(result, index)
    ]
    order = list(result.figures)
    rows.sort(key=lambda r: order.index(r[0]))
    header = ("derived value", "which", "value", "±", "from raw readings", "± raw", "uncertainty from")
    return html_table("Derived values" + _of(result, index), header, rows, name=f"{prefix}derived", left=(0, 1, 6))


# ------------------------------------------------------------------ explanations


def told_list(told: Sequence[Sequence[str]]) -> Markup:
    """Explanations in their order; the last line of each says what is left."""
    items = [
        element(
            "li",
            *(element("p", line, class_="fault") for line in lines[:-1]),
            element("p", lines[-1], class_="left"),
        )
        for lines in told
    ]
    return element("ol", *items, class_="told")


def explanations_part(result: Result, index: int, *, mixups: bool = True) -> Markup:
    """Explanations of one snapshot with their rivals, or that none is needed.

    Parameters
    ----------
    result : Result
    index : int
        Counted from 0.
    mixups : bool
        Whether to look for simple mix-ups, too; where balances hold products each has to be solved again.

    Returns
    -------
    Markup
    """
    s = result.snapshot(index)
    told = explanations_in_words(s)
    parts: list[Markup | None] = []
    if told:
        parts.append(told_list(told))
    elif s.test.status == "disagrees":
        parts.append(element("p", "No set of possible faults that was tried accounts for the readings."))
    elif s.test.checks == 0:
        parts.append(element("p", "Nothing can be said: there is no check."))
    else:
        parts.append(element("p", "None is needed: the readings agree within their sigmas."))
    simple = mixups_of(result, index)[:3] if mixups else ()
    if simple:
        parts.append(
            element(
                "div",
                element(
                    "p", element("strong", "Simple mix-ups"), " that would let all readings agree; no size is fitted:"
                ),
                element(
                    "ul", *(element("li", f"{m.words}: leaves χ² {m.left:.2f}, limit {m.limit:.2f}.") for m in simple)
                ),
            )
        )
    parts += [element("p", remark) for remark in remarks_on_explanations(s)]
    parts += [element("p", sentence) for sentence in smearing_in_words(result, index)]
    if index in result.decisions:
        parts.append(element("p", f"Decided: {result.decisions[index].words}"))
    return join(*parts)
