"""Bounds of variables: whether they can hold together, and whether the adjusted values keep them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from . import units
from .errors import Notice, Problems

if TYPE_CHECKING:
    from .adjust.table import Table
    from .case.spec import CaseSpec
    from .model import Model

__all__ = ["bound_notices", "limits_of", "refuse_conflicts"]

Array = npt.NDArray[np.float64]
Limits = dict[int, tuple[float, float]]


def limits_of(model: Model, spec: CaseSpec) -> Limits:
    """Lower and upper bound of every bounded variable by its column, in its unit: what the case states, else physics."""
    out = {
        int(c): (float(model.lower[c]), float(model.upper[c]))
        for c in model.shown
        if np.isfinite(model.lower[c]) or np.isfinite(model.upper[c])
    }
    out.update(_stated(model, spec, out))
    return out


def _stated(model: Model, spec: CaseSpec, physical: Limits) -> Limits:
    out: Limits = {}
    for name, bound in spec.bounds.items():
        column = model.system.column(name)
        ends = []
        for stated, default in zip((bound.lower, bound.upper), physical.get(column, (-np.inf, np.inf)), strict=True):
            if stated is None:
                ends.append(default)
            else:
                factor, offset = units.factor_offset(stated[1], model.units[column])
                ends.append(factor * stated[0] + offset)
        out[column] = (ends[0], ends[1])
    return out


def bound_notices(table: Table, model: Model, spec: CaseSpec) -> list[Notice]:
    """Report violated bounds, stated or physical; a value outside is never exported without saying so."""
    limits = limits_of(model, spec)
    counts: dict[tuple[int, str], list[float]] = {}
    for group in table.groups:
        spread = np.linalg.norm(np.nan_to_num(group.cover), axis=1)
        for column, (low, high) in limits.items():
            if not group.determined[column]:
                continue
            x, slack = group.x[:, column], 1e-9 * (1.0 + spread[column])
            for word, beyond in (("below", x[x < low - slack]), ("above", x[x > high + slack])):
                if beyond.size:
                    counts.setdefault((column, word), []).extend(beyond.tolist())
    return [
        bound_notice(
            model, spec, column, word, len(values), min(values) if word == "below" else max(values), table.size
        )
        for (column, word), values in counts.items()
    ]


def bound_notice(
    model: Model, spec: CaseSpec, column: int, word: str, count: int, worst: float, snapshots: int
) -> Notice:
    """Words for a column that comes out `word` (below or above) its bound in `count` of so many snapshots."""
    bound = limits_of(model, spec)[column][0 if word == "below" else 1]
    many = f" in {count} snapshots" if snapshots > 1 else ""
    return Notice(
        "bound-violated",
        f"{model.names[column]} comes out {word} its bound of {bound:g} {model.units[column]}{many} "
        f"(worst {worst:.6g}). Reverse flow, zero offset, or a fault? The value is exported as it came out.",
    )


def refuse_conflicts(model: Model, spec: CaseSpec, problems: Problems) -> None:
    """Report stated bounds that no set of values can keep together, given the linear balances.

    A smallest set in conflict is found by leaving out one bound after the other (deletion filter: Chinneck &
    Dravnieks 1991, ORSA J. Comput. 3, 157).

    Parameters
    ----------
    model : Model
    spec : CaseSpec
    problems : Problems
        Gets one problem with the names of the set.
    """
    if not spec.bounds:
        return
    stated = [
        (column, side, end)
        for column, ends in _stated(model, spec, {}).items()
        for side, end in enumerate(ends)
        if np.isfinite(end)
    ]
    if _can_hold(model, stated):
        return
    kept = list(stated)
    for one in stated:
        without = [s for s in kept if s is not one]
        if not _can_hold(model, without):
            kept = without
    words = [
        f"{model.names[column]} {'at most' if side else 'at least'} {end:g} {model.units[column]}"
        for column, side, end in kept
    ]
    many = "the balances leave no value for it" if len(words) == 1 else "cannot hold together with the balances"
    problems.add(
        "bounds-conflict",
        f"{', '.join(words)}: {many}",
        "correct one of them: no smaller set of the bounds is in conflict",
        spec.where(("bounds",), key=True),
    )


def _can_hold(model: Model, stated: list[tuple[int, int, float]]) -> bool:
    from scipy.optimize import linprog

    equations = model.system.equations
    pure = np.diff(equations.products.indptr) == 0
    for coefficient, _ in equations.calls:
        pure &= np.diff(coefficient.indptr) == 0
    n = equations.shape[1]
    bounds = np.full((n, 2), (-np.inf, np.inf))
    bounds[:, 0], bounds[:, 1] = model.lower[:n], model.upper[:n]
    for column, value in model.fixed.items():
        if column < n:
            bounds[column] = value
    for column, side, end in stated:
        bounds[column, side] = end
    if np.any(bounds[:, 0] > bounds[:, 1]):
        return False
    found = linprog(np.zeros(n), A_eq=equations.linear[pure], b_eq=equations.rhs[pure], bounds=bounds, method="highs")
    # Only a proof of infeasibility refuses a case.
    return int(found.status) != 2
