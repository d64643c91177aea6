"""Standard atomic weights, and what follows from them: molar masses and mass fractions.

The weights are those of IUPAC's Commission on Isotopic Abundances and Atomic Weights (CIAAW): T. Prohaska et
al., "Standard atomic weights of the elements 2021", Pure Appl. Chem. 94 (2022) 573-600,
doi:10.1515/pac-2019-0603, with the commission's 2024 revisions of Zr, Gd and Lu. Fourteen elements (H, Li, B, C,
N, O, Mg, Si, S, Cl, Ar, Br, Tl, Pb) vary so much in nature that the standard is an interval; for them the value
is the commission's single abridged one, meant for trade and commerce. The 84 weights were typed from memory and
are compared in the tests with two independent libraries; the 2024 revisions are newer than either library.
"""

from __future__ import annotations

from fractions import Fraction
from types import MappingProxyType

from .formula import Formula
from .refusal import Mistake, Refusal

__all__ = ["AVOGADRO_ELECTRON_MASS", "FARADAY", "STANDARD_WEIGHTS", "mass_fraction", "molar_mass"]

FARADAY = 96485.33212
"""Faraday constant in C/mol; exact product of the SI values of e and N_A, CODATA 2018, 10 digits."""

AVOGADRO_ELECTRON_MASS = 5.4857990888e-4
"""Molar mass of the electron in g/mol (CODATA 2018, 5.485 799 0888 e-7 kg/mol)."""

# One line a period of the table, so that a reader can compare it with a printed one.
_TABLE = """
H 1.008  He 4.002602
Li 6.94  Be 9.0121831  B 10.81  C 12.011  N 14.007  O 15.999  F 18.998403162  Ne 20.1797
Na 22.98976928  Mg 24.305  Al 26.9815384  Si 28.085  P 30.973761998  S 32.06  Cl 35.45  Ar 39.95
K 39.0983  Ca 40.078  Sc 44.955907  Ti 47.867  V 50.9415  Cr 51.9961  Mn 54.938043  Fe 55.845  Co 58.933194
Ni 58.6934  Cu 63.546  Zn 65.38  Ga 69.723  Ge 72.630  As 74.921595  Se 78.971  Br 79.904  Kr 83.798
Rb 85.4678  Sr 87.62  Y 88.905838  Zr 91.222  Nb 92.90637  Mo 95.95  Ru 101.07  Rh 102.90549  Pd 106.42
Ag 107.8682  Cd 112.414  In 114.818  Sn 118.710  Sb 121.760  Te 127.60  I 126.90447  Xe 131.293
Cs 132.90545196  Ba 137.327  La 138.90547  Ce 140.116  Pr 140.90766  Nd 144.242  Sm 150.36  Eu 151.964
Gd 157.249  Tb 158.925354  Dy 162.500  Ho 164.930329  Er 167.259  Tm 168.934219  Yb 173.045  Lu 174.96669
Hf 178.486  Ta 180.94788  W 183.84  Re 186.207  Os 190.23  Ir 192.217  Pt 195.084  Au 196.966570  Hg 200.592
Tl 204.38  Pb 207.2  Bi 208.98040
Th 232.0377  Pa 231.03588  U 238.02891
"""


def _read(table: str) -> dict[str, Fraction]:
    words = table.split()
    return {symbol: Fraction(weight) for symbol, weight in zip(words[::2], words[1::2], strict=True)}


STANDARD_WEIGHTS = MappingProxyType(_read(_TABLE))
"""Standard atomic weight of every element that has one, as exact decimals in g/mol."""


def molar_mass(formula: Formula) -> float:
    """Return the molar mass of a formula in g/mol.

    The mass of missing or surplus electrons is counted (0.0005 g/mol each), so that masses balance wherever
    elements and charge do.

    Parameters
    ----------
    formula : Formula
        Parsed formula.

    Returns
    -------
    float
        Molar mass in g/mol.

    Raises
    ------
    Refusal
        An element has no standard atomic weight (code ``no-standard-weight``), e.g. technetium.
    """
    return float(_sum(formula)) - float(formula.charge) * AVOGADRO_ELECTRON_MASS


def mass_fraction(formula: Formula, element: str) -> float:
    """Return the grams of an element per gram of the formula; 0 where the element is absent."""
    return float(formula[element] * STANDARD_WEIGHTS.get(element, Fraction(0))) / molar_mass(formula)


def _sum(formula: Formula) -> Fraction:
    missing = [symbol for symbol in formula.composition if symbol not in STANDARD_WEIGHTS]
    if missing:
        raise Refusal(
            Mistake(
                "no-standard-weight",
                f"{formula.text!r}: {', '.join(missing)} has no standard atomic weight (no stable isotopes of "
                "known abundance)",
                "give amounts in mol instead of mass",
            )
        )
    return sum((count * STANDARD_WEIGHTS[symbol] for symbol, count in formula.composition.items()), Fraction(0))
