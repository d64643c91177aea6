"""Robust values beside the adjusted ones: where outliers would have pulled the result."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..adjust.robust import Loss, robust
from .sequence import Sequence

__all__ = ["SecondOpinion", "second_opinion_of"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class SecondOpinion:
    """Robust estimate of all snapshots.

    Attributes
    ----------
    loss : str
    variables, units : tuple of str, length v
    values : ndarray, shape (N, v)
        Robust values; nan where they cannot be calculated, or where there is no check.
    difference : ndarray, shape (N, v)
        Robust minus adjusted, in standard uncertainties of the adjusted value.
    pulled : ndarray, shape (N, number of meters)
        How far each reading is off by this estimate beyond what it influences it by, in sigmas; 0 for most.
    violation : ndarray, shape (N,)
        Of the optimality conditions, in sigmas; nan where there is no check.
    unique : ndarray of bool, shape (N,)
        False where other values fit as well by this loss.
    linearised : bool
        Whether balances hold products, so that the estimate is that of one linearisation at the adjusted values.
    """

    loss: Loss
    variables: tuple[str, ...]
    units: tuple[str, ...]
    values: Array
    difference: Array
    pulled: Array
    violation: Array
    unique: npt.NDArray[np.bool_]
    linearised: bool

    @property
    def optimal(self) -> bool:
        """Whether the conditions of an optimum hold in all snapshots, to 1e-7 sigma."""
        return not np.any(self.violation > 1e-7)

    @property
    def differs(self) -> npt.NDArray[np.bool_]:
        """Snapshots in which any value moves by more than one sigma, shape (N,)."""
        with np.errstate(invalid="ignore"):
            return np.asarray((np.abs(self.difference) > 1.0).any(axis=1))


def second_opinion_of(sequence: Sequence, loss: Loss) -> SecondOpinion:
    """Estimate all snapshots robustly, on the projector of each linearisation."""
    result, model = sequence.result, sequence.result.model
    shown, n = model.shown, result.size
    values, difference = np.full((n, shown.size), np.nan), np.full((n, shown.size), np.nan)
    pulled, violation = np.full((n, model.meters.size), np.nan), np.full(n, np.nan)
    unique = np.ones(n, dtype=bool)
    for p in sequence.parts:
        g = p.group
        projector = (g.signatures * g.sigma).T
        found = robust(p.parity, projector, loss)
        shift = found.shift * g.sigma
        # Lowering readings moves every column by its response to them.
        move = -(shift @ g.response[shown].T)
        spread = np.linalg.norm(g.cover[shown], axis=1)
        known = g.determined[shown]
        values[p.rows] = np.where(known, g.x[:, shown] + move, np.nan)
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(spread > 0, move / spread, 0.0)
        difference[p.rows] = np.where(known, ratio, np.nan)
        pulled[p.rows] = found.shift[:, model.meters]
        violation[p.rows] = found.violation
        unique[p.rows] = found.unique
    linear = all(p.group.equations.is_linear for p in sequence.parts)
    return SecondOpinion(
        loss, result.variables, result.units, values, difference, pulled, violation, unique, not linear
    )
