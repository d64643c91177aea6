"""Before the experiment: which meter to add next, and how often a fault would be noticed and named."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .coverage import expected_group
from .diagnose.planning import BreakTie, FindFault, Goal, Narrow, NewMeter, Observe, Placement, Plan, place
from .diagnose.refusal import Refusal
from .diagnose.rehearse import Rate, Rehearsal, rehearse
from .errors import InputError, Problem, Problems, did_you_mean
from .figures import parse_figure
from .snapshot import signatures

if TYPE_CHECKING:
    from .adjust.table import Group
    from .model import Model
    from .run import Case

__all__ = ["Offer", "Placements", "Rehearsed", "place_meters", "rehearse_case"]

Array = npt.NDArray[np.float64]

DEFAULT_SHARE = 0.01
"""Sigma of an offered meter as a share of the expected value where no meter of that variable states one; a choice of
this program, no source."""


@dataclass(frozen=True)
class Offer:
    """A meter that could be added.

    Attributes
    ----------
    variable : str
    sigma : float
        In the unit of the variable.
    unit : str
    price : float
    origin : str
        Where the sigma comes from.
    """

    variable: str
    sigma: float
    unit: str
    price: float
    origin: str


@dataclass(frozen=True)
class Placements:
    """Meters that could be added, ranked for one goal.

    Attributes
    ----------
    goal : str
        In words.
    measure : str
        What the numbers are.
    unit : str
        Their unit.
    offers : tuple of Offer
    ranked : tuple of Placement
        The best first.
    """

    goal: str
    measure: str
    unit: str
    offers: tuple[Offer, ...]
    ranked: tuple[Placement, ...]


def place_meters(
    case: Case,
    *,
    find: str | None = None,
    narrow: str | None = None,
    separate: Sequence[str] = (),
    determine: str | None = None,
    offers: Sequence[str] = (),
    count: int = 1,
) -> Placements:
    """Rank the meters that could be added to a case.

    Parameters
    ----------
    case : Case
    find : str, optional
        Goal: notice a smaller fault of this meter or possible fault.
    narrow : str, optional
        Goal: a smaller uncertainty of this variable, figure or arithmetic over variables.
    separate : sequence of str, optional
        Goal: tell these faults apart.
    determine : str, optional
        Goal: make this variable calculable.
    offers : sequence of str, optional
        ``variable = sigma unit`` and, behind a semicolon, a price; every variable that stands in a balance when left
        out, with the sigma of the meter that reads it now.
    count : int
        1 or 2 meters at once; every set is tried.

    Returns
    -------
    Placements

    Raises
    ------
    InputError
        If no goal or more than one is given, or a name is not known.
    """
    stated = [g for g in (find, narrow, determine, separate or None) if g is not None]
    if len(stated) != 1:
        raise InputError(
            Problem(
                "goal-missing" if not stated else "goal-ambiguous",
                "which meter is best depends on what it is for"
                if not stated
                else f"{len(stated)} goals are given, and the best meter differs between them",
                "give one of --find TAG, --narrow VARIABLE, --separate A --separate B, --determine VARIABLE",
            )
        )
    if count not in (1, 2):
        raise InputError(Problem("count-out-of-range", f"{count} meters at once", "ask for 1 or 2"))
    model, settings = case.model, case.parts.spec.settings
    group = expected_group(case)
    plan = plan_of(model, group)
    level, power = settings.level, settings.power
    goal: Goal
    if find is not None:
        i = _candidate(model, find)
        goal, words, measure, unit = (
            FindFault(i, level, power), f"find a fault of {find}", "smallest that is noticed", model.candidates[i].unit,
        )  # fmt: skip
    elif narrow is not None:
        row, unit = _row(case, group, narrow)
        goal, words, measure = Narrow(row), f"narrow {narrow}", "sigma after adjustment"
    elif determine is not None:
        row, _ = _row(case, group, determine)
        goal, words, measure, unit = Observe(row[None]), f"determine {determine}", "not determined", "variables"
    else:
        indices = tuple(_candidate(model, s) for s in separate)
        if len(indices) < 2:
            raise InputError(Problem("goal-missing", "one fault alone cannot be told apart", "name two or more"))
        goal, words, measure, unit = (
            BreakTie(indices), f"tell {' and '.join(separate)} apart", "largest correlation", "",
        )  # fmt: skip
    offered = [_offer(case, text) for text in offers] if offers else _every_offer(model, group)
    meters = []
    for o in offered:
        row = np.zeros(model.size)
        row[model.system.column(o.variable)] = 1.0
        meters.append(NewMeter(row, o.sigma, o.price))
    try:
        ranked = place(plan, meters, goal, count=count)
    except Refusal as refusal:
        raise InputError(Problem(refusal.code, refusal.message, refusal.hint)) from None
    return Placements(words, measure, unit, tuple(offered), ranked)


def plan_of(model: Model, group: Group) -> Plan:
    """Return a network with its candidates, as the planning kernel wants it; faults in the unit of each."""
    a = group.adjuster
    n = model.size
    cover = np.zeros((n, a.cover.shape[1]))
    cover[group.columns[group.present]] = a.cover
    cover[group.free] = a.cover_unmeasured
    null = a.elimination.null
    free = np.zeros((n, null.shape[1]))
    free[group.free] = null
    shifts = signatures(model, group)
    scale = np.array([c.scale for c in model.candidates])
    of_readings = group.response
    columns = model.fault_columns
    of_faults = np.zeros((n, columns.size))
    moved = -a.sigma[:, None] * (a.q1 @ group.signatures_of(columns))
    of_faults[group.columns[group.present]] = moved
    for j, column in enumerate(columns):
        of_faults[group.free, j] = a.unmeasured(moved[:, j], group.jacobian[:, column])[0]
    response = np.hstack([of_readings, of_faults]) * scale
    length = np.linalg.norm(shifts, axis=0)
    whole = np.where(length > 0, length, 1.0)
    for i, c in enumerate(model.candidates):
        if c.reading >= 0:
            whole[i] = abs(c.scale) / group.sigma[c.reading]
    return Plan(shifts, cover, response, free, whole)


def _candidate(model: Model, name: str) -> int:
    names = [c.name for c in model.candidates]
    if name not in names:
        raise InputError(
            Problem("unknown-fault", f"there is no meter or possible fault {name!r}", did_you_mean(name, names))
        )
    return names.index(name)


def _row(case: Case, group: Group, text: str) -> tuple[Array, str]:
    """Direction of a variable, a figure or arithmetic over variables, at the expected values."""
    model = case.model
    figure = parse_figure(case.parts.spec.figures.get(text, text))
    shown = {model.names[c]: int(c) for c in model.shown}
    problems = Problems(None)
    for name in figure.names:
        if name not in shown:
            problems.add("unknown-variable", f"there is no variable {name!r}", did_you_mean(name, shown))
    problems.raise_if_any()
    _, slopes = figure.value({n: float(group.x[0, shown[n]]) for n in figure.names})
    row = np.zeros(model.size)
    for name, slope in slopes.items():
        row[shown[name]] = slope
    unit = model.units[shown[figure.names[0]]] if figure.text.strip() in shown else ""
    return row, unit


def _offer(case: Case, text: str) -> Offer:
    """Read ``variable = sigma unit; price``."""
    from .units import difference_factor, parse_quantity

    match = re.fullmatch(r"\s*([^=]+?)\s*=\s*([^;]+?)\s*(?:;\s*([0-9.]+)\s*)?", text)
    if match is None:
        raise InputError(
            Problem(
                "offer-syntax", f"offer {text!r} is not understood", "write e.g. --offer 'feed.flow = 0.5 kg/h; 1200'"
            )
        )
    name = match.group(1)
    units = case.parts.system.units()
    if name not in units:
        raise InputError(Problem("unknown-variable", f"there is no variable {name!r}", did_you_mean(name, units)))
    try:
        value, unit = parse_quantity(match.group(2))
        sigma = value * difference_factor(unit, units[name])
    except ValueError as error:
        raise InputError(
            Problem("offer-syntax", f"offer {text!r}: {error}", f"state a sigma in {units[name]}")
        ) from None
    return Offer(name, sigma, units[name], float(match.group(3) or 0.0), "as offered")


def _every_offer(model: Model, group: Group) -> list[Offer]:
    stated: dict[int, tuple[float, str]] = {}
    for i, r in enumerate(model.readings):
        if r.kind == "meter" and len(r.reads) == 1:
            column = model.system.column(r.reads[0][0])
            stated.setdefault(column, (float(group.sigma[i] / abs(r.reads[0][1])), f"as {r.tag}"))
    out = []
    touched = np.abs(group.jacobian).sum(axis=0) > 0
    for c in model.shown:
        if int(c) in model.fixed or not touched[c]:
            continue
        if int(c) in stated:
            sigma, origin = stated[int(c)]
        else:
            value = abs(float(group.x[0, c]))
            peers = [s for k, (s, _) in stated.items() if model.units[k] == model.units[c]]
            sigma = DEFAULT_SHARE * value if value > 0 else float(np.median(peers)) if peers else 0.0
            origin = "1 % of the expected value" if value > 0 else "median of the meters in this unit"
            if sigma <= 0:
                continue
        out.append(Offer(model.names[c], sigma, model.units[c], 0.0, origin))
    return out


@dataclass(frozen=True)
class Rehearsed:
    """A rehearsal with names.

    Attributes
    ----------
    names, units : tuple of str
        Of the injected faults.
    sizes : tuple of float
    found : Rehearsal
    candidates : tuple of str
        Columns of the confusion table; the last is `nothing`.
    trials, seed : int
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    sizes: tuple[float, ...]
    found: Rehearsal
    candidates: tuple[str, ...]
    trials: int
    seed: int

    def noticed(self, name: str) -> Rate:
        """How often a fault was noticed."""
        return self.found.noticed[self.names.index(name)]

    def named(self, name: str) -> Rate:
        """How often a fault was named first."""
        return self.found.named[self.names.index(name)]


