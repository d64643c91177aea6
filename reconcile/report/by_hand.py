"""One node worked by hand: every number of its balances, so that it can be done again on paper."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Problem, did_you_mean
from .layout import table, wrap
from .numbers import decimals, plain, signed
from .words import fault_phrase

if TYPE_CHECKING:
    from ..model import Model
    from ..results import Result

__all__ = ["explain_node", "nodes_of"]

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class _Term:
    """One term of a balance: a coefficient times a variable, times another, or a function of some."""

    columns: tuple[int, ...]
    coefficient: float
    text: str


class _Read(NamedTuple):
    """The reading that stands for a variable: its value in base units, its number, its coefficient."""

    tag: str
    value: float
    number: int
    share: float


def nodes_of(result: Result) -> tuple[str, ...]:
    """Nodes that have a balance, in the order of the case."""
    found = [n for block in result.model.system.row_blocks for n in block.nodes if n]
    listed = list(result.spec.nodes) if result.spec is not None else []
    return tuple(dict.fromkeys([*(n for n in listed if n in found), *found]))


def explain_node(result: Result, node: str, index: int = 0) -> str:
    """Work the balances of one node of one snapshot by hand.

    Parameters
    ----------
    result : Result
    node : str
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    str
        At most 100 columns.

    Raises
    ------
    InputError
        If there is no such node, or it has no balance.
    """
    known = nodes_of(result)
    if node not in known:
        raise InputError(
            Problem(
                "unknown-node",
                f"there is no balance at a node {node!r}",
                did_you_mean(node, known) or f"nodes with a balance: {', '.join(known) or 'none'}",
            )
        )
    out = [f"NODE {node}, snapshot {result.labels[index]}"]
    names = iter(result.snapshot(index).balances)
    for block in result.model.system.row_blocks:
        for j, name in enumerate(block.names):
            line = next(names)
            if block.nodes[j] == node:
                out += ["", *_balance(result, index, block.start + j, name, line.unit)]
    out += _what_else(result, index, node)
    return "\n".join(out) + "\n"


def _balance(result: Result, index: int, row: int, name: str, unit: str) -> list[str]:
    model, group = result.model_of(index), result.group(index)
    x = group.x[int(np.flatnonzero(group.rows == index)[0])]
    read = _readings_of(result, index)
    raw = np.array([read[c].value if c in read else x[c] for c in range(model.size)])
    terms = _terms(model, row)
    complete = all(c in read or c in model.fixed for t in terms for c in t.columns)
    slope = model.system.equations.jacobian(raw[: model.system.size])[[row]].toarray()[0]
    constant = -float(model.system.equations.rhs[row])
    covariance = model.covariance_of_readings(
        np.where(np.isfinite(base := model.to_base(result.readings[index : index + 1])[0]), base, x[model.columns])
    )
    values_raw, values_after = _values(model, row, terms, raw), _values(model, row, terms, x)
    spread = _spread(slope, read, covariance)
    digits = decimals(spread) + 1 if spread > 0 else 4
    rows = []
    for t, before, after in zip(terms, values_raw, values_after, strict=True):
        seen = all(c in read or c in model.fixed for c in t.columns)
        own = _spread(np.where(np.isin(np.arange(slope.size), t.columns), slope, 0.0), read, covariance)
        tags = " x ".join(read[c].tag.removeprefix("known:") if c in read else "-" for c in t.columns)
        rows.append(
            (
                t.text,
                tags,
                f"{before:+.{digits}f}" if seen else "not read",
                f"{own:.{digits}f}" if seen else "",
                f"{after:+.{digits}f}",
            )
        )
    if constant:
        rows.append(("constant", "", f"{constant:+.{digits}f}", "", f"{constant:+.{digits}f}"))
    closure, after_closure = float(sum(values_raw)) + constant, float(sum(values_after)) + constant
    small = abs(after_closure) <= 1e-9 * max([abs(v) for v in values_after] + [abs(constant), 1e-300])
    rows.append(
        (
            "sum",
            "",
            f"{closure:+.{digits}f}" if complete else "not formed",
            f"{spread:.{digits}f}" if complete else "",
            "0 (closed)" if small else f"{after_closure:+.2e}",
        )
    )
    out = [f"{name}: what flows in counts +, what flows out counts - ({unit})", ""]
    out.append(table(("TERM", "meter", "from readings", "spread", "after adjustment"), rows, left=(0, 1), keep=4))
    if not complete:
        unread = sorted({c for t in terms for c in t.columns if c not in read and c not in model.fixed})
        out += ["", wrap("It holds something that is not read, so it cannot be formed from readings alone.")]
        if len(unread) == 1 and slope[unread[0]]:
            out.append(wrap(_solved(model, unread[0], slope, closure, spread, x)))
        return out
    out += ["", *_steps(result, index, slope, read, covariance, closure, spread, digits, unit)]
    return out


def _steps(
    result: Result,
    index: int,
    slope: Array,
    read: dict[int, _Read],
    covariance: Array,
    closure: float,
    spread: float,
    digits: int,
    unit: str,
) -> list[str]:
    model, s = result.model_of(index), result.snapshot(index)
    if not spread > 0:
        return []
    touched = [c for c in read if slope[c] != 0.0]
    shared = any(covariance[read[a].number, read[b].number] for a in touched for b in touched if a < b)
    squares = [abs(slope[c] / read[c].share) * math.sqrt(covariance[read[c].number, read[c].number]) for c in touched]
    formula = " + ".join(f"{v:.{digits}f}^2" for v in squares)
    out = [
        wrap(f"1. Spread that the sigmas let expect: sqrt({formula}) = {math.sqrt(sum(v * v for v in squares)):.{digits}f} {unit}.")
    ]  # fmt: skip
    if shared:
        out.append(wrap(f"   With what these meters share (covariances): {spread:.{digits}f} {unit}."))
    out.append(wrap(f"2. Ratio: {closure:+.{digits}f} / {spread:.{digits}f} = {closure / spread:+.2f} spreads."))
    out.append(
        wrap(
            "3. If this were the only balance, each reading would give way in proportion to its variance, "
            "by -(coefficient) x sigma^2 x closure / spread^2; the other balances have a say, too:"
        )
    )
    lines = {r.tag: r for r in s.readings}
    rows = []
    for c in touched:
        tag, i = read[c].tag, read[c].number
        r = lines[tag]
        alone = -float(covariance[i] @ _by_reading(slope, read, covariance.shape[0])) * closure / spread**2
        in_unit = alone / model.factor[i]
        rows.append(
            (
                tag,
                r.unit,
                plain(r.reading, r.sigma),
                plain(r.sigma_before, r.sigma_before),
                signed(in_unit, r.sigma_before / 10),
                signed(r.adjustment, r.sigma_before / 10),
                plain(r.adjusted, r.sigma),
            )
        )
    header = ("READING", "unit", "read", "sigma", "alone", "with all balances", "adjusted")
    out += ["", table(header, rows, left=(0, 1), keep=6)]
    return out


def _solved(model: Model, column: int, slope: Array, closure: float, spread: float, x: Array) -> str:
    """The only variable of a balance that is not read, from this balance alone."""
    # The sum was formed with the adjusted value of the unread variable; one step along its slope closes it.
    value, sigma = x[column] - closure / slope[column], spread / abs(slope[column])
    name, unit = model.names[column], model.units[column]
    return (
        f"With the raw readings it gives {name} = {plain(value, sigma)} ± {plain(sigma, sigma)} {unit}; with all "
        f"balances it is {plain(x[column], sigma)} {unit}."
    )


def _by_reading(slope: Array, read: dict[int, _Read], count: int) -> Array:
    out = np.zeros(count)
    for c, (_, _, i, share) in read.items():
        if c < slope.size:
            out[i] += slope[c] / share
    return out


def _spread(slope: Array, read: dict[int, _Read], covariance: Array) -> float:
    v = _by_reading(slope, read, covariance.shape[0])
    return math.sqrt(max(float(v @ covariance @ v), 0.0))


def _readings_of(result: Result, index: int) -> dict[int, _Read]:
    """Tag, value in base units and number of the reading that stands for each variable."""
    model, group = result.model_of(index), result.group(index)
    base = model.to_base(result.readings[index : index + 1])[0]
    absent = set(group.absent.tolist())
    out: dict[int, _Read] = {}
    for i, r in enumerate(model.readings):
        if len(r.reads) == 1 and r.kind != "cause" and i not in absent and math.isfinite(base[i]):
            out.setdefault(model.system.column(r.reads[0][0]), _Read(r.tag, base[i] / r.reads[0][1], i, r.reads[0][1]))
    return out


def _terms(model: Model, row: int) -> list[_Term]:
    e = model.system.equations
    faults = set(model.fault_columns.tolist())
    out = []
    linear = e.linear[[row]].tocoo()
    for column, coefficient in zip(linear.col, linear.data, strict=True):
        if coefficient and int(column) not in faults:
            out.append(_Term((int(column),), float(coefficient), f"{_factor(coefficient)}{model.names[column]}"))
    products = e.products[[row]].tocoo()
    for p, coefficient in zip(products.col, products.data, strict=True):
        a, b = (int(c) for c in e.pairs[p])
        if coefficient and not {a, b} & faults:
            out.append(_Term((a, b), float(coefficient), f"{_factor(coefficient)}{model.names[a]} x {model.names[b]}"))
    return [*out, *_called(model, row)]


def _called(model: Model, row: int) -> list[_Term]:
    """Terms that are functions, with the variables that they depend on."""
    out = []
    for coefficients, call in model.system.equations.calls:
        part = coefficients[[row]].tocoo()
        if not part.nnz:
            continue
        used = {int(c) for m in call.matrices for c in m[part.col].tocoo().col}
        columns = tuple(sorted(used - set(model.fault_columns.tolist())))
        out.append(_Term(columns, math.nan, f"function of {', '.join(model.names[c] for c in columns)}"))
    return out


def _values(model: Model, row: int, terms: list[_Term], x: Array) -> list[float]:
    e = model.system.equations
    called = iter([float((f[[row]] @ c.value(x[: model.system.size]))[0]) for f, c in e.calls if f[[row]].nnz])
    return [
        next(called) if math.isnan(t.coefficient) else t.coefficient * float(np.prod([x[c] for c in t.columns]))
        for t in terms
    ]


def _factor(coefficient: float) -> str:
    sign = "+" if coefficient > 0 else "-"
    return f"{sign} " if abs(coefficient) == 1 else f"{sign} {abs(coefficient):.4g} x "


def _what_else(result: Result, index: int, node: str) -> list[str]:
    """Faults at this node that the evidence names."""
    a = result.snapshot(index).accounts
    if a is None or result.snapshot(index).test.status != "disagrees":
        return []
    told = []
    for account in a.standing:
        for alternative in account.alternatives:
            told += [fault_phrase(f) for f in alternative.faults if f.candidate.item == node]
    return ["", wrap(f"Named by an explanation that stands: {'; '.join(dict.fromkeys(told))}.", "")] if told else []
