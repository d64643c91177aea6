"""What is done to the log before windows: what single readings cannot be, what lags, what was calculated."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, did_you_mean
from ..readings.dead_time import estimate_dead_time, shift_times
from ..readings.derived import find_derived, mark_derived
from ..readings.table import ReadingsTable
from ..readings.time_order import seconds_of
from ..readings.validity import SignalLimits, check_signals, run_mask
from .decisions import Entry, of_notice
from .spec import CampaignSpec, Condition

__all__ = ["Signals"]

Array = npt.NDArray[np.float64]
_DETECTION_ROWS = 1000


class Signals:
    """A log on its way, and what was decided so far.

    Attributes
    ----------
    spec : CampaignSpec
    table : ReadingsTable
        As it stands after the steps taken.
    unmoved : ReadingsTable or None
        As it stood before dead times were taken back.
    log : list of Entry
    """

    def __init__(self, spec: CampaignSpec, table: ReadingsTable, tags: Sequence[str]) -> None:
        self.spec, self.table, self.tags = spec, table, tuple(tags)
        self.unmoved: ReadingsTable | None = None
        self.log: list[Entry] = []
        self.told = 0

    # ---------------------------------------------------------------- telling

    def tell_new(self, skip: tuple[str, ...] = ()) -> None:
        """Log the notices that have come since the last time; those of some codes have entries of their own."""
        for notice in self.table.notices[self.told :]:
            if not skip or not notice.code.startswith(skip):
                self.log.append(of_notice(notice))
        self.told = len(self.table.notices)

    def add(self, notice: Notice, **more: Any) -> None:
        """Tell and log something."""
        self.table = replace(self.table, notices=(*self.table.notices, notice))
        self.told = len(self.table.notices)
        self.log.append(replace(of_notice(notice), **more))

    # ---------------------------------------------------------------- conditions

    def holds(self, condition: Condition) -> npt.NDArray[np.bool_]:
        """Whether a condition holds in each row; False where its reading is missing."""
        table, name = self.table, condition.column
        if name not in table.extra and name not in table.columns:
            hint = did_you_mean(name, [*table.extra, *table.columns]) or "name a column of the log"
            words = f"the case names a column {name!r}, which the log does not have"
            raise InputError(
                Problem("column-missing", words, hint, Location(table.sources[0] if table.sources else None))
            )
        if condition.sign == "=":
            cells = table.extra[name] if name in table.extra else table.column(name)
            wanted = condition.value.casefold()
            return np.array([str(c).strip().casefold() == wanted or _equal(c, wanted) for c in cells], dtype=bool)
        if condition.sign == "<":
            return np.asarray(
                _numbers(table, name) < float(condition.value),
                dtype=bool,
            )
        return run_mask(table, name, on_above=float(condition.value) if condition.sign == ">" else None)

    def running(self) -> npt.NDArray[np.bool_] | None:
        """Whether the plant runs, row by row; None where the case does not say when."""
        windows = self.spec.windows
        return None if windows is None or windows.runs_when is None else self.holds(windows.runs_when)

    # ---------------------------------------------------------------- steps

    def check(self) -> None:
        """Leave out what single readings cannot be."""
        plain = [t for t in self.table.columns if self.spec.of(t).counter is None]
        limits = {t: self.spec.of(t).limits for t in plain if self.spec.of(t).limits != SignalLimits()}
        if limits:
            self.table = check_signals(self.table, limits)
            self.tell_new()

    def take_back_lags(self) -> None:
        """Move readings back by their dead times, given or found."""
        lags = {}
        for tag, rule in self.spec.readings.items():
            if tag not in self.table.columns:
                continue
            if rule.lag:
                lags[tag] = rule.lag
            elif rule.lag_range is not None:
                lags[tag] = self._find_lag(tag, rule.behind, rule.lag_range)
        if lags:
            self.unmoved = self.table
            self.table = shift_times(self.table, lags)

    def _find_lag(self, tag: str, behind: str, wanted: tuple[float, float]) -> float:
        table = self.table
        if table.time is None:
            raise InputError(Problem("time-missing", f"the lag of {tag} needs stamps", "add a column of stamps"))
        if behind not in table.columns:
            words = f"the lag of {tag} is sought behind {behind!r}, which is no column of the log"
            raise InputError(Problem("tag-unknown", words, did_you_mean(behind, table.columns)))
        seconds = seconds_of(table.time)
        step = float(np.median(np.diff(seconds))) if len(seconds) > 1 else 0.0
        grid = np.arange(seconds[0], seconds[-1] + 0.5 * step, step) if step > 0 else seconds
        x, y = (np.interp(grid, seconds[g], table.column(t)[g]) if (g := table.usable[:, table.index(t)]).any()
                else np.full(grid.size, np.nan) for t in (behind, tag))  # fmt: skip
        first = round(wanted[0] / step) if step > 0 else 0
        last = round(wanted[1] / step) if step > 0 else 0
        # The range begins at `first`: y is moved so far ahead, and what is found counts from there.
        y = np.concatenate([y[first:], np.full(first, np.nan)])
        found = estimate_dead_time(x, y, max(last - first, 0), step=step / 60.0, names=(behind, tag), unit="min")
        lag, low, high = (v + first * step / 60.0 for v in (found.lag, found.low, found.high))
        for notice in found.notices:
            self.add(replace(notice, where=replace(notice.where, tag=tag)))
        words = (
            f"{tag} lags {lag:.3g} min behind {behind} (95 % {low:.3g} to {high:.3g} min), and was moved back by it; "
            f"root mean square of the difference {found.before:.3g} before, {found.after:.3g} after"
        )
        self.add(
            Notice("lag-found", words, Location(tag=tag)),
            amount=lag,
            sigma=(high - low) / 3.92,
            unit="min",
            otherwise=0.0,
        )
        return lag * 60.0

    def leave_calculated(self) -> None:
        """Leave out columns that were calculated from others, declared or found."""
        stated = [t for t in self.table.columns if self.spec.of(t).calculated]
        if stated:
            self.table = mark_derived(self.table, stated)
            for tag in stated:
                self.add(Notice("reading-calculated", f"{tag} is declared as calculated: it adds no check, and is not used",
                                 Location(tag=tag)))  # fmt: skip
        plain = [
            t
            for t in self.table.columns
            if t in self.tags and (r := self.spec.of(t)).counter is None and r.level is None and t not in stated
        ]
        if len(self.table) < 8 or len(plain) < 2:
            return
        some = self.table.select(plain).take(np.arange(min(len(self.table), _DETECTION_ROWS)))
        found = [d for d in find_derived(some) if self.spec.of(d.tag).calculated is None]
        if not found:
            return
        # A copy or a sum would pass for a check of the balances. What is proportional, or a product, may read another
        # quantity of the same source (two rates from one dilution): told, and used.
        false_checks = [d for d in found if d.kind in ("copy", "sum")]
        self.table = mark_derived(self.table, false_checks)
        for d in found:
            way = (
                f"It adds no check, and is not used; write calculated: false under reading: of {d.tag} if an instrument "
                "reads it"
                if d in false_checks
                else f"If so, it adds no check: write calculated: true under reading: of {d.tag}, or false to keep this quiet"
            )
            words = d.notice.message.replace("It adds no check; declare it as calculated, or leave it out", way)
            self.add(replace(d.notice, message=words))


def _equal(cell: Any, wanted: str) -> bool:
    try:
        return float(cell) == float(wanted)
    except ValueError:
        return False


def _numbers(table: ReadingsTable, name: str) -> Array:
    if name in table.columns:
        return table.column(name)
    try:
        return np.array([float(c) for c in table.extra[name]])
    except ValueError as error:
        raise InputError(Problem("run-flag", f"column {name!r}: {error}", "write numbers")) from None
