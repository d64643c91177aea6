"""Derived values (recovery, yield, clearance, split): arithmetic over variables, with uncertainty.

The uncertainty comes from the full covariance of the adjusted variables by the law of propagation of
uncertainty (JCGM 100:2008, clause 5.2); the derivatives are exact.
"""

from __future__ import annotations

import ast
import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .errors import InputError, Location, Problem, did_you_mean

if TYPE_CHECKING:
    from .results import Result

__all__ = ["Figure", "FigureValue", "evaluate", "parse_figure"]

Array = npt.NDArray[np.float64]
Dual = tuple[float, dict[str, float]]

_NAME = re.compile(r"`([^`]+)`|([A-Za-z_][A-Za-z0-9_\-]*(?:\.[A-Za-z_][A-Za-z0-9_\-+]*)+)")
_FUNCTIONS: dict[str, tuple[Callable[[float], float], Callable[[float], float]]] = {
    "sqrt": (math.sqrt, lambda v: 0.5 / math.sqrt(v)),
    "exp": (math.exp, math.exp),
    "log": (math.log, lambda v: 1.0 / v),
    "abs": (abs, lambda v: math.copysign(1.0, v)),
}


@dataclass(frozen=True)
class Figure:
    """A parsed derived value.

    Attributes
    ----------
    text : str
    names : tuple of str
        Variables it uses.
    """

    text: str
    names: tuple[str, ...]
    tree: ast.Expression
    aliases: Mapping[str, str]

    def value(self, values: Mapping[str, float]) -> tuple[float, dict[str, float]]:
        """Value and exact partial derivatives at these values of the variables."""
        return _walk(self.tree.body, {k: values[v] for k, v in self.aliases.items()}, self.aliases)


@dataclass(frozen=True)
class FigureValue:
    """A derived value of one snapshot.

    Attributes
    ----------
    name, text : str
    value, sigma : float
        From the adjusted values and their full covariance; nan where a variable cannot be calculated.
    raw, raw_sigma : float
        From the raw readings alone; nan where one of its variables is not read.
    diagonal_sigma : float
        What one would get from the standard uncertainties alone, without the covariances.
    shares : mapping of str to float
        Share of each reading in the variance, adding up to 1.
    reason : str
        Why there is no value, or a warning; may be empty.
    """

    name: str
    text: str
    value: float
    sigma: float
    raw: float
    raw_sigma: float
    diagonal_sigma: float
    shares: Mapping[str, float]
    reason: str = ""


def parse_figure(text: str, where: Location | None = None) -> Figure:
    """Parse arithmetic over variables; nothing else is understood, and nothing is ever run.

    Parameters
    ----------
    text : str
        Numbers, variables (``item.quantity``, in backquotes if the name is unusual), ``+ - * / **``,
        parentheses, and sqrt, exp, log, abs.
    where : Location, optional
        For messages.

    Returns
    -------
    Figure

    Raises
    ------
    InputError
        If the text is anything else.
    """
    aliases: dict[str, str] = {}

    def alias(match: re.Match[str]) -> str:
        name = match.group(1) or match.group(2)
        for key, known in aliases.items():
            if known == name:
                return key
        key = f"v{len(aliases)}_"
        aliases[key] = name
        return key

    try:
        tree = ast.parse(_NAME.sub(alias, text), mode="eval")
        _allowed(tree.body, aliases)
    except (SyntaxError, ValueError) as error:
        what = error.msg if isinstance(error, SyntaxError) else str(error)
        raise InputError(
            Problem(
                "figure-syntax",
                f"figure {text!r} is not understood: {what}",
                "write arithmetic over variables, e.g. permeate.flow / feed.flow",
                where or Location(),
            )
        ) from None
    return Figure(text, tuple(aliases.values()), tree, aliases)


@lru_cache(maxsize=256)
def _parsed(text: str) -> Figure:
    """The same figure serves every snapshot."""
    return parse_figure(text)


def _allowed(node: ast.expr, aliases: Mapping[str, str]) -> None:
    match node:
        case ast.Constant(value=int() | float()) if not isinstance(node.value, bool):
            return
        case ast.Name(id=name):
            if name not in aliases:
                raise ValueError(f"{name!r} is no variable; a variable is written item.quantity")
        case ast.BinOp(left=left, op=ast.Add() | ast.Sub() | ast.Mult() | ast.Div() | ast.Pow(), right=right):
            _allowed(left, aliases)
            _allowed(right, aliases)
        case ast.UnaryOp(op=ast.USub() | ast.UAdd(), operand=operand):
            _allowed(operand, aliases)
        case ast.Call(func=ast.Name(id=name), args=[argument], keywords=[]) if name in _FUNCTIONS:
            _allowed(argument, aliases)
        case ast.Call(func=ast.Name(id=name)):
            raise ValueError(f"{name}() is not known here; there are {', '.join(_FUNCTIONS)}, each of one argument")
        case _:
            raise ValueError("only numbers, variables, + - * / **, parentheses and sqrt, exp, log, abs are allowed")


