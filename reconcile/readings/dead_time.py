"""How long a signal lags behind another, and readings moved back by it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, did_you_mean
from .steady import autocorrelation_time
from .table import ReadingsTable, Status
from .time_order import seconds_of

__all__ = ["DeadTime", "estimate_dead_time", "shift_times"]


@dataclass(frozen=True)
class DeadTime:
    """A dead time found from two signals.

    Attributes
    ----------
    lag : float
        Best lag, in the unit of `step`; y follows x.
    low, high : float
        About 95 % interval (profile likelihood), no narrower than one step to each side.
    gain, offset : float
        Of the line ``y = offset + gain x(t - lag)``.
    before, after : float
        Root mean square of y minus x without shift, and minus the shifted line.
    notices : tuple of Notice
    """

    lag: float
    low: float
    high: float
    gain: float
    offset: float
    before: float
    after: float
    notices: tuple[Notice, ...] = ()


def estimate_dead_time(
    x: npt.NDArray[np.float64],
    y: npt.NDArray[np.float64],
    max_lag: int,
    *,
    step: float = 1.0,
    names: tuple[str, str] = ("x", "y"),
    unit: str = "",
) -> DeadTime:
    """Find the lag with which a line in x follows y best, by least squares.

    For each lag of 0..max_lag steps the line ``y = a + b x(t - lag)`` is fitted to the same rows; the interval holds
    the lags with ``n_eff log(RSS / RSS_min) <= 3.84`` (95 % of chi-squared with 1 degree of freedom), ``n_eff``
    being the number of rows over the autocorrelation time of the residuals.

    Parameters
    ----------
    x, y : (n,) float64
        At equal steps; NaN pairs are left out.
    max_lag : int
        Largest lag tried, in steps.
    step : float
        Length of a step, in the unit the lag is wanted in.
    names : (str, str)
        For messages.
    unit : str
        For messages.

    Raises
    ------
    InputError
        ``dead-time``: too few rows, or an x that does not move.
    """
    n = x.size
    if max_lag < 1 or n - max_lag < 10:
        words = f"{n} rows are too few to try {max_lag} lags"
        raise InputError(Problem("dead-time", words, "use a longer record or a smaller range"))
    rows = np.arange(max_lag, n)
    shifted = np.stack([x[rows - k] for k in range(max_lag + 1)])
    good = np.isfinite(shifted).all(axis=0) & np.isfinite(y[rows])
    shifted, target = shifted[:, good], y[rows][good]
    if target.size < 10 or float(np.ptp(shifted)) == 0.0:
        words = f"{names[0]} does not move, or too few rows have both readings"
        raise InputError(Problem("dead-time", words, "use a stretch in which it changes"))
    centred = shifted - shifted.mean(axis=1, keepdims=True)
    scatter = np.einsum("ij,ij->i", centred, centred)
    cross = centred @ (target - target.mean())
    gain = np.divide(cross, scatter, out=np.zeros_like(cross), where=scatter > 0)
    rss = np.maximum(float(np.sum((target - target.mean()) ** 2)) - gain * cross, 0.0)
    best = int(np.argmin(rss))
    residual = target - target.mean() - gain[best] * centred[best]
    floor = 1e-20 * max(float(target @ target), 1e-300)
    n_eff = target.size / autocorrelation_time(residual)
    inside = n_eff * np.log((rss + floor) / (rss[best] + floor)) <= 3.84
    lag = best + _vertex(rss, best)
    low = min(float(np.flatnonzero(inside)[0]), lag - 1.0)
    high = max(float(np.flatnonzero(inside)[-1]), lag + 1.0)
    notices = []
    if best == max_lag:
        words = (
            f"the best dead time of {names[1]} behind {names[0]} is {best * step:g}{_spaced(unit)}, the largest allowed; "
            "widen the range or give it"
        )
        notices.append(Notice("lag-at-end", words, Location(tag=names[1])))
    line = target.mean() - gain[best] * shifted[best].mean()
    return DeadTime(
        lag * step,
        max(low, 0.0) * step,
        high * step,
        float(gain[best]),
        float(line),
        float(np.sqrt(np.mean((target - shifted[0]) ** 2))),
        float(np.sqrt(rss[best] / target.size)),
        tuple(notices),
    )


def _spaced(unit: str) -> str:
    return f" {unit}" if unit else ""


def _vertex(rss: npt.NDArray[np.float64], best: int) -> float:
    """Offset of the vertex of the parabola through the best lag and its neighbours."""
    if not 0 < best < rss.size - 1:
        return 0.0
    left, mid, right = rss[best - 1 : best + 2].tolist()
    bend = left - 2.0 * mid + right
    return float(np.clip(0.5 * (left - right) / bend, -0.5, 0.5)) if bend > 0 else 0.0


def shift_times(table: ReadingsTable, dead_times: Mapping[str, float]) -> ReadingsTable:
    """Move readings back by the dead time of their tag.

    A tag with a dead time of 480 s gets, at each row, what it read 480 s later; between rows by a straight line.
    Rows at the end of the record have no such reading.

    Parameters
    ----------
    table : ReadingsTable
        With times.
    dead_times : mapping of tag to seconds

    Raises
    ------
    InputError
        For an unknown tag or a table without time.
    """
    if table.time is None:
        raise InputError(Problem("time-missing", "dead times need stamps, and the rows have none", "add a time column"))
    seconds = seconds_of(table.time)
    values, status = table.values.copy(), table.status.copy()
    lower = None if table.lower is None else table.lower.copy()
    upper = None if table.upper is None else table.upper.copy()
    reasons = dict(table.reasons)
    for tag, lag in dead_times.items():
        if tag not in table.columns:
            words = f"a dead time is given for {tag!r}, which is no column"
            raise InputError(Problem("tag-unknown", words, did_you_mean(tag, table.columns)))
        j = table.index(tag)
        wanted = seconds + lag
        right = np.searchsorted(seconds, wanted - 1e-6)
        inside = (right < seconds.size) & (wanted >= seconds[0] - 1e-6)
        right = np.clip(right, 0, seconds.size - 1)
        exact = inside & (np.abs(seconds[right] - wanted) <= 1e-6)
        left = np.clip(right - 1, 0, None)
        span = seconds[right] - seconds[left]
        share = np.divide(wanted - seconds[left], span, out=np.zeros_like(wanted), where=span > 0)
        between = values[left, j] + share * (values[right, j] - values[left, j])
        old_values, old_status = table.values[:, j], table.status[:, j]
        both = inside & ~exact & table.usable[left, j] & table.usable[right, j]
        values[:, j] = np.where(exact, old_values[right], np.where(both, between, np.nan))
        missing = np.int8(Status.MISSING)
        status[:, j] = np.where(exact, old_status[right], np.where(both, np.int8(Status.GOOD), missing))
        for bound, source in ((lower, table.lower), (upper, table.upper)):
            if bound is not None and source is not None:
                bound[:, j] = np.where(exact, source[right, j], np.nan)
        reasons = {place: words for place, words in reasons.items() if place[1] != j}
        for row in np.flatnonzero(exact).tolist():
            words_of = table.reasons.get((int(right[row]), j))
            if words_of is not None:
                reasons[row, j] = words_of
        for row in np.flatnonzero(~inside).tolist():
            reasons[row, j] = "the record ends before the dead time is over"
    return replace(table, values=values, status=status, lower=lower, upper=upper, reasons=reasons)
