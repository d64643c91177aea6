"""Checks of the balances themselves: units, signs, derivatives, an exact state, dependent ones."""

from __future__ import annotations

import contextlib
import itertools
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

from ..adjust.eliminate import dependent_rows
from ..errors import ReconcileError, did_you_mean
from ..units import UnitProblem, difference_factor, same_kind
from .bench import Bench, Check, Stand
from .state import convert

__all__ = ["CHECKS"]

Array = npt.NDArray[np.float64]

EXACT = 1e-12
SLOPES = 1e-6
REBUILT = 1e-9
SHOWN = 3


# ------------------------------------------------------------------ one unit


def _one_unit(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        out += [f"{stand.label}: {c}" for c in _mixed_terms(stand)]
        if not stand.trial.in_other_units and _has_unit_option(bench):
            out.append(f"{stand.label}: the domain has units among its options; state others under in_other_units")
        for change in stand.trial.in_other_units:
            out += [f"{stand.label}: {c}" for c in _rebuilt(stand, change, bench)]
    return out


def _has_unit_option(bench: Bench) -> bool:
    fields = bench.domain.options.model_fields if bench.domain.options is not None else {}
    return any(name == "unit" or name.endswith("_unit") for name in fields)


def _mixed_terms(stand: Stand) -> Iterator[str]:
    """Two terms of one balance in different units of one kind, taken with the same factor."""
    for row in stand.own_indices():
        terms = list(_terms(stand, int(row)))
        for (a, unit_a, ca), (b, unit_b, cb) in itertools.combinations(terms, 2):
            one_factor = unit_a != unit_b and abs(abs(ca) - abs(cb)) <= 1e-12 * abs(ca)
            if one_factor and same_kind(unit_a, unit_b) and abs(difference_factor(unit_a, unit_b) - 1.0) > 1e-12:
                name = stand.system.row_names()[row]
                yield f"balance {name!r} adds {a} in {unit_a} to {b} in {unit_b} with one factor"
                break


def _terms(stand: Stand, row: int) -> Iterator[tuple[str, str, float]]:
    """Terms of a balance that have a unit of their own: (name, unit, coefficient)."""
    e, system = stand.equations, stand.system
    linear = e.linear[[row]]
    for c, value in zip(linear.indices, linear.data, strict=True):
        yield system.name(int(c)), system.unit(int(c)), float(value)
    if e.products.nnz:
        products = e.products[[row]]
        for p, value in zip(products.indices, products.data, strict=True):
            i, j = (int(c) for c in e.pairs[p])
            yield f"{system.name(i)} * {system.name(j)}", f"({system.unit(i)})*({system.unit(j)})", float(value)


def _rebuilt(stand: Stand, change: dict[str, object], bench: Bench) -> list[str]:
    """Write the balances in other units: every closure must be the same quantity."""
    told = ", ".join(f"{d}: {o}" for d, o in change.items())
    other = Stand(stand.trial)
    try:
        other.__dict__["case"] = stand.trial.load(stand.trial.with_domains(change))
    except ReconcileError as error:
        return [f"with {told}: {error}"]
    names = {n: i for i, n in enumerate(other.system.row_names())}
    if set(names) != set(stand.system.row_names()) or set(other.system.names()) != set(stand.system.names()):
        return [f"with {told} there are other balances or variables than before"]
    x = stand.near(bench.rng())
    y = convert(x, stand.system, other.system)
    one, two = stand.equations.closure(x), other.equations.closure(y)
    size = other.equations.largest_term(y)
    out = []
    for rows in stand.own_rows():
        for k, name in enumerate(rows.names):
            there = names[name]
            try:
                factor = difference_factor(rows.unit, other.system.rows_of(there).unit)
            except UnitProblem as problem:
                out.append(f"balance {name!r} with {told}: {problem}")
                continue
            if abs(two[there] - factor * one[rows.start + k]) > REBUILT * size[there]:
                odd = _odd_terms(stand, other, rows.start + k, there, factor, x, y)
                out.append(
                    f"balance {name!r} mixes units: with {told} it is {two[there]:.6g} instead of "
                    f"{factor * one[rows.start + k]:.6g} {other.system.rows_of(there).unit}; look at {odd}"
                )
    return out[:SHOWN]


def _odd_terms(stand: Stand, other: Stand, row: int, there: int, factor: float, x: Array, y: Array) -> str:
    """Variables whose share of a balance does not follow the units."""
    before = stand.equations.jacobian(x)[[row]].toarray()[0]
    after = other.equations.jacobian(y)[[there]].toarray()[0]
    share = []
    for c, name in enumerate(stand.system.names()):
        column = other.system.column(name)
        told = after[column] * difference_factor(stand.system.unit(c), other.system.unit(column))
        share.append(abs(told - factor * before[c]) * max(abs(x[c]), 1e-300))
    odd = np.flatnonzero(np.array(share) > 1e-6 * max(share))
    return ", ".join(stand.system.name(int(c)) for c in odd[:SHOWN])


# ------------------------------------------------------------------ signs


def _inflows(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        kinds = {n: r for r in stand.system.row_blocks for n in r.names}
        for balance, entries in stand.trial.inflows.items():
            if balance not in kinds:
                out.append(f"{stand.label}: there is no balance {balance!r}; {did_you_mean(balance, kinds)}")
                continue
            out += [f"{stand.label}: {c}" for e in entries if (c := _inflow(stand, balance, e))]
    if not any(s.trial.inflows for s in bench.stands):
        out.append("no trial states what flows into a balance; write inflows: {balance: [variable]}")
    return out


def _inflow(stand: Stand, balance: str, entry: str) -> str:
    system = stand.system
    row = system.row_names().index(balance)
    unit = system.rows_of(row).unit
    names = [n.strip() for n in entry.split(" * ")]
    share = 1.0
    with contextlib.suppress(ValueError):
        share, names = float(names[0]), names[1:]
    known = {n: i for i, n in enumerate(system.names())}
    missing = [n for n in names if n not in known]
    if missing or not 1 <= len(names) <= 2:
        return f"inflow {entry!r} of {balance!r} is no variable and no product of two; {did_you_mean(missing[0], known) if missing else ''}"
    columns = [known[n] for n in names]
    if len(columns) == 1:
        of = system.unit(columns[0])
        raised = float(stand.equations.jacobian(stand.state.x)[[row]].toarray()[0, columns[0]])
    else:
        of = f"({system.unit(columns[0])})*({system.unit(columns[1])})"
        raised = 0.0
        for p, pair in enumerate(stand.equations.pairs):
            if sorted(pair.tolist()) == sorted(columns):
                raised = float(stand.equations.products[[row]].toarray()[0, p])
    try:
        expected = share * difference_factor(of, unit)
    except UnitProblem as problem:
        return f"inflow {entry!r} cannot flow into {balance!r}: {problem}"
    if abs(raised - expected) > 1e-9 * abs(expected):
        return (
            f"raising {' * '.join(names)} by 1 {of} raises balance {balance!r} by {raised:.6g} instead of {expected:+.6g} {unit}"
            + ("; its sign is turned" if raised * expected < 0 else "")
        )
    return ""


# ------------------------------------------------------------------ derivatives


def _derivatives(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        rng = bench.rng()
        for _ in range(3):
            found = _wrong_slopes(stand, stand.near(rng))
            if found:
                out += [f"{stand.label}: {c}" for c in found]
                break
    return out


def _wrong_slopes(stand: Stand, x: np.ndarray) -> list[str]:
    e = stand.equations
    rows = stand.own_indices()
    exact = e.jacobian(x).toarray()[rows]
    size = np.where(np.abs(x) > 0, np.abs(x), 1.0)
    numeric = np.zeros_like(exact)
    for j in range(x.size):
        step = np.zeros(x.size)
        step[j] = 1e-5 * size[j]
        numeric[:, j] = (e.closure(x + step) - e.closure(x - step))[rows] / (2 * step[j])
    scale = np.maximum(np.abs(numeric * size).max(axis=1, keepdims=True), 1e-300)
    wrong = np.argwhere(~(np.abs(exact - numeric) * size <= SLOPES * scale))
    names = stand.system.row_names()
    return [
        f"the derivative of balance {names[rows[i]]!r} by {stand.system.name(int(j))} is {exact[i, j]:.8g}, "
        f"finite differences give {numeric[i, j]:.8g}"
        for i, j in wrong[:SHOWN]
    ]


# ------------------------------------------------------------------ an exact state


def _truth(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        state = stand.state
        if state.checked == 0:
            out.append(f"{stand.label}: truth states too few values to check any balance; work out some more by hand")
            continue
        closure, size = stand.equations.closure(state.x), stand.equations.largest_term(state.x)
        off = np.abs(closure) > EXACT * np.maximum(size, 1e-300)
        rows = stand.own_indices()
        wrong = rows[off[rows]]
        worst = wrong[np.argsort(-np.abs(closure[wrong]) / np.maximum(size[wrong], 1e-300))]
        names, units = stand.system.row_names(), stand.system
        out += [
            f"{stand.label}: balance {names[i]!r} is off by {closure[i]:.6g} {units.rows_of(int(i)).unit} at the truth"
            for i in worst[:SHOWN]
        ]
    return out


def _dependent(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        system = stand.system
        names = system.row_names()
        faults = [c for b in system.blocks if b.fault is not None for c in range(b.start, b.stop)]
        rows = np.delete(stand.equations.jacobian(stand.state.x).toarray(), faults, axis=1)
        rows = (
            rows
            * np.where(np.abs(stand.state.x) > 0, np.abs(stand.state.x), 1.0)[np.delete(np.arange(system.size), faults)]
        )
        own = set(stand.own_indices().tolist())
        unknown = [n for n in stand.trial.dependent if n not in names]
        if unknown:
            out.append(
                f"{stand.label}: dependent names {unknown[0]!r}, which is no balance; {did_you_mean(unknown[0], names)}"
            )
            continue
        declared = [names.index(n) for n in stand.trial.dependent]
        left = np.delete(np.arange(len(names)), declared)
        for combination in dependent_rows(rows[left]):
            group = left[np.flatnonzero(np.abs(combination) > 1e-9 * np.abs(combination).max())]
            if own & set(group.tolist()):
                told = ", ".join(repr(names[i]) for i in group)
                out.append(
                    f"{stand.label}: of the balances {told} one follows from the others; leave it out, or declare it under dependent"
                )
        for k, i in enumerate(declared):
            others = [*left.tolist(), *declared[:k]]
            if len(dependent_rows(rows[[*others, i]])) == len(dependent_rows(rows[others])):
                out.append(f"{stand.label}: balance {names[i]!r} is declared dependent, but follows from no others")
    return out


CHECKS = (
    Check("one unit", "the terms of each balance are in one unit", _one_unit, ("named",)),
    Check("derivatives", "derivatives agree with finite differences to 1e-6", _derivatives),
    Check(
        "inflows", "raising an inflow by 1 raises its balance by 1 in its unit", _inflows, ("one unit", "derivatives")
    ),
    Check("truth", "an exact state closes every balance to 1e-12", _truth, ("one unit", "inflows", "derivatives")),
    Check("dependent", "balances that follow from others are declared", _dependent, ("truth",)),
)
