"""Units at the border of the program: one factor and one offset per column, never per value.

A unit has more than dimensions. ``wt%`` and ``vol%`` are both plain numbers, and so are dry and wet fractions;
gauge and absolute pressure differ by an atmosphere that nobody told us; a normal cubic metre is no cubic metre.
All of these are kinds of their own here, so that two of them never meet without a word from the user.
The library (pint) is loaded when the first unit is read.
"""

from __future__ import annotations

import math
import re
from fractions import Fraction
from functools import lru_cache

from .unit_reader import UnitProblem, read_unit

__all__ = [
    "UnitProblem",
    "describe_kind",
    "difference_factor",
    "factor_offset",
    "mismatch_hint",
    "parse_quantity",
    "parse_unit",
    "same_kind",
]

_NUMBER = re.compile(r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?")
_GROUPS = {
    ("[mass]", "[time]"): "mass per time",
    ("[length]3", "[time]"): "volume per time",
    ("[substance]", "[time]"): "amount per time",
    ("[normal_gas]", "[time]"): "normal gas volume per time",
    ("[standard_gas]", "[time]"): "standard gas volume per time",
    ("[reference_gas]", "[time]"): "gas volume at a stated reference per time",
    ("[mass]", "[length]3"): "mass per volume",
    ("[substance]", "[length]3"): "amount per volume",
    ("[equivalents]", "[length]3"): "equivalents per volume",
    ("[mass]", ""): "mass",
    ("[length]3", ""): "volume",
    ("[temperature]", ""): "temperature",
    ("[substance]", ""): "amount",
    ("[time]", ""): "time",
    ("[length]", ""): "length",
    ("[current]", ""): "electric current",
    ("[normal_gas]", ""): "normal gas volume",
    ("[standard_gas]", ""): "standard gas volume",
    ("[mass]", "[length] [time]2"): "pressure",
    ("[mass] [length]2", "[time]3"): "power",
    ("[mass] [length]2", "[time]2"): "energy",
}


def parse_unit(text: str) -> None:
    """Check that a unit can be read.

    Parameters
    ----------
    text : str
        E.g. ``kg/h``, ``m3/h``, ``kJ/(kg K)``, ``meq/L``, ``vol% dry``, ``Nm3(0 degC, 101.325 kPa)/h``; an empty text
        or ``1`` is a plain number.

    Raises
    ------
    UnitProblem
        With `did_you_mean` where there is a near unit.
    """
    read_unit(text)


def same_kind(a: str, b: str) -> bool:
    """Whether values in one unit can be told in the other.

    Parameters
    ----------
    a, b : str
        Units.

    Returns
    -------
    bool
        True for equal dimensions, unless one is a mass and the other a volume fraction, one dry and the other not,
        or one a gauge and the other an absolute pressure.

    Raises
    ------
    UnitProblem
        If one of them cannot be read.
    """
    one, other = read_unit(a), read_unit(b)
    return (
        one.dimensions == other.dimensions
        and one.gauge == other.gauge
        and one.moisture == other.moisture
        and (one.basis == other.basis or not one.basis or not other.basis)
    )


def factor_offset(from_unit: str, to_unit: str) -> tuple[float, float]:
    """Return how values are converted: ``y_to = factor * y_from + offset``.

    Parameters
    ----------
    from_unit, to_unit : str
        Units of the same kind.

    Returns
    -------
    factor, offset : float
        Rounded once, from an exact fraction. The offset is nonzero for temperatures only.

    Raises
    ------
    UnitProblem
        With code ``unit-mismatch`` if the kinds differ.
    """
    if not same_kind(from_unit, to_unit):
        raise _mismatch(from_unit, to_unit)
    return _convert(from_unit, to_unit)


@lru_cache(maxsize=4096)
def _convert(from_unit: str, to_unit: str) -> tuple[float, float]:
    source, target = read_unit(from_unit), read_unit(to_unit)
    return float(source.factor / target.factor), float((source.offset - target.offset) / target.factor)


def difference_factor(from_unit: str, to_unit: str) -> float:
    """Return the factor for a difference, such as a standard uncertainty: no offset ever.

    Parameters
    ----------
    from_unit, to_unit : str
        As in `factor_offset`; a difference of gauge pressures is a difference of pressures, and the base of a
        percentage may be left out.

    Returns
    -------
    float

    Raises
    ------
    UnitProblem
        With code ``unit-mismatch`` if the kinds differ.
    """
    source, target = read_unit(from_unit), read_unit(to_unit)
    fits = (
        source.dimensions == target.dimensions
        and (source.basis == target.basis or not source.basis or not target.basis)
        and (source.moisture == target.moisture or not source.moisture)
    )
    if not fits:
        raise _mismatch(from_unit, to_unit)
    return float(source.factor / target.factor)


def parse_quantity(text: str) -> tuple[float, str]:
    """Read a number with its unit.

    Parameters
    ----------
    text : str
        E.g. ``3.2 mmHg min/L``, ``-1e-3 kg/h``, ``5 %``.

    Returns
    -------
    value : float
        Finite.
    unit : str
        As written; an empty text for a plain number.

    Raises
    ------
    UnitProblem
        With code ``number-unreadable`` or ``unit-unknown``.
    """
    stripped = str(text).strip().replace("−", "-")
    found = _NUMBER.match(stripped)
    if not found:
        raise UnitProblem(
            f"{str(text)!r} does not start with a number",
            code="number-unreadable",
            hint="write a number and its unit, e.g. 3.2 L/min",
        )
    rest = stripped[found.end() :]
    if re.match(r",\d", rest):
        raise UnitProblem(
            f"{str(text)!r} has a comma in its number",
            code="number-unreadable",
            hint=f"write {stripped.replace(',', '.', 1)!r} if it is a decimal mark, "
            "or leave it out if it parts thousands",
        )
    if re.match(r"[\s_ ']*\d", rest) and not re.match(r"\s+1\s*/", rest):
        raise UnitProblem(
            f"{str(text)!r} has two numbers",
            code="number-unreadable",
            hint="write one number without spaces, then its unit",
        )
    value = float(found.group())
    if not math.isfinite(value):
        raise UnitProblem(f"{str(text)!r} is too large for a number", code="number-unreadable")
    unit = rest.strip()
    if unit.startswith("/"):
        unit = "1" + unit
    parse_unit(unit)
    return value, unit


def describe_kind(unit: str) -> str:
    """Say in words what a unit measures, e.g. ``volume per time``; an empty text where there is no usual word."""
    found = read_unit(unit)
    up = " ".join(_power(d, p) for d, p in found.dimensions if p > 0)
    down = " ".join(_power(d, p) for d, p in found.dimensions if p < 0)
    words = {(_sorted(a), _sorted(b)): text for (a, b), text in _GROUPS.items()}.get((_sorted(up), _sorted(down)), "")
    if not found.dimensions:
        words = f"{found.basis} fraction" if found.basis else "plain number"
    if found.gauge:
        words = "gauge pressure"
    elif words == "pressure":
        words = "absolute pressure"
    return f"{words}, {found.moisture}" if found.moisture else words


def _sorted(text: str) -> str:
    return " ".join(sorted(text.split()))


def _power(dimension: str, power: Fraction) -> str:
    return dimension if abs(power) == 1 else f"{dimension}{abs(power)}"


def mismatch_hint(got: str, wanted: str) -> str:
    """Say how a unit of the wrong kind can be put right.

    Parameters
    ----------
    got, wanted : str
        Two readable units of different kinds.

    Returns
    -------
    str
    """
    one, other = read_unit(got), read_unit(wanted)
    for guess in _slips(got):
        if _readable(guess) and same_kind(guess, wanted):
            return f"did you mean {guess}?"
    if one.dimensions == other.dimensions:
        if one.gauge != other.gauge:
            return (
                "gauge and absolute pressure differ by the local atmosphere: "
                "convert the readings and state the same kind"
            )
        if one.moisture != other.moisture:
            return "say dry or wet on both sides, e.g. vol% dry"
        return "convert the readings, or state the same basis on both sides"
    kinds = {describe_kind(got), describe_kind(wanted)}
    if kinds == {"mass per time", "volume per time"}:
        return (
            f"a density lies between them: convert the readings to {wanted}, "
            "or choose one of the two for the whole balance"
        )
    if any("gas" in k for k in kinds):
        return (
            "gas volumes need a stated temperature and pressure, the same on both sides, "
            "e.g. Nm3(0 degC, 101.325 kPa)/h"
        )
    if kinds == {"amount per volume", "equivalents per volume"}:
        return "the charge number lies between them: convert the readings"
    return f"write a unit that measures the same as {wanted}" if wanted else "leave the unit out or write fraction"


def _slips(unit: str) -> list[str]:
    """Spellings that were perhaps meant: ``l/m`` for L/min, ``N m3`` for Nm3."""
    if unit.startswith(("Nm3", "NL", "Sm3", "SL")):
        return []
    return [
        re.sub(r"/\s*m\b(?!\d)", "/min", unit),
        re.sub(r"\b([NS]) +m3", r"\1m3", unit),
        unit.lower(),
    ]


def _readable(text: str) -> bool:
    try:
        read_unit(text)
    except UnitProblem:
        return False
    return True


def _mismatch(from_unit: str, to_unit: str) -> UnitProblem:
    return UnitProblem(
        f"{from_unit or '1'} ({describe_kind(from_unit) or 'another kind'}) cannot be told in "
        f"{to_unit or '1'} ({describe_kind(to_unit) or 'another kind'})",
        code="unit-mismatch",
        hint=mismatch_hint(from_unit, to_unit),
    )
