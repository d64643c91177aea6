"""From the raw log to snapshots: each step of the case's plan in turn, and what each decided.

The order is that of the matter: what single readings cannot be, what lags, what was calculated; then laboratory
values; then windows; last, what is known only as an interval.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from datetime import datetime

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, did_you_mean
from ..readings.lab import join_lab
from ..readings.table import ReadingsTable
from ..readings.time_order import seconds_of
from ..readings.windows import LeftOut, WindowRules, Windows, make_windows, sigma_of_mean
from .decisions import Entry, in_words_of_the_case, of_counter
from .intervals import enter_intervals
from .line_ups import line_up_of
from .samples import samples_in_windows
from .signals import Signals
from .snapshots import Alternative, Prepared, digest
from .spec import CampaignSpec, WindowSpec
from .stamps import place_samples

__all__ = ["prepare"]

Array = npt.NDArray[np.float64]


def prepare(
    spec: CampaignSpec,
    table: ReadingsTable,
    tags: Sequence[str],
    *,
    lab: ReadingsTable | None = None,
    units: Mapping[str, str] | None = None,
    file: str | None = None,
    held: Sequence[str] = (),
    held_at_end: bool = False,
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
    held, held_at_end
        Tags of what is held at the start (or end) of a window; see `WindowRules`.

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
        return _Preparation(spec, told, tags, lab, held, at_end=held_at_end).run()
    except InputError as error:
        raise in_words_of_the_case(error, file) from None


class _Preparation(Signals):
    def __init__(
        self,
        spec: CampaignSpec,
        table: ReadingsTable,
        tags: Sequence[str],
        lab: ReadingsTable | None,
        held: Sequence[str] = (),
        *,
        at_end: bool = False,
    ) -> None:
        super().__init__(spec, table, tags)
        self.lab, self.held, self.at_end = lab, tuple(held), at_end
        self.edges: Array | None = None

    def run(self) -> Prepared:
        running = self.running()
        states = {n: self.holds(u.when) for n, u in self.spec.line_ups.items() if u.when is not None}
        self.tell_new()
        self.check()
        self.take_back_lags()
        self.leave_calculated()
        if self.spec.windows is None:
            return self._rows(states)
        return self._windows(self.spec.windows, running, states)

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
        self.tell_new()
        index = table.time
        spans = () if index is None else tuple((str(t), str(t)) for t in index)
        hashes = tuple(digest(table, i, i + 1) for i in range(len(table)))
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
            held=[t for t in self.held if t in log.columns],
            held_at_end=self.at_end,
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
        self.tell_new(skip=("counter-", "window-off", "window-left-out"))
        for left in found.left_out:
            at = log.where(int(found.bounds[left.window, 0]))
            name = "window-off" if left.code == "off" else "window-left-out"
            self.log.append(
                Entry(name, "", left.label, at.file or "", at.line, at.row, words=f"{left.code}: {left.reason}")
            )
        alternatives = self._counters(found, log)
        alternatives += self._levels(found)
        self._zero(found)
        if (
            plan.keep_unsteady
            and not rules.levels
            and not rules.held
            and any(n.code == "window-not-steady" for n in found.table.notices)
        ):
            words = (
                "windows that are not steady are kept, but no level is read: what is stored meanwhile shows as a closure, "
                "and may look like a fault; read the level, or leave keep_unsteady out"
            )
            self.add(Notice("no-inventory-read", words))
        table = replace(found.table, scatter=self._scatter(plan, found))
        self.edges = _edges(found, log)
        ends = [min(int(b), len(log) - 1) for b in found.bounds[:, 1]]
        spans = () if log.time is None else tuple(
            (str(log.time[int(a)]), str(log.time[e])) for a, e in zip(found.bounds[:, 0], ends, strict=True)
        )  # fmt: skip
        long = [log.index(t) for t in dict.fromkeys((*rules.counters, *rules.levels, *rules.held))]
        hashes = tuple(
            digest(
                log, int(a), int(b), long, found.table.values[w], table.scatter[w] if table.scatter is not None else ()
            )
            for w, (a, b) in enumerate(found.bounds)
        )
        if self.lab is not None:
            declared = self.spec.lab.options.get("interval") if self.spec.lab is not None else None
            borders = (
                np.array([]) if log.time is None else np.append(seconds_of(log.time), np.inf)[found.bounds].ravel()
            )
            lab, assumed = place_samples(self.lab, borders, declared)
            table, hashes, outside = samples_in_windows(table, found, log, lab, hashes)
            for notice in (assumed, outside):
                if notice is not None:
                    self.add(notice)
        shown = {}
        for name, rows in states.items():
            shown[name] = np.array([rows[a:b].all() for a, b in found.bounds])
            for w, (a, b) in enumerate(found.bounds):
                if rows[a:b].any() and not rows[a:b].all():
                    words = f"line-up {name!r} changed in it"
                    found = replace(
                        found, left_out=(*found.left_out, LeftOut(w, table.label(w), "line-up changed", words))
                    )
                    self.add(Notice("window-left-out", f"window {table.label(w)}: {words}"), snapshot=table.label(w))
        left_out: dict[int, LeftOut] = {}
        for left in found.left_out:
            left_out.setdefault(left.window, left)
        notices = self.table.notices
        return self._finish(replace(table, notices=notices), left_out, spans, hashes, found, tuple(alternatives), shown)

    def _scatter(self, plan: WindowSpec, found: Windows) -> Array:
        """What adds to the law of each meter: scatter of the mean or readings at both ends, and what is estimated."""
        if plan.scatter == "included":
            return found.guessed
        self._scatter_unknown(found)
        out = np.nan_to_num(found.sigma)
        for tag, rule in self.spec.readings.items():
            if rule.noise is not None and tag in found.table.columns:
                j = found.table.index(tag)
                out[:, j] = sigma_of_mean(rule.noise, 0.0, np.nan_to_num(found.effective[:, j], nan=1.0))
        return out

    def _scatter_unknown(self, found: Windows) -> None:
        """Tell which means stand on one sample: nothing shows their scatter, and none is assumed."""
        alone = (found.effective == 1.0) & np.isnan(found.sigma) & found.used[:, None]
        for tag, count in zip(found.table.columns, alone.sum(axis=0).tolist(), strict=True):
            if count and self.spec.of(tag).noise is None:
                words = (
                    f"{tag} has a single sample in {count} of {len(alone)} windows: its scatter is not known there and "
                    f"not counted; state it (reading: {{noise: ...}}), or write scatter: included under windows"
                )
                self.add(Notice("scatter-unknown", words, Location(tag=tag)))

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
            if rule.level is None or tag in self.held or tag not in found.table.columns:
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
        table, intervals, entries = enter_intervals(table, self.spec, left_out)
        self.log.extend(entries)
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
            self.edges,
        )


def _edges(found: Windows, log: ReadingsTable) -> Array | None:
    """Start of each window, end of what its rows stand for, and the row behind; see `Prepared`."""
    if log.time is None or len(log) < 2:
        return None
    seconds = seconds_of(log.time)
    step = float(np.median(np.diff(seconds)))
    first, stop = found.bounds.T
    behind = np.append(seconds, np.nan)[stop]
    last = seconds[stop - 1]
    # A row half a step late is late; one that is later than that was not written.
    return np.column_stack([seconds[first], np.where(behind - last <= 1.5 * step, behind, last + step), behind])


def _stamps(dates: Sequence[datetime], table: ReadingsTable) -> list[str]:
    """Dates as the log's clock shows them; without a zone where that has none."""
    bare = table.time is None or table.time.tz is None
    return [(d.replace(tzinfo=None) if bare else d).isoformat() for d in dates]
