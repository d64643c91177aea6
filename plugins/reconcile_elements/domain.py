"""Domain `elements`: balances of atoms, charge, species and reactions."""

from __future__ import annotations

from typing import ClassVar

from pydantic import BaseModel

from reconcile import Domain, Network, System

from .balances import write
from .layout import make_plan
from .missing import missing_variable
from .options import ElementsNode, ElementsOptions, ElementsStream
from .refusal import Refusal


class Elements(Domain):
    """Atoms and charge are conserved, whatever reacts.

    Variables
        ``stream.species``, an amount per time; for a gas or a known mixture ``stream.total``; for a gas
        ``stream.species.fraction`` (dry or wet, as the stream says) and ``stream.volume_flow`` at stated conditions;
        ``stream.species.mass`` of weighed species; ``stream.current`` of electrons;
        ``node.reaction``, the extent of a reaction; ``node.species.accumulation``; and the shared parameters
        ``species.atoms.H``, ``species.degree_of_reduction``, ``species.carbon_fraction``.
    Possible faults
        a hidden product of stated formula, gas lost before its meter, air drawn into a gas line.

    A node mixes (species are conserved), reacts (elements are conserved), or reacts by stated reactions (species
    are conserved but for their extents: the claim that nothing else happens there).
    """

    name: ClassVar[str] = "elements"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = "atoms, charge, species and reactions; gas analysis; unseen products and gas leaks"
    options: ClassVar[type[BaseModel]] = ElementsOptions
    stream_options: ClassVar[type[BaseModel]] = ElementsStream
    node_options: ClassVar[type[BaseModel]] = ElementsNode
    after: ClassVar[tuple[str, ...]] = ("charge",)
    caution: ClassVar[str] = (
        "Closed balances do not prove that a vessel is tight: CO2, NH3, H2S and solvent vapour can escape unseen. "
        "Where hydrogen and oxygen meet (electrolysis, oxygen-enriched gas), a leak or crossover term is a hazard to "
        "look into, not a number to absorb; gas alarms and local codes come first."
    )
    forgotten: ClassVar[tuple[str, ...]] = (
        "acid and base added for pH control (an ammonia solution is a nitrogen source)",
        "carbon dioxide kept as bicarbonate above pH 6.5",
        "water and solvent carried off with the gas",
        "antifoam",
        "samples taken",
    )

    def build(self, network: Network, system: System, options: ElementsOptions) -> None:
        """Check the case against the network, then write it."""
        try:
            write(make_plan(network, options), system)
        except Refusal as error:
            raise ValueError(str(error)) from error  # what the host takes for a refusal of the case

    def missing(self, name: str, network: Network, options: ElementsOptions) -> str | None:
        """Ask for the basis of a gas, or for the conditions of its volume, that a variable waits for."""
        return missing_variable(name, network, options)
