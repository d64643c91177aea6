"""The grammar of units: names, powers, products, quotients; and what was meant by a name that there is not.

Names are looked up in a registry of the pint library that holds the definitions of ``units.txt`` and no others.
"""

from __future__ import annotations

import difflib
import re
from dataclasses import dataclass
from fractions import Fraction
from functools import lru_cache
from pathlib import Path
from typing import Any

from .errors import ReconcileError

__all__ = ["Unit", "UnitProblem", "read_unit"]

_PREFIXABLE_NAMES = (
    "meter gram second mole ampere kelvin equivalent radian reactive_volt_ampere apparent_volt_ampere liter "
    "normal_liter standard_liter tonne newton dyne pascal bar joule watt watt_hour calorie electronvolt poise "
    "stokes hertz coulomb volt ohm siemens farad ampere_hour molar pound_mole"
)
_PREFIXABLE = frozenset(_PREFIXABLE_NAMES.split())
_FRACTIONS = {
    **{f"{w}%": ("percent", "mass") for w in ("wt", "w", "mass")},
    **{f"{w}%": ("percent", "volume") for w in ("vol", "v")},
    "mol%": ("percent", "amount"),
    "%": ("percent", ""),
    "‰": ("permille", ""),
    "ppmw": ("ppm", "mass"),
    "ppmv": ("ppm", "volume"),
    "ppbw": ("ppb", "mass"),
    "ppbv": ("ppb", "volume"),
}
_GAUGE = re.compile(r"\b(mbar|bar|psi|kPa|MPa|Pa)(?:\((g|a|abs|gauge)\)|(g|a)\b)")
_REFERENCE_GAS = re.compile(r"\b[NS](m3|mL|L|l)\s*\(([^()]*)\)")
_AMBIGUOUS = {
    "ton": "a ton is metric (t), short (short_ton) or long (long_ton)",
    "tons": "a ton is metric (t), short (short_ton) or long (long_ton)",
    "oz": "an ounce is troy (troy_ounce, as for gold) or avoirdupois (avoirdupois_ounce)",
    "nm3": "a normal cubic metre is Nm3; a cubic nanometre would be nm^3",
    "Mm3": "a million cubic metres is hm3; a cubic megametre would be Mm^3",
    "month": "a month has no fixed length: write d (days)",
}
_SPELLINGS = {
    "hrs": "h", "hour": "h", "hours": "h", "hr": "h", "sec": "s", "secs": "s", "mins": "min", "mn": "min", "mnt": "min",
    "lit": "L", "ltr": "L", "ltrs": "L", "lt": "L", "litres": "L", "liters": "L", "cbm": "m3", "kgs": "kg", "kgm": "kg",
    "kilo": "kg", "kilos": "kg", "lbs": "lb", "grm": "g", "gms": "g", "gm": "g", "mts": "m", "mtr": "m", "cum": "m3",
    "kgh": "kg/h", "kgph": "kg/h", "m3h": "m3/h", "m3ph": "m3/h", "lmin": "L/min", "scmh": "Sm3/h",
    "nm3h": "Nm3/h", "usgpm": "gpm", "torr": "mmHg", "deg_c": "degC", "degc": "degC", "centigrade": "degC",
    "mequiv": "meq", "pct": "%", "wtpct": "wt%", "wt.%": "wt%", "vol.%": "vol%", "w/o": "wt%",
}  # fmt: skip
_USUAL_UNITS = (
    "kg/h kg/s g/s g/min t/h t/d lb/h L/min L/h L/s mL/min m3/h m3/s m3/d gpm Nm3/h Sm3/h scfm mol/h kmol/h mol/s "
    "kg/m3 g/L mg/L mmol/L meq/L mol/L g/t mg/kg wt% vol% mol% % ppm fraction bar mbar kPa Pa MPa psi mmHg barg "
    "degC K kW W MW kJ/kg kJ/(kg*K) A V ohm mmHg*min/L"
)
_USUAL = _USUAL_UNITS.split()
_MOISTURE = re.compile(r"\(?\b(dry|wet)\b\)?(?: basis)?")
_POWERS = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
_TOKEN = re.compile(
    r"\s*(?:(?P<percent>(?:wt|w|mass|vol|v|mol)?%|‰)|(?P<name>[^\W\d_]\w*|°[CFR])(?P<power>-\d+)?"
    r"|(?P<number>\d+)|(?P<sign>\*\*|[/*·⋅^()]|\.(?=\s*[^\W\d])))"
)


