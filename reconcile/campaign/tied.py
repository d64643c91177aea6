"""Windows of a log put in a row, for inventories that tie them: their lengths, and what was read in each."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem
from ..readings.table import ReadingsTable
from .snapshots import Prepared
from .spec import CampaignSpec

__all__ = ["Row", "in_a_row", "keep_moving"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Row:
    """Windows that follow one another without a gap.

    Attributes
    ----------
    labels : tuple of str, length N
    values : ndarray, shape (N, number of tags)
        In the unit of each meter; nan where nothing was read.
    own, scatter : ndarray of that shape, or None
        Sigmas of single cells, and what adds to the law of a meter.
    lengths : ndarray, shape (N,), or None
        Seconds; None where the log does not tell.
    statuses : mapping of (window, tag) to str
        Why a cell is empty.
    notices : tuple of Notice
    """

    labels: tuple[str, ...]
    values: Array
    own: Array | None
    scatter: Array | None
    lengths: Array | None
    statuses: Mapping[tuple[int, str], str] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()


def keep_moving(plan: CampaignSpec, *, linear: bool) -> CampaignSpec:
    """Keep windows that are not steady, since what is held takes up the change.

    Balances of means hold exactly where they are `linear`, so nothing is tested; where they have products, a window that
    moves is told.
    """
    if plan.windows is None:
        return plan
    kept = replace(plan.windows, keep_unsteady=True)
    return replace(plan, windows=replace(kept, slope_level=None, ratio_level=None) if linear else kept)


def in_a_row(
    prepared: Prepared, tags: Sequence[str], held: Collection[str], counters: Collection[str], *, at_end: bool
) -> Row:
    """Put windows in a row; time between two of them becomes a window in which nothing was read.

    Parameters
    ----------
    prepared : Prepared
    tags : sequence of str
        Columns wanted, in this order.
    held : collection of str
        Those that tell what is held at the start (or end) of a window; a window left out keeps them.
    counters : collection of str
        Those that count up to the row behind the window, missing rows included.
    at_end : bool
        Whether `held` is read at the end of a window.

    Raises
    ------
    InputError
        If windows overlap, or do not follow one another in time.
    """
    table = prepared.table
    columns = [table.columns.index(t) for t in tags]
    values = np.where(table.usable, table.values, np.nan)[:, columns]
    statuses = {(int(i), tags[j]): table.reason(int(i), columns[j]) for i, j in np.argwhere(np.isnan(values))}
    flows = [j for j, t in enumerate(tags) if t not in held]
    for i, left in prepared.left_out.items():
        statuses.update({(i, tags[j]): f"window left out: {left.reason}" for j in flows})
        values[i, flows] = np.nan
    row = Row(
        tuple(table.label(i) for i in range(len(table))),
        values,
        None if table.sigma is None else table.sigma[:, columns],
        None if table.scatter is None else np.nan_to_num(table.scatter[:, columns]),
        None,
        statuses,
    )
    if prepared.edges is None:
        return row
    _refuse_disorder(prepared.edges, table, row.labels)
    row = _without_counts_over_gaps(row, prepared.edges, [j for j, t in enumerate(tags) if t in counters], tags)
    row = _with_gaps(row, prepared.edges, [j for j in range(len(tags)) if j not in flows], tags, at_end=at_end)
    return _without_empty_end(row)


def _without_empty_end(row: Row) -> Row:
    """Leave out windows at the end in which nothing was read: the closing row of a log is no window."""
    read = np.flatnonzero(np.isfinite(row.values).any(axis=1))
    size = int(read[-1]) + 1 if read.size else len(row.labels)
    if size == len(row.labels) or row.lengths is None:
        return row
    return replace(
        row,
        labels=row.labels[:size],
        values=row.values[:size],
        own=None if row.own is None else row.own[:size],
        scatter=None if row.scatter is None else row.scatter[:size],
        lengths=row.lengths[:size],
        statuses={(i, t): words for (i, t), words in row.statuses.items() if i < size},
    )


def _refuse_disorder(edges: Array, table: ReadingsTable, labels: tuple[str, ...]) -> None:
    late = np.flatnonzero(edges[1:, 0] < edges[:-1, 1] - 1e-6)
    if late.size:
        i = int(late[0])
        raise InputError(
            Problem(
                "windows-overlap",
                f"window {labels[i + 1]} begins before window {labels[i]} has ended; what is held ties windows that follow "
                "one another in time",
                "correct the times under windows: at, and put them in order",
                Location(file=table.sources[0] if table.sources else None),
            )
        )


def _without_counts_over_gaps(row: Row, edges: Array, counters: Sequence[int], tags: Sequence[str]) -> Row:
    """Leave out what a counter counted over missing rows behind its window: it is not of that window."""
    over = np.flatnonzero(edges[:, 2] > edges[:, 1] + 1e-6)
    if not over.size or not counters:
        return row
    values, statuses = row.values.copy(), dict(row.statuses)
    for i in over.tolist():
        for j in counters:
            if np.isfinite(values[i, j]):
                values[i, j] = np.nan
                statuses[i, tags[j]] = "it counts over the missing rows behind the window as well"
    return replace(row, values=values, statuses=statuses)


def _with_gaps(row: Row, edges: Array, held: Sequence[int], tags: Sequence[str], *, at_end: bool) -> Row:
    """Insert a window without readings wherever time passes between two windows."""
    pause = np.append(edges[1:, 0] - edges[:-1, 1], 0.0)
    gaps = pause > 1e-6
    place = np.arange(len(edges)) + np.concatenate([[0], np.cumsum(gaps[:-1])])
    size = len(edges) + int(gaps.sum())
    labels, lengths = [""] * size, np.zeros(size)
    values, own, scatter = (
        None if part is None else np.full((size, part.shape[1]), empty)
        for part, empty in ((row.values, np.nan), (row.own, np.nan), (row.scatter, 0.0))
    )
    assert values is not None
    pairs = [(o, r) for o, r in ((values, row.values), (own, row.own), (scatter, row.scatter)) if r is not None]
    for i, at in enumerate(place.tolist()):
        labels[at], lengths[at] = row.labels[i], edges[i, 1] - edges[i, 0]
        for out, given in pairs:
            out[at] = given[i]  # type: ignore[index]
        if not gaps[i]:
            continue
        labels[at + 1], lengths[at + 1] = f"after {row.labels[i]}", pause[i]
        # The row behind missing rows is the end of the gap, not of the window.
        if at_end and edges[i, 2] > edges[i, 1] + 1e-6:
            for out, given in pairs:
                out[at + 1, held], out[at, held] = given[i, held], np.nan if given is not row.scatter else 0.0  # type: ignore[index]
    statuses = {(int(place[i]), t): words for (i, t), words in row.statuses.items()}
    statuses.update({(int(place[i]) + 1, t): "no window of the log" for i in np.flatnonzero(gaps) for t in tags
                     if np.isnan(values[int(place[i]) + 1, list(tags).index(t)])})  # fmt: skip
    notices = row.notices
    if gaps.any():
        first = int(np.flatnonzero(gaps)[0])
        words = (
            f"between windows, {int(gaps.sum())} times, time passes that no window covers, first {pause[first] / 60:g} min "
            f"after window {row.labels[first]}: a window without readings stands there, and its flows are unknown"
        )
        notices = (*notices, Notice("gap-between-windows", words))
    return replace(
        row, labels=tuple(labels), values=values, own=own, scatter=scatter, lengths=lengths, statuses=statuses,
        notices=notices,
    )  # fmt: skip
