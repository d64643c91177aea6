"""How a user states an uncertainty, and the standard uncertainty (k = 1) that it means.

Sources: JCGM 100:2008 (GUM), 4.3.7 (a limit: rectangular, half-width over the root of 3), F.2.2.1 (a digital step:
over the root of 12), 6.2.1 (expanded uncertainty U = k u), 5.1.2 (components add in quadrature). Clause numbers from
memory.
"""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Mapping
from typing import Any

from ..errors import Problem, Problems, did_you_mean
from ..units import UnitProblem, describe_kind, difference_factor, mismatch_hint, parse_quantity, parse_unit
from .places import Places
from .quantities import Refusal
from .spec import SigmaPart, SigmaSpec

__all__ = ["STATEMENTS", "read_sigma"]

STATEMENTS = ("sigma", "accuracy", "expanded")
_EXAMPLE = "e.g. sigma: 1 % of reading, sigma: 0.2 L/min, or sigma: default(2 % of reading) for a marked guess"
_NUMBER = r"[+-]?(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?"
_PERCENT = re.compile(rf"\s*(?P<number>{_NUMBER})\s*(?:%|percent|per cent)(?P<rest>.*)", re.S)
_GUESS = re.compile(r"\s*default\s*\((?P<inside>.*)\)\s*", re.S)
_PLUS_MINUS = re.compile(r"\s*(?:±|\+\s*/\s*-|\+-)\s*")
_OF = {"of reading": "reading", "of value": "reading", "of span": "span"}
_SPAN_WORDS = ("full scale", "fullscale", "fs", "f.s.", "range", "urv", "full range")
_READING_WORDS = ("rate", "measured value", "mv", "m.v.", "o.r.", "rdg", "indication", "measurement", "flow")


def read_sigma(
    data: Mapping[str, Any],
    *,
    unit: str,
    span: tuple[float, float] | None,
    owner: str,
    path: tuple[Any, ...],
    places: Places,
    problems: Problems,
    required: bool = True,
    allow_span: bool = True,
) -> SigmaSpec | None:
    """Read sigma, accuracy or expanded (with coverage), and resolution.

    Parameters
    ----------
    data : mapping
        The block that holds these keys.
    unit : str
        Unit that absolute components are converted into; readable.
    span : (float, float) or None
        In that unit.
    owner : str
        How messages name the thing, e.g. ``meter 'FT-1'``.
    path : tuple
        Path of the block.
    places : Places
    problems : Problems
        Takes every mistake, at its place.
    required : bool
        Whether one of the three must be there.
    allow_span : bool
        Whether ``% of span`` has a meaning here.

    Returns
    -------
    SigmaSpec or None
        None if there is none, or if there were problems.
    """
    before = len(problems.found)

    def complain(key: str | None, code: str, message: str, hint: str = "", item: int | None = None) -> None:
        spot = path if key is None else (*path, key) if item is None else (*path, key, item)
        problems.extend([Problem(code, message, hint, places.where(spot, key=key is None))])

    stated = [k for k in STATEMENTS if k in data]
    if not stated:
        if required and not _misspelt(data):
            complain(None, "sigma-missing", f"{owner} has no sigma, and none is guessed silently", f"write {_EXAMPLE}")
        for key in ("coverage", "resolution"):
            if key in data and not required:
                complain(key, "sigma-missing", f"{key} of {owner} stands without a sigma", f"write {_EXAMPLE}")
        return None
    if len(stated) > 1:
        complain(
            stated[1],
            "sigma-twice",
            f"{owner} has both {stated[0]} and {stated[1]}",
            "keep one; a list adds components, e.g. sigma: [0.5 % of reading, 0.1 L/min]",
        )
        return None
    key = stated[0]
    divisor = {"sigma": 1.0, "accuracy": math.sqrt(3.0), "expanded": _coverage(data, owner, complain)}[key]
    parts: list[SigmaPart] = []
    guess = False
    value = data[key]
    entries = list(enumerate(value)) if isinstance(value, list) else [(None, value)]
    if not entries:
        complain(key, "sigma-blank", f"{key} of {owner} is an empty list", f"write {_EXAMPLE}")
    for item, entry in entries:
        spot = (*path, key) if item is None else (*path, key, item)
        text = "" if entry is None else places.text(spot, entry)
        try:
            if isinstance(entry, (dict, list, bool)):
                raise Refusal("sigma-unreadable", f"{key} of {owner} is no text", f"write {_EXAMPLE}")
            inside = _GUESS.fullmatch(text)
            if inside and key != "sigma":
                raise Refusal(
                    "sigma-unreadable",
                    f"{key} of {owner}: default(...) marks a guess of a sigma",
                    f"write sigma: {text.strip()}",
                )
            guess = guess or bool(inside)
            reader = _Component(key, owner, unit, span, allow_span)
            kind, number = reader.read(inside["inside"] if inside else text)
            parts.append(SigmaPart(kind, number / divisor, text, key))  # type: ignore[arg-type]
        except Refusal as refused:
            complain(key, refused.code, refused.message, refused.hint, item)
    if "resolution" in data:
        text = "" if data["resolution"] is None else places.text((*path, "resolution"), data["resolution"])
        try:
            if "%" in text:
                raise Refusal(
                    "resolution-percent",
                    f"resolution of {owner} is a step of the display",
                    f"write it in a unit, e.g. 0.1 {unit}",
                )
            _, step = _Component("resolution", owner, unit, span, allow_span).read(text)
            parts.append(SigmaPart("absolute", step / (2.0 * math.sqrt(3.0)), text, "resolution"))
        except Refusal as refused:
            complain("resolution", refused.code, refused.message, refused.hint)
    return SigmaSpec(tuple(parts), guess) if len(problems.found) == before else None


