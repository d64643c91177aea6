"""Balances of a fluid over the nodes of a network."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from pydantic import BaseModel

from reconcile import Domain, Expression, Network, System, units

from .density import density_of
from .options import FluidNode, FluidOptions, FluidStream
from .pressure import write_pressures

Array = npt.NDArray[np.float64]


class Fluid(Domain):
    """Fluid: what flows into a node flows out of it, or is stored there.

    Variables: ``stream.flow``; ``node.accumulation`` where an inventory may change; ``node.evaporation``; with
    resistances also ``node.pressure`` and ``stream.resistance``. Possible faults: ``node.leak``.
    """

    name: ClassVar[str] = "fluid"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = "mass or volume of a fluid over the nodes of a network; pressures; losses at nodes"
    options: ClassVar[type[BaseModel]] = FluidOptions
    stream_options: ClassVar[type[BaseModel]] = FluidStream
    node_options: ClassVar[type[BaseModel]] = FluidNode
    forgotten: ClassVar[tuple[str, ...]] = (
        "sample draw-off",
        "seal and flush water",
        "evaporation and vents",
        "condensate",
        "bypass valves that do not close",
    )
    caution: ClassVar[str] = (
        "A suspected flow or pressure reading may be a blockage, a closed valve or a real leak: check the hardware first, "
        "and never bypass a relief device or an interlock because a balance calls its sensor bad. Local codes come first."
    )

    def build(self, network: Network, system: System, options: FluidOptions) -> None:
        """Write one balance per node, and one pressure drop per stream with a resistance."""
        flow = system.variables("flow", network.streams, unit=options.unit, lower=0)
        weight = _weights(network, options)
        closure = network.incidence @ (flow * weight)
        closure = _inventories(network, system, options, closure)
        if options.leaks != "none":
            two_sided = options.leaks == "both"
            leak = system.faults(
                "leak",
                network.nodes,
                unit=options.unit,
                lower=-np.inf if two_sided else 0.0,
                says="{size} {unit} "
                + ("lost (or, if negative, drawn in) at {item}" if two_sided else "lost at {item}"),
                separate="look for a loss at {item}: close it in and watch level or pressure, or collect what drips",
            )
            closure = closure - leak * _at_nodes(network, weight)
        system.require(
            closure == 0,
            names=[f"{n} flow" for n in network.nodes],
            kind="mass" if _conserves_mass(options) else "volume",
            unit=options.unit,
            nodes=network.nodes,
        )
        closed = [s for s, c in zip(network.streams, network.of_streams("closed", False), strict=True) if c]
        if closed:
            system.fix(flow[closed], 0.0)
        write_pressures(network, system, flow, options)


def _inventories(network: Network, system: System, options: FluidOptions, closure: Expression) -> Expression:
    for key, quantity, lower in (("stores", "accumulation", -np.inf), ("evaporates", "evaporation", 0.0)):
        where = np.flatnonzero([bool(chosen) for chosen in network.of_nodes(key, False)])
        if where.size:
            nodes = [network.nodes[k] for k in where]
            term = system.variables(quantity, nodes, unit=options.unit, lower=lower)
            shape = (len(network.nodes), where.size)
            place = sp.csr_array((np.ones(where.size), (where, np.arange(where.size))), shape=shape)
            closure = closure - place @ term
    return closure


def _conserves_mass(options: FluidOptions) -> bool:
    if options.conserve is not None:
        return options.conserve == "mass"
    return units.same_kind(options.unit, "kg/h")


def _weights(network: Network, options: FluidOptions) -> Array:
    """Factor of each stream's flow in the balances: its density relative to the first, where volumes carry mass."""
    of_mass = units.same_kind(options.unit, "kg/h")
    of_volume = units.same_kind(options.unit, "L/min")
    if not of_mass and not of_volume:
        # Counts, ampere hours, normal volumes: whatever it is, it adds up in its own unit.
        return np.ones(len(network.streams))
    if of_mass:
        if options.conserve == "volume":
            raise ValueError(f"flows in {options.unit} are masses; a volume balance needs a unit of volume per time")
        return np.ones(len(network.streams))
    density = [
        None if d is None else density_of(s, d)
        for s, d in zip(network.streams, network.of_streams("density"), strict=True)
    ]
    known = {round(d, 9) for d in density if d is not None}
    if options.conserve == "mass":
        missing = [s for s, d in zip(network.streams, density, strict=True) if d is None]
        if missing:
            raise ValueError(
                f"a mass balance of flows in {options.unit} needs the density of every stream; "
                f"missing for {', '.join(missing)}; write e.g. {missing[0]}: {{path: a -> b, density: 1.0 kg/L}}"
            )
        values = np.array(density, dtype=float)
        return np.asarray(values / values[0])
    if len(known) > 1:
        raise ValueError(
            f"streams of different density meet, and volumes do not add up then (densities {min(known):g} to "
            f"{max(known):g} kg/m3); write conserve: mass and give every stream its density, or measure mass"
        )
    return np.ones(len(network.streams))


def _at_nodes(network: Network, weight: Array) -> Array:
    """Weight of what is lost at a node: that of what flows in, on average."""
    inflow = network.inflow
    count = np.maximum(np.asarray(inflow.sum(axis=1)).ravel(), 1.0)
    mean = np.asarray(inflow @ weight).ravel() / count
    return np.where(mean > 0, mean, 1.0)
