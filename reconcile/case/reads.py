"""What a meter reads: one variable, or a sum such as ``a.flow - 0.5 * b.flow``."""

from __future__ import annotations

import re

from .quantities import Refusal

__all__ = ["names_in", "read_reads", "unquoted"]

_NUMBER = r"(?:\d+(?:\.\d*)?|\.\d+)(?:[eE][+-]?\d+)?(?![\w.])"
_NAME = r"[^\W-][\w-]*(?:\.[\w-]+)*"
_TOKEN = re.compile(rf"\s*(?:(?P<number>{_NUMBER})|(?P<name>{_NAME})|`(?P<odd>[^`]+)`|(?P<sign>[-+*/−·]))")
_EXAMPLE = "write e.g. supply.flow, a.flow + b.flow, or a.flow - 0.5 * b.flow"


def unquoted(name: str) -> str:
    """Return a name without the backticks that odd names stand in."""
    name = name.strip()
    return name[1:-1] if len(name) > 2 and name[0] == name[-1] == "`" else name


def read_reads(text: str, owner: str) -> tuple[tuple[str, float], ...]:
    """Read a sum of variables.

    Parameters
    ----------
    text : str
        Names are of letters, digits, ``_``, ``-`` and dots; any other name stands in backticks. A minus sign has a
        space before it, since names may hold one.
    owner : str
        How messages name the meter.

    Returns
    -------
    tuple of (variable name, coefficient)
        In the order of the text; a variable that stands twice is one entry.

    Raises
    ------
    Refusal
    """
    tokens = _tokens(text, owner)
    if not tokens:
        raise Refusal("reads-missing", f"reads of {owner} is blank", _EXAMPLE)
    found: dict[str, float] = {}
    place = 0
    while place < len(tokens):
        sign = 1.0
        if tokens[place] in (("sign", "+"), ("sign", "-")):
            sign = -1.0 if tokens[place][1] == "-" else 1.0
            place += 1
        elif place:
            raise Refusal(
                "reads-unreadable",
                f"reads of {owner}: a + or - is missing before {tokens[place][1]!r} in {text!r}",
                _EXAMPLE,
            )
        name, coefficient, place = _term(tokens, place, text, owner)
        if "." not in name:
            raise Refusal(
                "reads-no-quantity",
                f"reads of {owner}: {name!r} says where, but not what is measured there",
                f"write e.g. {name}.flow",
            )
        found[name] = found.get(name, 0.0) + sign * coefficient
    gone = [n for n, c in found.items() if c == 0.0]
    if gone:
        raise Refusal(
            "reads-nothing",
            f"reads of {owner}: {gone[0]!r} cancels out of {text!r}",
            "leave it out or correct its factor",
        )
    return tuple(found.items())


def _tokens(text: str, owner: str) -> list[tuple[str, str]]:
    tokens, place = [], 0
    rest = text.rstrip()
    while place < len(rest):
        match = _TOKEN.match(rest, place)
        if not match:
            position = place + len(rest[place:]) - len(rest[place:].lstrip())
            raise Refusal(
                "reads-unreadable",
                f"reads of {owner}: unexpected {rest[position]!r} at position {position + 1} of {text!r}",
                "put an odd name in backticks; " + _EXAMPLE,
            )
        kind = str(match.lastgroup)
        token = match.group(kind).replace("−", "-").replace("·", "*")
        tokens.append(("name" if kind == "odd" else kind, token))
        place = match.end()
    return tokens


def _term(tokens: list[tuple[str, str]], place: int, text: str, owner: str) -> tuple[str, float, int]:
    """Read one name with its factors."""
    name: str | None = None
    coefficient = 1.0
    divide = False
    while True:
        kind, token = tokens[place] if place < len(tokens) else ("end", "")
        if kind == "number":
            number = float(token)
            if divide and number == 0.0:
                raise Refusal("reads-unreadable", f"reads of {owner}: {text!r} divides by zero", _EXAMPLE)
            coefficient = coefficient / number if divide else coefficient * number
        elif kind == "name" and name is None and not divide:
            name = token
        elif kind == "name":
            raise Refusal(
                "reads-not-a-sum",
                f"reads of {owner}: {text!r} multiplies or divides variables, but a meter reads a sum",
                "let a domain declare the product as a variable, or put a derived value under figures:",
            )
        else:
            raise Refusal(
                "reads-unreadable",
                f"reads of {owner}: {text!r} {'ends too early' if kind == 'end' else f'has an unexpected {token!r}'}",
                _EXAMPLE,
            )
        place += 1
        if place < len(tokens) and tokens[place] in (("sign", "*"), ("sign", "/")):
            divide = tokens[place][1] == "/"
            place += 1
            continue
        break
    if name is None:
        raise Refusal("reads-unreadable", f"reads of {owner}: {text!r} has a number without a variable", _EXAMPLE)
    return name, coefficient, place


def names_in(expression: str) -> list[str]:
    """Variable names in a longer formula: those in backticks, and those with a dot; each once, in order."""
    pattern = re.compile(rf"`([^`]+)`|({_NUMBER})|({_NAME})")
    found = (
        m.group(1) or (m.group(3) if m.group(3) and "." in m.group(3) else None) for m in pattern.finditer(expression)
    )
    return list(dict.fromkeys(n for n in found if n))
