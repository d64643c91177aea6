"""Reads what a case says about its log: texts become numbers, each mistake is told at its place."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace
from typing import Any

from ..case.places import Places
from ..case.quantities import Refusal, read_span, read_unit
from ..case.spec import MeterSpec
from ..errors import InputError, Problems, did_you_mean
from ..readings.counters import CounterRule
from ..readings.levels import LevelTable
from ..readings.options import ReadOptions
from ..readings.validity import SignalLimits
from ..units import UnitProblem, describe_kind, difference_factor, same_kind
from .options import LabModel, LevelModel, LimitsModel, LineUpModel, ReadingModel, WindowsModel
from .spec import CampaignSpec, LabSpec, LineUpSpec, ReadingSpec, WindowSpec
from .texts import Path, Texts

__all__ = ["read_campaign"]

_WAYS = ("length", "rows", "by", "at", "whole")
_RATIO_LEVELS = (0.10, 0.05, 0.025, 0.01, 0.005)


def read_campaign(
    data: Mapping[str, Any],
    meters: Mapping[str, MeterSpec],
    tags: tuple[str, ...],
    streams: tuple[str, ...],
    places: Places,
    problems: Problems,
) -> CampaignSpec:
    """Read the ``reading:`` blocks of the meters, and ``windows``, ``lab`` and ``line_ups``.

    Parameters
    ----------
    data : mapping
        The case as plain data.
    meters : mapping of tag to MeterSpec
        Those that were read; their ``reading`` option has passed its model.
    tags, streams : tuple of str
        All names that the case gives, those with mistakes included.
    places : Places
    problems : Problems
        Takes every mistake.

    Returns
    -------
    CampaignSpec
    """
    reader = _Reader(meters, tags, streams, places, problems)
    readings = {}
    for tag, meter in meters.items():
        block = meter.options.get("reading")
        if block is not None:
            readings[tag] = reader.reading(meter, ReadingModel.model_validate(block))
        elif meter.span is not None:
            readings[tag] = ReadingSpec(limits=SignalLimits(span=meter.span))
        if dates := meter.options.get("calibrated"):
            readings[tag] = replace(readings.get(tag, ReadingSpec()), calibrated=tuple(dates))
    windows = lab = None
    if data.get("windows") is not None:
        found = reader.block(WindowsModel, data["windows"], ("windows",), "windows")
        windows = reader.windows(found) if found is not None else None
    if data.get("lab") is not None:
        value = {"file": data["lab"]} if isinstance(data["lab"], str) else data["lab"]
        block = reader.block(LabModel, value, ("lab",), "lab")
        lab = reader.lab(block) if block is not None else None
    line_ups = {}
    entries = data.get("line_ups")
    for name, value in (entries if isinstance(entries, dict) else {}).items():
        line_up = reader.block(LineUpModel, value, ("line_ups", name), f"line-up {name!r}")
        if line_up is not None:
            line_ups[name] = reader.line_up(name, line_up)
    spec = CampaignSpec(readings, windows, lab, line_ups)
    reader.fit(spec, "windows" in data, "lab" in data)
    return spec


class _Reader(Texts):
    # ---------------------------------------------------------------- meters

    def reading(self, meter: MeterSpec, model: ReadingModel) -> ReadingSpec:
        path, owner = ("meters", meter.tag, "reading"), f"meter {meter.tag!r}"
        kinds = [k for k in ("counter", "level", "sample") if getattr(model, k)]
        if len(kinds) > 1:
            self.refuse((*path, kinds[1]), "two-kinds", f"{owner} is both {kinds[0]} and {kinds[1]}", "keep one")
        told: dict[str, Any] = {
            "column": model.column,
            "sample": model.sample,
            "censored": model.censored,
            "calculated": model.calculated,
        }
        unit = meter.unit
        if model.counter is not None:
            told.update(self._counter(meter, model.counter, (*path, "counter")))
            for key in ("limits", "noise", "steady_within"):
                if getattr(model, key) is not None:
                    hint = "largest_rate and each_reading belong to the counter: block"
                    self.refuse((*path, key), "not-for-counters", f"{owner} is a counter; {key} has no meaning", hint)
        elif model.level is not None:
            told.update(self._level(meter, model.level, (*path, "level")))
            if model.noise is not None:
                hint = "write each_reading in the level: block"
                self.refuse((*path, "noise"), "not-for-levels", f"{owner} is a level; noise has no meaning", hint)
            unit = model.level.unit
        if model.counter is None:
            limits = model.limits or LimitsModel.model_validate({})
            told["limits"] = self._limits(meter, limits, unit, (*path, "limits"), plain=model.level is None)
            for key in ("noise", "steady_within") if model.level is None else ("steady_within",):
                told[key] = self.difference((*path, key), getattr(model, key), unit, f"{key} of {owner}")
        told["lag"] = self.duration((*path, "lag"), model.lag, f"lag of {owner}", "8 min", zero=True)
        if model.find_lag is not None:
            if model.lag is not None:
                self.refuse((*path, "find_lag"), "lag-twice", f"{owner} has a lag and finds one", "keep one")
            told["behind"] = model.find_lag.behind
            self.known_tag((*path, "find_lag", "behind"), model.find_lag.behind, f"find_lag of {owner}")
            try:
                spot = f"range of the lag of {owner}"
                told["lag_range"] = read_span(model.find_lag.between, "s", spot)
                if told["lag_range"][0] < 0:
                    raise Refusal("lag-negative", f"{spot} begins below zero", "write e.g. between: 0 to 20 min")
            except Refusal as refused:
                self.problems.extend([refused.at(self.places.where((*path, "find_lag", "between")))])
        return ReadingSpec(**told)

    def _amount(self, meter: MeterSpec, path: Path, value: Any, owner: str) -> tuple[float, str, float | None] | None:
        """Return what an amount is in the meter's unit (times an hour, for rates), its unit, and that hour."""
        rate = _is_rate(meter.unit)
        if value is None and not rate:
            return 1.0, meter.unit, None
        if value is None:
            what = f"{owner} is missing, and meter {meter.tag!r} is in {meter.unit}"
            self.refuse(path[:-1], "amount-unit", what, f"add {path[-1]}, an amount with its unit, e.g. 1 kg or 0.5 L",
                        key=True)  # fmt: skip
            return None
        found = self.quantity(path, value, owner, "0.5 L")
        if found is None:
            return None
        number, unit = found
        try:
            if not rate:
                return number * difference_factor(unit, meter.unit), unit, None
            if unit and same_kind(f"{unit}/h", meter.unit):
                return number * difference_factor(f"{unit}/h", meter.unit), unit, 3600.0
        except UnitProblem:
            pass
        kind = describe_kind(unit) or "a plain number"
        words = f"{owner} is in {unit or 'no unit'} ({kind}), which gives no {meter.unit}"
        self.refuse(path, "unit-mismatch", words, "write an amount with its unit, e.g. 0.5 L")
        return None

    def _counter(self, meter: MeterSpec, model: Any, path: Path) -> dict[str, Any]:
        owner = f"counter of {meter.tag!r}"
        worth = self._amount(meter, (*path, "pulse"), model.pulse, f"pulse of the {owner}")
        if worth is None:
            return {}
        pulse, unit, per = worth
        one = self._amount(meter, (*path, "pulse"), f"1 {unit}", owner) if unit else (1.0, "", None)
        sigma = None
        if model.each_reading is not None:
            found = self._amount(meter, (*path, "each_reading"), model.each_reading, f"each_reading of the {owner}")
            sigma = None if found is None else found[0]
        fastest = None
        if model.largest_rate is not None:
            wanted = meter.unit if per else f"{meter.unit}/s"
            found_rate = self.difference(
                (*path, "largest_rate"), model.largest_rate, wanted, f"largest_rate of the {owner}"
            )
            fastest = None if found_rate is None else found_rate / (per or 1.0)
        rule = CounterRule(model.rolls_over_at, model.starts_again, pulse, fastest, sigma)
        return {
            "counter": rule,
            "amount_unit": unit,
            "amount_factor": one[0] if one else 1.0,
            "per": per,
            "column_unit": "",
        }

    def _level(self, meter: MeterSpec, model: LevelModel, path: Path) -> dict[str, Any]:
        owner = f"level of {meter.tag!r}"
        try:
            read_unit(model.unit, f"the {owner}", self.places.texts.get((*path, "unit")))
        except Refusal as refused:
            self.problems.extend([refused.at(self.places.where((*path, "unit")))])
            return {}
        if (model.holds is None) == (model.table is None):
            what = "neither holds nor table" if model.holds is None else "both holds and table"
            hint = "write holds: 4.0 kg for straight walls, or a table of [level, content]"
            self.refuse(path, "level-rule", f"the {owner} has {what}", hint, key=True)
            return {}
        key = "holds" if model.table is None else "content_unit"
        stated = model.holds if model.table is None else f"1 {model.content_unit or meter.unit}"
        worth = self._amount(meter, (*path, key), stated, f"{key} of the {owner}")
        if worth is None:
            return {}
        size, unit, per = worth
        try:
            if model.table is None:
                rule = LevelTable(per_level=size)
            else:
                levels, contents = zip(*model.table, strict=True)
                rule = LevelTable(levels=levels, contents=tuple(c * size for c in contents))
        except InputError as error:
            self.refuse((*path, "table"), error.problems[0].code, error.problems[0].message, error.problems[0].hint)
            return {}
        sigma = self.difference((*path, "each_reading"), model.each_reading, model.unit, f"each_reading of the {owner}")
        one = self._amount(meter, (*path, key), f"1 {unit}", owner)
        return {
            "level": rule,
            "amount_unit": unit,
            "amount_factor": one[0] if one else 1.0,
            "per": per,
            "column_unit": model.unit,
            "level_sigma": sigma or 0.0,
        }

    def _limits(self, meter: MeterSpec, model: LimitsModel, unit: str, path: Path, *, plain: bool) -> SignalLimits:
        owner = f"meter {meter.tag!r}"
        low = high = None
        if model.possible is not None:
            try:
                low, high = read_span(model.possible, unit, f"possible range of {owner}")
            except Refusal as refused:
                self.problems.extend([refused.at(self.places.where((*path, "possible")))])
        told = {
            key: self.difference((*path, key), getattr(model, key), unit, f"{key} of {owner}")
            for key in ("spike", "change_per_minute", "flat_within")
        }
        change = told["change_per_minute"]
        return SignalLimits(
            low=low,
            high=high,
            span=meter.span if plain and model.saturates else None,
            spike=told["spike"],
            max_rate=None if change is None else change / 60.0,
            flat_count=model.flat_for,
            flat_tolerance=told["flat_within"] or 0.0,
            max_gap=self.duration((*path, "gap"), model.gap, f"gap of {owner}", "10 min"),
        )

    # ---------------------------------------------------------------- the log as a whole

    def windows(self, model: WindowsModel) -> WindowSpec | None:
        path = ("windows",)
        ways = [w for w in _WAYS if getattr(model, w)]
        if len(ways) != 1:
            words = f"windows are cut in one way; {' and '.join(ways) or 'none'} given"
            self.refuse(path, "window-rule", words, f"give one of {', '.join(_WAYS)}, e.g. length: 20 min", key=True)
        for key in ("required", "steady_readings"):
            for i, tag in enumerate(getattr(model, key) or ()):
                self.known_tag((*path, key, i), tag, f"{key} of windows")
        slope = ratio = None
        if model.steady in ("slope", "both"):
            slope = model.steady_level or 0.001
        if model.steady in ("ratio", "both"):
            ratio = model.steady_level or 0.01
            if ratio not in _RATIO_LEVELS:
                known = ", ".join(f"{v:g}" for v in _RATIO_LEVELS)
                words = f"the ratio test has no limit for level {ratio:g}"
                self.refuse((*path, "steady_level"), "steady-level", words, f"write one of {known}")
        at = None
        if model.at is not None:
            rows = []
            for i, span in enumerate(model.at):
                start, end = (self.places.text((*path, "at", i, k), getattr(span, k)) for k in ("start", "end"))
                rows.append((span.name or start, start, end))
            at = tuple(rows)
        when = None
        if model.runs_when is not None:
            when = self.condition((*path, "runs_when"), model.runs_when, "runs_when of windows")
        return WindowSpec(
            length=self.duration((*path, "length"), model.length, "length of windows"),
            rows=model.rows,
            by=model.by,
            at=at,
            whole=model.whole,
            least_coverage=model.least_coverage,
            required=tuple(model.required),
            slope_level=slope,
            ratio_level=ratio,
            steady_readings=None if model.steady_readings is None else tuple(model.steady_readings),
            keep_unsteady=model.keep_unsteady,
            runs_when=when,
            hold_up=self.duration((*path, "hold_up"), model.hold_up, "hold_up of windows", "45 min"),
            scatter=model.scatter,
        )

    def lab(self, model: LabModel) -> LabSpec:
        options = dict(model.model_extra or {})
        known = [*(f.name for f in fields(ReadOptions)), *LabModel.model_fields]
        for name in [n for n in options if n not in known]:
            hint = did_you_mean(name, known) or f"known keys: {', '.join(known)}"
            self.refuse(("lab", name), "unknown-key", f"unknown key {name!r} in lab", hint, key=True)
            del options[name]
        try:
            ReadOptions.build(options, self.places.where(("lab",), key=True))
        except InputError as error:
            self.problems.extend(error.problems)
        return LabSpec(
            file=model.file,
            before=self.duration(("lab", "before"), model.before, "before of lab", "10 min", zero=True) or 0.0,
            after=self.duration(("lab", "after"), model.after, "after of lab", "10 min", zero=True) or 0.0,
            told_from=model.told_from,
            options=options,
        )

    def line_up(self, name: str, model: LineUpModel) -> LineUpSpec:
        path = ("line_ups", name)
        for i, stream in enumerate(model.closed):
            if stream not in self.streams:
                hint = did_you_mean(stream, self.streams) or "name streams of the case"
                words = f"line-up {name!r} closes {stream!r}, which is no stream"
                self.refuse((*path, "closed", i), "unknown-stream", words, hint)
        if (model.when is None) == (model.windows is None):
            what = "neither when nor windows" if model.when is None else "both when and windows"
            hint = "write when: 'valve = shut', or windows: [names]"
            self.refuse(path, "line-up-rule", f"line-up {name!r} has {what}", hint, key=True)
        when = None
        if model.when is not None:
            when = self.condition((*path, "when"), model.when, f"when of line-up {name!r}")
        names = tuple(self.places.text((*path, "windows", i), v) for i, v in enumerate(model.windows or ()))
        return LineUpSpec(name, tuple(model.closed), when, names)

    def fit(self, spec: CampaignSpec, windows_written: bool, lab_written: bool) -> None:
        """Refuse what does not fit together."""
        for tag, r in spec.readings.items():
            if (r.counter or r.level) and not windows_written:
                kind = "counter" if r.counter else "level"
                words = f"{tag} is a {kind}: it says nothing without a first and a last reading"
                hint = "add windows:, e.g. windows: {whole: true} or windows: {length: 1 h}"
                self.refuse(("meters", tag, "reading", kind), "windows-missing", words, hint, key=True)
            if r.sample and not lab_written:
                hint = "add lab: with the name of the file"
                self.refuse(("meters", tag, "reading", "sample"), "lab-missing", f"no lab: gives {tag}", hint, key=True)
        if lab_written and not windows_written and spec.lab is not None and spec.lab.options.get("interval"):
            words = "interval says which window a sample belongs to, and there are no windows"
            hint = (
                "write before: and after: instead, e.g. before: 1 h, after: 0 min for a sample collected over that hour"
            )
            self.refuse(("lab", "interval"), "interval-without-windows", words, hint, key=True)
        if lab_written and not spec.samples and spec.lab is not None:
            hint = "write reading: {sample: true} at the meters whose values it gives"
            self.refuse(("lab",), "lab-unused", "no meter takes its values from the laboratory's file", hint, key=True)


def _is_rate(unit: str) -> bool:
    kind = describe_kind(unit)
    return "per time" in kind or "power" in kind or "current" in kind
