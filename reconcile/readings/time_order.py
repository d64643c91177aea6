"""Stamps in a row: rising, each once, at a regular step, and where in its interval each stands."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..errors import Location, Notice, Problems
from .options import ReadOptions

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["order_rows", "seconds_of", "to_centre"]


def seconds_of(index: pd.DatetimeIndex) -> npt.NDArray[np.float64]:
    """Return the (N,) seconds since 1970-01-01 (UTC, or the local clock of stamps without zone)."""
    return np.asarray(index.as_unit("us").asi8, dtype=np.float64) / 1e6


def order_rows(
    index: pd.DatetimeIndex, options: ReadOptions, where: Callable[[int], Location], problems: Problems
) -> tuple[npt.NDArray[np.int64] | None, tuple[Notice, ...]]:
    """Check that stamps rise, each once.

    Returns
    -------
    rows : (M,) int64 or None
        Rows to take, in order, where that is not simply all of them.
    notices : tuple of Notice
        Rows sorted or left out; steps that are not regular.
    """
    stamps = np.asarray(index.asi8)
    notices: list[Notice] = []
    rows = np.arange(stamps.size)
    if options.sort and stamps.size and np.any(np.diff(stamps) < 0):
        rows = np.argsort(stamps, kind="stable")
        notices.append(
            Notice("rows-sorted", f"{int(np.sum(np.diff(stamps) < 0))} steps back in time: rows were sorted")
        )
    step = np.diff(stamps[rows])
    same = np.flatnonzero(step == 0)
    back = np.flatnonzero(step < 0)
    if same.size and options.duplicates != "refuse" and not back.size:
        drop = same + 1 if options.duplicates == "first" else same
        rows = np.delete(rows, drop)
        notices.append(
            Notice("duplicates-dropped", f"{same.size} rows repeat a stamp: the {options.duplicates} one is kept")
        )
    elif same.size or back.size:
        _complain_order(index, same, back, options, where, problems)
        return None, ()
    notices.extend(_regular(index[rows]))
    changed = rows.size != stamps.size or bool(np.any(rows != np.arange(stamps.size)))
    return (rows if changed else None), tuple(notices)


def _complain_order(
    index: pd.DatetimeIndex,
    same: npt.NDArray[np.int64],
    back: npt.NDArray[np.int64],
    options: ReadOptions,
    where: Callable[[int], Location],
    problems: Problems,
) -> None:
    stamps = index.asi8
    if options.sort:
        back = np.flatnonzero(np.diff(stamps) < 0)
    if back.size and index.tz is None and _like_autumn(index, back):
        row = int(back[0]) + 1
        first, last = index[row], index[row - 1]
        problems.add(
            "repeated-hour",
            f"{first:%H:%M} to {last:%H:%M} comes twice on {first:%Y-%m-%d}: local time with a change of the clocks?",
            "declare zone = Europe/... (or your own), or repeated_hour with it for the half that is in the file",
            where(row),
        )
        return
    if back.size and not options.sort:
        row = int(back[0]) + 1
        if back.size == stamps.size - 1 and not same.size:
            words, hint = "the newest row comes first", "declare sort = true"
        else:
            words = f"row {row + 1} is earlier than row {row} ({index[row]} after {index[row - 1]})"
            hint = "two files appended? Split them, or declare sort = true"
            if back.size > 1:
                words += f"; {back.size} such steps in all"
        problems.add("time-order", words, hint, where(row))
    if same.size:
        row = int(same[0]) + 1
        problems.add(
            "duplicate-stamp",
            f"rows {row} and {row + 1} have the same stamp {index[row]}"
            + (f"; {same.size} such pairs in all" if same.size > 1 else ""),
            "remove one, or declare duplicates = first or last",
            where(row),
        )


def _like_autumn(index: pd.DatetimeIndex, back: npt.NDArray[np.int64]) -> bool:
    """Tell the one step back by just under an hour that a clock makes in autumn."""
    if back.size != 1 or len(index) < 4:
        return False
    stamps = seconds_of(index) / 60.0
    step = float(np.median(np.diff(stamps)))
    fall = float(stamps[back[0] + 1] - stamps[back[0]])
    return step > 0 and abs(fall + 60.0 - step) < 1e-6 and index[int(back[0]) + 1].month in (9, 10, 11, 3, 4)


def _regular(index: pd.DatetimeIndex) -> list[Notice]:
    if len(index) < 4:
        return []
    step = np.diff(seconds_of(index))
    usual = float(np.median(step))
    odd = np.abs(step - usual) > 0.01 * usual
    if not odd.any():
        return []
    longest = int(np.argmax(step))
    words = (
        f"{int(odd.sum())} of {step.size} steps are not the usual {usual:g} s; "
        f"the longest is {step[longest]:g} s, after {index[longest]}"
    )
    return [Notice("irregular-step", words)]


def to_centre(
    index: pd.DatetimeIndex, interval: str | None, source: str, problems: Problems, *, needed: bool = True
) -> pd.DatetimeIndex | None:
    """Move stamps of interval means to the centre of their interval.

    Parameters
    ----------
    index : DatetimeIndex of length N >= 2
    interval : {"start", "end", "centre"}, optional
        Where each stamp stands; None is refused when `needed`.
    source : str
        Name for the message.
    needed : bool
        False: stamps of unknown convention are left as they are.
    """
    if interval is None:
        if needed:
            problems.add(
                "interval-unknown",
                f"{source}: do the stamps stand at the start or at the end of their interval? "
                "A wrong choice shifts the readings by one interval",
                "declare interval = start, end or centre",
                Location(file=source),
            )
            return None
        return index
    if interval == "centre" or len(index) < 2:
        return index
    step = (index[1:] - index[:-1]).to_series().median()
    return index + step / 2 if interval == "start" else index - step / 2
