"""Mix-ups that need no unknown size: a reversed sign, a unit factor, two swapped meters, a reversed arrow.

Each says exactly what the readings should have been, so it can be tried: put right, do the readings agree? With no
size to fit, a mix-up that leaves little is stronger evidence than a bias that leaves as little.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .adjust.table import adjust_table
from .diagnose.critical import chi2_limit
from .refit import problem_of

if TYPE_CHECKING:
    from .results import Result

__all__ = ["Mixup", "mixups_of"]

Array = npt.NDArray[np.float64]

FACTORS = (60.0, 3600.0, 24.0, 1000.0)
"""Minutes, seconds, days, and the thousand: the unit slips of the trade (common practice, no source)."""

MOST_METERS = 40
MOST_SOLVED = 20


@dataclass(frozen=True)
class Mixup:
    """A mix-up that, put right, lets the readings agree.

    Attributes
    ----------
    kind : str
        ``sign``, ``factor`` or ``swap``.
    tags : tuple of str
    words : str
    left : float
        Objective with the mix-up put right.
    limit : float
        What it may be; no size was fitted, so all checks remain.
    """

    kind: str
    tags: tuple[str, ...]
    words: str
    left: float
    limit: float


def mixups_of(result: Result, index: int) -> tuple[Mixup, ...]:
    """Try every mix-up of one snapshot that disagrees.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    tuple of Mixup
        Those that let the readings agree, the best first; empty where the readings agree as they are.
    """
    if not result.suspicious[index]:
        return ()
    trials = [t for t in _trials(result, index) if _possible(result, t)]
    group = result.group(index)
    left = _by_parity(result, index, trials)
    if not group.equations.is_linear or result.model.has_relative:
        # To first order only a ranking: the most promising are solved in full.
        trials = [trials[int(t)] for t in np.argsort(left, kind="stable")[:MOST_SOLVED]]
        left = _solved(result, index, trials)
    limit = chi2_limit(result.settings.level, group.checks)
    found = [
        Mixup(kind, tags, words, float(value), limit)
        for (kind, tags, words, _), value in zip(trials, left, strict=True)
        if value <= limit
    ]
    return tuple(sorted(found, key=lambda m: m.left))


Trial = tuple[str, tuple[str, ...], str, dict[int, float]]


def _trials(result: Result, index: int) -> Iterator[Trial]:
    """Every mix-up, as the readings (by meter, in its unit) that would be right; the most suspicious meters first."""
    read = result.readings[index]
    tests = result.snapshot(index).meter_tests
    size = np.where(np.isfinite(read), np.abs(np.nan_to_num(tests.z)), -1.0)
    order = [int(j) for j in np.argsort(-size, kind="stable") if size[j] > 1e-9][:MOST_METERS]
    unit = [result.model.readings[i].unit for i in result.model.meters]
    for j in order:
        tag = result.tags[j]
        if read[j] != 0:
            yield "sign", (tag,), f"the sign of {tag} is reversed (or its arrow is)", {j: -read[j]}
    for a, b in combinations(order, 2):
        if unit[a] == unit[b] and read[a] != read[b]:
            one, two = result.tags[a], result.tags[b]
            yield "swap", (one, two), f"{one} and {two} are swapped", {a: read[b], b: read[a]}
    for j in order:
        tag = result.tags[j]
        for factor in FACTORS:
            yield (
                "factor",
                (tag,),
                f"{tag} is {factor:g} times too small: another unit than {unit[j]}?",
                {j: read[j] * factor},
            )
            yield (
                "factor",
                (tag,),
                f"{tag} is {factor:g} times too large: another unit than {unit[j]}?",
                {j: read[j] / factor},
            )


def _possible(result: Result, trial: Trial) -> bool:
    """Whether the readings put right are possible values: a flow may run against its arrow, a concentration may not."""
    model = result.model
    linear = model.system.equations.linear
    for j, value in trial[3].items():
        reading = model.readings[int(model.meters[j])]
        if len(reading.reads) != 1:
            continue
        name, coefficient = reading.reads[0]
        column = model.system.column(name)
        meant = (value * reading.factor + reading.offset) / coefficient
        if meant > model.upper[column]:
            return False
        stream = result.spec is None or name.partition(".")[0] in result.spec.streams
        has_arrow = stream and not np.isfinite(model.upper[column]) and linear[:, [column]].nnz > 0
        if meant < model.lower[column] and not (has_arrow and model.lower[column] == 0.0):
            return False
    return True


def _by_parity(result: Result, index: int, trials: list[Trial]) -> Array:
    group, model = result.group(index), result.model
    parity = group.parity[int(np.flatnonzero(group.rows == index)[0])]
    read = result.readings[index]
    out = np.empty(len(trials))
    for t, (_, _, _, right) in enumerate(trials):
        p = parity.copy()
        for j, value in right.items():
            i = int(model.meters[j])
            p += group.signatures[:, i] * (value - read[j]) * model.factor[i]
        out[t] = p @ p
    return out


def _solved(result: Result, index: int, trials: list[Trial]) -> Array:
    model = result.model_of(index)
    if not trials:
        return np.zeros(0)
    rows = np.tile(result.readings[index], (len(trials), 1))
    rows[:, [j for j, tag in enumerate(result.tags) if tag in result.excluded]] = np.nan
    for t, (_, _, _, right) in enumerate(trials):
        for j, value in right.items():
            rows[t, j] = value
    table = adjust_table(
        problem_of(model, result.settings),
        model.to_base(rows),
        names=lambda c: model.names[c],
        row_names=lambda r: model.row_names[r],
    )
    out = np.full(len(trials), np.inf)
    for group in table.groups:
        out[group.rows] = (group.parity**2).sum(axis=1)
    return out
