"""What the way from the log to the snapshots decided, for a terminal."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np

from ..campaign.adjusted import LEFT_OUT
from ..campaign.variants import entered_intervals
from .layout import table, wrap
from .log_parts import log_parts

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
    out: list[str] = []
    for part in log_parts(result, snapshot):
        out += ["", f"{part.title.upper()}{part.of}"]
        if part.sentences:
            out += [wrap(sentence) for sentence in part.sentences]
        else:
            out.append(table((part.header[0].upper(), *part.header[1:]), part.rows, left=part.left))
        out += [wrap(note) for note in part.notes]
    return out


def last_lines(excluded: Mapping[str, str], notices: tuple[Notice, ...], cautions: tuple[str, ...]) -> list[str]:
    """What stands at the end of every text: what was left out, notices, cautions."""
    out: list[str] = []
    if excluded:
        out += ["", "LEFT OUT", *(wrap(f"{tag}: {why}") for tag, why in excluded.items())]
    if notices:
        out += ["", "NOTICES", *(wrap(line) for line in grouped_notices(notices))]
    for caution in cautions:
        out += ["", wrap(f"Caution: {caution}", "")]
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
