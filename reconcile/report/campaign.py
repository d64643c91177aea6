"""What the way from the log to the snapshots decided, for a terminal."""

from __future__ import annotations

import math
from collections import Counter
from typing import TYPE_CHECKING

import numpy as np

from ..campaign.adjusted import LEFT_OUT
from ..campaign.line_ups import zero_of_closed
from ..campaign.variants import bound_checks, entered_intervals, moves, what_ifs
from .layout import table, wrap
from .numbers import plain, signed

if TYPE_CHECKING:
    from ..campaign.snapshots import Prepared
    from ..errors import Notice
    from ..results import Result

__all__ = [
    "from_the_log",
    "grouped_notices",
    "not_simply_read",
    "not_used",
    "plan_in_words",
    "verdict_line_of",
    "why_not",
]

_FEW = 3
_MANY = 20


def why_not(result: Result, index: int) -> str:
    """Why a snapshot has no adjusted values: ``left out: ...`` or ``not solved``."""
    error = result.table.failed[index]
    if error.code != LEFT_OUT or result.prepared is None:
        return "not solved"
    return f"left out: {result.prepared.left_out[index].code}"


def plan_in_words(prepared: Prepared) -> list[str]:
    """What the case makes of its log, before anything is adjusted."""
    table = prepared.table
    out = []
    if prepared.left_out or prepared.segments or any(a != b for a, b in prepared.spans):
        counts = Counter(left.code for left in prepared.left_out.values())
        words = ", ".join(f"{n} {code}" for code, n in counts.items())
        out.append(f"  windows: {len(table)}, from {table.label(0)} to {table.label(len(table) - 1)}")
        out[-1] += f"; left out: {words}" if words else "; all used"
        first = int(np.flatnonzero(prepared.used)[0])
        cells = [f"{t} = {v:.6g}" for t, v in zip(table.columns, table.values[first], strict=True) if math.isfinite(v)]
        out.append(wrap(f"first window used, {table.label(first)}: {', '.join(cells)}"))
    for name in dict.fromkeys(prepared.line_ups.values()):
        held = [i for i, n in prepared.line_ups.items() if n == name]
        out.append(f"  line-up {name}: {len(held)} snapshots, {', '.join(prepared.closed[held[0]])} closed")
    return out


def verdict_line_of(result: Result, index: int) -> str:
    """One line on a snapshot without adjusted values."""
    why = why_not(result, index)
    return f"{why[0].upper()}{why[1:]}: {result.table.failed[index].message}"


def not_simply_read(result: Result, index: int) -> dict[str, str]:
    """Readings of a snapshot that nobody read as such: ``estimated``, or the middle of an ``interval``; by tag."""
    if result.prepared is None:
        return {}
    marks = {result.tags[j]: "estimated" for i, j in result.prepared.estimated if i == index}
    return marks | {c.tag: "interval" for c in entered_intervals(result, index)}


def not_used(result: Result) -> list[str]:
    """Counts of snapshots without adjusted values, in words."""
    counts = Counter(why_not(result, i) for i in sorted(result.table.failed))
    out = []
    left = sum(n for w, n in counts.items() if w.startswith("left out"))
    if left:
        codes = ", ".join(f"{n} {w.removeprefix('left out: ')}" for w, n in counts.items() if w.startswith("left out"))
        out.append(f"{left} left out ({codes})")
    if counts["not solved"]:
        out.append(f"{counts['not solved']} could not be solved")
    return out


def from_the_log(result: Result, snapshot: int | None = None) -> list[str]:
    """Sections on intervals, bounds, zero checks and rejected readings of the log.

    Parameters
    ----------
    result : Result
    snapshot : int, optional
        Only this one, counted from 0.
    """
    prepared = result.prepared
    if prepared is None:
        return []
    parts = (_estimated, _intervals, _bounds, _zero, _rejected)
    return [line for part in parts for line in part(result, snapshot)]


def _estimated(result: Result, snapshot: int | None) -> list[str]:
    """Cells that count as readings although nobody read them."""
    prepared = result.prepared
    assert prepared is not None
    cells = [(i, j) for i, j in prepared.estimated if snapshot is None or i == snapshot]
    if not cells:
        return []
    units = {r.tag: r.unit for r in result.model.readings}
    out = ["", "ESTIMATED, NOT READ"]
    for i, j in cells[:_MANY]:
        where = f"{result.labels[i]}: " if result.size > 1 else ""
        tag, more = result.tags[j], 0.0 if prepared.table.scatter is None else float(prepared.table.scatter[i, j])
        value = f"{plain(float(result.readings[i, j]), more)} {units[tag]}"
        out.append(
            wrap(f"{where}{tag} {value}: {prepared.table.reason(i, j)}, {plain(more, more)} {units[tag]} unsure.")
        )
    if len(cells) > _MANY:
        out.append(wrap(f"{len(cells) - _MANY} more; readings.csv of --out lists them."))
    return out


