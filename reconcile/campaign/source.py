"""Where the log and the laboratory's values come from, and whether their columns fit the meters."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from ..case.spec import CaseSpec
from ..errors import InputError, Location, Problem, Problems, did_you_mean
from ..readings.table import ReadingsTable
from ..units import factor_offset
from .spec import CampaignSpec
from .stamps import at_starts

__all__ = ["plan_of", "read_log", "read_samples"]


def plan_of(spec: CaseSpec) -> CampaignSpec:
    """What a case says about its log; an empty plan if it says nothing."""
    return spec.campaign if spec.campaign is not None else CampaignSpec()


def read_log(spec: CaseSpec, readings: Any, readers: Mapping[str, Any]) -> ReadingsTable:
    """Read the log, and check that its columns fit the meters.

    Parameters
    ----------
    spec : CaseSpec
    readings : path, DataFrame, mapping of tag to value(s), ReadingsTable or None
        None: what the case names.
    readers : mapping of suffix or scheme to callable
        Of plugins.

    Returns
    -------
    ReadingsTable
        Columns are tags, as they stand in the source: counters, levels, single samples.

    Raises
    ------
    InputError
    """
    plan, tags = plan_of(spec), tuple(spec.meters)
    needed = plan.columns(tags)
    from_file = readings is None or isinstance(readings, (str, Path))
    if isinstance(readings, ReadingsTable):
        table = readings
    elif from_file:
        table = _from_file(spec, plan, readings, needed, readers)
    else:
        table = _from_memory(readings, needed)
    headers = {plan.of(t).column or t: t for t in tags}
    if any(h != t for h, t in headers.items()):
        table = replace(
            table,
            columns=tuple(headers.get(c, c) for c in table.columns),
            units={headers.get(c, c): u for c, u in table.units.items()},
        )
    _check_columns(spec, plan, table, needed)
    if not from_file:
        return table
    held = spec.trajectory.held(spec.meters) if spec.trajectory is not None else ()
    instants = {*held, *(t for t, r in plan.readings.items() if r.counter is not None or r.level is not None)}
    named = spec.readings if isinstance(spec.readings, dict) else {}
    window = plan.windows.length if plan.windows is not None else None
    joined = plan.windows is not None or plan.lab is not None
    return at_starts(table, named.get("interval"), instants, window, joined=joined)


def _from_file(
    spec: CaseSpec, plan: CampaignSpec, readings: str | Path | None, needed: tuple[str, ...], readers: Mapping[str, Any]
) -> ReadingsTable:
    named = spec.readings if isinstance(spec.readings, dict) else {}
    if readings is None:
        if spec.readings is None:
            raise InputError(
                Problem(
                    "no-readings",
                    "the case names no readings, and none were given",
                    "add a line 'readings: readings.csv' to the case, or name the file with --readings",
                    Location(file=str(spec.path)),
                )
            )
        readings = spec.beside(str(named.get("file") if named else spec.readings))
    from ..readings.sources import read_readings

    given = {k: v for k, v in named.items() if k != "file"}
    if needed:
        kept = given.get("keep", ())
        given["keep"] = [
            *kept,
            *(c for c in needed if c not in kept and c not in (given.get("label_column"), given.get("time_column"))),
        ]
    expected = tuple(plan.of(t).column or t for t in spec.meters if not (plan.lab and plan.of(t).sample))
    return read_readings(readings, readers=readers, expected=expected, **given)


def _from_memory(readings: Any, needed: tuple[str, ...]) -> ReadingsTable:
    from ..readings.values import from_values

    present = [c for c in needed if c in readings]
    if not present:
        return from_values(readings)
    extra = {c: np.array([str(v) for v in np.atleast_1d(np.asarray(readings[c], dtype=object))]) for c in present}
    rest = (
        readings.drop(columns=present)
        if hasattr(readings, "columns")
        else {k: v for k, v in readings.items() if k not in present}
    )
    return replace(from_values(rest), extra=extra)


def read_samples(spec: CaseSpec, table: ReadingsTable, readers: Mapping[str, Any]) -> ReadingsTable | None:
    """Read the laboratory's file; None where there is none, or where the log holds its values already.

    Raises
    ------
    InputError
    """
    plan = plan_of(spec)
    if plan.lab is None or all(t in table.columns for t in plan.samples):
        return None
    from ..readings.sources import read_readings

    headers = {plan.of(t).column or t: t for t in plan.samples}
    found = read_readings(spec.beside(str(plan.lab.file)), readers=readers, expected=tuple(headers), **plan.lab.options)
    lab = replace(
        found,
        columns=tuple(headers.get(c, c) for c in found.columns),
        units={headers.get(c, c): u for c, u in found.units.items()},
    )
    problems = Problems(None)
    _check_units(spec, plan, lab, problems)
    problems.raise_if_any()
    return lab


def _check_columns(spec: CaseSpec, plan: CampaignSpec, table: ReadingsTable, needed: tuple[str, ...]) -> None:
    problems = Problems(None)
    for tag in spec.meters:
        if tag in table.columns or (plan.lab is not None and plan.of(tag).sample):
            continue
        header = plan.of(tag).column
        words = f"meter {tag!r} has no column in the readings" + (f" ({header!r})" if header else "")
        near = did_you_mean(header or tag, [c for c in table.columns if c not in spec.meters])
        problems.add("no-column", words, near or "add the column, empty where there is no reading")
    for tag in table.columns:
        if tag not in spec.meters and tag not in needed:
            problems.add(
                "unknown-column",
                f"column {tag!r} matches no meter of the case",
                did_you_mean(tag, spec.meters) or "declare the meter, or remove the column",
            )
    _check_units(spec, plan, table, problems)
    problems.raise_if_any()


def _check_units(spec: CaseSpec, plan: CampaignSpec, table: ReadingsTable, problems: Problems) -> None:
    for tag, stated in table.units.items():
        meter, rule = spec.meters.get(tag), plan.of(tag)
        wanted = meter.unit if meter is not None and rule.column_unit is None else rule.column_unit
        # A counter's column counts; what a count is worth stands in the case.
        if wanted and not same_unit(stated, wanted):
            problems.add(
                "unit-differs",
                f"the readings give {tag} in {stated}, the case in {wanted}",
                "state the unit of the file in the case; the program converts from there",
                Location(file=table.sources[0] if table.sources else None, tag=tag),
            )


def same_unit(a: str, b: str) -> bool:
    """Whether two spellings mean the same unit."""
    if a.strip() == b.strip():
        return True
    try:
        factor, offset = factor_offset(a, b)
    except ValueError:
        return False
    return abs(factor - 1.0) < 1e-12 and offset == 0.0
