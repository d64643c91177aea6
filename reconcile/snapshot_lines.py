"""The lines of one snapshot in detail: of a reading, a variable, a balance, a possible fault."""

from __future__ import annotations

from dataclasses import dataclass

from .model import Candidate

__all__ = ["FRAME_COLUMNS", "BalanceLine", "FaultLine", "ReadingLine", "VariableLine"]

FRAME_COLUMNS = (
    "snapshot",
    "variable",
    "unit",
    "meter",
    "class",
    "reading",
    "sigma_before",
    "adjusted",
    "sigma",
    "adjustment",
    "adjustment_in_sigmas",
    "share_checked",
    "smallest_detectable",
)


@dataclass(frozen=True)
class ReadingLine:
    """A reading before and after; all values in the unit of the meter.

    Attributes
    ----------
    tag, reads, unit, kind : str
    reading : float
        nan where the meter gave nothing.
    sigma_before : float
        Total standard uncertainty of the reading, shared errors included.
    adjusted, sigma : float
        What it should have read, and its standard uncertainty.
    adjustment, in_sigmas : float
        adjusted - reading, and the same over `sigma_before`.
    share : float
        Share of an error of this reading that would show, 0 to 1.
    z : float
        Test value; nan where the reading is not checked.
    smallest : float
        Smallest bias that would be noticed at the level and power of the case; inf where none would.
    klass : str
        ``checked``, ``not checked``, ``calculated`` (absent, but determined by the others) or
        ``cannot be calculated``.
    word : str
        ``sound so far``, ``suspect``, ``tied``, ``cannot tell``, ``not checked``, ``left out``, ``no reading``.
    origin : str
        Where its sigma comes from.
    """

    tag: str
    reads: str
    unit: str
    kind: str
    reading: float
    sigma_before: float
    adjusted: float
    sigma: float
    adjustment: float
    in_sigmas: float
    share: float
    z: float
    smallest: float
    klass: str
    word: str
    origin: str


@dataclass(frozen=True)
class VariableLine:
    """A variable of the balances, in its own unit."""

    name: str
    unit: str
    klass: str
    adjusted: float
    sigma: float
    meters: tuple[str, ...]
    reason: str


@dataclass(frozen=True)
class BalanceLine:
    """A balance before and after.

    Attributes
    ----------
    name, kind, unit, node, domain : str
    before : float
        Closure of the raw readings; nan where the balance holds a variable that is not read.
    spread : float
        Standard deviation that the sigmas let expect.
    ratio : float
        before / spread.
    after : float
        Closure of the adjusted values.
    scale : float
        Largest term of the balance.
    inflow, outflow : float
        Sum of the positive and of the negative terms of the raw readings.
    """

    name: str
    kind: str
    unit: str
    node: str
    domain: str
    before: float
    spread: float
    ratio: float
    after: float
    scale: float
    inflow: float
    outflow: float


@dataclass(frozen=True)
class FaultLine:
    """A possible fault taken alone, in the unit of its size.

    Attributes
    ----------
    candidate : Candidate
    size, sigma : float
        Least-squares size if this were the only fault, and its standard uncertainty.
    low, high : float
        95 % interval.
    z : float
        Test value.
    left : float
        Objective that remains if it is granted.
    smallest : float
        Smallest size that would be noticed at the level and power of the case.
    """

    candidate: Candidate
    size: float
    sigma: float
    low: float
    high: float
    z: float
    left: float
    smallest: float
