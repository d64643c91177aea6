"""From samples to windows: means, counter and level differences, how sure each is, and why a window is left out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Problem, Problems, did_you_mean
from .counters import CounterRule, CounterStep
from .levels import LevelTable
from .table import ReadingsTable
from .time_order import seconds_of
from .window_work import WindowWork

__all__ = ["LeftOut", "WindowRules", "Windows", "ZeroCheck", "make_windows", "sigma_of_mean"]


@dataclass(frozen=True)
class WindowRules:
    """How windows are cut and judged.

    Attributes
    ----------
    duration : float, optional
        Seconds a window; windows start at round times of the day if they fit into it.
    count : int, optional
        Rows a window.
    column : str, optional
        Kept column whose value names the window.
    spans : sequence of (name, start, end), optional
        Stamps of each window; its end is not part of it. Exactly one of the four is needed.
    counters : mapping of tag to CounterRule
        These become differences, not means.
    levels : mapping of tag to LevelTable
        These become changes of what the tank holds.
    level_sigma : mapping of tag to float
        Standard uncertainty of one reading of a level.
    held : sequence of str
        Columns that tell what is held at one instant: the reading at an edge of the window stands for it, no mean and no
        difference; levels among them become contents.
    held_at_end : bool
        Whether that edge is the end of the window (the row behind it), else its start.
    per : float or mapping of tag to float, optional
        Seconds of the unit of time in which differences are given as rates (3600: per hour); None: amounts.
    steady : sequence of str, optional
        Tags that must be steady; None: all that are averaged.
    slope_level : float, optional
        A slope less probable than this by chance is not steady; None: not tested.
    r_level : float, optional
        Level of the ratio-of-variances test; None: not tested.
    tolerance : mapping of tag to float
        Change over a window that does not matter, however significant.
    keep_unsteady : bool
        Keep such windows (an inventory term takes up the change).
    required : sequence of str
        Tags without which a window is left out.
    least : float
        Share of the rows that must be good for a mean.
    hold_up : float, optional
        Seconds that material stays in the plant; shorter windows get a notice.
    calibrations : mapping of tag to sequence of stamps
        Times at which a meter was recalibrated.
    """

    duration: float | None = None
    count: int | None = None
    column: str | None = None
    spans: Sequence[tuple[str, str, str]] | None = None
    counters: Mapping[str, CounterRule] = field(default_factory=dict)
    levels: Mapping[str, LevelTable] = field(default_factory=dict)
    level_sigma: Mapping[str, float] = field(default_factory=dict)
    held: Sequence[str] = ()
    held_at_end: bool = False
    per: float | Mapping[str, float] | None = None
    steady: Sequence[str] | None = None
    slope_level: float | None = 0.001
    r_level: float | None = None
    tolerance: Mapping[str, float] = field(default_factory=dict)
    keep_unsteady: bool = False
    required: Sequence[str] = ()
    least: float = 0.5
    hold_up: float | None = None
    calibrations: Mapping[str, Sequence[str]] = field(default_factory=dict)


@dataclass(frozen=True)
class LeftOut:
    """A window that no balance is made of: its number from 0, its name, a code, and the reason in words."""

    window: int
    label: str
    code: str
    reason: str


@dataclass(frozen=True)
class ZeroCheck:
    """What a meter shows while the plant is off: window, tag, mean and sigma of the mean from scatter."""

    window: int
    label: str
    tag: str
    mean: float
    sigma: float


@dataclass(frozen=True)
class Windows:
    """Windows of a table of readings.

    Attributes
    ----------
    table : ReadingsTable
        A row a window, all windows, those left out included; time is the middle of the window.
    used : (W,) bool
        False for windows left out.
    sigma : (W, k) float64
        The part of the sigma that averages: of a mean, from its scatter and the effective number of samples; of a
        difference, from the readings at both ends. What does not average (calibration) is not in it.
    effective : (W, k) float64
        Effective number of samples behind each mean; NaN for differences.
    bounds : (W, 2) int64
        First row, and one past the last row, of each window.
    left_out : tuple of LeftOut
    zero_checks : tuple of ZeroCheck
    segments : mapping of tag to (W,) int64
        Number of recalibrations before the window; windows of different segments are not one series.
    guessed : (W, k) float64
        The part of `sigma` that comes from intervals of a counter that were estimated; 0 elsewhere.
    counter_steps : mapping of tag to tuple of CounterStep
        Every decision about a counter.
    """

    table: ReadingsTable
    used: npt.NDArray[np.bool_]
    sigma: npt.NDArray[np.float64]
    effective: npt.NDArray[np.float64]
    bounds: npt.NDArray[np.int64]
    left_out: tuple[LeftOut, ...] = ()
    zero_checks: tuple[ZeroCheck, ...] = ()
    segments: Mapping[str, npt.NDArray[np.int64]] = field(default_factory=dict)
    guessed: npt.NDArray[np.float64] = field(default_factory=lambda: np.zeros((0, 0)))
    counter_steps: Mapping[str, tuple[CounterStep, ...]] = field(default_factory=dict)

    def kept(self) -> ReadingsTable:
        """Return the table of the windows that are used."""
        return self.table.take(self.used)


def sigma_of_mean(
    averaging: npt.ArrayLike, constant: npt.ArrayLike, effective: npt.ArrayLike
) -> npt.NDArray[np.float64]:
    """Return the sigma of a mean: ``sqrt(averaging^2 / n_eff + constant^2)``.

    Parameters
    ----------
    averaging : array_like
        Standard uncertainty of one reading that is independent from reading to reading.
    constant : array_like
        Standard uncertainty that all readings of the window share (calibration, installation); it does not average.
    effective : array_like
        Effective number of samples.
    """
    a, c, n = (np.asarray(v, dtype=np.float64) for v in (averaging, constant, effective))
    return np.asarray(np.sqrt(a**2 / np.maximum(n, 1.0) + c**2))


def make_windows(
    table: ReadingsTable,
    rules: WindowRules,
    *,
    running: npt.NDArray[np.bool_] | None = None,
    witness: ReadingsTable | None = None,
) -> Windows:
    """Cut a table into windows.

    Parameters
    ----------
    table : ReadingsTable
    rules : WindowRules
    running : (N,) bool, optional
        False while the plant is off: such windows become zero checks.
    witness : ReadingsTable, optional
        The same rows before readings were moved by their dead times; a window in which those move is not steady
        either, since the plant was not.

    Raises
    ------
    InputError
        ``no-window-left`` with the counts of reasons; rules that do not fit the table.
    """
    _check(table, rules)
    bounds, labels = _cut(table, rules)
    work = WindowWork(table, rules, bounds, labels, witness)
    for w in range(len(bounds)):
        state = work.state(w, running)
        work.fill(w, off=state == "off")
        work.judge(w, state)
    return work.finish()


def _check(table: ReadingsTable, rules: WindowRules) -> None:
    ways = [n for n in ("duration", "count", "column", "spans") if getattr(rules, n) is not None]
    if len(ways) != 1:
        words = f"windows are cut by duration, by count, by a column or by spans; {' and '.join(ways) or 'none'} given"
        raise InputError(Problem("window-rule", words, "give exactly one"))
    if (rules.duration is not None and not rules.duration > 0) or (rules.count is not None and not rules.count > 0):
        raise InputError(Problem("window-rule", "a window must be longer than nothing", "give a positive number"))
    if (rules.duration is not None or rules.spans is not None) and table.time is None:
        words = "windows of a duration need stamps, and the rows have none"
        raise InputError(Problem("time-missing", words, "add a column of stamps, or cut by count"))
    if rules.column is not None and rules.column not in table.extra:
        hint = did_you_mean(rules.column, table.extra) or "list it under keep when the file is read"
        raise InputError(Problem("column-missing", f"there is no column {rules.column!r} to cut by", hint))
    named = [
        *rules.counters,
        *rules.levels,
        *rules.held,
        *rules.tolerance,
        *rules.required,
        *(rules.steady or ()),
        *rules.calibrations,
    ]
    for tag in named:
        if tag not in table.columns:
            words = f"a rule names {tag!r}, which is no column"
            raise InputError(Problem("tag-unknown", words, did_you_mean(tag, table.columns)))
    if rules.per is not None and table.time is None:
        raise InputError(Problem("time-missing", "rates need stamps, and the rows have none", "leave per out"))


def _cut(table: ReadingsTable, rules: WindowRules) -> tuple[npt.NDArray[np.int64], list[str]]:
    n = len(table)
    if rules.column is not None:
        names = [str(v) for v in table.extra[rules.column]]
        changes = np.flatnonzero([i == 0 or names[i] != names[i - 1] for i in range(n)])
        edges = np.append(changes, n)
        return np.column_stack([edges[:-1], edges[1:]]), [names[i] for i in changes.tolist()]
    if rules.count is not None:
        edges = np.append(np.arange(0, n, rules.count), n)
        return np.column_stack([edges[:-1], edges[1:]]), [str(i + 1) for i in range(edges.size - 1)]
    assert table.time is not None
    seconds = seconds_of(table.time)
    if rules.spans is not None:
        return _spans(table, rules.spans, seconds)
    assert rules.duration is not None
    # Round times of the user's own clock, where the duration divides the day.
    clock = table.time.tz_localize(None) if table.time.tz is not None else table.time
    origin = seconds[0] if n else 0.0
    if n and 86400.0 % rules.duration == 0.0:
        origin -= seconds_of(clock)[0] % rules.duration
    number = np.floor((seconds - origin) / rules.duration + 1e-9).astype(np.int64)
    starts = np.flatnonzero(np.diff(number, prepend=number[0] - 1 if n else 0))
    edges = np.append(starts, n)
    return np.column_stack([edges[:-1], edges[1:]]), [str(table.time[i]) for i in starts.tolist()]


def _spans(
    table: ReadingsTable, spans: Sequence[tuple[str, str, str]], seconds: npt.NDArray[np.float64]
) -> tuple[npt.NDArray[np.int64], list[str]]:
    import pandas as pd

    assert table.time is not None
    problems = Problems(table.sources[0] if table.sources else None)
    bounds = []
    for name, *ends in spans:
        stamps = []
        for text in ends:
            try:
                stamp = pd.Timestamp(text)
            except ValueError:
                problems.add("stamp-unreadable", f"window {name}: {text!r} is no stamp", "write e.g. 2025-05-01 14:00")
                continue
            if (stamp.tzinfo is None) != (table.time.tz is None):
                stamp = stamp.tz_localize(table.time.tz) if stamp.tzinfo is None else stamp.tz_localize(None)
            stamps.append(stamp)
        if len(stamps) < 2:
            continue
        first, last = np.searchsorted(seconds, seconds_of(pd.DatetimeIndex(stamps)) - 1e-6)
        if last <= first:
            words = f"window {name} ({ends[0]} to {ends[1]}) holds no row; the record runs {table.time[0]} to {table.time[-1]}"
            problems.add("window-empty", words, "correct start and end")
        bounds.append((int(first), int(last)))
    problems.raise_if_any()
    return np.array(bounds, dtype=np.int64), [name for name, _, _ in spans]