def rehearse_case(
    case: Case,
    *,
    inject: Sequence[str] = (),
    sigmas: float | None = None,
    trials: int = 2000,
    seed: int = 1,
) -> Rehearsed:
    """Inject faults into a case many times and count what would be noticed and named.

    Parameters
    ----------
    case : Case
        Expected values are needed where a sigma is stated in percent or a balance holds products.
    inject : sequence of str, optional
        ``TAG`` or ``TAG = size unit``; every checked meter and possible fault when left out.
    sigmas : float, optional
        Size in sigmas of each meter where none is stated; the smallest detectable size when left out.
    trials : int
        Draws per fault, and as many without one.
    seed : int

    Returns
    -------
    Rehearsed

    Raises
    ------
    InputError
        If nothing is checked or a name is not known.
    """
    model, settings = case.model, case.parts.spec.settings
    group = expected_group(case)
    shifts = signatures(model, group)
    norms = np.linalg.norm(shifts, axis=0)
    from .diagnose.critical import smallest_detectable

    chosen: list[tuple[int, float]] = []
    for text in inject or [c.name for i, c in enumerate(model.candidates) if norms[i] > 0 and c.kind != "shared error"]:
        name, _, stated = text.partition("=")
        i = _candidate(model, name.strip())
        c = model.candidates[i]
        if stated.strip():
            size = _size(stated, c.unit)
        elif sigmas is not None and c.reading >= 0:
            size = sigmas * float(group.sigma[c.reading]) / abs(c.scale)
        else:
            size = smallest_detectable(float(norms[i]), settings.level, settings.power)
        if not np.isfinite(size):
            raise InputError(Problem("not-checked", f"nothing in this network would notice a fault of {c.name}"))
        chosen.append((i, size))
    try:
        found = rehearse(
            shifts, [{i: s} for i, s in chosen], trials=trials, rng=seed, level=settings.level, scale=norms
        )
    except Refusal as refusal:
        raise InputError(Problem(refusal.code, refusal.message, refusal.hint)) from None
    return Rehearsed(
        tuple(model.candidates[i].name for i, _ in chosen),
        tuple(model.candidates[i].unit for i, _ in chosen),
        tuple(s for _, s in chosen),
        found,
        (*(c.name for c in model.candidates), "nothing"),
        trials,
        seed,
    )


def _size(text: str, unit: str) -> float:
    from .units import difference_factor, parse_quantity

    try:
        value, stated = parse_quantity(text.strip())
        return value * difference_factor(stated, unit)
    except ValueError as error:
        raise InputError(Problem("size-syntax", f"size {text.strip()!r}: {error}", f"state it in {unit}")) from None
