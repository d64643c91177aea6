"""From the raw log to snapshots: each step of the case's plan in turn, and what each decided.

The order is that of the matter: what single readings cannot be, what lags, what was calculated; then laboratory
values; then windows; last, what is known only as an interval.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from datetime import datetime
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, did_you_mean
from ..readings.dead_time import estimate_dead_time, shift_times
from ..readings.derived import find_derived, mark_derived
from ..readings.lab import join_lab
from ..readings.table import ReadingsTable, Status
from ..readings.time_order import seconds_of
from ..readings.validity import SignalLimits, check_signals, run_mask
from ..readings.windows import LeftOut, WindowRules, Windows, ZeroCheck, make_windows, sigma_of_mean
from .decisions import Entry, in_words_of_the_case, of_counter, of_notice
from .line_ups import line_up_of
from .spec import CampaignSpec, Condition, WindowSpec

__all__ = ["Alternative", "Interval", "Prepared", "prepare"]

Array = npt.NDArray[np.float64]
_DETECTION_ROWS = 5000


@dataclass(frozen=True)
class Interval:
    """A cell of which only an interval is known; `upper` may be inf, `lower` -inf: then nothing is entered."""

    snapshot: int
    tag: str
    lower: float
    upper: float
    status: Status

    @property
    def closed(self) -> bool:
        """Whether both ends are known."""
        return bool(np.isfinite(self.lower) and np.isfinite(self.upper))

    @property
    def middle(self) -> float:
        """Middle of the interval."""
        return 0.5 * (self.lower + self.upper)

    @property
    def sigma(self) -> float:
        """Standard uncertainty if nothing is known but the ends: rectangular, (b - a)/sqrt(12) (GUM 4.3.7)."""
        return (self.upper - self.lower) / np.sqrt(12.0)


@dataclass(frozen=True)
class Alternative:
    """Another way to read the log in one cell, and the value that it would have given."""

    snapshot: int
    tag: str
    rule: str
    value: float
    scatter: float
    words: str


@dataclass(frozen=True)
class Prepared:
    """Snapshots ready for the balances.

    Attributes
    ----------
    table : ReadingsTable
        A row a snapshot, those left out included; columns are the meters, in their units; with `sigma` and `scatter`.
    left_out : mapping of snapshot to LeftOut
    spans : tuple of (start, end)
        First and last stamp of each snapshot, as text; the same where it is one row; empty without stamps.
    hashes : tuple of str
        Of what each snapshot is made of.
    log : tuple of Entry
    zero_checks : tuple of ZeroCheck
    intervals : tuple of Interval
    alternatives : tuple of Alternative
    segments : mapping of tag to (W,) int64
        Number of recalibrations before each snapshot.
    closed : mapping of snapshot to tuple of str
        Streams that a line-up closes there.
    line_ups : mapping of snapshot to str
        Names of the line-ups that hold there.
    """

    table: ReadingsTable
    left_out: Mapping[int, LeftOut] = field(default_factory=dict)
    spans: tuple[tuple[str, str], ...] = ()
    hashes: tuple[str, ...] = ()
    log: tuple[Entry, ...] = ()
    zero_checks: tuple[ZeroCheck, ...] = ()
    intervals: tuple[Interval, ...] = ()
    alternatives: tuple[Alternative, ...] = ()
    segments: Mapping[str, npt.NDArray[np.int64]] = field(default_factory=dict)
    closed: Mapping[int, tuple[str, ...]] = field(default_factory=dict)
    line_ups: Mapping[int, str] = field(default_factory=dict)

    @property
    def used(self) -> npt.NDArray[np.bool_]:
        """Snapshots that balances are made of, shape (W,)."""
        out = np.ones(len(self.table), dtype=bool)
        out[list(self.left_out)] = False
        return out

    @property
    def estimated(self) -> tuple[tuple[int, int], ...]:
        """Cells (snapshot, column) that count as readings although nobody read them; intervals are not among them."""
        entered = {(c.snapshot, self.table.index(c.tag)) for c in self.intervals}
        cells = zip(*np.nonzero(self.table.status == Status.ESTIMATED), strict=True)
        return tuple((int(i), int(j)) for i, j in cells if (int(i), int(j)) not in entered)


def prepare(
    spec: CampaignSpec,
    table: ReadingsTable,
    tags: Sequence[str],
    *,
    lab: ReadingsTable | None = None,
    units: Mapping[str, str] | None = None,
    file: str | None = None,
) -> Prepared:
    """Turn a log into snapshots.

    Parameters
    ----------
    spec : CampaignSpec
    table : ReadingsTable
        The log; its columns are tags, those of the laboratory perhaps missing.
    tags : sequence of str
        Meters of the case, in the order wanted.
    lab : ReadingsTable, optional
        Samples with their values, where they are not in the log.
    units : mapping of tag to str, optional
        Units of the columns, for messages; what the log states goes before.
    file : str, optional
        The case file, for messages without a place of their own.

    Returns
    -------
    Prepared

    Raises
    ------
    InputError
        With the names that the case uses.
    """
    try:
        told = replace(table, units={**{t: u for t, u in (units or {}).items() if t in table.columns}, **table.units})
        return _Preparation(spec, told, tags, lab).run()
    except InputError as error:
        raise in_words_of_the_case(error, file) from None


class _Preparation:
    def __init__(
        self, spec: CampaignSpec, table: ReadingsTable, tags: Sequence[str], lab: ReadingsTable | None
    ) -> None:
        self.spec, self.table, self.tags, self.lab = spec, table, tuple(tags), lab
        self.log: list[Entry] = []
        self.told = 0
        self.unmoved: ReadingsTable | None = None

    def run(self) -> Prepared:
        running = self._running()
        states = {n: self._holds(u.when) for n, u in self.spec.line_ups.items() if u.when is not None}
        self._tell_new()
        plain = [t for t in self.table.columns if self.spec.of(t).counter is None]
        limits = {t: self.spec.of(t).limits for t in plain if self.spec.of(t).limits != SignalLimits()}
        if limits:
            self.table = check_signals(self.table, limits)
            self._tell_new()
        self._lags()
        self._calculated()
        if self.spec.windows is None:
            return self._rows(states)
        return self._windows(self.spec.windows, running, states)

    # ---------------------------------------------------------------- telling

    def _tell_new(self, skip: tuple[str, ...] = ()) -> None:
        """Log the notices that have come since the last time; those of some codes have entries of their own."""
        for notice in self.table.notices[self.told :]:
            if not skip or not notice.code.startswith(skip):
                self.log.append(of_notice(notice))
        self.told = len(self.table.notices)

    def _add(self, notice: Notice, **more: Any) -> None:
        self.table = replace(self.table, notices=(*self.table.notices, notice))
        self.told = len(self.table.notices)
        self.log.append(replace(of_notice(notice), **more))

    # ---------------------------------------------------------------- steps before windows

    def _holds(self, condition: Condition) -> npt.NDArray[np.bool_]:
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

    def _running(self) -> npt.NDArray[np.bool_] | None:
        windows = self.spec.windows
        return None if windows is None or windows.runs_when is None else self._holds(windows.runs_when)

    def _lags(self) -> None:
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
            self._add(replace(notice, where=replace(notice.where, tag=tag)))
        words = (
            f"{tag} lags {lag:.3g} min behind {behind} (95 % {low:.3g} to {high:.3g} min), and was moved back by it; "
            f"root mean square of the difference {found.before:.3g} before, {found.after:.3g} after"
        )
        self._add(
            Notice("lag-found", words, Location(tag=tag)),
            amount=lag,
            sigma=(high - low) / 3.92,
            unit="min",
            otherwise=0.0,
        )
        return lag * 60.0

    def _calculated(self) -> None:
        stated = [t for t in self.table.columns if self.spec.of(t).calculated]
        if stated:
            self.table = mark_derived(self.table, stated)
            for tag in stated:
                self._add(Notice("reading-calculated", f"{tag} is declared as calculated: it adds no check, and is not used",
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
            self._add(replace(d.notice, message=words))

    # ---------------------------------------------------------------- snapshots

    def _rows(self, states: Mapping[str, npt.NDArray[np.bool_]]) -> Prepared:
        """Every row, or every sample, is a snapshot."""
        table = self.table
        if self.lab is not None and self.spec.lab is not None:
            if states:
                words = "a line-up that a column shows needs windows where samples are joined"
                raise InputError(Problem("line-up-rule", words, "add windows:, or name the windows of the line-up"))
            plan = self.spec.lab
            table = join_lab(table, self.lab, before=plan.before, after=plan.after, change=plan.told_from)
        elif self.lab is not None:  # pragma: no cover - a laboratory's table is read only where the case names it
            raise AssertionError("a laboratory's table without a plan")
        self.table = table
        self.told = min(self.told, len(table.notices))
        self._tell_new()
        index = table.time
        spans = () if index is None else tuple((str(t), str(t)) for t in index)
        hashes = tuple(_digest(table, i, i + 1, ()) for i in range(len(table)))
        return self._finish(table, {}, spans, hashes, states=states)

    def _windows(
        self, plan: WindowSpec, running: npt.NDArray[np.bool_] | None, states: Mapping[str, npt.NDArray[np.bool_]]
    ) -> Prepared:
        log = self.table
        readings = {t: self.spec.of(t) for t in log.columns}
        rules = WindowRules(
            duration=plan.length,
            count=len(log) if plan.whole else plan.rows,
            column=plan.by,
            spans=plan.at,
            counters={t: r.counter for t, r in readings.items() if r.counter is not None},
            levels={t: r.level for t, r in readings.items() if r.level is not None},
            level_sigma={t: r.level_sigma for t, r in readings.items() if r.level is not None},
            per={t: r.per for t, r in readings.items() if r.per is not None} or None,
            steady=plan.steady_readings,
            slope_level=plan.slope_level,
            r_level=plan.ratio_level,
            tolerance={t: r.steady_within for t, r in readings.items() if r.steady_within is not None},
            keep_unsteady=plan.keep_unsteady,
            required=[t for t in plan.required if t in log.columns],
            least=plan.least_coverage,
            hold_up=plan.hold_up,
            calibrations={
                t: _stamps(r.calibrated, log) for t, r in readings.items() if r.calibrated and log.time is not None
            },
        )
        found = make_windows(log, rules, running=running, witness=self.unmoved)
        self.table = found.table
        self._tell_new(skip=("counter-", "window-off", "window-left-out"))
        for left in found.left_out:
            at = log.where(int(found.bounds[left.window, 0]))
            name = "window-off" if left.code == "off" else "window-left-out"
            self.log.append(
                Entry(name, "", left.label, at.file or "", at.line, at.row, words=f"{left.code}: {left.reason}")
            )
        alternatives = self._counters(found, log)
        alternatives += self._levels(found)
        self._zero(found)
        table = replace(found.table, scatter=self._scatter(plan, found))
        ends = [min(int(b), len(log) - 1) for b in found.bounds[:, 1]]
        spans = () if log.time is None else tuple(
            (str(log.time[int(a)]), str(log.time[e])) for a, e in zip(found.bounds[:, 0], ends, strict=True)
        )  # fmt: skip
        long = [log.index(t) for t in (*rules.counters, *rules.levels)]
        hashes = tuple(
            _digest(
                log, int(a), int(b), long, found.table.values[w], table.scatter[w] if table.scatter is not None else ()
            )
            for w, (a, b) in enumerate(found.bounds)
        )
        if self.lab is not None:
            table, hashes = self._samples_in_windows(table, found, log, hashes)
        shown = {}
        for name, rows in states.items():
            shown[name] = np.array([rows[a:b].all() for a, b in found.bounds])
            for w, (a, b) in enumerate(found.bounds):
                if rows[a:b].any() and not rows[a:b].all():
                    words = f"line-up {name!r} changed in it"
                    found = replace(
                        found, left_out=(*found.left_out, LeftOut(w, table.label(w), "line-up changed", words))
                    )
                    self._add(Notice("window-left-out", f"window {table.label(w)}: {words}"), snapshot=table.label(w))
        left_out: dict[int, LeftOut] = {}
        for left in found.left_out:
            left_out.setdefault(left.window, left)
        notices = self.table.notices
        return self._finish(replace(table, notices=notices), left_out, spans, hashes, found, tuple(alternatives), shown)

    def _scatter(self, plan: WindowSpec, found: Windows) -> Array:
        """What adds to the law of each meter: scatter of the mean or readings at both ends, and what is estimated."""
        if plan.scatter == "included":
            return found.guessed
        out = np.nan_to_num(found.sigma)
        for tag, rule in self.spec.readings.items():
            if rule.noise is not None and tag in found.table.columns:
                j = found.table.index(tag)
                out[:, j] = sigma_of_mean(rule.noise, 0.0, np.nan_to_num(found.effective[:, j], nan=1.0))
        return out

    def _counters(self, found: Windows, log: ReadingsTable) -> list[Alternative]:
        out = []
        seconds = None if log.time is None else seconds_of(log.time)
        for tag, steps in found.counter_steps.items():
            rule, j = self.spec.of(tag), log.index(tag)
            for step in steps:
                w = self._window_of(found, step.row - 1, len(log))
                label = "" if w is None else found.table.label(w)
                self.log.append(of_counter(step, tag, rule, log, label))
                if w is None or not np.isfinite([step.otherwise, step.amount, found.table.values[w, j]]).all():
                    continue
                a, last = int(found.bounds[w, 0]), min(int(found.bounds[w, 1]), len(log) - 1)
                scale = 1.0 if rule.per is None or seconds is None else rule.per / (seconds[last] - seconds[a])
                value = found.table.values[w, j] - (step.amount - step.otherwise) * scale
                rest = (
                    found.guessed[w, j] ** 2 - (step.sigma * scale) ** 2
                    if step.rule in ("restart", "too-fast")
                    else 0.0
                )
                words = (
                    f"{tag}, {step.before:.10g} -> {step.after:.10g}: counted as "
                    f"{step.otherwise / rule.amount_factor:.6g} {rule.amount_unit} instead of "
                    f"{step.amount / rule.amount_factor:.6g}"
                )
                out.append(Alternative(w, tag, f"counter-{step.rule}", value, float(np.sqrt(max(rest, 0.0))), words))
        return out

    @staticmethod
    def _window_of(found: Windows, first: int, rows: int) -> int | None:
        """Window that the interval from a row to the next belongs to."""
        for w, (a, b) in enumerate(found.bounds.tolist()):
            if a <= first < min(b, rows - 1):
                return w
        return None

    def _levels(self, found: Windows) -> list[Alternative]:
        out = []
        for tag, rule in self.spec.readings.items():
            if rule.level is None or tag not in found.table.columns:
                continue
            for w, change in enumerate(found.table.column(tag)):
                if np.isfinite(change) and change != 0.0:
                    way = "rose" if change > 0 else "fell"
                    words = f"{tag} left out of the balance, although what the tank holds {way} by {abs(change):.4g}"
                    out.append(Alternative(w, tag, "inventory", 0.0, 0.0, words))
        return out

    def _zero(self, found: Windows) -> None:
        for zero in found.zero_checks:
            words = f"{zero.tag} shows {zero.mean:.3g} while the plant is off: offset of its zero"
            self.log.append(
                Entry(
                    "zero-check", zero.tag, zero.label, amount=zero.mean, sigma=zero.sigma, otherwise=0.0, words=words
                )
            )

    def _samples_in_windows(
        self, table: ReadingsTable, found: Windows, log: ReadingsTable, hashes: tuple[str, ...]
    ) -> tuple[ReadingsTable, tuple[str, ...]]:
        """Set the mean of the samples drawn in each window beside its plant readings."""
        lab = self.lab
        assert lab is not None
        if lab.time is None or log.time is None:
            bare = lab if lab.time is None else log
            name = bare.sources[0] if bare.sources else None
            raise InputError(Problem("time-missing", "samples need stamps to find their window", "add a time column",
                                     Location(name)))  # fmt: skip
        from ..errors import Problems
        from ..readings.time import check_zone_of

        problems = Problems()
        check_zone_of(log.time, log.sources[0] if log.sources else "log", lab.time,
                      lab.sources[0] if lab.sources else "lab", problems)  # fmt: skip
        problems.raise_if_any()
        stamps, drawn = seconds_of(log.time), seconds_of(lab.time)
        shape = (len(table), len(lab.columns))
        values, status = np.full(shape, np.nan), np.full(shape, int(Status.MISSING), dtype=np.int8)
        bounds = {"lower": np.full(shape, np.nan), "upper": np.full(shape, np.nan)}
        reasons = dict(table.reasons)
        k, used = len(table.columns), np.zeros(len(lab), dtype=bool)
        out = list(hashes)
        for w, (a, b) in enumerate(found.bounds.tolist()):
            end = stamps[b] if b < len(stamps) else np.inf
            rows = np.flatnonzero((drawn >= stamps[a]) & (drawn < end))
            used[rows] = True
            for j in range(shape[1]):
                kinds = lab.status[rows, j]
                open_ = np.isin(kinds, [int(Status.CENSORED_LOW), int(Status.CENSORED_HIGH), int(Status.SATURATED)])
                good = lab.usable[rows, j]
                if open_.any() and lab.lower is not None and lab.upper is not None:
                    status[w, j] = kinds[open_][0]
                    cells = good | open_
                    for name, source in (("lower", lab.lower), ("upper", lab.upper)):
                        bounds[name][w, j] = np.mean(np.where(open_, source[rows, j], lab.values[rows, j])[cells])
                    reasons[w, k + j] = f"{int(open_.sum())} of {rows.size} samples are only bounds, so the mean is one"
                elif good.any():
                    values[w, j], status[w, j] = float(lab.values[rows, j][good].mean()), int(Status.GOOD)
                else:
                    reasons[w, k + j] = "no sample was drawn in the window"
            out[w] = hashlib.sha256(
                (out[w] + "".join(_digest(lab, r, r + 1, ()) for r in rows.tolist())).encode()
            ).hexdigest()[:16]
        if not used.all():
            row = int(np.flatnonzero(~used)[0])
            words = (
                f"{int((~used).sum())} samples were drawn outside every window, the first {lab.label(row)}; not used"
            )
            self._add(Notice("sample-outside", words, lab.where(row)))
        nan = np.full(table.values.shape, np.nan)
        some = np.isfinite(bounds["lower"]).any() or np.isfinite(bounds["upper"]).any()
        keep = table.lower is not None or some
        joined = replace(
            table,
            columns=table.columns + lab.columns,
            values=np.hstack([table.values, values]),
            status=np.hstack([table.status, status]),
            reasons=reasons,
            lower=np.hstack([nan if table.lower is None else table.lower, bounds["lower"]]) if keep else None,
            upper=np.hstack([nan if table.upper is None else table.upper, bounds["upper"]]) if keep else None,
            scatter=None if table.scatter is None else np.hstack([table.scatter, np.zeros(shape)]),
            units={**table.units, **lab.units},
            echo=table.echo + lab.echo,
            source_hash=hashlib.sha256((table.source_hash + lab.source_hash).encode()).hexdigest(),
        )
        return joined, tuple(out)

    # ---------------------------------------------------------------- the end

    def _finish(
        self,
        table: ReadingsTable,
        left_out: Mapping[int, LeftOut],
        spans: tuple[tuple[str, str], ...],
        hashes: tuple[str, ...],
        windows: Windows | None = None,
        alternatives: tuple[Alternative, ...] = (),
        states: Mapping[str, npt.NDArray[np.bool_]] | None = None,
    ) -> Prepared:
        table = table.select(self.tags)
        table, intervals = self._intervals(table, left_out)
        shown = dict(states or {})
        for name, line_up in self.spec.line_ups.items():
            if line_up.windows:
                labels = [table.label(i) for i in range(len(table))]
                for wanted in line_up.windows:
                    if wanted not in labels:
                        words = f"line-up {name!r} names window {wanted!r}, which there is not"
                        raise InputError(Problem("unknown-window", words, did_you_mean(wanted, labels)))
                shown[name] = np.isin(labels, line_up.windows)
            holds = int(shown[name].sum())
            words = f"line-up {name!r} holds in {holds} of {len(table)} snapshots: {', '.join(line_up.closed)} closed"
            table = replace(table, notices=(*table.notices, Notice("line-up", words)))
            self.log.append(Entry("line-up", amount=float(holds), words=words))
        closed, names = line_up_of(self.spec.line_ups, shown, len(table))
        return Prepared(
            table,
            dict(left_out),
            spans,
            hashes,
            tuple(self.log),
            windows.zero_checks if windows else (),
            tuple(intervals),
            tuple(a for a in alternatives if a.snapshot not in left_out),
            windows.segments if windows else {},
            closed,
            names,
        )

    def _intervals(self, table: ReadingsTable, left_out: Mapping[int, LeftOut]) -> tuple[ReadingsTable, list[Interval]]:
        """Enter the middle of an interval with its rectangular sigma; leave one without an end missing."""
        if table.lower is None or table.upper is None:
            return table, []
        values, status = table.values.copy(), table.status.copy()
        sigma = np.full(values.shape, np.nan) if table.sigma is None else table.sigma.copy()
        reasons = dict(table.reasons)
        found = []
        for i, j in zip(*np.nonzero(~(np.isnan(table.lower) & np.isnan(table.upper))), strict=True):
            tag, kind = table.columns[j], Status(int(status[i, j]))
            cell = Interval(int(i), tag, float(table.lower[i, j]), float(table.upper[i, j]), kind)
            if int(i) in left_out:
                continue
            label = table.label(int(i))
            if not cell.closed:
                found.append(cell)
                side, end = ("at least", cell.lower) if np.isfinite(cell.lower) else ("at most", cell.upper)
                words = f"{side} {end:.6g}; entered as missing"
                reasons[int(i), int(j)] = words
                self.log.append(Entry("bound-only", tag, label, amount=end, words=f"{tag}: {words}"))
                continue
            if self.spec.of(tag).censored == "leave out":
                words = f"between {cell.lower:.6g} and {cell.upper:.6g}; left out, as the case says"
                reasons[int(i), int(j)] = words
                self.log.append(
                    Entry("interval-left-out", tag, label, amount=cell.middle, sigma=cell.sigma, words=words)
                )
                continue
            values[i, j], sigma[i, j], status[i, j] = cell.middle, cell.sigma, int(Status.ESTIMATED)
            found.append(cell)
            words = (
                f"between {cell.lower:.6g} and {cell.upper:.6g}; entered as {cell.middle:.6g} +/- {cell.sigma:.2g}, "
                "solved at both ends as well"
            )
            reasons[int(i), int(j)] = words
            self.log.append(
                Entry("interval-entered", tag, label, amount=cell.middle, sigma=cell.sigma, words=f"{tag}: {words}")
            )
        return replace(table, values=values, status=status, sigma=sigma, reasons=reasons), found


def _stamps(dates: Sequence[datetime], table: ReadingsTable) -> list[str]:
    """Dates as the log's clock shows them; without a zone where that has none."""
    bare = table.time is None or table.time.tz is None
    return [(d.replace(tzinfo=None) if bare else d).isoformat() for d in dates]


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


def _digest(table: ReadingsTable, a: int, b: int, long: Sequence[int], *more: Any) -> str:
    """Hash of the cells that a snapshot is made of; columns of differences include the row at its end."""
    state = hashlib.sha256(repr(table.columns).encode())
    for j in range(len(table.columns)):
        end = min(b, len(table) - 1) + 1 if j in long else b
        state.update(np.ascontiguousarray(table.values[a:end, j]).tobytes())
        state.update(np.ascontiguousarray(table.status[a:end, j]).tobytes())
    for name in ("lower", "upper"):
        ends = getattr(table, name)
        if ends is not None:
            state.update(np.ascontiguousarray(ends[a:b]).tobytes())
    for array in more:
        state.update(np.ascontiguousarray(array, dtype=np.float64).tobytes())
    return state.hexdigest()[:16]