def _intervals(result: Result, snapshot: int | None) -> list[str]:
    cells = [(c.snapshot, c.tag) for c in entered_intervals(result, snapshot)]
    found = moves(result, snapshot, _FEW)
    out: list[str] = []
    for i, tag in dict.fromkeys((m.snapshot, m.tag) for m in found):
        rows = [m for m in found if (m.snapshot, m.tag) == (i, tag)]
        first = rows[0]
        unit = next(r.unit for r in result.model.readings if r.tag == tag)
        where = f" in {result.labels[i]}" if result.size > 1 else ""
        out += ["", f"OVER THE INTERVAL OF {tag}{where}, {first.low:g} to {first.high:g} {unit}"]
        lines = [
            (
                m.name,
                m.unit,
                plain(m.at_low, step),
                plain(m.at_high, step),
                plain(m.entered, step),
                plain(m.sigma, m.sigma),
            )
            for m in rows
            for step in (0.2 * abs(m.at_high - m.at_low) or math.nan,)
        ]
        header = ("FIGURE OR VARIABLE", "unit", f"at {first.low:g}", f"at {first.high:g}", "middle", "±")
        out.append(table(header, sorted(lines, key=lambda r: r[1] != ""), left=(0, 1)))
        out.append(
            wrap(
                "The answer is the range: only its ends are known of this reading. The middle, with the rectangular "
                "sigma (b - a)/sqrt(12), is what the files carry."
            )
        )
    if len(cells) > _FEW:
        out.append(wrap(f"{len(cells) - _FEW} more cells are intervals; intervals.csv of --out lists them."))
    return out


def _bounds(result: Result, snapshot: int | None) -> list[str]:
    found = [b for b in bound_checks(result) if snapshot is None or b.snapshot == snapshot]
    if not found:
        return []
    out = ["", "ONLY A BOUND WAS READ"]
    for b in found[:_MANY]:
        where = f"{result.labels[b.snapshot]}: " if result.size > 1 else ""
        value = (
            "not determined" if not math.isfinite(b.value) else f"{plain(b.value, b.sigma)} ± {plain(b.sigma, b.sigma)}"
        )
        out.append(wrap(f"{where}{b.tag} is {b.side} {b.bound:g} {b.unit}; the balances give {value}: {b.word}."))
    if len(found) > _MANY:
        out.append(wrap(f"{len(found) - _MANY} more; intervals.csv of --out lists them."))
    return out


def _zero(result: Result, snapshot: int | None) -> list[str]:
    checks = (*(result.prepared.zero_checks if result.prepared else ()), *zero_of_closed(result))
    if not checks:
        return []
    units = {r.tag: r.unit for r in result.model.readings}
    rows = []
    for z in checks[:_MANY]:
        known = math.isfinite(z.sigma) and z.sigma > 0
        spread = z.sigma if known else 0.1 * abs(z.mean) or math.nan
        rows.append(
            (z.label, z.tag, units.get(z.tag, ""), signed(z.mean, spread), plain(z.sigma, z.sigma) if known else "-")
        )
    out = ["", "ZERO CHECKS (what meters show while nothing flows)"]
    out.append(table(("WINDOW", "meter", "unit", "offset", "±"), rows, left=(0, 1, 2)))
    if len(checks) > _MANY:
        out.append(wrap(f"{len(checks) - _MANY} more; log.csv of --out lists them."))
    return out


def _rejected(result: Result, snapshot: int | None) -> list[str]:
    if result.prepared is None or (snapshot is None and result.size > _MANY):
        return []
    found = what_ifs(result, snapshot)
    if not found:
        return []
    rows = [
        (
            w.alternative.words
            if result.size == 1
            else f"{result.labels[w.alternative.snapshot]}: {w.alternative.words}",
            f"{signed(w.closure, abs(w.closure / w.ratio) if w.ratio else math.nan)} {w.unit}" if w.balance else "-",
            signed(w.ratio, 1.0),
            f"{w.objective:.1f}",
        )
        for w in found
    ]
    out = ["", "WHAT IF THE LOG WERE READ OTHERWISE"]
    for words, closure, ratio, objective in rows:
        out.append(wrap(f"{words}: closure {closure}, {ratio} spreads, χ² {objective}."))
    return out


def grouped_notices(notices: tuple[Notice, ...]) -> list[str]:
    """Notices as lines; of each kind the first few, and how many more there are."""
    seen: Counter[str] = Counter()
    out = []
    for notice in notices:
        seen[notice.code] += 1
        if seen[notice.code] <= _FEW:
            out.append(str(notice))
    out += [f"and {n - _FEW} more [{code}]" for code, n in seen.items() if n > _FEW]
    return out
