"""Equivalents of ions: how a concentration counts in a charge balance."""

from __future__ import annotations

from reconcile_elements.formula import parse_formula
from reconcile_elements.masses import molar_mass

from reconcile import units

from .options import Ion

CACO3_PER_EQUIVALENT = 0.5
"""Moles of CaCO3 per equivalent: it neutralises two."""


def equivalents_per_unit(sample: str, name: str, ion: Ion) -> float:
    """Return meq/L per unit of a concentration, without the sign of the charge.

    Parameters
    ----------
    sample, name : str
        For messages.
    ion : Ion

    Raises
    ------
    ValueError
        If the unit is no concentration, or a mass concentration does not say what it is counted as.
    """
    if ion.charge == 0:
        raise ValueError(f"{name} in {sample!r} has no charge; leave it out of the charge balance")
    for base, per_base in (("meq/L", 1.0), ("mmol/L", float(abs(ion.charge)))):
        if units.same_kind(ion.unit, base):
            return units.difference_factor(ion.unit, base) * per_base
    if not units.same_kind(ion.unit, "mg/L"):
        raise ValueError(f"{name} in {sample!r} has unit {ion.unit!r}; write meq/L, mmol/L or mg/L")
    if ion.analysed_as is None:
        raise ValueError(
            f"{name} in {sample!r} is given in {ion.unit}: counted as what? Nitrate as N and as NO3 differ by 4.43; "
            f"write e.g. {name}: {{charge: {ion.charge}, unit: {ion.unit}, as: {name.rstrip('+-0123456789') or name}}}"
        )
    milligrams = units.difference_factor(ion.unit, "mg/L")
    mass = molar_mass(parse_formula(ion.analysed_as))
    if ion.analysed_as == "CaCO3":
        return milligrams / (mass * CACO3_PER_EQUIVALENT)
    return milligrams * abs(ion.charge) / mass
