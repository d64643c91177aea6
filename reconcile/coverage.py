"""Before any reading is taken: what the meters of a case can check, calculate and notice."""

from __future__ import annotations

from dataclasses import asdict, dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .adjust.structure import additions_to_calculate, additions_to_check, ties
from .adjust.table import Group, adjust_table
from .checks_in_words import checks_in_words, dependent_in_words, sum_in_words
from .diagnose.critical import smallest_detectable
from .diagnose.familywise import familywise_limit
from .diagnose.lookalike import classes, near_parallel
from .diagnose.rehearse import rehearse
from .errors import InputError, Location, Problem
from .snapshot import signatures

if TYPE_CHECKING:
    from .model import Model
    from .run import Case

__all__ = ["Coverage", "CoverageLine", "LookAlike", "UnreadLine", "coverage_in", "coverage_of"]

Array = npt.NDArray[np.float64]

DRAWS, SEED = 1000, 1
MOST_DRAWN = 200
"""Chances of naming a fault right are drawn where there are no more candidates than this."""


@dataclass(frozen=True)
class CoverageLine:
    """A fault that might be there, and whether anything would notice it.

    Attributes
    ----------
    name, kind, item, unit : str
    value : float
        Expected reading; nan where it is not a reading or none is expected.
    sigma_before, sigma_after : float
        Standard uncertainty of the reading and of the adjusted value; nan for faults that are no readings.
    share : float
        Share of an error that would show; nan for faults that are no readings.
    smallest : float
        Smallest size that is noticed at the level and power of the case if only this fault is asked for.
    smallest_of_all : float
        The same with the correction for asking for all of its kind at once.
    needs : tuple of tuple of str
        For an unchecked reading: smallest sets of variables that would make it checked if they were read.
    named : float
        Chance that a fault of the smallest size is ranked first, it or one that looks exactly like it: a share of
        seeded draws; nan where nothing would notice it, or where there are too many candidates to draw each.
    """

    name: str
    kind: str
    item: str
    unit: str
    value: float
    sigma_before: float
    sigma_after: float
    share: float
    smallest: float
    smallest_of_all: float
    needs: tuple[tuple[str, ...], ...] = ()
    named: float = np.nan


@dataclass(frozen=True)
class UnreadLine:
    """A variable that no meter reads.

    Attributes
    ----------
    name, unit, klass : str
    sigma : float
        Standard uncertainty with which it would be calculated.
    reason : str
        Why it cannot be calculated.
    needs : tuple of tuple of str
        Smallest sets of other variables that would make it calculable if they were read.
    """

    name: str
    unit: str
    klass: str
    sigma: float
    reason: str = ""
    needs: tuple[tuple[str, ...], ...] = ()


@dataclass(frozen=True)
class LookAlike:
    """Two faults that are hard to tell apart, or cannot be told apart at all."""

    first: str
    second: str
    correlation: float
    same: bool