class UnitProblem(ReconcileError, ValueError):
    """A unit or quantity could not be understood, or two of them do not fit.

    Attributes
    ----------
    did_you_mean : str
        The nearest unit that would be understood, or an empty string.
    """

    exit_code = 2
    default_code = "unit-unknown"

    def __init__(self, message: str, *, code: str | None = None, hint: str = "", did_you_mean: str = "") -> None:
        if did_you_mean and not hint:
            hint = f"did you mean {did_you_mean}?"
        super().__init__(message, code=code, hint=hint)
        self.did_you_mean = did_you_mean


@dataclass(frozen=True)
class Unit:
    """A unit in terms of base units; `offset` is nonzero only for a temperature that stands alone."""

    factor: Fraction
    offset: Fraction
    dimensions: tuple[tuple[str, Fraction], ...]
    basis: str = ""
    moisture: str = ""
    gauge: bool = False


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint

    # Fractions keep the factors exact: 1 L/min is 0.06 m3/h and not 0.06000000000000001.
    return pint.UnitRegistry(str(Path(__file__).with_name("units.txt")), non_int_type=Fraction)


@lru_cache(maxsize=4096)
def _named(name: str) -> tuple[Fraction, Fraction, tuple[tuple[str, Fraction], ...]] | None:
    """Factor, offset and dimensions of a single name, or None where there is no such unit."""
    registry = _registry()
    readings = registry.parse_unit_name(name)
    if not readings:
        return None
    prefix, unit, _ = readings[0]
    if prefix and unit not in _PREFIXABLE:
        return None
    # A plural of a symbol is more often a lost sign: "Pas" is no pascals.
    if name.endswith("s") and len(name) < 4 and name not in ("hrs", "lbs"):
        shorter = registry.parse_unit_name(name[:-1])
        if shorter and shorter[0][:2] == (prefix, unit):
            return None
    one = registry.Quantity(Fraction(1), prefix + unit).to_root_units()
    offset = Fraction(0)
    factor = Fraction(one.magnitude)
    if unit in ("degree_Celsius", "degree_Fahrenheit"):
        factor = Fraction(registry.Quantity(Fraction(1), f"delta_{unit}").to_root_units().magnitude)
        offset = Fraction(one.magnitude) - factor
    dimensions = tuple(sorted((str(k), Fraction(v)) for k, v in one.dimensionality.items() if v))
    return factor, offset, dimensions


# ------------------------------------------------------------------ reading a unit


@lru_cache(maxsize=4096)
def read_unit(text: str) -> Unit:
    """Read a unit; see `reconcile.units.parse_unit` for what may be written.

    Raises
    ------
    UnitProblem
    """
    return _read(str(text).strip(), _Reader)


def _read(text: str, reader_class: type[_Reader]) -> Unit:
    plain = text.replace("−", "-")
    # The gas reference goes first: a pressure in it has a gauge or none of its own.
    reference = _REFERENCE_GAS.search(plain)
    size = Fraction(1)
    if reference:
        size = _reference(text, reference.group(2), reference.group(1))
        plain = f"{plain[: reference.start()]}reference_m3{plain[reference.end() :]}"
    gauge = _GAUGE.search(plain)
    plain = re.sub(r"\s+per\s+", "/", _GAUGE.sub(r"\1", plain))
    moisture = ""
    water = _MOISTURE.search(plain)
    if water:
        moisture = water.group(1)
        plain = (plain[: water.start()] + " " + plain[water.end() :]).strip(" ,")
    reader = reader_class(text, plain, size)
    alone = len(reader.parts) == 1 and reader.parts[0][1] == 1
    dimensions = tuple(sorted((k, v) for k, v in reader.dimensions.items() if v))
    return Unit(
        factor=reader.factor,
        # Degrees in a product are differences: kJ/(kg degC) has no offset.
        offset=reader.parts[0][2] if alone else Fraction(0),
        dimensions=dimensions,
        basis=reader.basis if not dimensions else "",
        moisture=moisture,
        gauge=bool(gauge) and alone and (gauge.group(2) or gauge.group(3)).startswith("g"),  # type: ignore[union-attr]
    )


