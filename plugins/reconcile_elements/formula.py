"""Chemical formulae: from text to exact composition and charge.

What is understood:

* elements with subscripts, whole or decimal: ``C6H12O6``, ``CH1.8O0.5N0.2`` (subscript digits may be unicode);
* groups in ``()`` or ``[]``, nested: ``Ca3(PO4)2``, ``K4[Fe(CN)6]``;
* hydrates: ``CuSO4·5H2O``, with a middle dot or ``*``. A full stop is read as a hydrate only before water at the
  end of the formula (``CuSO4.5H2O``) or before a letter or bracket; elsewhere it is a decimal point, since
  ``CH1.8N0.2`` must stay what it is (and a decimal subscript before a final H2O is written ``C1.5H2O1``);
* charge, at the end: ``Na+``, ``Cl-``, ``NH4+``, ``Ca++``, ``SO4-2``, ``Fe+3``, ``SO4^2-``, ``SO₄²⁻``;
* the electron: ``e-``.

What is refused, because two readings are in use: ``Fe3+`` (three atoms with one charge, or one atom with three),
``SO42-`` and ``[Fe(CN)6]3-``. Write ``Fe+3``, ``SO4-2``, ``[Fe(CN)6]-3``.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from fractions import Fraction
from types import MappingProxyType
from typing import NoReturn

from reconcile import did_you_mean

from .refusal import Mistake, Refusal

__all__ = ["SYMBOLS", "Formula", "parse_formula"]

_PERIODIC_TABLE = (
    "H He Li Be B C N O F Ne Na Mg Al Si P S Cl Ar K Ca Sc Ti V Cr Mn Fe Co Ni Cu Zn Ga Ge As Se Br Kr Rb "
    "Sr Y Zr Nb Mo Tc Ru Rh Pd Ag Cd In Sn Sb Te I Xe Cs Ba La Ce Pr Nd Pm Sm Eu Gd Tb Dy Ho Er Tm Yb Lu "
    "Hf Ta W Re Os Ir Pt Au Hg Tl Pb Bi Po At Rn Fr Ra Ac Th Pa U Np Pu Am Cm Bk Cf Es Fm Md No Lr Rf Db "
    "Sg Bh Hs Mt Ds Rg Cn Nh Fl Mc Lv Ts Og "
)

SYMBOLS: tuple[str, ...] = tuple(_PERIODIC_TABLE.split())
"""Symbols of the 118 elements in order of atomic number (IUPAC periodic table)."""

_KNOWN = frozenset(SYMBOLS)
_OPEN = {"(": ")", "[": "]"}
_DOTS = "·∙•⋅*"
_SUBSCRIPTS = str.maketrans("₀₁₂₃₄₅₆₇₈₉", "0123456789")
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻", "0123456789+-")
_RAISED = "⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻"
_NUMBER = re.compile(r"\d+(?:\.\d+)?")
# The count is tried before the full stop is taken for a decimal point; only water at the very end qualifies.
_HYDRATE = re.compile(r"\.(?:\d+(?:\.\d+)?)?H2O$")
_SIGN_NUMBER = re.compile(r"([+-])(\d+(?:\.\d+)?)$")
_SIGNS = re.compile(r"(\++|-+)$")
_CARET = re.compile(r"\^\(?(?:(\d+(?:\.\d+)?)?([+-])|([+-])(\d+(?:\.\d+)?))\)?$")


@dataclass(frozen=True)
class Formula:
    """A parsed formula.

    Attributes
    ----------
    text : str
        As the user wrote it.
    composition : Mapping[str, Fraction]
        Atoms of each element, exact; elements in order of first appearance.
    charge : Fraction
        Charge number; whole, unless the formula is written per carbon.
    """

    text: str
    composition: Mapping[str, Fraction]
    charge: Fraction = Fraction(0)

    def __getitem__(self, element: str) -> Fraction:
        return self.composition.get(element, Fraction(0))

    def __hash__(self) -> int:
        return hash((self.text, self.charge))

    def __reduce__(self) -> tuple[object, ...]:
        return parse_formula, (self.text,)  # a read-only mapping does not pickle, its text does


def parse_formula(text: str) -> Formula:
    """Parse a chemical formula.

    Parameters
    ----------
    text : str
        Formula in the notation of this module.

    Returns
    -------
    Formula
        Exact composition and charge.

    Raises
    ------
    Refusal
        Codes ``formula-empty``, ``formula-unexpected`` (with the position counted from 1),
        ``formula-unknown-element``, ``formula-bracket``, ``formula-zero``, ``formula-charge-ambiguous``.
    """
    return _Parser(text).formula()


class _Parser:
    """Recursive descent over one formula; positions stay those of the user's text."""

    def __init__(self, text: str) -> None:
        self.text = text.strip()
        self.source = self.text.translate(_SUBSCRIPTS).replace("\N{MINUS SIGN}", "-")
        self.at = 0

    def formula(self) -> Formula:
        if not self.source:
            self._fail("formula-empty", "formula is empty", "write e.g. C6H12O6, CO2 or SO4-2")
        if self.source in {"e-", "e⁻", "e^-", "e-1"}:
            return Formula(self.text, MappingProxyType({}), Fraction(-1))
        charge, end = self._charge()
        self.end = end
        counts: dict[str, Fraction] = {}
        for factor, part in self._parts():
            for element, count in part.items():
                counts[element] = counts.get(element, Fraction(0)) + factor * count
        return Formula(self.text, MappingProxyType(counts), charge)

    # -- charge: read from the end, before anything else ------------------------------------------------------

    def _charge(self) -> tuple[Fraction, int]:
        body = self.source.rstrip(_RAISED)
        if body != self.source:
            raised = "^" + self.source[len(body) :].translate(_SUPERSCRIPTS)
            found = _CARET.fullmatch(raised)
            if not found:
                self._unexpected(len(body))
            return _caret_charge(found), len(body)
        if found := _CARET.search(self.source):
            return _caret_charge(found), found.start()
        if found := _SIGN_NUMBER.search(self.source):
            return _signed(found[1], found[2]), found.start()
        if found := _SIGNS.search(self.source):
            self._refuse_ambiguous(self.source[: found.start()], found[1])
            return _signed(found[1][0], str(len(found[1]))), found.start()
        return Fraction(0), len(self.source)

    def _refuse_ambiguous(self, body: str, signs: str) -> None:
        """Refuse a digit before the sign where it may be the subscript or the charge."""
        tail = re.search(r"(?:([A-Z][a-z]?)|([)\]]))(\d+)$", body)
        if not tail or "." in body[tail.start() - 1 : tail.start()]:
            return
        digits, lone = tail[3], tail.start() == 0
        if not (lone or tail[2] or len(digits) > 1):
            return
        sign = signs[0]
        atoms = body[: -len(digits)] + digits[:-1]
        self._fail(
            "formula-charge-ambiguous",
            f"{digits[-1]!r} at position {len(body)} may be a subscript or the charge",
            f"write {atoms + sign + digits[-1]!r} for charge {digits[-1]}{sign}, or {body + sign + '1'!r} for "
            f"charge 1{sign}",
        )

    # -- body -------------------------------------------------------------------------------------------------

    def _parts(self) -> Iterator[tuple[Fraction, dict[str, Fraction]]]:
        first = True
        while self.at < self.end or first:
            factor = Fraction(1) if first else self._subscript(hydrate=False)
            part = self._group(closing="")
            if not part:
                self._unexpected(self.at)
            yield factor, part
            first = False
            if self.at < self.end:
                self.at += 1  # the dot between a salt and its water
                if self.at == self.end:
                    self._unexpected(self.at - 1)

    def _group(self, closing: str) -> dict[str, Fraction]:
        counts: dict[str, Fraction] = {}
        opened = self.at
        while self.at < self.end and not self._is_dot():
            char = self.source[self.at]
            if char in _OPEN:
                self.at += 1
                inner = self._group(_OPEN[char])
                if not inner:
                    self._unexpected(self.at - 1)
            elif char == closing:
                self.at += 1
                break
            elif "A" <= char <= "Z":
                inner = {self._element(): Fraction(1)}
            else:
                self._unexpected(self.at)
            number = self._subscript()
            for element, count in inner.items():
                counts[element] = counts.get(element, Fraction(0)) + number * count
            if closing and self.at == self.end:
                self._unclosed(opened)
        else:
            if closing:
                self._unclosed(opened)
        return counts

    def _element(self) -> str:
        two, one = self.source[self.at : min(self.at + 2, self.end)], self.source[self.at]
        if len(two) == 2 and "a" <= two[1] <= "z":
            if two in _KNOWN:
                self.at += 2
                return two
            if one in _KNOWN:
                self._unexpected(self.at + 1)
            self._unknown(two)
        if one not in _KNOWN:
            # 'NA' for sodium: the two letters together name an element
            before = self.source[self.at - 1 : self.at]
            self._unknown(one, (before + one).capitalize() if (before + one).capitalize() in _KNOWN else "")
        self.at += 1
        return one

    def _subscript(self, hydrate: bool = True) -> Fraction:
        found = _NUMBER.match(self.source, self.at, self.end)
        if not found:
            return Fraction(1)
        digits = found[0]
        whole, point, _ = digits.partition(".")
        if hydrate and point and _HYDRATE.match(self.source[: self.end], self.at + len(whole)):
            digits = whole
        number = Fraction(digits)
        if number == 0:
            self._fail("formula-zero", f"subscript 0 at position {self.at + 1}", "leave the element out")
        self.at += len(digits)
        return number

    def _is_dot(self) -> bool:
        char = self.source[self.at]
        if char in _DOTS:
            return True
        after = self.source[self.at + 1 : self.at + 2]
        return char == "." and (
            after.isupper() or after in ("(", "[") or bool(_HYDRATE.match(self.source[: self.end], self.at))
        )

    # -- words ------------------------------------------------------------------------------------------------

    def _unknown(self, symbol: str, meant: str = "") -> NoReturn:
        hint = f"did you mean {meant!r}?" if meant else did_you_mean(symbol, SYMBOLS)
        self._fail("formula-unknown-element", f"unknown element {symbol!r} at position {self.at + 1}", hint)

    def _unexpected(self, at: int) -> NoReturn:
        char = self.text[at : at + 1]
        rest = self.source[at:]
        hint = ""
        if rest == "e":
            hint = "the electron is written e-"
        elif rest[:1].islower():
            # A lower-case start or tail is mostly a missing capital: 'nacl', 'cO2'
            guess = next((s for s in (rest[:2].capitalize(), rest[:1].upper()) if s in _KNOWN), "")
            hint = f"did you mean {guess!r}? Symbols start with a capital" if guess else ""
            if re.match(r"(aq|g|l|s)\)", rest):
                hint = "leave the state of aggregation out"
        elif rest[:1] in {")", "]"}:
            hint = "it closes no open bracket"
        elif rest[:1] == ",":
            hint = "decimals are written with a point"
        elif rest[:1].isspace():
            hint = "write the formula without spaces"
        elif rest[:1] == ".":
            hint = "write the middle dot '·' before anything but water"
        self._fail("formula-unexpected", f"unexpected {char or 'end'} at position {at + 1}", hint)

    def _unclosed(self, opened: int) -> NoReturn:
        self._fail("formula-bracket", f"bracket at position {opened} is never closed", "add the closing bracket")

    def _fail(self, code: str, message: str, hint: str = "") -> NoReturn:
        raise Refusal(Mistake(code, f"{self.text!r}: {message}" if self.text else message, hint))


def _signed(sign: str, number: str) -> Fraction:
    return Fraction(number) * (1 if sign == "+" else -1)


def _caret_charge(found: re.Match[str]) -> Fraction:
    return _signed(found[2] or found[3], found[1] or found[4] or "1")
