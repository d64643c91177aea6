"""Checks of what comes out: test values, absent readings, faults found, false alarms, refusals."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ..adjust.table import adjust_table
from ..diagnose.critical import chi2_limit
from ..diagnose.lookalike import classes
from ..errors import InputError, ReconcileError
from ..model import Candidate, Model, build_model
from ..refit import problem_of
from ..results import Result
from ..snapshot import signatures
from ..units import factor_offset, same_kind
from .bench import Bench, Check, NotJudged, Stand
from .building import same_outcome
from .state import adjust, drawn, group_of, objectives, readings_at, stated_readings
from .trial import merged

__all__ = ["CHECKS"]

OTHER_UNITS = (
    "t/d", "g/s", "m3/d", "mL/s", "mol/s", "kmol/h", "kPa", "mmHg", "mbar", "mA", "A", "mA h", "W", "MJ/h",
    "mol/m3", "mmol/L", "mg/dL", "g/m3", "kg/L", "g/t", "fraction", "%", "K", "mol", "g", "mL", "L", "1",
)  # fmt: skip
"""Units to tell readings in, instead of the case's own."""


# ------------------------------------------------------------------ units and sigmas


def _units(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        case, factors = {**stand.trial.case, "meters": dict(stand.trial.case.get("meters", {}))}, {}
        for tag, meter in stand.case.parts.spec.meters.items():
            unit = _other_unit(meter.unit)
            if unit:
                case["meters"][tag] = {**case["meters"][tag], "unit": unit}
                factors[tag] = factor_offset(meter.unit, unit)[0]
        variants = [("another unit of the readings", case, factors)] if factors else []
        for change in stand.trial.in_other_units:
            variants.append((f"stating {change}", stand.trial.with_domains(change), {}))
        if not variants:
            raise NotJudged(f"{stand.label}: no reading and no option has another unit")
        for what, changed, scale in variants:
            other = Stand(stand.trial)
            try:
                other.__dict__["case"] = stand.trial.load(changed)
                out += [f"{stand.label}: {c}" for c in same_outcome(stand, other, bench, what, scale)]
            except ReconcileError as error:
                out.append(f"{stand.label}: {what}: {error}")
    return out


def _other_unit(unit: str) -> str:
    for other in OTHER_UNITS:
        if same_kind(unit, other):
            factor, offset = factor_offset(unit, other)
            if offset == 0.0 and abs(factor - 1.0) > 1e-9:
                return other
    return ""


def _sigmas(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        case, model = stand.case, stand.case.model
        doubled = _twice_as_wide(model)
        base = drawn(model, stand.state.x, bench.rng(), 3)
        one, two = adjust(case, base), adjust_table(
            problem_of(doubled, case.parts.spec.settings), base, names=case.name_of_column, row_names=case.name_of_row
        )  # fmt: skip
        for table in (one, two):
            out += [f"{stand.label}: {e}" for e in table.failed.values()]
        if one.failed or two.failed:
            continue
        a, b = (np.concatenate([(g.parity**2).sum(axis=1) for g in t.groups]) for t in (one, two))
        a, b = (v[np.argsort(np.concatenate([g.rows for g in t.groups]))] for v, t in ((a, one), (b, two)))
        for before, after in zip(a, b, strict=True):
            if abs(after - before / 4) > 1e-9 * max(1.0, before):
                out.append(f"{stand.label}: with all sigmas doubled chi-squared goes from {before:.9g} to {after:.9g}")
                break
    return out


def _twice_as_wide(model: Model) -> Model:
    """The same readings with every sigma doubled, those of prior knowledge and shared errors included."""
    wide = [replace(r, relative=2 * r.relative, absolute=2 * r.absolute) for r in model.readings if r.kind != "cause"]
    shared = [
        replace(s, relative=tuple(2 * v for v in s.relative), absolute=tuple(2 * v for v in s.absolute))
        for s in model.shared
    ]
    names = {c: model.names[c] for c in range(model.system.size)}
    fixed = {names[c]: v for c, v in model.fixed.items()}
    design = {names[c]: v for c, v in model.design.items()}
    return build_model(model.system, wide, fixed=fixed, shared=shared, design=design)


# ------------------------------------------------------------------ absent readings


def _missing(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        case = stand.case
        group = group_of(case, stand.state.x)
        values = stated_readings(case.model, readings_at(case.model, stand.state.x))
        for i in case.model.meters:
            tag = case.model.tags[i]
            result = case.run({**values, tag: np.nan})
            if result.table.failed:
                out.append(f"{stand.label}: without {tag} there is no answer: {result.table.failed[0]}")
                continue
            line = result.snapshot(0).reading(tag)
            if group.checked[i]:
                expected = values[tag]
                spread = max(case.model.total_sigma(readings_at(case.model, stand.state.x))[i], 1e-9 * abs(expected))
                if line.klass != "calculated" or not abs(line.adjusted - expected) <= 1e-3 * spread:
                    out.append(
                        f"{stand.label}: {tag} is checked by the others, but without its reading it is {line.klass} "
                        f"({line.adjusted:.6g} {line.unit}, truth {expected:.6g})"
                    )
            elif line.klass != "cannot be calculated" or np.isfinite(line.adjusted):
                out.append(
                    f"{stand.label}: nothing checks {tag}, yet without its reading it comes out as {line.adjusted:.6g}"
                )
            elif not _told_why(result, line.reads):
                out.append(f"{stand.label}: without {tag} nothing says why {line.reads} cannot be calculated")
    return out


def _told_why(result: Result, reads: str) -> bool:
    lines = {v.name: v for v in result.snapshot(0).variables}
    return reads not in lines or bool(lines[reads].reason)


# ------------------------------------------------------------------ faults


def _injected(bench: Bench) -> list[str]:
    out = []
    tried = 0
    for stand in bench.stands:
        case, model = stand.case, stand.case.model
        group = group_of(case, stand.state.x)
        if group.checks == 0:
            continue
        shifts = signatures(model, group)
        norms = np.linalg.norm(shifts, axis=0)
        alike = classes(shifts, scale=np.maximum(norms.max(initial=0.0) * 1e-3, norms))
        linear = group.equations.is_linear
        for k, candidate in enumerate(model.candidates):
            if alike.label[k] < 0:
                continue
            # A linear case is exact for any size; elsewhere a small one, without noise, keeps the first order exact.
            size = (12.0 if linear else 0.02) / norms[k] * (candidate.side or 1)
            base = _with_fault(stand, candidate, size)
            table = adjust(case, base[None])
            tried += 1
            if table.failed:
                out.append(f"{stand.label}: with fault {candidate.name} there is no answer: {table.failed[0]}")
                continue
            found = table.groups[0]
            now = signatures(model, found)
            length = np.linalg.norm(now, axis=0)
            with np.errstate(divide="ignore", invalid="ignore"):
                z = np.where(alike.label >= 0, np.abs(found.parity[0] @ now) / length, 0.0)
            if not z[k] >= (1.0 - 1e-3) * np.nanmax(z):
                best = model.candidates[int(np.nanargmax(z))].name
                out.append(
                    f"{stand.label}: fault {candidate.name} was injected, but {best} explains the readings better"
                )
    if not tried:
        raise NotJudged("no trial has a reading that another one checks")
    return out


def _with_fault(stand: Stand, candidate: Candidate, size: float) -> np.ndarray:
    """Readings without noise, base units, when a fault is there: a biased meter, or balances that close with it."""
    model = stand.case.model
    if candidate.reading >= 0:
        base = readings_at(model, stand.state.x)
        base[candidate.reading] += size * candidate.scale
        return base
    x = stand.state.x.copy()
    column = candidate.column
    x[column] = size
    e = stand.equations
    move = np.array([c for c in range(x.size) if c not in model.fixed], dtype=np.int64)
    scale = np.where(np.abs(x[move]) > 0, np.abs(x[move]), 1.0)
    for _ in range(20):
        rows = np.maximum(e.largest_term(x), 1e-300)
        slopes = e.jacobian(x)[:, move].toarray() * scale / rows[:, None]
        step = np.linalg.lstsq(slopes, -e.closure(x) / rows, rcond=1e-12)[0] * scale
        x[move] += step
        if np.abs(step / scale).max() < 1e-15:
            break
    return readings_at(model, x)


# ------------------------------------------------------------------ no fault


def _alarms(bench: Bench) -> list[str]:
    out = []
    judged = 0
    for stand in bench.stands:
        case = stand.case
        if group_of(case, stand.state.x).checks == 0:
            continue
        judged += 1
        total, checks = objectives(case, stand.state.x, drawn(case.model, stand.state.x, bench.rng(), bench.runs))
        level = case.parts.spec.settings.level
        limits = {int(c): chi2_limit(level, int(c)) for c in np.unique(checks) if c}
        failed = int(np.isnan(total).sum())
        alarms = failed + sum(t > limits[int(c)] for t, c in zip(total, checks, strict=True) if c)
        share = alarms / bench.runs
        # At 5 % and 2000 runs this is 4 to 6 %: two standard deviations of the binomial, and a little more.
        band = 0.01 * np.sqrt(level * (1 - level) / 0.0475 * 2000 / bench.runs)
        if abs(share - level) > band:
            out.append(
                f"{stand.label}: of {bench.runs} runs without a fault {100 * share:.2f} % alarm, "
                f"expected {100 * (level - band):.2f} to {100 * (level + band):.2f} %"
                + (f" ({failed} found no answer)" if failed else "")
            )
    if not judged:
        raise NotJudged("no trial has a reading that another one checks")
    return out


# ------------------------------------------------------------------ refusals


def _refusals(bench: Bench) -> list[str]:
    out = []
    entries = [(s, r) for s in bench.stands for r in s.trial.refused]
    if not entries:
        raise NotJudged("no trial states a case that is refused; write refused: [{change: ..., says: [...]}]")
    for stand, refused in entries:
        try:
            stand.trial.load(merged(stand.trial.case, refused.change))
        except InputError as error:
            text = str(error)
            bare = [p for p in error.problems if not p.message.rstrip().rstrip(":").strip()]
            told = [p.message.removeprefix(f"domain {stand.trial.domain!r}:").strip() for p in error.problems]
            absent = [w for w in refused.says if w not in text]
            if bare or not all(told):
                out.append(f"{stand.label}: the refusal of {refused.change} has an empty message")
            elif absent:
                out.append(
                    f"{stand.label}: the refusal of {refused.change} does not say {absent[0]!r}; it says {text!r}"
                )
            elif stand.trial.domain not in text and not any(p.where.line for p in error.problems):
                out.append(f"{stand.label}: the refusal of {refused.change} names neither the domain nor a line")
        except ReconcileError as error:
            out.append(f"{stand.label}: {refused.change} should be refused with a ValueError; it gives {error}")
        else:
            out.append(f"{stand.label}: {refused.change} is not refused")
    return out


SOUND = ("truth", "derivatives", "order")

CHECKS = (
    Check("units", "other units change neither chi-squared nor test values", _units, ("one unit", *SOUND)),
    Check("sigmas", "doubling all sigmas quarters chi-squared", _sigmas, SOUND),
    Check("missing", "an absent reading is calculated, or said to be unknown and why", _missing, SOUND),
    Check("injected", "an injected fault lands in the first look-alike class", _injected, SOUND),
    Check("alarms", "runs without a fault alarm as often as stated", _alarms, SOUND),
    Check("refusals", "a wrong case is refused in words that say what and where", _refusals),
)