def _walk(node: ast.expr, values: Mapping[str, float], aliases: Mapping[str, str]) -> Dual:
    match node:
        case ast.Constant(value=number):
            return float(number), {}  # type: ignore[arg-type]
        case ast.Name(id=name):
            return values[name], {aliases[name]: 1.0}
        case ast.UnaryOp(op=op, operand=operand):
            v, d = _walk(operand, values, aliases)
            sign = -1.0 if isinstance(op, ast.USub) else 1.0
            return sign * v, {k: sign * g for k, g in d.items()}
        case ast.Call(func=ast.Name(id=name), args=[argument]):
            v, d = _walk(argument, values, aliases)
            function, slope = _FUNCTIONS[name]
            return function(v), {k: slope(v) * g for k, g in d.items()}
        case ast.BinOp(left=left, op=op, right=right):
            a, da = _walk(left, values, aliases)
            b, db = _walk(right, values, aliases)
            match op:
                case ast.Add():
                    return a + b, _combine(da, 1.0, db, 1.0)
                case ast.Sub():
                    return a - b, _combine(da, 1.0, db, -1.0)
                case ast.Mult():
                    return a * b, _combine(da, b, db, a)
                case ast.Div():
                    return a / b, _combine(da, 1.0 / b, db, -a / b**2)
                case _:
                    slope_b = math.log(a) * a**b if db else 0.0
                    return a**b, _combine(da, b * a ** (b - 1), db, slope_b)
    raise AssertionError("checked by parse_figure")


def _combine(da: dict[str, float], fa: float, db: dict[str, float], fb: float) -> dict[str, float]:
    out = {k: fa * v for k, v in da.items()}
    for k, v in db.items():
        out[k] = out.get(k, 0.0) + fb * v
    return out


def evaluate(name: str, text: str, result: Result, index: int) -> FigureValue:
    """Evaluate a figure for one snapshot of a result.

    Parameters
    ----------
    name, text : str
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    FigureValue

    Raises
    ------
    InputError
        If the figure uses a name that is no variable.
    """
    figure = _parsed(text)
    position = {v: i for i, v in enumerate(result.variables)}
    for used in figure.names:
        if used not in position:
            raise InputError(
                Problem(
                    "figure-variable",
                    f"figure {name!r} uses {used!r}, which is no variable",
                    did_you_mean(used, position),
                )
            )
    group = result.group(index)
    columns = result.model.shown
    nan = float("nan")
    values = {v: float(result.adjusted[index, position[v]]) for v in figure.names}
    unknown = [v for v, value in values.items() if not math.isfinite(value)]
    if unknown:
        reason = f"{', '.join(unknown)} cannot be calculated"
        return FigureValue(name, text, nan, nan, nan, nan, nan, {}, reason)
    try:
        value, slopes = figure.value(values)
    except (ZeroDivisionError, ValueError, OverflowError):
        return FigureValue(
            name, text, nan, nan, nan, nan, nan, {}, "it has no value here (division by zero or the like)"
        )
    gradient = np.zeros(result.model.size)
    for v, slope in slopes.items():
        gradient[columns[position[v]]] = slope
    used_columns = np.flatnonzero(gradient)
    cover = gradient[used_columns] @ group.cover[used_columns]
    sigma = float(np.linalg.norm(cover))
    diagonal = float(np.linalg.norm(gradient[used_columns] * np.linalg.norm(group.cover[used_columns], axis=1)))
    raw, raw_sigma = _from_raw(figure, result, index, group)
    shares = _shares(gradient, result, group)
    return FigureValue(
        name, text, value, sigma, raw, raw_sigma, diagonal, shares, _near_zero(figure, values, result, index)
    )


def _from_raw(figure: Figure, result: Result, index: int, group: object) -> tuple[float, float]:
    """Value and uncertainty from the raw readings, with their full covariance."""
    model = result.model_of(index)
    base = model.to_base(result.readings[index : index + 1])[0]
    direct = {
        r.reads[0][0]: i
        for i, r in reversed(list(enumerate(model.readings)))
        if len(r.reads) == 1 and r.kind != "cause" and np.isfinite(base[i])
    }
    fixed = {model.names[c]: v for c, v in model.fixed.items()}
    if any(n not in direct and n not in fixed for n in figure.names):
        return float("nan"), float("nan")
    try:
        value, slopes = figure.value({n: fixed[n] if n in fixed else float(base[direct[n]]) for n in figure.names})
    except (ZeroDivisionError, ValueError, OverflowError):
        return float("nan"), float("nan")
    gradient = np.zeros(len(model.readings))
    for n, slope in slopes.items():
        if n in direct and n not in fixed:
            gradient[direct[n]] = slope
    covariance = model.covariance_of_readings(np.nan_to_num(base))
    return value, float(np.sqrt(gradient @ covariance @ gradient))


def _shares(gradient: Array, result: Result, group: object) -> dict[str, float]:
    """Share of each reading's own error in the variance of the figure."""
    from .adjust.table import Group

    assert isinstance(group, Group)
    per_reading = (gradient @ group.response) * group.sigma
    variance = per_reading**2
    total = variance.sum()
    if total <= 0:
        return {}
    out = {result.model.tags[i]: float(v / total) for i, v in enumerate(variance)}
    return {k: v for k, v in sorted(out.items(), key=lambda kv: -kv[1]) if v > 1e-6}


def _near_zero(figure: Figure, values: Mapping[str, float], result: Result, index: int) -> str:
    """Warn where a divisor is within three sigmas of zero: the linear propagation is then not to be trusted."""
    position = {v: i for i, v in enumerate(result.variables)}
    columns = result.model.shown
    cover = result.group(index).cover
    for node in ast.walk(figure.tree):
        if isinstance(node, ast.BinOp) and isinstance(node.op, ast.Div):
            v, slopes = _walk(node.right, {k: values[n] for k, n in figure.aliases.items()}, figure.aliases)
            if not slopes:
                continue
            combined = sum(s * cover[columns[position[n]]] for n, s in slopes.items())
            if abs(v) < 3.0 * float(np.linalg.norm(combined)):
                return "the divisor is within three sigmas of zero: the uncertainty is only rough"
    return ""
