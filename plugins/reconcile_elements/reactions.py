"""What compositions imply: balanced reactions and independent reactions, exactly, so that both are yes or no."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from fractions import Fraction

from reconcile import did_you_mean

from .exact import null_space
from .formula import Formula
from .refusal import Mistake, Refusal

__all__ = [
    "CHARGE",
    "composition_matrix",
    "imbalance",
    "independent_reactions",
    "parse_reaction",
    "require_balanced",
]

CHARGE = "charge"
"""Name of the conserved quantity that is not an element."""


def composition_matrix(
    formulas: Sequence[Formula], conserve: Sequence[str] | None = None
) -> tuple[tuple[str, ...], list[list[Fraction]]]:
    """Return what is conserved and how much of it each formula holds.

    Parameters
    ----------
    formulas : sequence of Formula
        Species, one column each.
    conserve : sequence of str, optional
        Elements (and ``charge``) to keep, in this order; default: every element in order of appearance, then
        charge if any species is charged.

    Returns
    -------
    names : tuple of str
        Conserved quantities, one row each.
    matrix : list of list of Fraction
        Shape (len(names), len(formulas)).
    """
    if conserve is None:
        found = list(dict.fromkeys(e for f in formulas for e in f.composition))
        conserve = [*found, CHARGE] if any(f.charge for f in formulas) else found
    return tuple(conserve), [[f.charge if name == CHARGE else f[name] for f in formulas] for name in conserve]


def independent_reactions(species: Mapping[str, Formula]) -> tuple[dict[str, int], ...]:
    """Return a full set of independent reactions that the species allow.

    Every reaction that conserves elements and charge is a combination of these; their number is the number of
    species less the rank of the composition matrix (Smith & Missen, "Chemical Reaction Equilibrium Analysis",
    1982, ch. 2).

    Parameters
    ----------
    species : mapping of str to Formula
        Name to composition.

    Returns
    -------
    tuple of dict of str to int
        Whole-number coefficients of the species that take part; negative = consumed.
    """
    names = list(species)
    _, matrix = composition_matrix([species[n] for n in names])
    return tuple(
        {name: c for name, c in zip(names, vector, strict=True) if c} for vector in null_space(matrix, len(names))
    )


def imbalance(coefficients: Mapping[str, Fraction | float], species: Mapping[str, Formula]) -> dict[str, Fraction]:
    """Return what a reaction makes (+) or destroys (-) of each element and of charge; empty when balanced.

    Coefficients given as floats are taken as the decimal that they print as, so 0.1 is one tenth.
    """
    exact = {name: _exact(c) for name, c in coefficients.items()}
    rows, matrix = composition_matrix([species[n] for n in exact])
    sums = {
        row: sum((c * v for c, v in zip(exact.values(), values, strict=True)), Fraction(0))
        for row, values in zip(rows, matrix, strict=True)
    }
    return {row: value for row, value in sums.items() if value}


def require_balanced(
    coefficients: Mapping[str, Fraction | float],
    species: Mapping[str, Formula],
    *,
    name: str = "reaction",
    tolerance: float = 0.0,
) -> None:
    """Refuse a reaction that makes or destroys elements or charge.

    Parameters
    ----------
    coefficients : mapping of str to number
        Species to coefficient; negative = consumed.
    species : mapping of str to Formula
        Compositions.
    name : str
        What to call the reaction in the message.
    tolerance : float
        Largest gap allowed, relative to the amount of that element on the reaction's larger side. Published yield
        equations are rounded; they may need 1e-3.

    Raises
    ------
    Refusal
        ``reaction-unbalanced``, with both sides of each element that does not balance.
    """
    gaps = imbalance(coefficients, species)
    words = []
    for row, gap in gaps.items():
        left, right = Fraction(0), Fraction(0)
        for label, value in coefficients.items():
            amount = species[label].charge if row == CHARGE else species[label][row]
            term = _exact(value) * amount
            if _exact(value) < 0:
                left -= term
            else:
                right += term
        if abs(gap) > Fraction(tolerance) * max(abs(left), abs(right)):
            words.append(f"{row} {float(left):g} on the left, {float(right):g} on the right")
    if words:
        raise Refusal(
            Mistake(
                "reaction-unbalanced",
                f"{name} is not balanced: {'; '.join(words)}",
                "correct a coefficient, or add the species that is missing (water, H+, CO2, ...)",
            )
        )


_TERM = re.compile(r"(?:(\d+(?:\.\d+)?(?:/\d+)?|\d*\.\d+)\s+)?(\S+)")


def parse_reaction(text: str, species: Mapping[str, Formula], *, name: str = "reaction") -> dict[str, Fraction]:
    """Read ``glucose + 6 oxygen -> 6 carbon_dioxide + 6 water``.

    A coefficient stands before a species name with a space between: a whole number, a decimal or a fraction such
    as ``1/2``.

    Parameters
    ----------
    text : str
        The reaction.
    species : mapping of str to Formula
        Names that may occur.
    name : str
        What to call the reaction in messages.

    Returns
    -------
    dict of str to Fraction
        Species to coefficient, negative = consumed. A species on both sides counts with its net coefficient.

    Raises
    ------
    Refusal
        ``reaction-arrow``, ``reaction-term``, ``reaction-species``, ``reaction-empty``: all mistakes at once.
    """
    sides = text.split("->")
    if len(sides) != 2:
        raise Refusal(Mistake("reaction-arrow", f"{name}: {text!r} needs exactly one '->'", "write e.g. a + 2 b -> c"))
    net: dict[str, Fraction] = {}
    mistakes = []
    for sign, side in zip((-1, 1), sides, strict=True):
        for term in re.split(r"\s\+\s", f" {side} ") if side.strip() else []:
            found = _TERM.fullmatch(term.strip())
            if not found:
                mistakes.append(
                    Mistake("reaction-term", f"{name}: cannot read {term.strip()!r}", "write e.g. 6 oxygen")
                )
            elif found[2] not in species:
                mistakes.append(
                    Mistake(
                        "reaction-species",
                        f"{name}: {found[2]!r} is not one of the species",
                        did_you_mean(found[2], species) or f"known: {', '.join(species)}",
                    )
                )
            elif found[1] and _exact(found[1]) == 0:
                mistakes.append(Mistake("reaction-term", f"{name}: coefficient 0 of {found[2]}", "leave it out"))
            else:
                net[found[2]] = net.get(found[2], Fraction(0)) + sign * _exact(found[1] or "1")
    net = {label: value for label, value in net.items() if value}
    if not net and not mistakes:
        mistakes.append(Mistake("reaction-empty", f"{name}: {text!r} changes nothing", "write e.g. a + 2 b -> c"))
    if mistakes:
        raise Refusal(mistakes)
    return net


def _exact(value: Fraction | float | str) -> Fraction:
    if isinstance(value, str):
        top, _, bottom = value.partition("/")
        return Fraction(top) / Fraction(bottom or "1") if bottom != "0" else Fraction(0)
    return value if isinstance(value, Fraction) else Fraction(repr(float(value)))
