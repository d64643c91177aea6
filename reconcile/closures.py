"""Balances of one snapshot: closures before and after adjustment, with the spread that the sigmas lead to expect."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .adjust.eliminate import dependent_rows
from .adjust.table import Group
from .snapshot_lines import BalanceLine

if TYPE_CHECKING:
    from .results import Result

__all__ = ["Closures", "balances_of", "closures_of"]

Array = npt.NDArray[np.float64]


def balances_of(result: Result, index: int) -> tuple[BalanceLine, ...]:
    """Balances of one snapshot before and after, without the tests of everything else that `look` makes."""
    group = result.group(index)
    return closures_of(result, index, group, group.x[int(np.flatnonzero(group.rows == index)[0])]).lines


@dataclass(frozen=True)
class Closures:
    """Balances of one snapshot.

    Attributes
    ----------
    lines : tuple of BalanceLine
    closure, covariance : ndarray, shapes (m,) and (m, m)
        Of the raw closures.
    alone : ndarray of int
        Balances that are formed from readings only.
    part : ndarray, shape (m, number of columns read)
        Their coefficients.
    """

    lines: tuple[BalanceLine, ...]
    closure: Array
    covariance: Array
    alone: npt.NDArray[np.int64]
    part: Array

    def tested(self) -> npt.NDArray[np.int64]:
        """Balances that can be tested alone: formed from readings only, and not implied by others."""
        implied = dependent_rows(self.part[self.alone])
        return np.delete(self.alone, [int(np.flatnonzero(row)[-1]) for row in implied])


def closures_of(result: Result, index: int, group: Group, x: Array) -> Closures:
    """Closure of every balance of the domains, before with the raw readings where they suffice, and after."""
    model, e = result.model_of(index), group.equations
    base = model.to_base(result.readings[index : index + 1])[0]
    base[group.absent] = np.nan
    raw = np.full(model.size, np.nan)
    source = np.full(model.size, -1)
    coefficient = np.ones(model.size)
    for i, r in reversed(list(enumerate(model.readings))):
        if len(r.reads) == 1 and r.kind != "cause" and np.isfinite(base[i]):
            column = model.system.column(r.reads[0][0])
            raw[column], source[column] = base[i] / r.reads[0][1], i
            coefficient[column] = r.reads[0][1]
    for c, v in model.fixed.items():
        raw[c] = v
    m = model.system.equations.shape[0]
    formed = np.isfinite(raw)
    x_raw = np.where(formed, raw, np.nan_to_num(x))
    jacobian = e.jacobian(x_raw).toarray()[:m]
    complete = ~np.any((jacobian != 0) & ~formed, axis=1)
    before = e.closure(x_raw)[:m]
    covariance = model.covariance_of_readings(np.where(np.isfinite(base), base, x[model.columns]))
    read = np.flatnonzero(source >= 0)
    scaled = jacobian[:, read] / coefficient[read]
    of_closure = scaled @ covariance[np.ix_(source[read], source[read])] @ scaled.T
    spread = np.sqrt(np.diag(of_closure))
    inflow, outflow = (t[:m] for t in e.split_terms(x_raw))
    x = np.nan_to_num(x)
    after, scale = e.closure(x)[:m], e.largest_term(x)[:m]
    out = []
    for block in model.system.row_blocks:
        for j, name in enumerate(block.names):
            k = block.start + j
            ok = bool(complete[k])
            with np.errstate(divide="ignore", invalid="ignore"):
                ratio = before[k] / spread[k] if ok and spread[k] > 0 else np.nan
            out.append(
                BalanceLine(
                    name,
                    block.kind,
                    block.unit,
                    block.nodes[j],
                    block.writer,
                    float(before[k]) if ok else np.nan,
                    float(spread[k]) if ok else np.nan,
                    float(ratio),
                    float(after[k]),
                    float(scale[k]),
                    float(inflow[k]) if ok else np.nan,
                    float(-outflow[k]) if ok else np.nan,
                )
            )
    alone = np.flatnonzero(complete & (spread > 0))
    return Closures(tuple(out), before, of_closure, alone, jacobian[:, read])