def _misspelt(data: Mapping[str, Any]) -> bool:
    """Whether a key looks like one of the three; it is told as unknown, and once is enough."""
    others = [k for k in data if k not in ("span", "unit", "reads", "reading")]
    return any(difflib.get_close_matches(s, others, n=1, cutoff=0.7) for s in STATEMENTS)


def _coverage(data: Mapping[str, Any], owner: str, complain: Any) -> float:
    """Return the coverage factor, or 1 after a complaint."""
    if "expanded" not in data:
        if "coverage" in data:
            complain(
                "coverage",
                "coverage-without-expanded",
                f"coverage of {owner} belongs to an expanded uncertainty",
                "write expanded: instead of sigma: or accuracy:, or leave coverage out",
            )
        return 1.0
    if data.get("coverage") is None:
        complain(
            "coverage" if "coverage" in data else "expanded",
            "coverage-missing",
            f"the expanded uncertainty of {owner} has no coverage factor",
            "add what the certificate says, e.g. coverage: 2",
        )
        return 1.0
    factor = data["coverage"]
    try:
        number = float(str(factor).removeprefix("k").strip().removeprefix("=")) if not isinstance(factor, bool) else 0.0
    except ValueError:
        number = 0.0
    if not 0 < number < math.inf:
        complain(
            "coverage",
            "coverage-unreadable",
            f"coverage of {owner} is {factor!r}, not a number above zero",
            "write the factor k of the certificate, e.g. coverage: 2",
        )
        return 1.0
    if number > 10:
        complain(
            "coverage",
            "coverage-unreadable",
            f"a coverage factor of {number:g} for {owner} looks like a level of confidence",
            "write the factor k, which is about 2 for 95 %: coverage: 2",
        )
        return 1.0
    return number


