"""Faults that are the same in all snapshots: the pooled evidence, explained like that of one snapshot."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ..accounts import Accounts, explain, explainer_of
from ..diagnose.critical import smallest_detectable
from .sequence import Sequence

__all__ = ["Steady", "SteadyFault", "Stretch", "steady_of", "stretches_of", "without_steady"]

LEAST_IN_A_STRETCH = 10
MOST_STRETCHES = 6


@dataclass(frozen=True)
class SteadyFault:
    """A fault taken alone, as steady over all snapshots; in the unit of its size.

    Attributes
    ----------
    name, kind, item, unit : str
    size, sigma, z : float
    smallest : float
        Smallest steady size that the pool notices at the level and power of the case.
    sigmas : float
        `size` in sigmas of the reading; nan for faults that are no readings.
    """

    name: str
    kind: str
    item: str
    unit: str
    size: float
    sigma: float
    z: float
    smallest: float
    sigmas: float


@dataclass(frozen=True)
class Stretch:
    """Some consecutive snapshots pooled."""

    first: str
    last: str
    count: int
    objective: float
    checks: int
    limit: float
    p: float


@dataclass(frozen=True)
class Steady:
    """Pooled evidence.

    Attributes
    ----------
    count : int
        Snapshots with a check.
    objective, limit, p : float
        Square of the pooled parity vector, its limit at the level of the case, and its p-value.
    checks : int
    contrast, contrast_p : float
        What snapshots with different readings absent say against each other that no steady fault accounts for.
    contrast_checks : int
    faults : tuple of SteadyFault
        Every candidate that is checked.
    accounts : Accounts or None
        Explanations of the pool; None where it agrees.
    single : str or None
        Snapshot without which the pool would agree, and what would be left then in `without_it`.
    """

    count: int
    objective: float
    checks: int
    limit: float
    p: float
    contrast: float
    contrast_checks: int
    contrast_p: float
    faults: tuple[SteadyFault, ...]
    accounts: Accounts | None
    single: str | None = None
    without_it: float = float("nan")

    @property
    def agrees(self) -> bool:
        """Whether no steady fault shows."""
        return not self.objective > self.limit


def steady_of(sequence: Sequence) -> Steady:
    """Pool all snapshots and explain what the pool says."""
    result, pool = sequence.result, sequence.pooled
    settings, model = result.settings, result.model
    largest = sequence.parts[0].group.sigma
    faults = []
    for i, c in enumerate(model.candidates):
        if not sequence.checked[i]:
            continue
        size, sigma = float(pool.size[i]), float(pool.sigma[i])
        own = abs(size * c.scale) / float(largest[c.reading]) if c.reading >= 0 else float("nan")
        faults.append(
            SteadyFault(
                c.name, c.kind, c.item, c.unit, size, sigma, size / sigma,
                smallest_detectable(1.0 / sigma, settings.level, settings.power), own,
            )
        )  # fmt: skip
    accounts = None
    if pool.objective > pool.limit:
        values = np.mean([part.group.x[0] for part in sequence.parts], axis=0)[model.columns]
        explainer = explainer_of(model, pool.signatures, settings, result.spec, values=values)
        accounts = None if explainer is None else explain(explainer, pool.parity, model, settings.level)
    single, without = _single(sequence) if accounts is not None and sequence.count > 2 else (None, float("nan"))
    return Steady(
        pool.count, pool.objective, pool.checks, pool.limit, pool.p,
        pool.contrast, pool.contrast_checks, pool.contrast_p, tuple(faults), accounts, single, without,
    )  # fmt: skip


def without_steady(sequence: Sequence, steady: Steady) -> Sequence:
    """Return the evidence with the best explanation of the pool granted, where there is one."""
    standing = steady.accounts.standing if steady.accounts else ()
    place = {c.name: i for i, c in enumerate(sequence.candidates)}
    out = sequence
    for fault in standing[0].alternatives[0].faults if standing else ():
        out = out.minus(np.full(sequence.result.size, fault.size), place[fault.candidate.name])
    return out


def _single(sequence: Sequence) -> tuple[str | None, float]:
    """Snapshot that alone makes the pool disagree, if the one that disagrees most does."""
    worst = int(np.nanargmax(sequence.result.objective))
    rest = sequence.without(worst).pool()
    agrees = rest.objective <= rest.limit
    return (sequence.result.labels[worst], rest.objective) if agrees else (None, float("nan"))


def stretches_of(sequence: Sequence) -> tuple[Stretch, ...]:
    """Pool consecutive snapshots in up to six stretches of at least ten; none where there are fewer than twenty."""
    n = sequence.count
    wanted = min(MOST_STRETCHES, n // LEAST_IN_A_STRETCH)
    if wanted < 2:
        return ()
    out = []
    for j in range(wanted):
        first, last = (int(sequence.rows[k]) for k in (j * n // wanted, (j + 1) * n // wanted - 1))
        pool = sequence.pool(first, last + 1)
        labels = sequence.result.labels
        out.append(Stretch(labels[first], labels[last], pool.count, pool.objective, pool.checks, pool.limit, pool.p))
    return tuple(out)
