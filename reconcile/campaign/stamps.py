"""Where in its interval a stamp stands: moved to the start where the case says so, asked for where it decides.

A mean belongs to an interval, a counter or a level to an instant: when stamps are the ends of intervals, means move to
the starts and instants stay where they were read.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, Problems
from ..readings.table import ReadingsTable, Status
from ..readings.time_order import seconds_of, to_centre

__all__ = ["at_starts", "place_samples"]

Floats = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_FEW_ROWS = 20
"""Windows of fewer rows get a notice of what their stamps are taken for: one row is 5 % of them or more."""


def at_starts(
    table: ReadingsTable,
    interval: str | None,
    instants: Collection[str] = (),
    window: float | None = None,
    *,
    joined: bool = True,
) -> ReadingsTable:
    """Move stamps that stand at the end, or in the middle, of the interval of a mean to its start.

    Parameters
    ----------
    table : ReadingsTable
        Of a log, perhaps of several files.
    interval : {"start", "end", "centre"} or None
        As the case declares it.
    instants : collection of str
        Tags of counters, levels and inventories: what they show is of the stamp itself.
    window : float, optional
        Seconds of the windows that the log is cut into.
    joined : bool
        Whether rows are put together: in windows, or around samples. Else each is a snapshot, whatever its stamp means.

    Raises
    ------
    InputError
        ``interval-unknown``: files with different steps are joined, and nothing is declared.
        ``interval-of-instants``: instants in a log whose stamps are middles.
        ``duplicate-stamp``: two rows begin at the same time once their stamps are moved.
    """
    if table.time is None or len(table) < 2:
        return table
    steps = _steps(table)
    if interval is None:
        if joined:
            _ask_of_files(table, steps)
        return _told_as_starts(table, steps, window)
    if interval == "start":
        return table
    here = [t for t in table.columns if t in instants]
    if interval == "centre" and here:
        words = f"stamps are declared as middles of intervals, but {', '.join(here)} shows what is at the stamp itself"
        hint = "export with stamps at the end or the start of the intervals, and declare that"
        raise InputError(Problem("interval-of-instants", words, hint, Location(file=_name(table, 0))))
    back = steps if interval == "end" else steps / 2
    seconds = seconds_of(table.time)
    moved = seconds - back
    rows = np.argsort(moved, kind="stable")
    same = np.flatnonzero(np.diff(moved[rows]) <= 0)
    if same.size:
        a, b = int(rows[same[0]]), int(rows[same[0] + 1])
        words = f"its interval begins when that of {table.where(a)} does, once stamps are moved from their {interval}"
        raise InputError(Problem("duplicate-stamp", words, "remove one of the two rows", table.where(b)))
    where = "ends" if interval == "end" else "middles"
    told = " or ".join(f"{s / 60:g}" for s in np.unique(steps))
    words = f"stamps are the {where} of intervals of {told} min: moved to their starts"
    if here:
        words += f"; {', '.join(here)} shows what is at the stamp, and stays"
    out = _rearranged(table, seconds, moved, here) if here else _rows(table, moved[rows], rows, rows, [])
    return replace(out, notices=(*table.notices, Notice("stamps-moved", words)))


def _steps(table: ReadingsTable) -> Floats:
    """Usual step of the file that each row comes from, in seconds."""
    seconds = seconds_of(table.time)  # type: ignore[arg-type]
    usual = float(np.median(np.diff(np.sort(seconds))))
    out = np.full(len(table), usual)
    if table.source_of is not None:
        for source in np.unique(table.source_of):
            own = table.source_of == source
            if own.sum() > 1:
                out[own] = float(np.median(np.diff(np.sort(seconds[own]))))
    return out


def _name(table: ReadingsTable, row: int) -> str | None:
    return table.where(row).file


def _ask_of_files(table: ReadingsTable, steps: Floats) -> None:
    if table.source_of is None or steps.max() <= 1.5 * steps.min():
        return
    fine, coarse = int(np.argmin(steps)), int(np.argmax(steps))
    words = (
        f"a row every {steps[coarse] / 60:g} min here, every {steps[fine] / 60:g} min in {_name(table, fine)}: do the stamps "
        "stand at the start or at the end of their interval? A wrong choice shifts the readings by one interval"
    )
    hint = (
        "declare it under readings:, e.g. readings: {file: logs/*.csv, interval: end}; start also for single readings at "
        "their stamps"
    )
    raise InputError(Problem("interval-unknown", words, hint, Location(file=_name(table, coarse))))


def _told_as_starts(table: ReadingsTable, steps: Floats, window: float | None) -> ReadingsTable:
    step = float(np.median(steps))
    if window is None or not 0 < step < window < _FEW_ROWS * step:
        return table
    words = (
        f"a window of {window / 60:g} min holds {window / step:.3g} rows, and each stamp is taken for the start of its "
        f"interval of {step / 60:g} min; if it is the end, every window is one row off: write interval: end under readings:"
    )
    return replace(table, notices=(*table.notices, Notice("stamps-taken-as-starts", words)))


# ------------------------------------------------------------------ means move, instants stay


def _rearranged(table: ReadingsTable, seconds: Floats, moved: Floats, instants: Sequence[str]) -> ReadingsTable:
    """Means at their new times, instants at their old ones; a row more wherever an instant is no start."""
    order = np.argsort(moved, kind="stable")
    begins = moved[order]
    near = np.clip(np.searchsorted(begins, seconds - 0.01), 0, len(begins) - 1)
    meets = np.abs(begins[near] - seconds) <= 0.01
    of_mean = np.concatenate([order, np.full(int((~meets).sum()), -1)])
    times = np.concatenate([begins, seconds[~meets]])
    of_instant = np.full(len(times), -1)
    of_instant[near[meets]] = np.flatnonzero(meets)
    of_instant[len(begins) :] = np.flatnonzero(~meets)
    rows = np.argsort(times, kind="stable")
    return _rows(table, times[rows], of_mean[rows], of_instant[rows], [table.index(t) for t in instants])


def _rows(
    table: ReadingsTable, times: Floats, of_mean: Ints, of_instant: Ints, instants: Sequence[int]
) -> ReadingsTable:
    """Table at other times: row numbers of the old one for means and for instants, -1 where there is none."""
    import pandas as pd

    source = np.tile(of_mean[:, None], (1, len(table.columns)))
    source[:, instants] = of_instant[:, None]
    gone, cell = source < 0, (source, np.arange(len(table.columns)))

    def taken(part: Any, empty: float) -> Any:
        return None if part is None else np.where(gone, empty, part[cell])

    either = np.where(of_mean >= 0, of_mean, of_instant)
    words = {(int(i), int(j)): "not read at this time" for i, j in np.argwhere(gone)}
    kept: dict[tuple[int, int], str] = {}
    places = [dict(zip(rows.tolist(), range(len(rows)), strict=True)) for rows in (of_mean, of_instant)]
    for (row, j), why in table.reasons.items():
        place = places[j in instants].get(row)
        if place is not None:
            kept[place, j] = why
    assert table.time is not None
    stamps = pd.DatetimeIndex((np.round(times * 1e6)).astype("int64").astype("datetime64[us]"))
    return replace(
        table,
        values=taken(table.values, np.nan),
        status=taken(table.status, int(Status.MISSING)),
        time=stamps if table.time.tz is None else stamps.tz_localize("UTC").tz_convert(table.time.tz),
        labels=None if table.labels is None else [table.labels[i] for i in either.tolist()],
        reasons={**kept, **words},
        lower=taken(table.lower, np.nan),
        upper=taken(table.upper, np.nan),
        sigma=taken(table.sigma, np.nan),
        scatter=taken(table.scatter, 0.0),
        extra={name: part[either] for name, part in table.extra.items()},
        source_of=None if table.source_of is None else table.source_of[either],
        lines=None if table.lines is None else table.lines[either],
    )


# ------------------------------------------------------------------ samples in windows


def place_samples(lab: ReadingsTable, borders: Floats, interval: str | None) -> tuple[ReadingsTable, Notice | None]:
    """Put each sample at the middle of the time over which it was collected, before it is given to a window.

    Parameters
    ----------
    lab : ReadingsTable
    borders : ndarray
        Seconds at which windows begin and end.
    interval : {"start", "end", "centre"} or None
        Where the stamp of a sample stands in that time; None: it was drawn at its stamp.

    Raises
    ------
    InputError
        ``interval-unknown``: every sample stands on a border, so that its window is a matter of that.
    """
    if lab.time is None or len(lab) < 2 or not borders.size:
        return lab, None
    name = lab.sources[0] if lab.sources else "laboratory"
    if interval is not None:
        problems = Problems()
        moved = to_centre(lab.time, interval, name, problems)
        problems.raise_if_any()
        return replace(lab, time=moved), None
    drawn = seconds_of(lab.time)
    step = np.diff(drawn)
    if len(lab) >= 3 and np.abs(drawn[:, None] - borders).min(axis=1).max() <= 0.5:
        words = (
            f"all {len(lab)} samples stand on borders of windows, the first {lab.label(0)}: do their stamps stand at the start "
            "or at the end of the time they stand for? A wrong choice moves each to the window beside its own"
        )
        hint = (
            "declare it under lab:, e.g. lab: {file: lab.csv, interval: end}; centre for samples drawn at their stamps"
        )
        raise InputError(Problem("interval-unknown", words, hint, Location(file=name)))
    if len(lab) < 4 or np.ptp(step) > 0.01 * np.median(step):
        return lab, None
    words = (
        f"samples come every {np.median(step) / 60:g} min; each is taken as drawn at its stamp. If it was collected over the "
        "time before or after, write interval: end or start under lab:"
    )
    return lab, Notice("samples-at-stamps", words, Location(file=name))
