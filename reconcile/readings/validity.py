"""Tests of single signals: gap, gross range, spike, rate of change, flat line; and saturated, and off.

The list of the first five is that of the QARTOD manuals of the U.S. Integrated Ocean Observing System (names and
ideas, from memory); the limits are the user's. Each test returns a new table with statuses and a reason per cell.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, did_you_mean
from .table import ReadingsTable, Status
from .time_order import seconds_of

__all__ = ["SignalLimits", "check_signals", "run_mask"]

_OFF_WORDS = frozenset({"0", "0.0", "off", "false", "no", "stop", "stopped", "standby"})
_ON_WORDS = frozenset({"1", "1.0", "on", "true", "yes", "run", "running"})


@dataclass(frozen=True)
class SignalLimits:
    """Limits for one signal; a limit that is None is not tested.

    Attributes
    ----------
    low, high : float, optional
        Gross range: beyond it the reading is impossible.
    span : (float, float), optional
        Span of the instrument: a reading at its upper end is a lower bound of the true value, not a value, and
        one at its lower end an upper bound, unless that end is 0.
    spike : float, optional
        Largest distance from the mean of both neighbours.
    max_rate : float, optional
        Largest change per second.
    flat_count : int, optional
        Number of equal readings in a row that is a frozen signal.
    flat_tolerance : float
        Readings closer than this are equal.
    max_gap : float, optional
        Longest time between rows, in seconds, that is not told as a gap.
    """

    low: float | None = None
    high: float | None = None
    span: tuple[float, float] | None = None
    spike: float | None = None
    max_rate: float | None = None
    flat_count: int | None = None
    flat_tolerance: float = 0.0
    max_gap: float | None = None


def check_signals(table: ReadingsTable, limits: Mapping[str, SignalLimits]) -> ReadingsTable:
    """Apply the tests to every signal that has limits.

    Parameters
    ----------
    table : ReadingsTable
    limits : mapping of tag to SignalLimits

    Returns
    -------
    ReadingsTable
        Readings beyond the range, spikes and too fast changes are `Status.BAD_SOURCE`, frozen ones `Status.FLAT`,
        clipped ones `Status.SATURATED` with an interval; their values become NaN. One notice a tag and test.

    Raises
    ------
    InputError
        For a tag that is not in the table; for a test of rates in a table without time.
    """
    for tag, rule in limits.items():
        if tag not in table.columns:
            words = f"limits are given for {tag!r}, which is no column"
            raise InputError(Problem("tag-unknown", words, did_you_mean(tag, table.columns)))
        if table.time is None and (rule.max_rate is not None or rule.max_gap is not None):
            words = f"{tag} has a limit on rate or gap, but the rows have no time"
            raise InputError(Problem("time-missing", words, "add a column of stamps", Location(tag=tag)))
    seconds = None if table.time is None else seconds_of(table.time)
    marks = _Marks(table)
    for tag, rule in limits.items():
        _check_one(marks, table.index(tag), tag, rule, seconds)
    return marks.apply()


class _Marks:
    """Collects what the tests find; the first finding of a cell stands."""

    def __init__(self, table: ReadingsTable) -> None:
        self.table = table
        self.found: dict[Status, npt.NDArray[np.bool_]] = {}
        self.taken = table.status != Status.GOOD
        self.reasons: dict[tuple[int, int], str] = {}
        self.notices: list[Notice] = []
        nans = np.full(table.values.shape, np.nan)
        self.lower = nans.copy() if table.lower is None else table.lower.copy()
        self.upper = nans if table.upper is None else table.upper.copy()

    def mark(
        self, rows: npt.NDArray[np.int64], column: int, status: Status, words: str, notice: str, code: str
    ) -> None:
        rows = rows[~self.taken[rows, column]]
        if not rows.size:
            return
        mask = self.found.setdefault(status, np.zeros(self.table.values.shape, dtype=bool))
        mask[rows, column] = True
        self.taken[rows, column] = True
        self.reasons.update(dict.fromkeys(((r, column) for r in rows.tolist()), words))
        place = self.table.where(int(rows[0]), self.table.columns[column])
        self.notices.append(Notice(code, notice.format(n=rows.size), place))

    def apply(self) -> ReadingsTable:
        from dataclasses import replace

        table = self.table
        for status, mask in self.found.items():
            table = table.with_status(mask, status, drop_values=True)
        bounds = Status.SATURATED in self.found or self.table.lower is not None
        return replace(
            table,
            reasons={**table.reasons, **self.reasons},
            notices=table.notices + tuple(self.notices),
            lower=self.lower if bounds else None,
            upper=self.upper if bounds else None,
        )


def _check_one(marks: _Marks, j: int, tag: str, rule: SignalLimits, seconds: npt.NDArray[np.float64] | None) -> None:
    x = marks.table.values[:, j]
    if rule.max_gap is not None and seconds is not None:
        _gaps(marks, x, tag, rule.max_gap, seconds)
    for limit, outside, side in ((rule.low, x < _or(rule.low), "below"), (rule.high, x > _or(rule.high), "above")):
        if limit is not None:
            words = f"gross range: {side} {limit:g}"
            notice = f"{tag}: {{n}} readings {side} {limit:g}, which cannot be; not used"
            marks.mark(np.flatnonzero(outside), j, Status.BAD_SOURCE, words, notice, "gross-range")
    if rule.span is not None:
        _saturated(marks, x, j, tag, rule.span)
    if rule.flat_count is not None:
        _flat(marks, x, j, tag, rule.flat_count, rule.flat_tolerance)
    if rule.spike is not None:
        # What other tests have caught is no neighbour to be compared with.
        x = np.where(marks.taken[:, j], np.nan, x)
        near = np.full(x.size, np.nan)
        near[1:-1] = 0.5 * (x[:-2] + x[2:])
        # A neighbour of a spike is far from its neighbours' mean, too, but by half as much.
        rows = np.flatnonzero(np.abs(x - near) > rule.spike)
        rows = rows[[_highest(np.abs(x - near), int(r)) for r in rows.tolist()]] if rows.size else rows
        words = f"spike: more than {rule.spike:g} from its neighbours"
        marks.mark(
            rows, j, Status.BAD_SOURCE, words, f"{tag}: {{n}} spikes of more than {rule.spike:g}; not used", "spike"
        )
    if rule.max_rate is not None and seconds is not None:
        _too_fast(marks, x, j, tag, rule.max_rate, seconds)


def _or(limit: float | None) -> float:
    return np.nan if limit is None else limit


def _highest(distance: npt.NDArray[np.float64], row: int) -> bool:
    around = distance[max(row - 1, 0) : row + 2]
    return bool(distance[row] >= np.nanmax(around))


def _gaps(
    marks: _Marks, x: npt.NDArray[np.float64], tag: str, longest: float, seconds: npt.NDArray[np.float64]
) -> None:
    rows = np.flatnonzero(np.isfinite(x))
    steps = np.diff(seconds[rows])
    wide = np.flatnonzero(steps > longest)
    if wide.size:
        worst = int(np.argmax(steps))
        place = marks.table.where(int(rows[worst]), tag)
        words = f"{tag}: {wide.size} gaps longer than {longest:g} s; the longest is {steps[worst]:g} s"
        marks.notices.append(Notice("gap", words, place))


def _saturated(marks: _Marks, x: npt.NDArray[np.float64], j: int, tag: str, span: tuple[float, float]) -> None:
    low, high = span
    slack = 1e-9 * (high - low)
    rows = np.flatnonzero((x >= high - slack) & ~marks.taken[:, j])
    marks.lower[rows, j], marks.upper[rows, j] = high, np.inf
    notice = (
        f"{tag} is at 100 % of its span ({high:g}) for {{n}} samples: the true value is at least this; "
        "treated as a lower bound, not as a reading"
    )
    marks.mark(rows, j, Status.SATURATED, f"at the upper end of the span, {high:g}", notice, "saturated")
    if low == 0.0:
        return
    rows = np.flatnonzero((x <= low + slack) & ~marks.taken[:, j])
    marks.lower[rows, j], marks.upper[rows, j] = -np.inf, low
    notice = f"{tag} is at the lower end of its span ({low:g}) for {{n}} samples: treated as an upper bound"
    marks.mark(rows, j, Status.SATURATED, f"at the lower end of the span, {low:g}", notice, "saturated")


def _flat(marks: _Marks, x: npt.NDArray[np.float64], j: int, tag: str, count: int, tolerance: float) -> None:
    moved = ~(np.abs(np.diff(x)) <= tolerance)
    edges = np.concatenate([[0], np.flatnonzero(moved) + 1, [x.size]])
    lengths = np.diff(edges)
    runs = [(int(a), int(n)) for a, n in zip(edges[:-1], lengths, strict=True) if n >= count and np.isfinite(x[a])]
    if not runs:
        return
    rows = np.concatenate([np.arange(a, a + n) for a, n in runs])
    start, longest = max(runs, key=lambda run: run[1])
    other = _liveliest(marks, j, start, longest)
    notice = f"{tag} repeats {x[start]:.10g} for {longest} samples{other}: frozen or last good value; status 'flat'"
    if len(runs) > 1:
        notice += f" ({len(runs)} such stretches)"
    marks.mark(rows, j, Status.FLAT, f"flat line: {count} or more equal readings", notice, "flat-line")


def _liveliest(marks: _Marks, j: int, start: int, length: int) -> str:
    """Say which other signal moved most, in percent, while this one stood still."""
    table = marks.table
    best, most = "", 0.0
    for k, tag in enumerate(table.columns):
        x = table.values[start : start + length, k]
        x = x[np.isfinite(x)]
        if k != j and x.size and np.mean(x) != 0.0:
            share = float((x.max() - x.min()) / abs(np.mean(x)))
            if share > most:
                best, most = tag, share
    return f" while {best} varies by {100 * most:.2g} %" if best else ""


def _too_fast(
    marks: _Marks, x: npt.NDArray[np.float64], j: int, tag: str, limit: float, seconds: npt.NDArray[np.float64]
) -> None:
    rows = np.flatnonzero(np.isfinite(x) & ~marks.taken[:, j])
    bad = []
    last: int | None = None
    for row in rows.tolist():
        # Compared with the last reading that was believed, so that the way back from a bad one is not bad, too.
        if last is not None and abs(x[row] - x[last]) > limit * (seconds[row] - seconds[last]):
            bad.append(row)
        else:
            last = row
    words = f"rate of change: more than {limit:g} per second"
    notice = f"{tag}: {{n}} readings change by more than {limit:g} per second; not used"
    marks.mark(np.array(bad, dtype=np.int64), j, Status.BAD_SOURCE, words, notice, "rate-of-change")


def run_mask(table: ReadingsTable, column: str, *, on_above: float | None = None) -> npt.NDArray[np.bool_]:
    """Return (N,) bool, True where a flag says that the plant runs.

    Parameters
    ----------
    table : ReadingsTable
    column : str
        A kept column of flags (0/1, on/off, ...), or a tag with `on_above`.
    on_above : float, optional
        Running means above this.

    Raises
    ------
    InputError
        For a missing column, or a word that is neither on nor off.
    """
    if column in table.extra:
        flags: Sequence[str] = [str(f).strip().casefold() for f in table.extra[column]]
        if on_above is None:
            for row, flag in enumerate(flags):
                if flag not in _OFF_WORDS | _ON_WORDS:
                    words = f"column {column!r}: {flag!r} is neither on nor off"
                    hint = "write 1 or 0, or declare on_above for a number"
                    raise InputError(Problem("run-flag", words, hint, table.where(row, column)))
            return np.array([f in _ON_WORDS for f in flags])
        try:
            return np.array([float(f) > on_above for f in flags])
        except ValueError as error:
            raise InputError(Problem("run-flag", f"column {column!r}: {error}", "write numbers")) from None
    if column in table.columns:
        return table.column(column) > (0.5 if on_above is None else on_above)
    known = [*table.extra, *table.columns]
    words = f"there is no column {column!r} that says whether the plant runs"
    raise InputError(Problem("column-missing", words, did_you_mean(column, known) or "list it under keep"))
