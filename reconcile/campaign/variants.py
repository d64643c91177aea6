"""A snapshot solved again with other values in some cells: the ends of an interval, the rejected reading of the log."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from ..adjust.table import adjust_table
from ..refit import problem_of
from .adjusted import model_of

if TYPE_CHECKING:
    from ..results import Result
    from .snapshots import Alternative, Interval

__all__ = ["BoundCheck", "Cell", "Moved", "WhatIf", "bound_checks", "entered_intervals", "moves", "variant", "what_ifs"]

_GIVEN = 1e-3
"""At an end, the reading counts as given: its sigma is this share of the interval."""


@dataclass(frozen=True)
class Cell:
    """A value put into a cell instead of its reading: with a sigma of its own, or scatter beside the meter's law."""

    value: float
    sigma: float = math.nan
    scatter: float = 0.0


def variant(result: Result, index: int, cells: Mapping[str, Cell], label: str = "") -> Result | None:
    """Solve one snapshot again with other cells.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    cells : mapping of tag to Cell
    label : str
        Name of the answer.

    Returns
    -------
    Result or None
        Of one snapshot; None where no consistent answer is found.
    """
    prepared = result.prepared
    if prepared is None:
        raise ValueError("readings that were solved again have no cells to be put right")
    table = prepared.table
    shape = table.values.shape
    own = np.full(shape, np.nan) if table.sigma is None else table.sigma.copy()
    more = np.zeros(shape) if table.scatter is None else table.scatter.copy()
    readings = result.readings[index : index + 1].copy()
    for tag, cell in cells.items():
        j = result.tags.index(tag)
        readings[0, j] = cell.value
        own[index, j], more[index, j] = cell.sigma, cell.scatter
    changed = replace(prepared, table=replace(table, sigma=own, scatter=more))
    model = model_of(result.model, changed, index)
    taken = readings.copy()
    gone = result.group(index).absent
    taken[0, [j for j, t in enumerate(result.tags) if t in result.excluded]] = np.nan
    base = model.to_base(taken)
    # What is absent stays so (a closed stream's meter), unless it is the cell that is tried.
    tried = [model.tags.index(t) for t in cells]
    base[0, [int(k) for k in gone if k not in tried]] = np.nan
    solved = adjust_table(
        problem_of(model, result.settings),
        base,
        names=lambda c: model.names[c],
        row_names=lambda r: model.row_names[r],
    )
    if solved.failed:
        return None
    return replace(
        result,
        model=model,
        prepared=None,
        table=solved,
        readings=readings,
        labels=(label or result.labels[index],),
        decisions={},
        statuses={},
        notices=(),
        _models={},
        _explainers={},
        _looked_at={},
        _granted={},
    )


# ------------------------------------------------------------------ intervals


@dataclass(frozen=True)
class Moved:
    """How far a variable or figure moves as one cell goes over its interval.

    Attributes
    ----------
    snapshot : int
    tag : str
    name, unit : str
        Of the variable; figures have no unit.
    kind : 'variable' or 'figure'
    low, high : float
        Ends of the cell's interval, in the unit of the meter.
    at_low, entered, at_high : float
        The value with the cell at either end, and as exported.
    sigma : float
        Standard uncertainty as exported; the interval is in it.
    """

    snapshot: int
    tag: str
    name: str
    unit: str
    kind: str
    low: float
    high: float
    at_low: float
    entered: float
    at_high: float
    sigma: float


def entered_intervals(result: Result, snapshot: int | None = None) -> tuple[Interval, ...]:
    """Cells that stand in the balances by the middle of their interval."""
    cells = result.prepared.intervals if result.prepared is not None else ()
    return tuple(
        c
        for c in cells
        if c.closed
        and (snapshot is None or c.snapshot == snapshot)
        and c.snapshot not in result.table.failed
        and c.tag not in result.excluded
    )


def moves(result: Result, snapshot: int | None = None, most: int | None = None) -> tuple[Moved, ...]:
    """Return what moves over the interval of every censored or saturated cell that was entered.

    Parameters
    ----------
    result : Result
    snapshot : int, optional
        Only this one, counted from 0.
    most : int, optional
        At most so many cells.
    """
    return tuple(m for cell in entered_intervals(result, snapshot)[:most] for m in _moves_of(result, cell))


