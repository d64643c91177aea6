"""The exact state of a trial, and readings drawn around it."""

from __future__ import annotations

import contextlib
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from ..adjust.solve import solve
from ..adjust.table import Group, Table, adjust_table
from ..errors import InputError, Problem, SolveError, did_you_mean
from ..model import Model
from ..run import Case
from ..system import Equations, System
from ..units import UnitProblem, factor_offset, parse_quantity
from .trial import Trial

__all__ = [
    "State",
    "adjust",
    "convert",
    "drawn",
    "exact_state",
    "group_of",
    "objectives",
    "readings_at",
    "stated_readings",
]

Array = npt.NDArray[np.float64]

STEPS = 60


@dataclass(frozen=True)
class State:
    """An exact state.

    Attributes
    ----------
    x : ndarray, shape (n,)
        Variables of the system, faults zero.
    stated : ndarray of bool, shape (n,)
        What the author stated or the domain fixed; the rest was calculated from the balances.
    checked : int
        How many balances the stated values check among themselves.
    """

    x: Array
    stated: npt.NDArray[np.bool_]
    checked: int


def exact_state(trial: Trial, case: Case) -> State:
    """Stated values, and the rest calculated from the balances.

    Raises
    ------
    InputError
        If a stated name is no variable, or its unit does not fit.
    """
    system = case.parts.system
    x = system.starts.copy()
    stated = np.zeros(system.size, dtype=bool)
    for block in system.blocks:
        if block.fault is not None:
            x[block.start : block.stop], stated[block.start : block.stop] = 0.0, True
    for column, value in case.model.fixed.items():
        x[column], stated[column] = value, True
    known = system.units()
    for name, told in trial.truth.items():
        if name not in known:
            raise InputError(
                Problem("unknown-variable", f"truth names {name!r}, which is no variable", did_you_mean(name, known))
            )
        column = system.column(name)
        try:
            x[column], stated[column] = _in_unit(told, known[name]), True
        except UnitProblem as problem:
            raise InputError(
                Problem(problem.code, f"truth of {name}: {problem.args[0]}", f"write a value in {known[name]}")
            ) from None
    free = np.flatnonzero(~stated)
    x[free] = np.where(np.isfinite(x[free]), x[free], 1.0)
    equations = system.equations
    x = _completed(equations, x, free)
    rows = equations.jacobian(x).toarray()
    checked = _rank(rows) - _rank(rows[:, free])
    return State(x, stated, checked)


def _in_unit(value: str | float, unit: str) -> float:
    if not isinstance(value, str):
        return float(value)
    number, of = parse_quantity(value)
    factor, offset = factor_offset(of, unit)
    return factor * number + offset


def _completed(equations: Equations, x: Array, free: npt.NDArray[np.int64]) -> Array:
    """Solve the balances for the free columns by damped least squares, scaled by their terms."""
    if not free.size:
        return x
    best = x.copy()
    for _ in range(STEPS):
        scale = np.maximum(equations.largest_term(best), 1e-300)
        size = np.maximum(np.abs(best[free]), 1e-3)
        closure = equations.closure(best)
        slopes = equations.jacobian(best)[:, free].toarray() * size / scale[:, None]
        step = np.linalg.lstsq(slopes, -closure / scale, rcond=1e-12)[0] * size
        before = float(np.linalg.norm(closure / scale))
        for damping in 0.5 ** np.arange(12):
            tried = best.copy()
            tried[free] += damping * step
            after = float(np.linalg.norm(equations.closure(tried) / scale))
            if np.isfinite(after) and after < before:
                best = tried
                break
        else:
            break
    return best


def _rank(rows: Array) -> int:
    if not rows.size:
        return 0
    rows = rows / np.maximum(np.abs(rows).max(axis=1, keepdims=True), 1e-300)
    rows = rows / np.maximum(np.abs(rows).max(axis=0, keepdims=True), 1e-300)
    return int(np.linalg.matrix_rank(rows, tol=1e-9))


def convert(x: Array, one: System, other: System) -> Array:
    """Tell a state of one system in the units, and in the order, of another with the same names."""
    out = np.zeros(other.size)
    for block in one.blocks:
        for k, item in enumerate(block.items):
            column = other.column(f"{item}.{block.quantity}")
            factor, offset = factor_offset(block.unit, other.unit(column))
            out[column] = factor * x[block.start + k] + offset
    return out


def readings_at(model: Model, x: Array) -> Array:
    """What every reading gives without error at a state, shape (k,), base units; shared errors are zero."""
    out = np.zeros(len(model.readings))
    for i, r in enumerate(model.readings):
        if r.kind != "cause":
            out[i] = sum(c * x[model.system.column(name)] for name, c in r.reads)
    return out


def drawn(model: Model, x: Array, rng: np.random.Generator, count: int) -> Array:
    """Readings with errors as declared, shared errors and prior knowledge included, shape (count, k)."""
    exact = readings_at(model, x)
    own = model.sigma(exact)
    own[[i for i, r in enumerate(model.readings) if r.kind == "cause"]] = 0.0
    part = model.shared_part(exact)
    return exact + rng.normal(size=(count, own.size)) * own + rng.normal(size=(count, part.shape[1])) @ part.T


def stated_readings(model: Model, base: Array) -> dict[str, float]:
    """Readings of the meters by tag, in their units."""
    told = model.stated(base)
    return {model.tags[i]: float(told[i]) for i in model.meters}


def adjust(case: Case, base: Array) -> Table:
    """Adjust readings of shape (N, k) in base units, prior knowledge included."""
    return adjust_table(case.problem(), base, names=case.name_of_column, row_names=case.name_of_row)


def objectives(case: Case, x: Array, base: Array) -> tuple[Array, npt.NDArray[np.int64]]:
    """Chi-squared and checks of each row of readings; nan and 0 where there is no answer.

    Products are linearised from the exact state on, so that thousands of rows take seconds.
    """
    model = case.model
    problem = case.problem()
    total, checks = np.full(len(base), np.nan), np.zeros(len(base), dtype=np.int64)
    if problem.equations(base[0]).is_linear and not problem.value_dependent:
        for group in adjust(case, base).groups:
            total[group.rows], checks[group.rows] = (group.parity**2).sum(axis=1), group.checks
        return total, checks
    start = np.zeros(model.size)
    start[: x.size] = x
    start[model.columns] = readings_at(model, x)
    start[list(model.fixed)] = list(model.fixed.values())
    near = replace(problem, start=start)
    for i, row in enumerate(base):
        with contextlib.suppress(SolveError):
            solution = solve(replace(near, readings=row), names=case.name_of_column, row_names=case.name_of_row)
            total[i], checks[i] = float(solution.parity @ solution.parity), solution.adjuster.checks
    return total, checks


def group_of(case: Case, x: Array) -> Group:
    """Linearisation at an exact state.

    Raises
    ------
    SolveError
        If the readings of that state cannot be adjusted.
    """
    table = adjust(case, readings_at(case.model, x)[None])
    if table.failed:
        raise table.failed[0]
    return table.groups[0]
