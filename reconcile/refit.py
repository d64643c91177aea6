"""What a case looks like if an explanation is granted: solved again with those faults free."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from .accounts import Alternative
from .adjust.solve import Problem
from .adjust.table import Group, adjust_table
from .diagnose.verdict import Conclusion
from .model import Model

if TYPE_CHECKING:
    from .figures import FigureValue
    from .results import Result

__all__ = [
    "Decision",
    "Granted",
    "Smeared",
    "decide",
    "figures_if",
    "grant",
    "granted_all",
    "problem_of",
    "smeared",
]

Array = npt.NDArray[np.float64]


def problem_of(model: Model, settings: Any) -> Problem:
    """Return what all snapshots of a model share, as arrays."""
    start = np.full(model.size, np.nan)
    typical = model.system.starts
    start[: typical.size] = typical
    for source in (model.design, model.fixed):
        start[list(source)] = list(source.values())
    return Problem(
        equations=model.with_shared,
        sigma=model.sigma,
        columns=model.columns,
        readings=np.full(model.columns.size, np.nan),
        fixed=np.array(sorted(model.fixed), dtype=np.int64),
        start=start,
        value_dependent=model.has_relative,
        settle=settings.percent_at == "adjusted",
        lower=model.lower,
        upper=model.upper,
    )


@dataclass(frozen=True)
class Granted:
    """A snapshot solved with the faults of one explanation free.

    Attributes
    ----------
    group : Group
        With one snapshot.
    left : float
        Objective that remains.
    checks : int
        Checks that remain.
    result : Result
        The same as a result, so that figures and covariances can be asked for.
    """

    group: Group
    left: float
    checks: int
    result: Result


@dataclass(frozen=True)
class Decision:
    """What was done about a suspect in one snapshot.

    Attributes
    ----------
    policy : str
        ``exclude`` or ``compensate``.
    alternative : Alternative
        The explanation that was granted.
    granted : Granted
    words : str
        The decision in words.
    """

    policy: str
    alternative: Alternative
    granted: Granted
    words: str


def decide(result: Result, policy: Literal["exclude", "compensate"]) -> Result:
    """Compute the adjusted values with suspects granted, wherever the evidence names one explanation.

    Parameters
    ----------
    result : Result
    policy : {"exclude", "compensate"}
        Values are the same, since a reading with an unknown bias says nothing: ``exclude`` reports what the suspect
        reads as calculated, ``compensate`` as its reading less the estimated bias.

    Returns
    -------
    Result
        The evidence stays that of all readings; snapshots in which the evidence cannot tell are left as they were.
    """
    decisions: dict[int, Decision] = {}
    for i in np.flatnonzero(result.suspicious):
        accounts = result.snapshot(int(i)).accounts
        if accounts is None or accounts.conclusion is not Conclusion.ONE:
            continue
        alternative = accounts.standing[0].alternatives[0]
        granted = grant(result, int(i), alternative)
        if granted is None:
            continue
        named = " and ".join(
            f"{f.candidate.name} ({f.size:+.4g} +/- {f.sigma:.2g} {f.candidate.unit})" for f in alternative.faults
        )
        verb = "excluded" if policy == "exclude" else "compensated for"
        decisions[int(i)] = Decision(policy, alternative, granted, f"{verb} {named}")
    return replace(result, decisions=decisions, _explainers={}, _looked_at={}, _granted={})


def grant(result: Result, index: int, alternative: Alternative) -> Granted | None:
    """Solve one snapshot again with the faults of an explanation free; kept with the result.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    alternative : Alternative

    Returns
    -------
    Granted or None
        None where no consistent answer is found.
    """
    key = (index, tuple((f.candidate.name, f.size) for f in alternative.faults))
    if key not in result._granted:
        result._granted[key] = _solved_with(result, index, alternative)
    return result._granted[key]


def _solved_with(result: Result, index: int, alternative: Alternative) -> Granted | None:
    model = result.model_of(index)
    names = {f.candidate.name for f in alternative.faults}
    free = {f.candidate.column for f in alternative.faults if f.candidate.column >= 0}
    tags = {f.candidate.name for f in alternative.faults if f.candidate.reading >= 0}
    opened = replace(model, fixed={c: v for c, v in model.fixed.items() if c not in free})
    problem = problem_of(opened, result.settings)
    start = problem.start.copy()
    # A fault variable starts at the size that the explanation gives it.
    for f in alternative.faults:
        if f.candidate.column >= 0:
            start[f.candidate.column] = f.size * f.candidate.scale
    base = model.to_base(result.readings[index : index + 1])
    base[0, result.group(index).absent] = np.nan
    base[0, [i for i, t in enumerate(model.tags) if t in tags]] = np.nan
    table = adjust_table(
        replace(problem, start=start), base, names=lambda c: model.names[c], row_names=lambda r: model.row_names[r]
    )
    if table.failed:
        return None
    group = table.groups[0]
    readings = result.readings[index : index + 1].copy()
    readings[0, [j for j, t in enumerate(result.tags) if t in tags]] = np.nan
    granted = replace(
        result,
        model=opened,
        prepared=None,
        decisions={},
        table=table,
        readings=readings,
        labels=(f"{result.labels[index]} granting {' and '.join(sorted(names))}",),
        _explainers={},
        _looked_at={},
        _granted={},
    )
    left = float((group.parity**2).sum())
    return Granted(group, left, group.checks, granted)


def granted_all(result: Result, index: int, limit: int = 4) -> tuple[tuple[Alternative, Granted], ...]:
    """Solve one snapshot again for every alternative of its standing explanations.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    limit : int
        At most so many explanations.

    Returns
    -------
    tuple of (Alternative, Granted)
        Empty where the readings agree; alternatives without a consistent answer are left out.
    """
    accounts = result.snapshot(index).accounts
    if accounts is None or not result.suspicious[index]:
        return ()
    solved = (
        (alternative, grant(result, index, alternative))
        for account in accounts.standing[:limit]
        for alternative in account.alternatives
    )
    return tuple((a, g) for a, g in solved if g is not None)


def figures_if(result: Result, index: int) -> list[tuple[Alternative, tuple[FigureValue, ...]]]:
    """Evaluate the figures of a case anew for every standing explanation of a snapshot.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    list of (Alternative, figures)
    """
    if not result.figures:
        return []
    return [(a, granted.result.figure_values(0)) for a, granted in granted_all(result, index)]


@dataclass(frozen=True)
class Smeared:
    """An adjusted value that an unseen fault pulls along.

    Attributes
    ----------
    variable, unit : str
    off : float
        Adjusted value as exported, less what it would be with the explanation granted.
    sigma : float
        Standard uncertainty of the adjusted value as exported.
    """

    variable: str
    unit: str
    off: float
    sigma: float


def smeared(result: Result, index: int, granted: Granted) -> tuple[Smeared, ...]:
    """Return which adjusted values would be off if an explanation holds, the most wrong first.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    granted : Granted

    Returns
    -------
    tuple of Smeared
        Variables that would be off by more than their own standard uncertainty.
    """
    off = result.adjusted[index] - granted.result.adjusted[0]
    sigma = result.sigmas[index]
    # What is known exactly moves by rounding only.
    least = np.maximum(sigma, 1e-9 * np.abs(result.adjusted[index]))
    with np.errstate(invalid="ignore"):
        chosen = [int(i) for i in np.flatnonzero((np.abs(off) > least) & (sigma > 0))]
    chosen.sort(key=lambda i: -abs(off[i]) / sigma[i])
    return tuple(Smeared(result.variables[i], result.units[i], float(off[i]), float(sigma[i])) for i in chosen)