def _reference(text: str, inside: str, volume: str) -> Fraction:
    """Cubic metres at 273.15 K and 101.325 kPa in one volume at the stated reference, as an ideal gas."""
    state: dict[str, Fraction] = {}
    for part in re.split(r"[,;]", inside):
        found = re.fullmatch(r"\s*([+-]?\d+(?:\.\d*)?)\s*(\S.*?)\s*", part)
        if found:
            unit = read_unit(found.group(2))
            kind = " ".join(d for d, _ in unit.dimensions)
            if not unit.gauge:
                state[kind] = Fraction(found.group(1)) * unit.factor + unit.offset
    kelvin, gram_pressure = state.get("[temperature]", Fraction(0)), state.get("[length] [mass] [time]", Fraction(0))
    if len(state) != 2 or kelvin <= 0 or gram_pressure <= 0:
        raise UnitProblem(
            f"the gas reference in unit {text!r} is not understood",
            hint="state a temperature and an absolute pressure, e.g. Nm3(0 degC, 101.325 kPa)",
        )
    size = {"m3": Fraction(1), "L": Fraction(1, 1000), "l": Fraction(1, 1000), "mL": Fraction(1, 10**6)}[volume]
    return size * gram_pressure / read_unit("atm").factor * Fraction("273.15") / kelvin


class _Reader:
    """Reads ``name power``, products, quotients and parentheses."""

    def __init__(self, text: str, plain: str, reference: Fraction = Fraction(1)) -> None:
        self.text = text
        self.reference = reference
        self.plain = plain.translate(_POWERS)
        self.tokens = self._tokens()
        self.place = 0
        self.factor = Fraction(1)
        self.dimensions: dict[str, Fraction] = {}
        self.numerator: dict[str, Fraction] = {}
        self.parts: list[tuple[str, int, Fraction]] = []
        self.stated_basis = ""
        if self.tokens:
            self._product(1)
            if self.place < len(self.tokens):
                raise self._unknown()

    @property
    def basis(self) -> str:
        """Of what a plain number is a fraction: mass, volume, amount, or not said."""
        if self.stated_basis:
            return self.stated_basis
        left = {k: v for k, v in self.numerator.items() if v}
        for dimension, power, word in (("[mass]", 1, "mass"), ("[length]", 3, "volume"), ("[substance]", 1, "amount")):
            if left == {dimension: power}:
                return word
        return ""

    def _tokens(self) -> list[tuple[str, str]]:
        tokens: list[tuple[str, str]] = []
        place = 0
        rest = self.plain.rstrip()
        while place < len(rest):
            found = _TOKEN.match(rest, place)
            if not found or found.end() == place:
                raise self._unknown()
            kind = str(found.lastgroup)
            if found.group("name"):
                tokens.append(("name", found.group("name")))
                if found.group("power"):
                    tokens.append(("power", found.group("power")))
            else:
                tokens.append((kind, found.group(kind)))
            place = found.end()
        return tokens

    def _peek(self) -> tuple[str, str]:
        return self.tokens[self.place] if self.place < len(self.tokens) else ("end", "")

    def _product(self, power: int) -> None:
        self._factor(power)
        divided = False
        while True:
            kind, sign = self._peek()
            if kind == "end" or sign == ")":
                return
            if sign == "/":
                self.place += 1
                self._factor(-power)
                divided = True
                continue
            if divided and kind != "number":
                raise UnitProblem(
                    f"unit {self.text!r} can be read in two ways: what stands behind a division bar is not clear",
                    code="unit-ambiguous",
                    hint="use parentheses, e.g. kJ/(kg K), or put the factor first",
                )
            if kind == "percent":
                raise self._unknown()
            if sign in ("*", "·", "⋅", "."):
                self.place += 1
            self._factor(power)

    def _factor(self, power: int) -> None:
        kind, token = self._peek()
        self.place += 1
        if token == "(":
            self._product(power)
            if self._peek()[1] != ")":
                raise self._unknown()
            self.place += 1
            return
        if kind == "number" and token == "1":
            return
        if kind == "percent":
            name, self.stated_basis = _FRACTIONS[token]
            self._take(name, power)
            return
        if kind != "name":
            raise self._unknown()
        name, exponent = self._resolve(token)
        kind, following = self._peek()
        if kind == "power":
            exponent *= int(following)
            self.place += 1
        elif following in ("^", "**"):
            self.place += 1
            exponent *= self._exponent()
        self._take(name, power * exponent)

    def _exponent(self) -> int:
        kind, token = self._peek()
        self.place += 1
        if kind == "number":
            return int(token)
        raise self._unknown()

    def _resolve(self, token: str) -> tuple[str, int]:
        """Split ``m3`` into m and 3, but leave ``mmH2O`` and ``Nm3`` whole."""
        if token in _AMBIGUOUS:
            raise UnitProblem(f"unit {self.text!r} is ambiguous", code="unit-ambiguous", hint=_AMBIGUOUS[token])
        if token in _FRACTIONS:
            name, self.stated_basis = _FRACTIONS[token]
            return name, 1
        if _named(token):
            return token, 1
        found = re.fullmatch(r"(\D+)(\d)", token)
        if found and found.group(1) not in _AMBIGUOUS and _named(found.group(1)):
            return found.group(1), int(found.group(2))
        raise self._unknown()

    def _take(self, name: str, power: int) -> None:
        found = _named(name)
        if found is None:
            raise self._unknown()
        factor, offset, dimensions = found
        if name == "reference_m3":
            factor = factor * self.reference
        self.factor *= factor**power
        self.parts.append((name, power, offset))
        for dimension, exponent in dimensions:
            self.dimensions[dimension] = self.dimensions.get(dimension, Fraction(0)) + power * exponent
            if power > 0:
                self.numerator[dimension] = self.numerator.get(dimension, Fraction(0)) + power * exponent

    def _unknown(self) -> UnitProblem:
        return UnitProblem(
            f"unit {self.text!r} is not understood",
            did_you_mean=_nearest(self.text),
            hint="" if _nearest(self.text) else "write it with SI symbols, e.g. kg/h, m3/h or L/min",
        )


