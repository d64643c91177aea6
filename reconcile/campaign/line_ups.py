"""Streams that are closed in some snapshots: the same case with another network there."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..readings.windows import ZeroCheck

if TYPE_CHECKING:
    from ..model import Model
    from ..results import Result
    from .spec import LineUpSpec

__all__ = ["closed_columns", "line_up_of", "silent", "zero_of_closed"]

_CARRIERS = ("flow", "current")


def line_up_of(
    line_ups: Mapping[str, LineUpSpec], states: Mapping[str, npt.NDArray[np.bool_]], size: int
) -> tuple[dict[int, tuple[str, ...]], dict[int, str]]:
    """Return the streams closed in each snapshot, and the names of the line-ups that close them.

    Parameters
    ----------
    line_ups : mapping of name to LineUpSpec
    states : mapping of name to (size,) bool
        Where each holds.
    size : int
        Number of snapshots.
    """
    closed: dict[int, tuple[str, ...]] = {}
    names: dict[int, str] = {}
    for i in range(size):
        held = [n for n in line_ups if n in states and states[n][i]]
        if held:
            closed[i] = tuple(dict.fromkeys(s for n in held for s in line_ups[n].closed))
            names[i] = " + ".join(held)
    return closed, names


def closed_columns(model: Model, streams: Sequence[str]) -> dict[int, float]:
    """Columns that are exactly zero while these streams are closed.

    What a stream carries (its flow or current) vanishes; where a domain has no such variable, all its amounts do. What a
    stream is like (composition, temperature) is left unknown: nothing flows that could show it.
    """
    out: dict[int, float] = {}
    for stream in streams:
        own = {
            int(c): model.names[c][len(stream) + 1 :] for c in model.shown if model.names[c].startswith(f"{stream}.")
        }
        carriers = [c for c, quantity in own.items() if quantity in _CARRIERS]
        out.update(dict.fromkeys(carriers or own, 0.0))
    return out


def silent(model: Model, closed: Mapping[int, float]) -> list[int]:
    """Readings that read closed streams alone: they tell of their zero, and of nothing else."""
    names = {model.names[c] for c in closed}
    return [i for i, r in enumerate(model.readings) if r.kind != "cause" and all(n in names for n, _ in r.reads)]


def zero_of_closed(result: Result) -> tuple[ZeroCheck, ...]:
    """What the meters of closed streams show: offsets of their zero."""
    prepared = result.prepared
    out: list[ZeroCheck] = []
    for i, streams in (prepared.closed if prepared is not None else {}).items():
        assert prepared is not None
        gone = silent(result.model, closed_columns(result.model, streams))
        scatter = prepared.table.scatter
        for j, k in enumerate(result.model.meters.tolist()):
            if k in gone and np.isfinite(result.readings[i, j]):
                sigma = float(scatter[i, j]) if scatter is not None else np.nan
                out.append(ZeroCheck(i, result.labels[i], result.tags[j], float(result.readings[i, j]), sigma))
    return tuple(out)
