"""Energy balances over the nodes of a network."""

from __future__ import annotations

from typing import ClassVar

from pydantic import BaseModel

from reconcile import Domain, Network, System

from .balances import write
from .layout import make_plan
from .options import EnergyNode, EnergyOptions, EnergyStream


class Energy(Domain):
    """Heat that enters a node leaves it: with streams, through a wall, or to the surroundings.

    Variables
        ``stream.temperature``; of water and steam ``stream.pressure`` (absolute) and of saturated steam
        ``stream.quality``; ``node.duty``, heat supplied or removed; ``node.transfer``, heat that passes from the warmer
        side of an exchanger to the colder; ``node.heat_loss``; ``node.stored_heat`` where an inventory may change.
    Possible faults
        ``node.heat_loss`` where no loss is expected. Losses of material that the domains fluid and mixture consider
        take their heat along.

    The flows are those of the domain fluid or mixture. Mechanical work, kinetic and potential energy are left out.
    Streams of constant heat capacity count their heat from one reference temperature; where all flows of a node
    balance it plays no part.
    """

    name: ClassVar[str] = "energy"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = "heat balances, heat exchangers, water and steam; heat losses, swapped temperature sensors"
    options: ClassVar[type[BaseModel]] = EnergyOptions
    stream_options: ClassVar[type[BaseModel]] = EnergyStream
    node_options: ClassVar[type[BaseModel]] = EnergyNode
    after: ClassVar[tuple[str, ...]] = ("fluid", "mixture")
    caution: ClassVar[str] = (
        "Steam, hot water and hot surfaces burn, and pressure systems fall under local codes: check hardware as a "
        "licensed person would, and never bypass a relief device or an interlock because a test calls its sensor bad. "
        "A heat meter that bills stays the record."
    )
    forgotten: ClassVar[tuple[str, ...]] = (
        "heat lost through walls and flanges",
        "heat of pumps and stirrers",
        "evaporation",
        "condensate and flash steam",
        "bypass valves that do not close",
    )

    def build(self, network: Network, system: System, options: EnergyOptions) -> None:
        """Check the case against the network, then write it."""
        write(make_plan(network, system, options), network, system)