# ------------------------------------------------------------------ what was meant


@lru_cache(maxsize=1024)
def _nearest(text: str) -> str:
    """A unit that can be read and looks like the text, or an empty string."""
    cleaned = re.sub(r"\s+per\s+", "/", text.strip().strip(".,;:[]"))
    whole = cleaned.casefold()
    if whole in _SPELLINGS:
        return _SPELLINGS[whole]
    folded = {u.casefold(): u for u in _USUAL}
    if whole in folded:
        return folded[whole]
    pieces = re.split(r"([/*·() ]+)", cleaned)
    mended = "".join(p if i % 2 else _mend(p) for i, p in enumerate(pieces))
    if mended != text and _resolves(mended):
        return mended
    near = difflib.get_close_matches(cleaned, _USUAL, n=1, cutoff=0.6)
    return near[0] if near else ""


def _mend(piece: str) -> str:
    """One name of a unit, spelt as usual."""
    bare = piece.strip(".,;:")
    folded = {s.casefold(): s for u in _USUAL for s in re.split(r"[/*()]", u) if s}
    for candidate in (
        _SPELLINGS.get(bare.casefold()),
        bare if bare and _resolves(bare) else None,
        folded.get(bare.casefold()),
    ):
        if candidate:
            return candidate
    near = difflib.get_close_matches(bare, list(folded.values()), n=1, cutoff=0.7) if len(bare) > 2 else []
    return near[0] if near else bare


def _resolves(text: str) -> bool:
    """Whether a text is a unit; asked without a suggestion, since suggestions ask this."""
    try:
        _read(text, _Quiet)
    except UnitProblem:
        return False
    return bool(text)


class _Quiet(_Reader):
    def _unknown(self) -> UnitProblem:
        return UnitProblem(f"unit {self.text!r} is not understood")