def _moves_of(result: Result, cell: Interval) -> list[Moved]:
    i, given = cell.snapshot, _GIVEN * (cell.upper - cell.lower)
    ends = [variant(result, i, {cell.tag: Cell(v, given)}) for v in (cell.lower, cell.upper)]
    rows: list[tuple[str, str, str, list[float], float, float]] = []
    for j, name in enumerate(result.variables):
        at = [math.nan if e is None else float(e.adjusted[0, j]) for e in ends]
        rows.append((name, result.units[j], "variable", at, float(result.adjusted[i, j]), float(result.sigmas[i, j])))
    figures = [() if e is None else e.figure_values(0) for e in ends]
    for f, found in enumerate(result.figure_values(i)):
        at = [values[f].value if values else math.nan for values in figures]
        rows.append((found.name, "", "figure", at, found.value, found.sigma))
    out = []
    for name, unit, kind, at, entered, sigma in rows:
        if not math.isfinite(entered):
            continue
        still = abs(at[1] - at[0]) <= 1e-9 * max(abs(at[0]), abs(at[1]), sigma if math.isfinite(sigma) else 0.0)
        if not still:
            out.append(Moved(i, cell.tag, name, unit, kind, cell.lower, cell.upper, at[0], entered, at[1], sigma))
    return out


@dataclass(frozen=True)
class BoundCheck:
    """Whether the value of what a meter reads respects a bound that the meter gave instead of a reading."""

    snapshot: int
    tag: str
    unit: str
    side: str
    bound: float
    value: float
    sigma: float
    word: str


def bound_checks(result: Result) -> tuple[BoundCheck, ...]:
    """Compare what the balances say with the bounds that saturated and censored cells give.

    ``respects it``, ``within its uncertainty`` (beyond, by less than two sigmas), ``contradicts it``, or
    ``cannot tell`` where nothing determines the value.
    """
    if result.prepared is None:
        return ()
    out = []
    for cell in result.prepared.intervals:
        if cell.closed or cell.snapshot in result.table.failed:
            continue
        model, group = result.model, result.final_group(cell.snapshot)
        i = model.tags.index(cell.tag)
        r = model.readings[i]
        x = group.x[int(np.flatnonzero(group.rows == cell.snapshot)[0]) if len(group.rows) > 1 else 0]
        combination = [(model.system.column(n), c) for n, c in r.reads]
        value = (sum(c * x[k] for k, c in combination) - r.offset) / r.factor
        sigma = float(np.linalg.norm(sum(c * group.cover[k] for k, c in combination)) / abs(r.factor))
        lower = math.isfinite(cell.lower)
        bound = cell.lower if lower else cell.upper
        short = (bound - value) if lower else (value - bound)
        if not math.isfinite(sigma):
            value, word = math.nan, "cannot tell"
        else:
            word = "respects it" if short <= 0 else "within its uncertainty" if short <= 2 * sigma else "contradicts it"
        side = "at least" if lower else "at most"
        out.append(BoundCheck(cell.snapshot, cell.tag, r.unit, side, bound, float(value), sigma, word))
    return tuple(out)


# ------------------------------------------------------------------ the rejected reading of the log


@dataclass(frozen=True)
class WhatIf:
    """What the balances say of the rejected reading of the log.

    Attributes
    ----------
    alternative : Alternative
    objective, limit : float
    p : float
    balance, unit : str
        The balance that is farthest from closed in its spreads.
    closure, ratio : float
        Of the raw readings there, and in spreads.
    """

    alternative: Alternative
    objective: float
    limit: float
    p: float
    balance: str
    unit: str
    closure: float
    ratio: float


def what_ifs(result: Result, snapshot: int | None = None, most: int = 50) -> tuple[WhatIf, ...]:
    """Solve snapshots again with each rejected reading of the log.

    Parameters
    ----------
    result : Result
    snapshot : int, optional
        Only this one, counted from 0.
    most : int
        At most so many.
    """
    if result.prepared is None:
        return ()
    chosen = [
        a
        for a in result.prepared.alternatives
        if (snapshot is None or a.snapshot == snapshot)
        and a.snapshot not in result.table.failed
        and a.tag not in result.excluded
    ]
    out = []
    for a in chosen[:most]:
        solved = variant(result, a.snapshot, {a.tag: Cell(a.value, scatter=a.scatter)}, a.words)
        if solved is None:
            continue
        formed = [b for b in solved.snapshot(0).balances if math.isfinite(b.ratio)]
        worst = max(formed, key=lambda b: abs(b.ratio), default=None)
        out.append(
            WhatIf(
                a,
                float(solved.objective[0]),
                float(solved.limit[0]),
                float(solved.p_value[0]),
                worst.name if worst else "",
                worst.unit if worst else "",
                worst.before if worst else math.nan,
                worst.ratio if worst else math.nan,
            )
        )
    return tuple(out)
