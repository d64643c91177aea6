"""Balances of components over the nodes of a network."""

from __future__ import annotations

from typing import ClassVar

from pydantic import BaseModel

from reconcile import Domain, Network, System

from .balances import write
from .layout import make_plan
from .options import MixtureNode, MixtureOptions, MixtureStream


class Mixture(Domain):
    """What a stream carries of each component is conserved wherever streams meet, part or split.

    Variables
        ``stream.component``, a mass fraction; ``stream.remainder`` (or ``stream.solids.remainder``,
        ``stream.liquid.remainder``), what is not listed, where the list is not complete; for slurries
        ``stream.solids``, ``stream.solids_flow``, ``stream.moisture``, ``stream.density`` and ``ore.solids_density``;
        ``stream.flow`` unless another domain declares it; ``node.accumulation`` and
        ``node.accumulation.component`` where an inventory may change.
    Possible faults
        ``stream.loss``, material of a stream lost where it comes from, before it is measured; ``stream.spill``,
        material of a stream lost where it goes to, after it is measured; ``node.loss.component``, a pure component
        lost; ``node.holdup.component``, a component that gathers in a node; ``ore.wrong_density``.

    The total mass balance of a node is written once: by the domain that declares the flows, else by this one. With
    a complete list of components the last one has no balance of its own, since it follows from the others.
    A build-up displaces what has no balance of its own: the last component listed, or all that is not listed.
    """

    name: ClassVar[str] = "mixture"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = "components, assays and slurries in the streams of a network; losses and hold-up"
    options: ClassVar[type[BaseModel]] = MixtureOptions
    stream_options: ClassVar[type[BaseModel]] = MixtureStream
    node_options: ClassVar[type[BaseModel]] = MixtureNode
    after: ClassVar[tuple[str, ...]] = ("fluid",)
    caution: ClassVar[str] = (
        "Adjusted tonnages and grades are estimates. For trade, custody and permits the agreed sample and the legal "
        "scale stay the record; keep the raw assays. Small differences between nearly equal assays make recoveries "
        "very uncertain: read them with their interval."
    )
    forgotten: ClassVar[tuple[str, ...]] = (
        "spray, seal and launder water",
        "spillage pumped back",
        "reagents",
        "moisture of concentrates and filter cakes",
        "change of stockpiles, bins and sumps",
        "material taken as samples",
    )

    def build(self, network: Network, system: System, options: MixtureOptions) -> None:
        """Check the case against the network, then write it."""
        write(make_plan(network, system, options), network, system)
