"""Degrees of reduction: the electrons that a compound can give, counted from stated reference compounds."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction

from .formula import Formula, parse_formula
from .reactions import CHARGE
from .refusal import Mistake, Refusal

__all__ = ["NITROGEN_SOURCES", "degree_of_reduction", "reduction_weights"]

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
