"""Snapshots meet the balances: each with the sigmas of its own cells, its line-up, and without those left out."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from ..adjust.table import Table, adjust_table
from ..diagnose.critical import chi2_p
from ..errors import Notice, SolveError
from ..refit import problem_of
from .line_ups import closed_columns, silent

if TYPE_CHECKING:
    from ..model import Model
    from ..run import Case
    from .snapshots import Prepared

__all__ = ["LEFT_OUT", "adjust_prepared", "agreement_notices", "model_of"]

LEFT_OUT = "left-out"
"""Code of a snapshot that was never to be solved."""

_TOO_GOOD = 0.999

Array = npt.NDArray[np.float64]


def adjust_prepared(case: Case, prepared: Prepared, base: Array, settings: Any) -> Table:
    """Adjust the snapshots that balances are made of.

    Parameters
    ----------
    case : Case
    prepared : Prepared
    base : ndarray, shape (N, number of readings)
        Readings in base units; nan where absent.
    settings : object

    Returns
    -------
    Table
        Of all N snapshots; those left out are among the failed ones, with code `LEFT_OUT`.
    """
    own, more = _of_all_readings(case.model, prepared)
    used = np.flatnonzero(prepared.used)
    networks: dict[tuple[str, ...], list[int]] = {}
    for i in used.tolist():
        networks.setdefault(prepared.closed.get(i, ()), []).append(i)
    parts = []
    for streams, numbers in networks.items():
        rows = np.array(numbers, dtype=np.int64)
        problem, readings = case.problem(settings), base[rows]
        if streams:
            closed = closed_columns(case.model, streams)
            problem = problem_of(replace(case.model, fixed={**case.model.fixed, **closed}), settings)
            readings = readings.copy()
            readings[:, silent(case.model, closed)] = np.nan
        table = adjust_table(
            problem,
            readings,
            names=case.name_of_column,
            row_names=case.name_of_row,
            sigmas=None if own is None else own[rows],
            scatter=None if more is None else more[rows],
        )
        parts.append(table.placed(rows, len(base)))
    left = {i: SolveError(entry.reason, code=LEFT_OUT) for i, entry in prepared.left_out.items()}
    failed = {i: error for part in parts for i, error in part.failed.items()}
    return Table(tuple(g for part in parts for g in part.groups), {**failed, **left}, len(base))


def agreement_notices(table: Table) -> tuple[Notice, ...]:
    """Tell where all snapshots together agree better than their sigmas allow in one case of a thousand."""
    checks = sum(g.checks * len(g.rows) for g in table.groups)
    objective = float(sum((g.parity**2).sum() for g in table.groups))
    p = chi2_p(objective, checks) if checks else 0.0
    if p <= _TOO_GOOD:
        return ()
    words = (
        f"readings agree better than their sigmas allow (χ² {objective:.3g} with {checks} checks, p > {_TOO_GOOD:g}): are some "
        "computed from others (copied, back-calculated), or are the sigmas those of a certificate with k = 2?"
    )
    return (Notice("agrees-too-well", words),)


def _of_all_readings(model: Model, prepared: Prepared) -> tuple[Array | None, Array | None]:
    """Sigmas of single cells over all readings of the model, base units; None where there are none."""
    out: list[Array | None] = []
    scale = np.abs(model.factor[model.meters])
    for part, empty in ((prepared.table.sigma, np.nan), (prepared.table.scatter, 0.0)):
        if part is None or not np.any(np.nan_to_num(part)):
            out.append(None)
            continue
        whole = np.full((len(part), len(model.readings)), empty)
        whole[:, model.meters] = part * scale
        out.append(whole)
    return out[0], out[1]


def model_of(model: Model, prepared: Prepared, index: int) -> Model:
    """Model of one snapshot, with the sigmas of its cells and the streams that its line-up closes."""
    count = len(model.meters)
    closed = closed_columns(model, prepared.closed[index]) if index in prepared.closed else {}
    own = np.full(count, np.nan) if prepared.table.sigma is None else prepared.table.sigma[index]
    more = np.zeros(count) if prepared.table.scatter is None else np.nan_to_num(prepared.table.scatter[index])
    if not np.isfinite(own).any() and not more.any() and not closed:
        return model
    return model.with_sigmas(own, more, closed)
