"""What happens to one window: its values, how sure they are, and whether it is fit for a balance."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem
from .counters import Increments, counter_increments
from .levels import inventory, inventory_change
from .steady import mean_sigma, r_test, slope_test
from .table import ReadingsTable, Status
from .time_order import seconds_of

if TYPE_CHECKING:
    from .windows import LeftOut, WindowRules, Windows, ZeroCheck

__all__ = ["WindowWork"]


class WindowWork:
    """Fills and judges windows, one after the other."""

    def __init__(
        self,
        table: ReadingsTable,
        rules: WindowRules,
        bounds: npt.NDArray[np.int64],
        labels: list[str],
        witness: ReadingsTable | None = None,
    ) -> None:
        self.witnesses = (table,) if witness is None else (table, witness)
        self.table, self.rules, self.bounds, self.labels = table, rules, bounds, labels
        shape = (len(bounds), len(table.columns))
        self.values = np.full(shape, np.nan)
        self.sigma = np.full(shape, np.nan)
        self.effective = np.full(shape, np.nan)
        self.guessed = np.zeros(shape)
        self.status = np.full(shape, int(Status.MISSING), dtype=np.int8)
        self.lower = np.full(shape, np.nan)
        self.upper = np.full(shape, np.nan)
        self.reasons: dict[tuple[int, int], str] = {}
        self.left_out: list[LeftOut] = []
        self.zeros: list[ZeroCheck] = []
        self.notices: list[Notice] = []
        self.seconds = None if table.time is None else seconds_of(table.time)
        self.usable = table.usable
        self.usual_rows = float(np.median(np.diff(bounds, axis=1))) if len(bounds) else 0.0
        self.counters: dict[str, Increments] = {}
        for tag, rule in rules.counters.items():
            x = np.where(self.usable[:, table.index(tag)], table.column(tag), np.nan)
            found = counter_increments(
                x,
                rule,
                seconds=self.seconds,
                tag=tag,
                where=lambda row, tag=tag: table.where(row, tag),  # type: ignore[misc]
            )
            self.counters[tag] = found
            self.notices.extend(found.notices)
        apart = {*rules.counters, *rules.levels, *rules.held}
        self.averaged = [t for t in table.columns if t not in apart]

    # ---------------------------------------------------------------- values

    def state(self, w: int, running: npt.NDArray[np.bool_] | None) -> str:
        """Return whether the plant is on, off, or switched (mixed) in a window."""
        if running is None:
            return "on"
        on = running[self.bounds[w, 0] : self.bounds[w, 1]]
        return "on" if on.all() else "mixed" if on.any() else "off"

    def fill(self, w: int, *, off: bool) -> None:
        """Compute the row of a window."""
        a, b = self.bounds[w].tolist()
        for j, tag in enumerate(self.table.columns):
            if tag in self.rules.held:
                self._held(w, j, tag, b if self.rules.held_at_end else a)
            elif tag in self.rules.counters:
                self._counter(w, j, tag, a, b)
            elif tag in self.rules.levels:
                self._level(w, j, tag, a, b)
            else:
                self._mean(w, j, a, b)
        if off:
            self.status[w, [t not in self.rules.held for t in self.table.columns]] = int(Status.OFF)

    def _mean(self, w: int, j: int, a: int, b: int) -> None:
        good = self.usable[a:b, j]
        x = self.table.values[a:b, j][good]
        status = self.table.status[a:b, j]
        bounded = np.isin(status, [int(Status.SATURATED), int(Status.CENSORED_LOW), int(Status.CENSORED_HIGH)])
        if bounded.any() and self.table.lower is not None and self.table.upper is not None:
            kinds = Counter(status[bounded].tolist())
            self.status[w, j] = kinds.most_common(1)[0][0]
            cells = good | bounded
            for out, source in ((self.lower, self.table.lower), (self.upper, self.table.upper)):
                out[w, j] = np.mean(np.where(bounded, source[a:b, j], self.table.values[a:b, j])[cells])
            self.reasons[w, j] = f"{int(bounded.sum())} of {b - a} readings are only bounds, so the mean is one"
            return
        if x.size == 0 or x.size < self.rules.least * (b - a):
            self._missing(w, j, status, x.size, b - a)
            return
        if x.size == 1:
            self.values[w, j], self.sigma[w, j], self.effective[w, j] = x[0], np.nan, 1.0
        else:
            self.values[w, j], self.sigma[w, j], self.effective[w, j] = mean_sigma(x)
        kinds = Counter(status[good].tolist())
        self.status[w, j] = kinds.most_common(1)[0][0]

    def _missing(self, w: int, j: int, status: npt.NDArray[np.int8], good: int, rows: int) -> None:
        kinds = Counter(s for s in status.tolist() if s != Status.GOOD)
        worst = kinds.most_common(1)[0][0] if kinds else int(Status.MISSING)
        flat_or_bad = worst in (Status.FLAT, Status.BAD_SOURCE, Status.OFF)
        self.status[w, j] = worst if flat_or_bad and not good else int(Status.MISSING)
        self.reasons[w, j] = f"{good} of {rows} readings are good"

    def _counter(self, w: int, j: int, tag: str, a: int, b: int) -> None:
        found = self.counters[tag]
        last = min(b, len(self.table) - 1)
        ends = self.usable[[a, last], j]
        if last <= a or not ends.all():
            self.reasons[w, j] = "the counter was not read at both ends of the window"
            return
        amount, sigma = found.total(a, last)
        if not np.isfinite(amount):
            self.reasons[w, j] = "what the counter missed cannot be estimated"
            return
        scale = self._per(tag, a, last)
        self.values[w, j], self.sigma[w, j] = amount * scale, sigma * scale
        estimated = bool(found.estimated[a:last].any())
        self.guessed[w, j] = scale * float(np.linalg.norm(found.sigmas[a:last][found.estimated[a:last]]))
        self.status[w, j] = int(Status.ESTIMATED if estimated else Status.GOOD)
        if estimated:
            self.reasons[w, j] = "an interval of the counter is estimated from its neighbours"

    def _level(self, w: int, j: int, tag: str, a: int, b: int) -> None:
        last = min(b, len(self.table) - 1)
        if last <= a or not self.usable[[a, last], j].all():
            self.reasons[w, j] = "the level was not read at both ends of the window"
            return
        x = self.table.values[[a, last], j]
        sigma = self.rules.level_sigma.get(tag, 0.0)
        change, s = inventory_change(float(x[0]), float(x[1]), self.rules.levels[tag], sigma)
        scale = self._per(tag, a, last)
        self.values[w, j], self.sigma[w, j] = change * scale, s * scale
        self.status[w, j] = int(Status.GOOD)

    def _held(self, w: int, j: int, tag: str, row: int) -> None:
        """Take the reading of one row for what is held at that instant."""
        if row >= len(self.table) or not self.usable[row, j]:
            edge = "end" if self.rules.held_at_end else "start"
            self.reasons[w, j] = f"not read at the {edge} of the window"
            return
        value, sigma = float(self.table.values[row, j]), self.rules.level_sigma.get(tag, 0.0)
        if tag in self.rules.levels:
            content, spread = inventory(value, self.rules.levels[tag], sigma)
            value, sigma = float(content[0]), float(spread[0])
        self.values[w, j], self.sigma[w, j] = value, sigma
        self.status[w, j] = self.table.status[row, j]

    def _per(self, tag: str, a: int, last: int) -> float:
        per = self.rules.per.get(tag) if isinstance(self.rules.per, Mapping) else self.rules.per
        if per is None or self.seconds is None:
            return 1.0
        return float(per / (self.seconds[last] - self.seconds[a]))

    # ---------------------------------------------------------------- judgement

    def judge(self, w: int, state: str) -> None:
        """Decide whether a balance may be made of a window."""
        a, b = self.bounds[w].tolist()
        if state == "off":
            self._zero(w)
            return
        if state == "mixed":
            self._leave(w, "switched", "the plant was switched on or off in it")
            return
        if self.rules.column is None and self.rules.spans is None and b - a < 0.5 * self.usual_rows:
            self._leave(w, "short", f"only {b - a} rows of the usual {self.usual_rows:g}")
            return
        for tag in self.rules.required:
            if not np.isfinite(self.values[w, self.table.index(tag)]):
                self._leave(w, f"missing {tag}", f"{tag} is missing ({self._why(w, tag)})")
                return
        found = self._moves(w, a, b)
        if found is not None:
            if self.rules.keep_unsteady:
                self.notices.append(Notice("window-not-steady", f"window {self.labels[w]}: {found}; kept as declared"))
            else:
                self._leave(w, "not steady", f"{found}; use inventory terms to keep it")

    def _why(self, w: int, tag: str) -> str:
        j = self.table.index(tag)
        return self.reasons.get((w, j), "no reading")

    def _moves(self, w: int, a: int, b: int) -> str | None:
        """Return what moves in a window, in words; None if nothing does."""
        for table in self.witnesses:
            found = self._moves_in(table, a, b)
            if found is not None:
                return found
        return None

    def _moves_in(self, table: ReadingsTable, a: int, b: int) -> str | None:
        usable = self.usable if table is self.table else table.usable
        tags = self.averaged if self.rules.steady is None else self.rules.steady
        for tag in tags:
            j = self.table.index(tag)
            good = usable[a:b, j]
            x = table.values[a:b, j][good]
            if x.size < 4:
                continue
            t = (np.arange(a, b) if self.seconds is None else self.seconds[a:b] / 3600.0)[good].astype(np.float64)
            allowed = self.rules.tolerance.get(tag, 0.0)
            if self.rules.slope_level is not None:
                slope = slope_test(t, x)
                if slope.p_value < self.rules.slope_level and abs(slope.change) > allowed:
                    unit = self.table.units.get(tag, "")
                    unit = f" {unit}" if unit else ""
                    way = "rises" if slope.slope > 0 else "falls"
                    base = "per row" if self.seconds is None else "per hour"
                    p = "p < 0.001" if slope.p_value < 0.001 else f"p = {slope.p_value:.3f}"
                    return f"{tag} {way} {abs(slope.slope):.2g}{unit} {base} ({p})"
            if self.rules.r_level is not None:
                r = r_test(x, level=self.rules.r_level)
                if not r.steady and float(x.max() - x.min()) > allowed:
                    return f"{tag} is not steady (ratio of variances {r.r:.2f}, limit {r.limit:.2f})"
        return None

    def _zero(self, w: int) -> None:
        from .windows import ZeroCheck

        shown = []
        for tag in self.averaged:
            j = self.table.index(tag)
            if np.isfinite(self.values[w, j]):
                mean, sigma = float(self.values[w, j]), float(self.sigma[w, j])
                self.zeros.append(ZeroCheck(w, self.labels[w], tag, mean, sigma))
                shown.append((abs(mean), f"{tag} shows {mean:.2g}"))
        shown.sort(key=lambda s: -s[0])
        words = ", ".join(s for _, s in shown[:4])
        self._leave(w, "off", f"the plant is off; readings used for a zero check only ({words})")

    def _leave(self, w: int, code: str, reason: str) -> None:
        from .windows import LeftOut

        self.left_out.append(LeftOut(w, self.labels[w], code, reason))
        a = int(self.bounds[w, 0])
        name = "window-off" if code == "off" else "window-left-out"
        self.notices.append(Notice(name, f"window {self.labels[w]}: {reason}", self.table.where(a)))

    # ---------------------------------------------------------------- the whole

    def finish(self) -> Windows:
        """Return the windows; refuse if none is left."""
        from .windows import Windows

        used = np.ones(len(self.bounds), dtype=bool)
        used[[left.window for left in self.left_out]] = False
        if not used.any():
            self._nothing()
        self._hold_up()
        segments = self._segments()
        bounded = bool(np.isfinite(self.lower).any() or np.isfinite(self.upper).any())
        first = self.bounds[:, 0]
        table = replace(
            self.table,
            values=self.values,
            status=self.status,
            time=None if self.table.time is None else self._middle(),
            labels=self.labels,
            reasons=self.reasons,
            lower=self.lower if bounded else None,
            upper=self.upper if bounded else None,
            extra={},
            notices=self.table.notices + tuple(self.notices),
            lines=None if self.table.lines is None else self.table.lines[first],
            source_of=None if self.table.source_of is None else self.table.source_of[first],
        )
        return Windows(
            table, used, self.sigma, self.effective, self.bounds, tuple(self.left_out), tuple(self.zeros), segments,
            self.guessed, {tag: found.log for tag, found in self.counters.items()},
        )  # fmt: skip

    def _middle(self) -> Any:
        time = self.table.time
        assert time is not None
        first, last = time[self.bounds[:, 0]], time[self.bounds[:, 1] - 1]
        return first + (last - first) / 2

    def _nothing(self) -> None:
        counts = Counter(left.code for left in self.left_out)
        words = ", ".join(f"{n} {code}" for code, n in counts.most_common())
        cures = {
            "not steady": "slope_level, tolerance or keep_unsteady",
            "off": "the run flag",
            "switched": "the run flag or the duration",
            "short": "the duration",
        }
        loosen = ", ".join(dict.fromkeys(cures.get(c, "required or least") for c in counts))
        hint = f"loosen one of: {loosen}" if loosen else "the table has no rows"
        place = Location(file=self.table.sources[0] if self.table.sources else None)
        raise InputError(Problem("no-window-left", f"no window left: {words or 'no rows'}", hint, place))

    def _hold_up(self) -> None:
        if self.rules.hold_up is None or self.seconds is None or self.rules.levels or self.rules.held:
            return
        length = self.rules.duration
        if length is None:
            spans = self.seconds[self.bounds[:, 1] - 1] - self.seconds[self.bounds[:, 0]]
            length = float(np.median(spans))
        if length < self.rules.hold_up:
            words = (
                f"windows last {length / 60:g} min, the hold-up is {self.rules.hold_up / 60:g} min: "
                "residuals will show accumulation; add the level or lengthen the window"
            )
            self.notices.append(Notice("window-shorter-than-hold-up", words))

    def _segments(self) -> dict[str, npt.NDArray[np.int64]]:
        if not self.rules.calibrations:
            return {}
        import pandas as pd

        time = self.table.time
        if time is None:
            raise InputError(Problem("time-missing", "calibration dates need stamps in the readings", "add them"))
        out = {}
        middle = seconds_of(self._middle())
        for tag, stamps in self.rules.calibrations.items():
            events = pd.DatetimeIndex([pd.Timestamp(s) for s in stamps])
            if events.tz is None and time.tz is not None:
                events = events.tz_localize(time.tz)
            number = np.searchsorted(np.sort(seconds_of(events)), middle, side="right")
            out[tag] = (number - number[0]).astype(np.int64)
            for event in events[(events > time[0]) & (events < time[-1])]:
                words = (
                    f"{tag} was recalibrated {event:%Y-%m-%d %H:%M}: windows before and after are not one series for "
                    "an audit of sigmas"
                )
                self.notices.append(Notice("recalibrated", words, Location(tag=tag)))
        return out
