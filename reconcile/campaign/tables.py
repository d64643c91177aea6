"""Tables of a corrected data set that come from a log: every cell with its status, every decision, every interval."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from ..readings.table import Status
from .adjusted import LEFT_OUT
from .decisions import LOG_COLUMNS

if TYPE_CHECKING:
    import pandas as pd

    from ..results import Result

__all__ = ["CELL_COLUMNS", "CELL_STATUSES", "campaign_tables", "cell_table"]

CELL_COLUMNS = (
    "snapshot", "start", "end", "meter", "item", "unit", "raw", "lower", "upper", "sigma_before", "corrected",
    "sigma_after", "status", "reason", "line_up", "input", "case", "domains",
)  # fmt: skip

CELL_STATUSES = (
    "measured-corrected",
    "measured-unchecked",
    "estimated-corrected",
    "estimated-unchecked",
    "interval-corrected",
    "interval-unchecked",
    "calculated",
    "known",
    "cannot-be-calculated",
    "no-balance",
    "not-solved",
)
"""Statuses of a cell: what it was before the balances, and what they made of it."""


def campaign_tables(result: Result) -> dict[str, pd.DataFrame]:
    """Tables that a log adds to the corrected data set, by file stem; none where single snapshots were given.

    Parameters
    ----------
    result : Result

    Returns
    -------
    dict of str to DataFrame
        ``readings`` (a row a snapshot and meter, and a variable that none reads), ``log`` (a row a decision) and
        ``intervals`` (a row an interval and what moves with it).
    """
    prepared = result.prepared
    if prepared is None or not (prepared.spans or prepared.log or prepared.left_out or prepared.intervals):
        return {}
    import pandas as pd

    log = pd.DataFrame([e.cells() for e in prepared.log], columns=list(LOG_COLUMNS))
    for name in ("line", "row"):
        log[name] = log[name].astype("Int64")
    for name in ("before", "after", "amount", "sigma", "otherwise"):
        log[name] = log[name].astype(float)
    return {"readings": cell_table(result), "log": log, "intervals": _intervals(result)}


def _intervals(result: Result) -> pd.DataFrame:
    import pandas as pd

    from .variants import bound_checks, moves

    columns = (
        "snapshot", "meter", "lower", "upper", "item", "kind", "unit", "at_lower", "entered", "at_upper", "sigma", "word",
    )  # fmt: skip
    rows: list[tuple[Any, ...]] = [
        (
            result.labels[m.snapshot],
            m.tag,
            m.low,
            m.high,
            m.name,
            m.kind,
            m.unit,
            m.at_low,
            m.entered,
            m.at_high,
            m.sigma,
            "",
        )
        for m in moves(result)
    ]
    nan = math.nan
    for b in bound_checks(result):
        ends = (b.bound, nan) if b.side == "at least" else (nan, b.bound)
        rows.append(
            (result.labels[b.snapshot], b.tag, *ends, b.tag, "reading", b.unit, nan, b.value, nan, b.sigma, b.word)
        )
    return pd.DataFrame(rows, columns=list(columns))


def cell_table(result: Result) -> pd.DataFrame:
    """Every reading before and after, and every variable that is not read, of every snapshot.

    Parameters
    ----------
    result : Result

    Returns
    -------
    pandas.DataFrame
        Columns `CELL_COLUMNS`. Every row has a status; every row whose value is not simply the corrected reading has a
        reason. Values are in the unit of the meter, or of the variable.
    """
    import pandas as pd

    return pd.DataFrame([row for i in range(result.size) for row in _rows_of(result, i)], columns=list(CELL_COLUMNS))


def _rows_of(result: Result, i: int) -> list[tuple[Any, ...]]:
    prepared, model = result.prepared, result.model_of(i)
    assert prepared is not None
    start, end = prepared.spans[i] if prepared.spans else ("", "")
    provenance = result.provenance
    domains = " ".join(f"{k} {v}" for k, v in provenance.get("domains", {}).items())
    made_of = prepared.hashes[i] if prepared.hashes else ""
    tail = (prepared.line_ups.get(i, ""), made_of, str(provenance.get("case_sha256", ""))[:16], domains)
    head = (result.labels[i], start, end)
    out = [(*head, *cell, *tail) for cell in _meters(result, i)]
    read = {n for k in model.meters for n, _ in model.readings[int(k)].reads if len(model.readings[int(k)].reads) == 1}
    status = _of_whole(result, i)
    classes = result.classes(i) if not status[0] else ()
    nan = math.nan
    for v, name in enumerate(result.variables):
        if name in read:
            continue
        word, reason = status
        if not word:
            word = {"cannot be calculated": "cannot-be-calculated", "known": "known"}.get(classes[v], "calculated")
        values = (float(result.adjusted[i, v]), float(result.sigmas[i, v]))
        out.append((*head, "", name, result.units[v], nan, nan, nan, nan, *values, word, reason, *tail))
    return out


def _of_whole(result: Result, i: int) -> tuple[str, str]:
    """Status and reason that hold for a whole snapshot; empty where each cell has its own."""
    if i not in result.table.failed:
        return "", ""
    error = result.table.failed[i]
    if error.code != LEFT_OUT:
        return "not-solved", error.message
    assert result.prepared is not None
    left = result.prepared.left_out[i]
    return "no-balance", f"{left.code}: {left.reason}"


def _meters(result: Result, i: int) -> list[tuple[Any, ...]]:
    prepared, model = result.prepared, result.model_of(i)
    assert prepared is not None
    table = prepared.table
    word, why = _of_whole(result, i)
    raw = result.readings[i]
    solved = not word
    group = result.group(i) if solved else None
    final = result.final_group(i) if solved else None
    nan = math.nan
    base = model.to_base((table.values if word else result.readings)[i : i + 1])[0]
    reference = base
    x = None
    if group is not None and final is not None:
        own = group.x[int(np.flatnonzero(group.rows == i)[0])]
        x = final.x[0] if i in result.decisions else own
        at = own[model.columns]
        settle = result.settings.percent_at == "adjusted"
        reference = at if settle else np.where(np.isfinite(base), base, at)
    before = model.total_sigma(np.nan_to_num(reference)) / np.abs(model.factor)
    absent = set() if group is None else set(group.absent.tolist())
    intervals = {c.tag: c for c in prepared.intervals if c.snapshot == i}
    out = []
    for j, k in enumerate(model.meters.tolist()):
        r = model.readings[k]
        value = sigma = nan
        reason = result.statuses.get((i, r.tag), "") or table.reason(i, j)
        status = word
        if final is not None and x is not None:
            terms = [(model.system.column(n), c) for n, c in r.reads]
            sigma = float(np.linalg.norm(sum(c * final.cover[col] for col, c in terms)) / abs(r.factor))
            if np.isfinite(sigma):
                value = float((sum(c * x[col] for col, c in terms) - r.offset) / r.factor)
            status, reason = _status(result, i, r.tag, k, k in absent, np.isfinite(sigma), reason)
        elif word == "no-balance":
            reason = why if not reason or reason == "equipment off" else f"{why}; {reason}"
        else:
            reason = why
        cell = intervals.get(r.tag)
        ends = (nan, nan) if cell is None else tuple(v if math.isfinite(v) else nan for v in (cell.lower, cell.upper))
        # What meters showed in a window that no balance is made of stands here, too.
        given = float(table.values[i, j] if word else raw[j])
        out.append(
            (r.tag, _item(r.reads), r.unit, given, *ends, float(before[k]) if math.isfinite(given) else nan, value, sigma,
             status, reason)
        )  # fmt: skip
    return out


def _status(result: Result, i: int, tag: str, k: int, absent: bool, known: bool, reason: str) -> tuple[str, str]:
    group = result.group(i)
    decision = result.decisions.get(i)
    j = result.tags.index(tag)
    granted = () if decision is None else [f.candidate.name for f in decision.alternative.faults]
    if tag in granted and decision is not None:
        return "calculated" if known else "cannot-be-calculated", decision.words
    if absent:
        why = f"left out: {result.excluded[tag]}" if tag in result.excluded else reason or "no value"
        if result.prepared is not None and i in result.prepared.closed and np.isfinite(result.readings[i, j]):
            why = f"{', '.join(result.prepared.closed[i])} closed: it tells of its zero only"
        return "calculated" if known else "cannot-be-calculated", why
    prepared = result.prepared
    assert prepared is not None
    kind = "measured"
    if any(c.snapshot == i and c.tag == tag and c.closed for c in prepared.intervals):
        kind = "interval"
    elif prepared.table.status[i, j] == Status.ESTIMATED:
        kind = "estimated"
    return f"{kind}-{'corrected' if group.checked[k] else 'unchecked'}", reason


def _item(reads: Any) -> str:
    text = ""
    for name, c in reads:
        sign = " - " if c < 0 else " + " if text else ""
        text += f"{sign}{name}" if abs(c) == 1 else f"{sign}{abs(c):g} * {name}"
    return text.removeprefix(" ")