@dataclass(frozen=True)
class Coverage:
    """What a set of meters can show.

    Attributes
    ----------
    title : str
    checks : int
        Independent checks.
    checks_in_words, dependent : tuple of str
    lines : tuple of CoverageLine
        Readings first, then the faults that domains know.
    unread : tuple of UnreadLine
    classes : tuple of tuple of str
        Faults that no reading of this network can tell apart.
    near : tuple of LookAlike
        Pairs whose signatures correlate by 0.9 or more.
    level, power : float
    """

    title: str
    checks: int
    checks_in_words: tuple[str, ...]
    dependent: tuple[str, ...]
    lines: tuple[CoverageLine, ...]
    unread: tuple[UnreadLine, ...]
    classes: tuple[tuple[str, ...], ...]
    near: tuple[LookAlike, ...]
    level: float
    power: float

    def line(self, name: str) -> CoverageLine:
        """Line of a fault by its name: a tag, or e.g. ``mixer.leak``."""
        return next(x for x in self.lines if x.name == name)

    def to_dict(self) -> dict[str, Any]:
        """Return everything as plain data, safe for JSON."""
        return _plain(asdict(self))


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {k: _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value


def coverage_of(case: Case) -> Coverage:
    """Work out what the meters of a case can show.

    Parameters
    ----------
    case : Case
        Expected values (``design:``) are needed where a sigma is stated in percent or a balance holds products.

    Returns
    -------
    Coverage

    Raises
    ------
    InputError
        If expected values are needed and missing.
    """
    return coverage_in(case.title, case.model, expected_group(case), case.parts.spec.settings)


def coverage_in(title: str, model: Model, group: Group, settings: Any) -> Coverage:
    """Work out what the readings of one linearisation can show.

    Parameters
    ----------
    title : str
    model : Model
    group : Group
    settings : Settings
        Level and power.

    Returns
    -------
    Coverage
    """
    shifts = signatures(model, group)
    norms = np.linalg.norm(shifts, axis=0)
    kinds = np.array([c.kind for c in model.candidates])
    limit_ratio = {}
    for kind in dict.fromkeys(kinds):
        own = shifts[:, kinds == kind]
        live = np.linalg.norm(own, axis=0) > 0
        limit_ratio[kind] = (
            familywise_limit(own[:, live], settings.level).limit if live.any() and group.checks else np.nan
        )
    lines = _lines(model, group, settings, norms, limit_ratio)
    chances = _chances(shifts, norms, lines, settings)
    lines = tuple(replace(line, named=chances.get(i, np.nan)) for i, line in enumerate(lines))
    alike = classes(shifts, scale=norms) if group.checks else None
    pairs = near_parallel(shifts, scale=norms) if group.checks else None
    names = [c.name for c in model.candidates]
    tied = tuple(tuple(names[i] for i in m) for m in alike.tied) if alike else ()
    near = (
        tuple(
            LookAlike(names[int(i)], names[int(j)], float(c), bool(t))
            for i, j, c, t in zip(pairs.first, pairs.second, pairs.correlation, pairs.tied, strict=True)
            if not t
        )
        if pairs
        else ()
    )
    return Coverage(
        title=title,
        checks=group.checks,
        checks_in_words=checks_in_words(model, group),
        dependent=dependent_in_words(model, group),
        lines=lines,
        unread=_unread(model, group),
        classes=tied,
        near=near,
        level=settings.level,
        power=settings.power,
    )


def _chances(shifts: Array, norms: Array, lines: tuple[CoverageLine, ...], settings: Any) -> dict[int, float]:
    """Chance of naming each fault right at its smallest detectable size, drawn with a fixed seed."""
    noticed = [i for i, line in enumerate(lines) if np.isfinite(line.smallest)]
    if not noticed or len(noticed) > MOST_DRAWN:
        return {}
    sizes = [{i: smallest_detectable(float(norms[i]), settings.level, settings.power)} for i in noticed]
    found = rehearse(shifts, sizes, trials=DRAWS, rng=SEED, level=settings.level, scale=norms)
    return {i: rate.value for i, rate in zip(noticed, found.in_class, strict=True)}


def expected_group(case: Case) -> Group:
    """Linearisation at the expected values of a case."""
    model = case.model
    values = np.full(len(model.readings), np.nan)
    missing = []
    for i, r in enumerate(model.readings):
        if r.kind != "meter":
            values[i] = model.constants[i]
            continue
        columns = [model.system.column(n) for n, _ in r.reads]
        known = [model.design.get(c, model.fixed.get(c, np.nan)) for c in columns]
        values[i] = sum(c * v for (_, c), v in zip(r.reads, known, strict=True))
        if not np.isfinite(values[i]):
            missing.append(i)
    needed = model.has_relative or not model.equations.is_linear
    if missing and needed:
        values = _from_readings(case, values)
        missing = [i for i in missing if not np.isfinite(values[i])]
    if missing and needed:
        tags = ", ".join(model.tags[i] for i in missing)
        raise InputError(
            Problem(
                "needs-design",
                f"what {tags} can show depends on the expected value, and none is stated",
                "state expected values, e.g. design: {feed.flow: 50 kg/h}",
                Location(file=str(case.parts.spec.path)),
            )
        )
    values = np.where(np.isfinite(values), values, 0.0)
    table = adjust_table(case.problem(), values[None], names=case.name_of_column, row_names=case.name_of_row)
    if table.failed:
        raise table.failed[0]
    return table.groups[0]


def _from_readings(case: Case, values: Array) -> Array:
    """Medians of the readings that the case names stand in for expected values that it does not state."""
    path = case.readings_path()
    if path is None or not path.is_file():
        return values
    table = case.prepare().table
    out = values.copy()
    base = case.model.to_base(
        np.where(table.usable, table.values, np.nan)[:, [table.columns.index(t) for t in case.tags]]
    )
    for i in np.flatnonzero(~np.isfinite(out)):
        seen = base[np.isfinite(base[:, i]), i]
        if seen.size:
            out[i] = float(np.median(seen))
    return out


def _lines(
    model: Model, group: Group, settings: Any, norms: Array, limits: dict[str, float]
) -> tuple[CoverageLine, ...]:
    x = group.x[0]
    value = x[model.columns]
    total = model.total_sigma(value)
    from scipy.special import ndtri

    out = []
    for i, c in enumerate(model.candidates):
        before = after = share = shown = np.nan
        needs: tuple[tuple[str, ...], ...] = ()
        noticed = norms[i] > 0
        if c.reading >= 0:
            r = model.readings[i]
            combination = [(model.system.column(n), k) for n, k in r.reads] if r.kind != "cause" else []
            combination = combination or [(int(model.columns[i]), 1.0)]
            cover = sum(k * group.cover[col] for col, k in combination)
            shown = (float(value[i]) - r.offset) / r.factor
            before = float(total[i] / abs(r.factor))
            after = float(np.linalg.norm(cover) / abs(r.factor))
            noticed = bool(group.checked[i])
            moves = sum(k * group.response[col, i] for col, k in combination)
            share = float(np.clip(1.0 - moves, 0.0, 1.0)) if noticed else 0.0
            if not noticed:
                needs = _needs_check(model, group, i)
        single = smallest_detectable(float(norms[i]), settings.level, settings.power) if noticed else np.inf
        of_all = (limits[c.kind] + float(ndtri(settings.power))) / norms[i] if noticed else np.inf
        out.append(CoverageLine(c.name, c.kind, c.item, c.unit, shown, before, after, share, single, of_all, needs))
    return tuple(out)


def _needs_check(model: Model, group: Group, reading: int) -> tuple[tuple[str, ...], ...]:
    if reading not in group.present or reading in group.absent:
        return ()
    position = int(np.flatnonzero(group.present == reading)[0])
    a = group.adjuster
    free = group.jacobian[:, group.free]
    found = additions_to_check(a.measured, free, position)
    return tuple(tuple(model.names[group.free[k]] for k in s) for s in found)


def _unread(model: Model, group: Group) -> tuple[UnreadLine, ...]:
    read = {n for r in model.readings if r.kind != "cause" and len(r.reads) == 1 for n, _ in r.reads}
    shown = set(model.shown.tolist())
    out = []
    elimination = group.adjuster.elimination
    for k, column in enumerate(group.free):
        name = model.names[column]
        if int(column) not in shown or name in read:
            continue
        if group.determined[column]:
            sigma = float(np.linalg.norm(group.cover[column]))
            out.append(UnreadLine(name, model.units[column], "calculated", sigma))
            continue
        tied = {model.names[group.free[j]]: v for j, v in ties(elimination, k).items()}

        reason = f"only {sum_in_words(tied)} is known" if len(tied) > 1 else "no balance ties it to a reading"
        found = additions_to_calculate(group.jacobian[:, group.free], k)
        needs = tuple(tuple(model.names[group.free[j]] for j in s) for s in found)
        out.append(UnreadLine(name, model.units[column], "cannot be calculated", np.nan, reason, needs))
    return tuple(out)
