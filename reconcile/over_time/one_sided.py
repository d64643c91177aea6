"""Balances that are off to the same side in every record: a sign of something missing, not of one bad meter."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .levels import FlowLevels
from .sequence import Sequence

__all__ = ["LEAST_RECORDS", "OneSided", "closures", "one_sided_of"]

Array = npt.NDArray[np.float64]

LEAST_RECORDS = 20
"""With fewer records one sign in all of them may be chance: 2 in a million at twenty, for one balance."""


@dataclass(frozen=True)
class OneSided:
    """A balance whose raw closure has one sign in every record.

    Attributes
    ----------
    balance, node, unit : str
    count : int
        Records in which it could be formed from readings.
    mean, low, high : float
        Of the closure: in minus out.
    meters : tuple of str
        Meters that could be behind it alone, by a constant error or one of scale.
    faults : tuple of str
        Domains' faults (leaks, unseen products) that could be, as constant.
    """

    balance: str
    node: str
    unit: str
    count: int
    mean: float
    low: float
    high: float
    meters: tuple[str, ...]
    faults: tuple[str, ...]

    @property
    def structural(self) -> bool:
        """Whether no single meter accounts for it."""
        return not self.meters


def one_sided_of(sequence: Sequence, levels: FlowLevels) -> tuple[OneSided, ...]:
    """Find balances that are off to one side in every record, and what could be behind each."""
    model = sequence.result.model
    off = closures(sequence)
    alive = [m for c in levels.classes for m in c]
    out = []
    for block in model.system.row_blocks:
        for j, name in enumerate(block.names):
            own = off[:, block.start + j]
            own = own[np.isfinite(own)]
            if own.size < LEAST_RECORDS or not (np.all(own > 0) or np.all(own < 0)):
                continue
            meters = tuple(dict.fromkeys(n for m in alive if m.kind in ("bias", "scale") for n in m.names))
            faults = tuple(dict.fromkeys(m.names[0] for m in alive if m.kind not in ("bias", "scale")))
            out.append(
                OneSided(
                    name, block.nodes[j], block.unit, own.size, float(own.mean()), float(own.min()), float(own.max()),
                    meters, faults,
                )
            )  # fmt: skip
    return tuple(out)


def closures(sequence: Sequence) -> Array:
    """Raw closure of every balance of the domains, shape (N, m); nan where a reading that it needs is absent."""
    result, model = sequence.result, sequence.result.model
    equations = model.system.equations
    base = model.to_base(result.readings)
    raw = np.full((result.size, model.system.size), np.nan)
    for i, r in reversed(list(enumerate(model.readings))):
        if len(r.reads) == 1 and r.kind != "cause":
            column = model.system.column(r.reads[0][0])
            given = np.isfinite(base[:, i])
            raw[given, column] = base[given, i] / r.reads[0][1]
    for c, v in model.fixed.items():
        if c < model.system.size:
            raw[:, c] = v
    known = np.isfinite(raw)
    filled = np.where(known, raw, 1.0)
    if equations.is_linear:
        out = np.asarray((equations.linear @ filled.T).T) - equations.rhs
        needs = np.asarray((abs(equations.linear) @ (~known).T.astype(float)).T) > 0
    else:
        out, needs = (
            np.zeros((result.size, equations.shape[0])),
            np.zeros((result.size, equations.shape[0]), dtype=bool),
        )
        for s in range(result.size):
            out[s] = equations.closure(filled[s])
            touched = equations.jacobian(filled[s]).toarray() != 0
            needs[s] = (touched & ~known[s]).any(axis=1)
    out[needs] = np.nan
    return out
