"""Checks an energy case against its network, and turns every quantity into numbers of one set of units."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from reconcile import Network, System, did_you_mean
from reconcile.units import (
    UnitProblem,
    describe_kind,
    difference_factor,
    factor_offset,
    mismatch_hint,
    parse_quantity,
    same_kind,
)

from .options import EnergyOptions

__all__ = ["Nodes", "Plan", "make_plan"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

_BASE = {
    "mass per time": ("kg/s", "kW", "kJ/(kg K)"),
    "volume per time": ("m3/s", "kW", "kJ/(kg K)"),
    "amount per time": ("mol/s", "kW", "kJ/(mol K)"),
    "mass": ("kg", "kJ", "kJ/(kg K)"),
    "volume": ("m3", "kJ", "kJ/(kg K)"),
    "amount": ("mol", "kJ", "kJ/(mol K)"),
}
TRIPLE_POINT = 0.01
"""degC; the zero of enthalpy in the steam tables."""


@dataclass(frozen=True)
class Nodes:
    """What happens to heat at the nodes; names, and pairs of streams by index.

    Attributes
    ----------
    balanced : tuple of str
        Nodes with an energy balance.
    supplied, removed : tuple of str
        Nodes with a heat duty.
    exchanges : tuple of (str, str)
        Warmer and colder side of each exchanger.
    losing : tuple of str
        Nodes with an expected heat loss.
    storing : tuple of str
        Nodes whose inventory may change, and with it their heat.
    equal : ndarray of int, shape (k, 2)
        Pairs of streams with one temperature.
    equal_at : tuple of str
        Node of each pair.
    """

    balanced: tuple[str, ...]
    supplied: tuple[str, ...]
    removed: tuple[str, ...]
    exchanges: tuple[tuple[str, str], ...]
    losing: tuple[str, ...]
    storing: tuple[str, ...]
    equal: Ints
    equal_at: tuple[str, ...]


@dataclass(frozen=True)
class Plan:
    """All that the balances are written from.

    Attributes
    ----------
    options : EnergyOptions
    carried : ndarray, shape (number of streams,)
        Heat unit per unit of flow and of kJ/kg (kJ/mol for molar flows).
    capacity : ndarray, shape (number of streams,)
        kJ/kg per temperature unit; nan for water and steam by the tables.
    reference : float
        In the temperature unit.
    medium : tuple of str
        ``water``, ``steam``, ``saturated``, or empty for a constant heat capacity.
    pressure, quality : ndarray, shape (number of streams,)
        Exactly known values, nan where it is a variable or none is needed.
    to_celsius : (float, float)
        Factor and offset of the temperature unit.
    to_bar : float
    leak_of : dict of str to str
    """

    options: EnergyOptions
    carried: Array
    capacity: Array
    reference: float
    medium: tuple[str, ...]
    pressure: Array
    quality: Array
    to_celsius: tuple[float, float]
    to_bar: float
    nodes: Nodes
    leak_of: dict[str, str]

    def having(self, *media: str) -> Ints:
        """Streams of these media."""
        return np.flatnonzero([m in media for m in self.medium])


def make_plan(network: Network, system: System, options: EnergyOptions) -> Plan:
    """Check the options against the network.

    Parameters
    ----------
    network : Network
    system : System
        Read for the flows, which another domain must have declared.
    options : EnergyOptions

    Returns
    -------
    Plan

    Raises
    ------
    ValueError
        Naming the option and what to write instead.
    """
    if system.find("flow", network.streams) is None:
        raise ValueError("heat is carried by flows: add the domain fluid (or mixture) to the case")
    flow_unit = system.unit(system.column(f"{network.streams[0]}.flow"))
    kind = describe_kind(flow_unit)
    if kind not in _BASE:
        raise ValueError(
            f"flows are in {flow_unit} ({kind or 'unknown'}), which carries no heat; write e.g. kg/h or m3/h"
        )
    base, heat, capacity_unit = _BASE[kind]
    per_flow = factor_offset(flow_unit, base)[0] / _fits("unit", options.unit, heat)
    temperature = options.temperature
    _fits("temperature", temperature, "degC")
    to_bar = _fits("pressure", options.pressure, "bar")
    carried = np.full(len(network.streams), per_flow)
    if kind.startswith("volume"):
        carried *= _densities(network, options, flow_unit)
    medium = tuple(m or "" for m in network.of_streams("medium"))
    if any(medium) and kind.startswith("amount"):
        raise ValueError(f"water and steam are tabulated by mass, but flows are in {flow_unit}; declare them as mass")
    kelvin = difference_factor(temperature, "K")
    capacity = _capacities(network, options, medium, capacity_unit) * kelvin
    factor, offset = factor_offset("degC", temperature)
    reference = factor * TRIPLE_POINT + offset
    if options.reference is not None:
        stated = _quantity("reference", options.reference, temperature)
        if any(medium) and abs(stated - reference) > 1e-6 * abs(factor):
            raise ValueError(
                f"reference is {options.reference}, but the steam tables have their zero at 0.01 degC; leave it out"
            )
        reference = stated
    pressure, quality = _states(network, medium, options)
    return Plan(
        options,
        carried,
        capacity,
        reference,
        medium,
        pressure,
        quality,
        factor_offset(temperature, "degC"),
        to_bar,
        _nodes(network, system),
        _leaks(network),
    )


# ------------------------------------------------------------------ quantities


def _fits(name: str, unit: str, wanted: str) -> float:
    """Factor to the wanted unit; refuses other kinds."""
    try:
        if same_kind(unit, wanted):
            return factor_offset(unit, wanted)[0]
        hint = mismatch_hint(unit, wanted) or f"write a unit like {wanted}"
    except UnitProblem as error:
        raise ValueError(f"{name}: {error.message}; {error.hint}") from error
    raise ValueError(f"{name} is in {unit} ({describe_kind(unit)}), but a unit like {wanted} is needed; {hint}")


def _quantity(name: str, text: str | float, wanted: str) -> float:
    """Value in the wanted unit of ``4.18 kJ/(kg K)``."""
    try:
        value, unit = parse_quantity(str(text))
        if not unit:
            raise ValueError(f"{name} is {text} of what? Write its unit, e.g. {text} {wanted}")
        if not same_kind(unit, wanted):
            _fits(name, unit, wanted)
        factor, offset = factor_offset(unit, wanted)
    except UnitProblem as error:
        raise ValueError(f"{name}: {error.message}; {error.hint}") from error
    return factor * value + offset


def _densities(network: Network, options: EnergyOptions, flow_unit: str) -> Array:
    """Density of every stream in kg/m3."""
    out = []
    for stream, own in zip(network.streams, network.of_streams("density"), strict=True):
        text = own if own is not None else options.density
        if text is None:
            raise ValueError(
                f"flows are in {flow_unit}, a volume, and stream {stream!r} has no density to tell its mass; "
                "add density: 992 kg/m3 to it, or under energy for all streams"
            )
        out.append(_positive(f"density of {stream!r}", _quantity(f"density of {stream!r}", text, "kg/m3")))
    return np.array(out)


def _positive(name: str, value: float) -> float:
    if not value > 0:
        raise ValueError(f"{name} must be above zero")
    return value


def _capacities(network: Network, options: EnergyOptions, medium: tuple[str, ...], unit: str) -> Array:
    out = np.full(len(network.streams), np.nan)
    own = network.of_streams("heat_capacity")
    for i, stream in enumerate(network.streams):
        if medium[i]:
            if own[i] is not None:
                raise ValueError(f"stream {stream!r} has a heat_capacity and a medium; keep one of the two")
            continue
        text = own[i] if own[i] is not None else options.heat_capacity
        if text is None:
            raise ValueError(
                f"stream {stream!r} has neither a heat_capacity nor a medium; add e.g. heat_capacity: 4.18 kJ/(kg K)"
            )
        name = f"heat_capacity of {stream!r}"
        out[i] = _positive(name, _quantity(name, text, unit))
    return out


def _states(network: Network, medium: tuple[str, ...], options: EnergyOptions) -> tuple[Array, Array]:
    """Stated pressures, in the pressure unit, and qualities."""
    pressure, quality = np.full(len(medium), np.nan), np.full(len(medium), np.nan)
    stated = (network.of_streams("pressure"), network.of_streams("quality"))
    for i, (stream, p, x) in enumerate(zip(network.streams, *stated, strict=True)):
        if p is not None and medium[i]:
            name = f"pressure of {stream!r}"
            pressure[i] = _positive(name, _quantity(name, p, options.pressure))
        if x is not None:
            if medium[i] != "saturated":
                raise ValueError(f"stream {stream!r} has a quality, but only medium: saturated has one")
            quality[i] = x
    return pressure, quality


# ------------------------------------------------------------------ nodes


def _nodes(network: Network, system: System) -> Nodes:
    heat = dict(zip(network.nodes, network.of_nodes("heat", False), strict=True))
    growing = system.find("accumulation")
    grown = set(growing.items) if growing is not None else set()
    storing = tuple(n for n in network.nodes if n in grown)
    exchanges = _exchanges(network)
    active = {n for n, h in heat.items() if h} | {n for pair in exchanges for n in pair} | set(storing)
    losing = tuple(n for n, lost in zip(network.nodes, network.of_nodes("loss", False), strict=True) if lost)
    active |= set(losing)
    simple, pairs, places = set(), [], []
    for k in np.flatnonzero(network.of_nodes("splits", False)):
        node = network.nodes[int(k)]
        into, out = np.flatnonzero(network.target == k), np.flatnonzero(network.source == k)
        if out.size < 2:
            raise ValueError(f"node {node!r} splits, but only {out.size} of its streams leaves it; draw the others")
        first = int(out[0])
        if into.size == 1 and node not in active:
            simple.add(node)
            first = int(into[0])
        others = [int(j) for j in out if j != first]
        pairs += [(first, j) for j in others]
        places += [node] * len(others)
    return Nodes(
        balanced=tuple(n for n in network.nodes if n not in simple),
        supplied=tuple(n for n in network.nodes if heat[n] in (True, "supplied")),
        removed=tuple(n for n in network.nodes if heat[n] == "removed"),
        exchanges=exchanges,
        losing=losing,
        storing=storing,
        equal=np.array(pairs, dtype=np.int64).reshape(-1, 2),
        equal_at=tuple(places),
    )


def _exchanges(network: Network) -> tuple[tuple[str, str], ...]:
    out: list[tuple[str, str]] = []
    for node, other in zip(network.nodes, network.of_nodes("exchanges_with"), strict=True):
        if other is None:
            continue
        if other == node:
            raise ValueError(f"node {node!r} exchanges heat with itself; name the node of the colder side")
        if other not in network.nodes:
            hint = did_you_mean(other, network.nodes) or "name the node of the colder side"
            raise ValueError(f"node {node!r} exchanges heat with {other!r}, which is no node; {hint}")
        if (other, node) in out:
            raise ValueError(
                f"nodes {other!r} and {node!r} each say that they exchange heat with the other; "
                "say it once, at the warmer side"
            )
        out.append((node, other))
    return tuple(out)


def _leaks(network: Network) -> dict[str, str]:
    """Stream whose material leaks at each node: the named one, else one that leaves, else one that enters."""
    out = {}
    for node, stated in zip(network.nodes, network.of_nodes("leak_of"), strict=True):
        touching = (*network.leaving(node), *network.entering(node))
        if stated and stated not in touching:
            hint = did_you_mean(stated, touching) or f"write one of {', '.join(touching)}"
            raise ValueError(f"node {node!r}: leak_of names {stated!r}, which does not touch it; {hint}")
        out[node] = stated or touching[0]
    return out
