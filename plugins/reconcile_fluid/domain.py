"""Balances of an incompressible fluid over the nodes of a network."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from reconcile import Domain, Network, System


class FluidOptions(BaseModel):
    """Options under ``domains: {fluid: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: str = Field(description="Unit of every flow in the network, mass or volume per time, e.g. kg/h or L/min")
    leaks: bool = Field(True, description="Whether a loss at each node is considered as a possible fault")


class FluidNode(BaseModel):
    """Keys of a node that the fluid domain reads."""

    model_config = ConfigDict(extra="forbid")
    stores: bool = Field(False, description="Whether an inventory in the node may change")


class Fluid(Domain):
    """Incompressible fluid: what flows into a node flows out of it.

    Variables: ``stream.flow``; for a node that stores, ``node.accumulation`` (the rate at which its inventory
    grows). Possible faults: ``node.leak``, a loss that no stream accounts for.
    """

    name: ClassVar[str] = "fluid"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = "flows of one fluid over the nodes of a network; losses at nodes"
    options: ClassVar[type[BaseModel]] = FluidOptions
    node_options: ClassVar[type[BaseModel]] = FluidNode
    forgotten: ClassVar[tuple[str, ...]] = (
        "sample draw-off",
        "seal and flush water",
        "evaporation and vents",
        "condensate",
        "bypass valves that do not close",
    )

    def build(self, network: Network, system: System, options: FluidOptions) -> None:
        """Write one balance per node."""
        flow = system.variables("flow", network.streams, unit=options.unit, lower=0)
        closure = network.incidence @ flow
        stores = [n for n, s in zip(network.nodes, network.of_nodes("stores", False), strict=True) if s]
        if stores:
            growth = system.variables("accumulation", stores, unit=options.unit)
            place = np.zeros((len(network.nodes), len(stores)))
            place[[network.nodes.index(n) for n in stores], range(len(stores))] = 1.0
            closure = closure - place @ growth
        if options.leaks:
            leak = system.faults(
                "leak",
                network.nodes,
                unit=options.unit,
                lower=0,
                says="{size} {unit} lost at {item}",
                separate="look for a loss at {item}: close it in and watch the level or pressure, or collect the drips",
            )
            closure = closure - leak
        system.require(
            closure == 0,
            names=[f"{n} flow" for n in network.nodes],
            kind="flow",
            unit=options.unit,
            nodes=network.nodes,
        )
