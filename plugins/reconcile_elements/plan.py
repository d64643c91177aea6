"""A checked plan: what each stream holds and what each node does, free of contradictions."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from .formula import Formula
from .options import ElementsOptions
from .reactions import CHARGE

__all__ = ["REDUCTION", "NodePlan", "Plan", "StreamPlan"]

REDUCTION = "reduction"
"""Word under ``conserve`` for the balance of the degree of reduction."""


@dataclass(frozen=True)
class StreamPlan:
    """What one stream holds and how it is measured.

    Attributes
    ----------
    name : str
    source, target : int
        Node indices, -1 outside.
    species : tuple of str
    composition : mapping of str to float, or None
        Known mole fractions.
    gas : {"dry", "wet"} or None
    volume_at : str or None
        Reference conditions of the volume flow.
    current : bool
        Electrons, read as a current.
    can_leak : bool
        Whether a loss before the meter is a possible fault.
    """

    name: str
    source: int
    target: int
    species: tuple[str, ...]
    composition: Mapping[str, float] | None = None
    gas: str | None = None
    volume_at: str | None = None
    current: bool = False
    can_leak: bool = False

    def counted(self, water: set[str]) -> tuple[str, ...]:
        """Species that the flow and the fractions of a gas are made of."""
        return tuple(s for s in self.species if self.gas != "dry" or s not in water)


@dataclass(frozen=True)
class NodePlan:
    """What one node conserves: species, elements, or species with reactions."""

    name: str
    mode: str  # "mixes", "elements" or "reactions"
    reactions: tuple[str, ...] = ()
    accumulates: tuple[str, ...] = ()


@dataclass(frozen=True)
class Plan:
    """Everything that the balances are written from; nothing in it contradicts itself.

    Attributes
    ----------
    formulas, hidden : mapping of str to Formula
    streams, nodes : tuple
    conserve : tuple of str
        Elements, ``charge``, ``reduction``.
    weights : mapping of str to Fraction
        Electrons per atom, when ``reduction`` is conserved.
    reactions : mapping of str to mapping of str to Fraction
    air : mapping of str to float
        Mole fractions of air.
    """

    options: ElementsOptions
    formulas: Mapping[str, Formula]
    hidden: Mapping[str, Formula]
    streams: tuple[StreamPlan, ...]
    nodes: tuple[NodePlan, ...]
    conserve: tuple[str, ...]
    weights: Mapping[str, Fraction]
    reactions: Mapping[str, Mapping[str, Fraction]]
    air: Mapping[str, float]
    water: set[str] = field(default_factory=set)

    def content(self, formula: Formula, row: str) -> Fraction:
        """How much of a conserved quantity one mol of the formula holds."""
        if row == CHARGE:
            return formula.charge
        if row == REDUCTION:
            return sum((self.weights[e] * n for e, n in formula.composition.items()), -formula.charge)
        return formula[row]
