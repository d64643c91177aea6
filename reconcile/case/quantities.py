"""Values with units, ranges and bounds as a case file writes them."""

from __future__ import annotations

import re
from typing import Any

from ..errors import Problem
from ..units import UnitProblem, describe_kind, factor_offset, mismatch_hint, parse_quantity, parse_unit, same_kind
from .spec import BoundSpec, Quantity

__all__ = ["Refusal", "read_bound", "read_quantity", "read_span", "read_unit"]

_TO = re.compile(r"\s+to\s+|\s*\.\.\.?\s*|\s*–\s*")
_AT = re.compile(r"\s*(?:(at\s+least|>=|≥|min(?:imum)?)|(at\s+most|<=|≤|max(?:imum)?))\s*(.*)", re.I | re.S)


class Refusal(Exception):
    """Why a text was refused: a code, what is wrong, and what to write instead."""

    def __init__(self, code: str, message: str, hint: str = "") -> None:
        super().__init__(message)
        self.code, self.message, self.hint = code, message, hint

    def at(self, where: Any) -> Problem:
        """Return it as a problem at a place."""
        return Problem(self.code, self.message, self.hint, where)


def read_unit(text: Any, owner: str, path_text: str | None = None) -> str:
    """Return a readable unit.

    Raises
    ------
    Refusal
    """
    if text is None or (isinstance(text, str) and not text.strip()):
        raise Refusal(
            "unit-missing",
            f"{owner} has no unit, and no balance can be formed without one",
            "write e.g. unit: kg/h, or unit: fraction for a plain number",
        )
    if isinstance(text, (bool, dict, list, float)):
        raise Refusal("unit-unknown", f"the unit of {owner} is no text", "write e.g. unit: kg/h")
    unit = (path_text if path_text is not None else str(text)).strip()
    try:
        parse_unit(unit)
    except UnitProblem as problem:
        raise Refusal(problem.code, f"{owner}: {problem.message}", problem.hint) from None
    return unit


def read_quantity(text: Any, owner: str, example: str = "3.2 L/min") -> Quantity:
    """Return a value with its unit; a plain number is without unit.

    Raises
    ------
    Refusal
    """
    if text is None or isinstance(text, (bool, dict, list)) or not str(text).strip():
        raise Refusal("value-missing", f"{owner} has no value", f"write e.g. {example}")
    try:
        return parse_quantity(str(text))
    except UnitProblem as problem:
        raise Refusal(problem.code, f"{owner}: {problem.message}", problem.hint) from None


def _range(text: str, owner: str, example: str) -> tuple[Quantity, Quantity] | None:
    """Read ``0 to 40 L/min``; the unit may stand once, at the end."""
    ends = _TO.split(text.strip())
    if len(ends) != 2 or not ends[0]:
        return None
    upper = read_quantity(ends[1], owner, example)
    lower = read_quantity(ends[0], owner, example)
    if not lower[1]:
        lower = (lower[0], upper[1])
    _same(lower[1], upper[1], owner)
    factor, offset = factor_offset(lower[1], upper[1])
    if not factor * lower[0] + offset < upper[0]:
        raise Refusal(
            "range-reversed", f"{owner} {text.strip()!r} does not rise", "write the lower end first, e.g. " + example
        )
    return lower, upper


def _same(got: str, wanted: str, owner: str) -> None:
    if not same_kind(got, wanted):
        raise Refusal(
            "unit-mismatch",
            f"{owner} is in {got or 'no unit'} ({describe_kind(got) or 'another kind'}), "
            f"but {wanted or 'a plain number'} ({describe_kind(wanted) or 'another kind'}) is wanted",
            mismatch_hint(got, wanted),
        )


def read_span(text: Any, unit: str, owner: str) -> tuple[float, float]:
    """Read the range of a meter, ``0 to 40 L/min``, into the unit of the meter.

    Returns
    -------
    low, high : float

    Raises
    ------
    Refusal
    """
    example = f"0 to 40 {unit}"
    found = _range(str(text), owner, example) if isinstance(text, str) else None
    if found is None:
        raise Refusal("span-unreadable", f"{owner} {text!r} is no range", f"write both ends, e.g. span: {example}")
    (low, low_unit), (high, high_unit) = found
    if not low_unit and not high_unit:
        # Both ends without a unit are in the unit of the meter only if that has none.
        _same("", unit, owner)
    _same(low_unit, unit, owner)
    _same(high_unit, unit, owner)
    a, b = factor_offset(low_unit, unit), factor_offset(high_unit, unit)
    return a[0] * low + a[1], b[0] * high + b[1]


def read_bound(text: Any, owner: str) -> BoundSpec:
    """Read ``at least 0 L/min``, ``at most 5 bar``, ``0 to 40 L/min``, ``at least 0 L/min and at most 3 m3/h``.

    Raises
    ------
    Refusal
    """
    example = "at least 0 L/min, at most 40 L/min, or 0 to 40 L/min"
    if not isinstance(text, str):
        raise Refusal("bound-unreadable", f"{owner} {text!r} is no bound", f"write {example}")
    found = _range(text, owner, "0 to 40 L/min") if not _AT.match(text) else None
    if found is not None:
        return BoundSpec(*found)
    limits: dict[str, Quantity] = {}
    for part in re.split(r"\s+and\s+|\s*,\s*(?=at\b)", text.strip()):
        match = _AT.fullmatch(part)
        if not match:
            raise Refusal("bound-unreadable", f"{owner} {text!r} is not understood", f"write {example}")
        side = "lower" if match.group(1) else "upper"
        if side in limits:
            raise Refusal("bound-unreadable", f"{owner} {text!r} has two {side} bounds", f"write {example}")
        limits[side] = read_quantity(match.group(3), owner)
    bound = BoundSpec(limits.get("lower"), limits.get("upper"))
    if bound.lower and bound.upper:
        _same(bound.lower[1], bound.upper[1], owner)
        factor, offset = factor_offset(bound.lower[1], bound.upper[1])
        if factor * bound.lower[0] + offset > bound.upper[0]:
            raise Refusal(
                "bounds-conflict", f"{owner} {text!r} leaves no value", "write the smaller number behind 'at least'"
            )
    return bound