class _Component:
    """Reads one component, such as ``1 % of reading`` or ``0.03 m3/h``."""

    def __init__(self, key: str, owner: str, unit: str, span: tuple[float, float] | None, allow_span: bool) -> None:
        self.key, self.owner, self.unit, self.span, self.allow_span = key, owner, unit, span, allow_span
        self.subject = f"{key} of {owner}"

    def read(self, text: str) -> tuple[str, float]:
        """Return kind and size; absolute sizes in the unit of the meter."""
        text = text.replace("−", "-").strip()
        if not text:
            raise Refusal("sigma-blank", f"{self.subject} is blank, and none is guessed silently", f"write {_EXAMPLE}")
        sign = _PLUS_MINUS.match(text)
        if sign:
            rest = text[sign.end() :]
            if self.key == "sigma":
                raise Refusal(
                    "plus-minus",
                    f"{self.subject}: is {text!r} a limit, or k times sigma?",
                    f"write accuracy: {rest} for a limit, or expanded: {rest} with coverage: 2",
                )
            text = rest
        percent = _PERCENT.fullmatch(text)
        if percent:
            return self._percent(text, float(percent["number"]), percent["rest"])
        return "absolute", self._absolute(text)

    def _percent(self, text: str, number: float, rest: str) -> tuple[str, float]:
        words = " ".join(rest.split()).casefold()
        if not words:
            absolute = f", or {number:g} % absolute for percentage points" if _is_percent(self.unit) else ""
            raise Refusal(
                "percent-of-what",
                f"{self.subject} is {text!r}: of reading or of span?",
                f"write {number:g} % of reading, or {number:g} % of span with e.g. span: 0 to 40 {self.unit}{absolute}",
            )
        if words in ("absolute", "abs"):
            return "absolute", self._absolute(f"{number!r} %")
        if words not in _OF:
            raise Refusal(
                "sigma-unreadable", f"{self.subject}: {text!r} is not understood", self._words_hint(number, words)
            )
        self._positive(number, text)
        if _OF[words] == "reading":
            return "reading", number / 100.0
        if not self.allow_span:
            raise Refusal(
                "span-missing",
                f"{self.subject} is in % of span, but there is no span here",
                f"write {number:g} % of value, or an amount with its unit",
            )
        if self.span is None:
            raise Refusal(
                "span-missing",
                f"{self.subject} is in % of span, but no span is given",
                f"add e.g. span: 0 to 40 {self.unit}",
            )
        return "absolute", number / 100.0 * (self.span[1] - self.span[0])

    def _words_hint(self, number: float, words: str) -> str:
        bare = words.removeprefix("of ").strip()
        if bare in _SPAN_WORDS:
            return f"write {number:g} % of span with e.g. span: 0 to 40 {self.unit}"
        if bare in _READING_WORDS:
            return f"write {number:g} % of reading"
        if re.search(r"[+,;]|\band\b", bare):
            return "write several components as a list, e.g. [0.5 % of reading, 0.1 L/min]"
        near = did_you_mean(f"of {bare}", _OF) or did_you_mean(bare, ["reading", "span"])
        if near:
            word = "span" if "span" in near else "value" if "value" in near else "reading"
            return f"did you mean '{number:g} % of {word}'?"
        return f"write {number:g} % of reading, or {number:g} % of span; several components as a list"

    def _absolute(self, text: str) -> float:
        bare = re.fullmatch(_NUMBER, text)
        if bare and self.unit not in ("", "1", "fraction"):
            self._positive(float(text), text)
            raise Refusal(
                "sigma-unit-missing", f"{self.subject} is {text!r} without a unit", f"write {text} {self.unit}"
            )
        try:
            value, unit = parse_quantity(text)
        except UnitProblem as problem:
            if problem.code == "number-unreadable" and not re.match(_NUMBER, text):
                raise Refusal(
                    "sigma-unreadable", f"{self.subject}: {text!r} is not understood", self._unknown_hint(text)
                ) from None
            hint = problem.hint
            if re.fullmatch(rf"{_NUMBER}\s*of\s+\w+", text):
                hint = f"write {text.replace('of', '% of', 1)}"
            elif re.search(r"\bof\b|,\s|;|\+", text):
                hint = "write components as a list, e.g. [0.5 % of reading, 0.1 L/min]"
            raise Refusal(problem.code, f"{self.subject}: {problem.message}", hint) from None
        self._positive(value, text)
        try:
            return value * difference_factor(unit, self.unit)
        except UnitProblem:
            raise Refusal(
                "sigma-unit",
                f"{self.subject} is in {unit or 'no unit'} ({describe_kind(unit) or 'another kind'}), "
                f"but the value is in {self.unit} ({describe_kind(self.unit) or 'another kind'})",
                mismatch_hint(unit, self.unit),
            ) from None

    def _unknown_hint(self, text: str) -> str:
        found = re.match(r"[A-Za-z]+", text)
        if found and did_you_mean(found.group(), ["default"]):
            return "did you mean default(2 % of reading)?"
        return f"write {_EXAMPLE}"

    def _positive(self, number: float, text: str) -> None:
        if number == 0:
            raise Refusal(
                "sigma-zero",
                f"{self.subject} is {text!r}: a sigma of zero would force every error onto other readings",
                "declare an exact value under known: instead",
            )
        if number < 0:
            raise Refusal("sigma-negative", f"{self.subject} is {text!r}", "a sigma is above zero: leave the sign out")


def _is_percent(unit: str) -> bool:
    try:
        parse_unit(unit)
        return describe_kind(unit).split(",")[0].endswith(("fraction", "plain number"))
    except UnitProblem:
        return False
