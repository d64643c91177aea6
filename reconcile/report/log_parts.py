"""What the way from the log to the snapshots decided, as tables that a terminal and a page lay out in their own way."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

from ..campaign.line_ups import zero_of_closed
from ..campaign.variants import bound_checks, entered_intervals, moves, what_ifs
from .numbers import plain, signed

if TYPE_CHECKING:
    from ..results import Result

__all__ = ["MANY", "LogPart", "log_parts"]

FEW = 3
MANY = 20
"""No more rows than this are told of one kind; of intervals no more than `FEW` cells."""

_RANGE = (
    "The answer is the range: only its ends are known of this reading. The middle, with the rectangular sigma "
    "(b - a)/sqrt(12), is what the files carry."
)


@dataclass(frozen=True)
class LogPart:
    """One kind of decision.

    Attributes
    ----------
    name : str
        Short name.
    title : str
        Plain words; `of` says what it is about.
    header : tuple of str
    rows : tuple of tuples of str
    left : tuple of int
        Columns of words.
    sentences : tuple of str
        The same as sentences, where they read better in a narrow place.
    notes : tuple of str
    of : str
    """

    name: str
    title: str
    header: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    left: tuple[int, ...]
    sentences: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    of: str = ""


def log_parts(result: Result, snapshot: int | None = None) -> Iterator[LogPart]:
    """Estimated cells, intervals, bounds, zero checks, rejected readings of the log; what there is none of is left out.

    Parameters
    ----------
    result : Result
    snapshot : int, optional
        Only this one, counted from 0.
    """
    if result.prepared is None:
        return
    for part in (_estimated, _intervals, _bounds, _zero, _rejected):
        yield from part(result, snapshot)


def _more(count: int, file: str) -> tuple[str, ...]:
    return (f"{count - MANY} more; {file} of --out lists them.",) if count > MANY else ()


def _estimated(result: Result, snapshot: int | None) -> Iterator[LogPart]:
    """Cells that count as readings although nobody read them."""
    prepared = result.prepared
    assert prepared is not None
    cells = [(i, j) for i, j in prepared.estimated if snapshot is None or i == snapshot]
    if not cells:
        return
    units = {r.tag: r.unit for r in result.model.readings}
    rows, told = [], []
    for i, j in cells[:MANY]:
        tag, label = result.tags[j], result.labels[i]
        more = 0.0 if prepared.table.scatter is None else float(prepared.table.scatter[i, j])
        value, unsure = plain(float(result.readings[i, j]), more), plain(more, more)
        why, where = prepared.table.reason(i, j), f"{label}: " if result.size > 1 else ""
        rows.append((label, tag, units[tag], value, unsure, why))
        told.append(f"{where}{tag} {value} {units[tag]}: {why}, {unsure} {units[tag]} unsure.")
    header = ("snapshot", "meter", "unit", "value", "± of it", "why")
    notes = _more(len(cells), "readings.csv")
    yield LogPart("estimated", "Estimated, not read", header, tuple(rows), (0, 1, 2, 5), tuple(told), notes)


def _intervals(result: Result, snapshot: int | None) -> Iterator[LogPart]:
    cells = entered_intervals(result, snapshot)
    found = moves(result, snapshot, FEW)
    keys = list(dict.fromkeys((m.snapshot, m.tag) for m in found))
    for k, (i, tag) in enumerate(keys):
        moved = sorted((m for m in found if (m.snapshot, m.tag) == (i, tag)), key=lambda m: m.unit != "")
        first = moved[0]
        unit = next(r.unit for r in result.model.readings if r.tag == tag)
        rows = []
        for m in moved:
            step = 0.2 * abs(m.at_high - m.at_low) or math.nan
            at = (plain(m.at_low, step), plain(m.at_high, step), plain(m.entered, step))
            rows.append((m.name, m.unit, *at, plain(m.sigma, m.sigma)))
        where = f" in {result.labels[i]}" if result.size > 1 else ""
        notes = [_RANGE]
        if k == len(keys) - 1 and len(cells) > FEW:
            notes.append(f"{len(cells) - FEW} more cells are intervals; intervals.csv of --out lists them.")
        yield LogPart(
            f"interval-{k + 1}",
            "Over the interval of",
            ("figure or variable", "unit", f"at {first.low:g}", f"at {first.high:g}", "middle", "±"),
            tuple(rows),
            (0, 1),
            notes=tuple(notes),
            of=f" {tag}{where}, {first.low:g} to {first.high:g} {unit}",
        )


def _bounds(result: Result, snapshot: int | None) -> Iterator[LogPart]:
    found = [b for b in bound_checks(result) if snapshot is None or b.snapshot == snapshot]
    if not found:
        return
    rows, told = [], []
    for b in found[:MANY]:
        label = result.labels[b.snapshot]
        known = math.isfinite(b.value)
        value = f"{plain(b.value, b.sigma)} ± {plain(b.sigma, b.sigma)}" if known else "not determined"
        where = f"{label}: " if result.size > 1 else ""
        rows.append((label, b.tag, b.unit, f"{b.side} {b.bound:g}", value, b.word))
        told.append(f"{where}{b.tag} is {b.side} {b.bound:g} {b.unit}; the balances give {value}: {b.word}.")
    header = ("snapshot", "meter", "unit", "bound", "balances give", "word")
    notes = _more(len(found), "intervals.csv")
    yield LogPart("bounds", "Only a bound was read", header, tuple(rows), (0, 1, 2, 5), tuple(told), notes)


def _zero(result: Result, snapshot: int | None) -> Iterator[LogPart]:
    checks = (*(result.prepared.zero_checks if result.prepared else ()), *zero_of_closed(result))
    if not checks:
        return
    units = {r.tag: r.unit for r in result.model.readings}
    rows = []
    for z in checks[:MANY]:
        known = math.isfinite(z.sigma) and z.sigma > 0
        spread = z.sigma if known else 0.1 * abs(z.mean) or math.nan
        sigma = plain(z.sigma, z.sigma) if known else "-"
        rows.append((z.label, z.tag, units.get(z.tag, ""), signed(z.mean, spread), sigma))
    yield LogPart(
        "zero",
        "Zero checks",
        ("window", "meter", "unit", "offset", "±"),
        tuple(rows),
        (0, 1, 2),
        notes=_more(len(checks), "log.csv"),
        of=" (what meters show while nothing flows)",
    )


def _rejected(result: Result, snapshot: int | None) -> Iterator[LogPart]:
    if snapshot is None and result.size > MANY:
        return
    rows, told = [], []
    for w in what_ifs(result, snapshot):
        label = result.labels[w.alternative.snapshot]
        words = w.alternative.words if result.size == 1 else f"{label}: {w.alternative.words}"
        closure = signed(w.closure, abs(w.closure / w.ratio) if w.ratio else math.nan) if w.balance else "-"
        ratio, objective = signed(w.ratio, 1.0), f"{w.objective:.1f}"
        rows.append((words, w.balance or "-", w.unit, closure, ratio, objective, plain(w.limit, 0.01)))
        of = f" {w.unit}" if w.balance else ""
        told.append(f"{words}: closure {closure}{of}, {ratio} spreads, χ² {objective}.")
    if not rows:
        return
    header = ("read otherwise", "balance", "unit", "closure", "in spreads", "χ²", "limit")
    yield LogPart("otherwise", "What if the log were read otherwise", header, tuple(rows), (0, 1, 2), tuple(told))
