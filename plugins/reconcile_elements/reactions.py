"""What compositions imply: balanced reactions, independent reactions and degrees of reduction.

All of it is exact (fractions of whole numbers), so that "balanced" and "independent" are yes or no, and not a
matter of a tolerance.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from fractions import Fraction
from math import gcd, lcm

from reconcile import did_you_mean

from .formula import Formula, parse_formula
from .refusal import Mistake, Refusal

__all__ = [
    "CHARGE",
    "NITROGEN_SOURCES",
    "composition_matrix",
    "degree_of_reduction",
    "imbalance",
    "independent_reactions",
    "null_space",
    "parse_reaction",
    "rank",
    "reduction_weights",
    "require_balanced",
]

CHARGE = "charge"
"""Name of the conserved quantity that is not an element."""

# Reference compounds have degree of reduction zero: they neither give nor take electrons. Where an element has one
# usual end state in aerobic culture it stands here; nitrogen has three, and must be stated.
_REFERENCES = {
    "H": "H+",
    "O": "H2O",
    "C": "CO2",
    "P": "H3PO4",
    "S": "H2SO4",
    "Na": "Na+",
    "K": "K+",
    "Mg": "Mg+2",
    "Ca": "Ca+2",
    "Cl": "Cl-",
}

NITROGEN_SOURCES = {
    "NH3": "NH3",
    "NH4": "NH3",
    "NH4+": "NH3",
    "NO3": "HNO3",
    "NO3-": "HNO3",
    "HNO3": "HNO3",
    "N2": "N2",
}
"""Accepted names of the nitrogen source, and the reference compound each stands for."""


def reduction_weights(
    elements: Iterable[str], nitrogen: str | None = None, references: Mapping[str, str] | None = None
) -> dict[str, Fraction]:
    """Return the electrons that each element counts for in a degree of reduction.

    The degree of reduction of a compound is the number of electrons it can give until it has become the reference
    compounds (CO2, H2O, H+, the nitrogen source, sulfate, phosphate); see e.g. Roels, "Energetics and Kinetics in
    Biotechnology" (1983), ch. 3. For CHON and an ammonia source the weights are 4, 1, -2, -3.

    Parameters
    ----------
    elements : iterable of str
        Elements that occur. ``charge`` is accepted and always counts -1.
    nitrogen : {"NH3", "NO3", "N2"}, optional
        Nitrogen source, the reference for N: -3, +5 or 0.
    references : mapping of str to str, optional
        Element to reference compound, where the usual one does not apply, e.g. ``{"S": "H2S", "Fe": "Fe+3"}``.

    Returns
    -------
    dict of str to Fraction
        Electrons per atom; per unit of charge for ``charge``.

    Raises
    ------
    Refusal
        ``nitrogen-source-missing`` when N occurs and its source is not stated, ``nitrogen-source-unknown``,
        ``reduction-reference-missing`` for an element without a usual end state, ``reduction-reference``.
    """
    compounds = {**_REFERENCES, **(references or {})}
    if nitrogen is not None:
        if nitrogen not in NITROGEN_SOURCES:
            raise Refusal(
                Mistake(
                    "nitrogen-source-unknown",
                    f"nitrogen source {nitrogen!r} is not known",
                    "write NH3, NO3 or N2",
                )
            )
        compounds["N"] = NITROGEN_SOURCES[nitrogen]
    weights = {CHARGE: Fraction(-1)}
    for element in ("H", "O", *elements):
        if element not in weights:
            weights[element] = _weight(element, compounds, weights)
    return {element: weights[element] for element in dict.fromkeys(elements)}


def _weight(element: str, compounds: Mapping[str, str], known: Mapping[str, Fraction]) -> Fraction:
    if element not in compounds:
        if element == "N":
            raise Refusal(
                Mistake(
                    "nitrogen-source-missing",
                    "the degree of reduction of a compound with nitrogen depends on the nitrogen source",
                    "which is it: NH3 (N counts -3), NO3 (+5) or N2 (0)? State e.g. nitrogen_source: NH3",
                )
            )
        raise Refusal(
            Mistake(
                "reduction-reference-missing",
                f"{element} has no usual end state to count its electrons from",
                f"name its reference compound, e.g. references: {{{element}: ...}}",
            )
        )
    compound = parse_formula(compounds[element])
    others = [e for e in compound.composition if e != element and e not in known]
    if not compound[element] or others:
        raise Refusal(
            Mistake(
                "reduction-reference",
                f"{compounds[element]!r} cannot be the reference compound of {element}",
                f"write a compound of {element} with nothing but H, O and charge",
            )
        )
    rest = sum((known[e] * n for e, n in compound.composition.items() if e != element), -compound.charge)
    return -rest / compound[element]


def degree_of_reduction(
    formula: Formula | str, nitrogen: str | None = None, references: Mapping[str, str] | None = None
) -> Fraction:
    """Return the degree of reduction of one formula unit: electrons per mol, or per C-mol if so written.

    Parameters
    ----------
    formula : Formula or str
        Composition; its charge counts (an electron has degree of reduction 1).
    nitrogen, references
        See `reduction_weights`; the nitrogen source must be stated exactly when the formula contains N.

    Returns
    -------
    Fraction
        Electrons per formula unit.
    """
    parsed = parse_formula(formula) if isinstance(formula, str) else formula
    weights = reduction_weights((*parsed.composition, CHARGE), nitrogen, references)
    return sum((weights[e] * n for e, n in parsed.composition.items()), -parsed.charge)


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


def rank(matrix: Sequence[Sequence[Fraction]]) -> int:
    """Return the exact rank of a matrix of fractions."""
    return len(_reduce(matrix)[1])


def null_space(matrix: Sequence[Sequence[Fraction]], columns: int) -> list[list[int]]:
    """Return a basis of the exact null space in the smallest whole numbers.

    Each basis vector uses as few columns as the echelon form allows: one free column and the pivots. The first
    non-zero coefficient is negative.

    Parameters
    ----------
    matrix : sequence of sequence of Fraction
        Shape (m, columns); may have no rows.
    columns : int
        Number of columns.

    Returns
    -------
    list of list of int
        ``columns - rank`` vectors.
    """
    echelon, pivots = _reduce(matrix)
    basis = []
    for free in (c for c in range(columns) if c not in pivots):
        vector = [Fraction(0)] * columns
        vector[free] = Fraction(1)
        for row, pivot in zip(echelon, pivots, strict=False):
            vector[pivot] = -row[free]
        basis.append(_whole(vector))
    return basis


def _reduce(matrix: Sequence[Sequence[Fraction]]) -> tuple[list[list[Fraction]], list[int]]:
    """Reduced row echelon form and its pivot columns."""
    rows = [[Fraction(v) for v in row] for row in matrix]
    pivots: list[int] = []
    for column in range(len(rows[0]) if rows else 0):
        at = len(pivots)
        found = next((r for r in range(at, len(rows)) if rows[r][column]), None)
        if found is None:
            continue
        rows[at], rows[found] = rows[found], rows[at]
        lead = rows[at][column]
        rows[at] = [v / lead for v in rows[at]]
        for r, row in enumerate(rows):
            if r != at and row[column]:
                factor = row[column]
                rows[r] = [v - factor * p for v, p in zip(row, rows[at], strict=True)]
        pivots.append(column)
        if len(pivots) == len(rows):
            break
    return rows, pivots


def _whole(vector: Sequence[Fraction]) -> list[int]:
    scale = lcm(*(v.denominator for v in vector))
    whole = [int(v * scale) for v in vector]
    common = gcd(*whole)
    first = next(v for v in whole if v)
    return [-v // common if first > 0 else v // common for v in whole]


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
