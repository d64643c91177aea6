"""Checks a mixture case against its network, and lays out which fraction is a variable where."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from reconcile import Network, System, did_you_mean
from reconcile.units import UnitProblem, describe_kind, factor_offset, same_kind

from .options import Component, MixtureOptions, Ore, Phase

__all__ = ["Nodes", "Part", "Plan", "make_plan"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Part:
    """A component, laid out over the streams.

    Attributes
    ----------
    name, unit : str
    scale : float
        Mass fraction per unit.
    phase : str
        ``stream``, ``solids`` or ``liquid``.
    constant : ndarray, shape (number of streams,)
        Mass fraction in the phase where it is exactly known (0 where the phase is absent), nan where it is a variable.
    amount_unit : str
        Unit of its balances.
    amount : float
        Balance units per unit of flow and of mass fraction.
    """

    name: str
    unit: str
    scale: float
    phase: Phase
    constant: Array
    amount_unit: str
    amount: float

    @property
    def streams(self) -> Ints:
        """Streams in which the fraction is a variable."""
        return np.flatnonzero(np.isnan(self.constant))


@dataclass(frozen=True)
class Nodes:
    """What happens to compositions at the nodes; indices of nodes and streams.

    Attributes
    ----------
    mixing : ndarray of int
        Nodes that have component balances.
    storing : tuple of str
        Nodes whose inventory may change.
    equal : ndarray of int, shape (k, 2)
        Pairs of streams that have one composition.
    equal_at : tuple of str
        Node of each pair.
    """

    mixing: Ints
    storing: tuple[str, ...]
    equal: Ints
    equal_at: tuple[str, ...]


@dataclass(frozen=True)
class Plan:
    """All that the balances are written from."""

    options: MixtureOptions
    flow_unit: str
    declares_flow: bool
    parts: tuple[Part, ...]
    solids: Part | None
    complete: frozenset[str]
    nodes: Nodes
    ores: dict[str, Ore]
    ore_of: tuple[str, ...]
    known: Array

    def of(self, phase: str) -> list[Part]:
        """Components of a phase."""
        return [p for p in self.parts if p.phase == phase]

    @property
    def balanced(self) -> list[Part]:
        """Parts with balances of their own: the last one of a complete list follows from the others."""
        last = {self.of(phase)[-1].name for phase in self.complete}
        return [*([self.solids] if self.solids else []), *(p for p in self.parts if p.name not in last)]


def make_plan(network: Network, system: System, options: MixtureOptions) -> Plan:
    """Check the options against the network.

    Parameters
    ----------
    network : Network
    system : System
        Read only for the flows that another domain declared.
    options : MixtureOptions

    Returns
    -------
    Plan

    Raises
    ------
    ValueError
        Naming the option and what to write instead.
    """
    unit, declares = _flow_unit(network, system, options)
    named = _named(options)
    pure = _pure(network, options, named)
    solids_constant = np.full(len(network.streams), np.nan)
    for i, what in enumerate(pure):
        if what and options.solids:
            phase = what if what in ("solids", "liquid") else named[what].of
            solids_constant[i] = 1.0 if phase == "solids" else 0.0
    parts = tuple(_part(name, c, pure, solids_constant, unit) for name, c in named.items())
    solids = None
    if options.solids:
        scale = _scale("solids", options.solids, unit)
        solids = Part("solids", options.solids, scale, "stream", solids_constant, *_amount(unit, options.solids, scale))
    _check_slurry(options)
    ores, ore_of = _ores(network, options, solids_constant)
    complete = _complete(options, parts)
    nodes = _nodes(network, system, declares, pure)
    _check_node_names(network, named, bool(options.solids), declares)
    known = np.array([bool(p) and p not in ("solids", "liquid") for p in pure], dtype=bool)
    return Plan(options, unit, declares, parts, solids, complete, nodes, ores, ore_of, known)


def _flow_unit(network: Network, system: System, options: MixtureOptions) -> tuple[str, bool]:
    """Unit of the flows, and whether this domain declares them."""
    found = system.find("flow", network.streams)
    if found is None:
        if options.unit is None:
            raise ValueError("unit is missing: say what the flows are in, e.g. unit: t/h, or add the domain fluid")
        unit = options.unit
    else:
        unit = system.unit(system.column(f"{network.streams[0]}.flow"))
        if options.unit not in (None, unit):
            raise ValueError(
                f"unit is {options.unit}, but the flows are declared in {unit} already; leave unit out here"
            )
    try:
        kind = describe_kind(unit)
    except UnitProblem as error:
        raise ValueError(f"unit: {error.message}; {error.hint}") from error
    if kind in ("mass per time", "mass", "amount per time", "amount"):
        return unit, found is None
    if kind.startswith("volume"):
        raise ValueError(
            f"flows are in {unit}, a volume, but fractions are carried by mass, and volumes do not add when densities "
            "differ; declare the flows as mass, e.g. t/h or kg/h, and give volume meters a density"
        )
    raise ValueError(f"flows are in {unit}, which is neither a mass nor an amount per time; write e.g. unit: t/h")


def _named(options: MixtureOptions) -> dict[str, Component]:
    """Components by name, with unit and phase filled in."""
    given = options.components
    if isinstance(given, list):
        double = next((n for n in given if given.count(n) > 1), None)
        if double:
            raise ValueError(f"component {double!r} is listed twice")
        stated = {n: Component(unit=None, of=None) for n in given}
    else:
        stated = {n: Component(unit=c, of=None) if isinstance(c, str) else c for n, c in given.items()}
    if not stated:
        raise ValueError("components is empty: list what is analysed, e.g. components: {Cu: '%'}")
    out: dict[str, Component] = {}
    for name, c in stated.items():
        phase = c.of or ("solids" if options.solids else "stream")
        if phase != "stream" and not options.solids:
            raise ValueError(
                f"component {name!r} is a fraction of the {phase}, but no solids fraction is declared; "
                "add e.g. solids: '%'"
            )
        if phase == "stream" and options.solids:
            raise ValueError(
                f"component {name!r} is a fraction of the whole stream, while solids are declared: say whether it is "
                "of: solids or of: liquid (the liquid itself is read as stream.moisture)"
            )
        out[name] = Component(unit=c.unit or options.basis, of=phase)
    return out


def _scale(name: str, unit: str, flow_unit: str) -> float:
    """Fraction per unit; refuses what is no fraction of the flow's kind."""
    wanted = "wt%" if describe_kind(flow_unit).startswith("mass") else "fraction"
    try:
        fits = same_kind(unit, wanted)
    except UnitProblem as error:
        raise ValueError(f"unit of {name!r}: {error.message}; {error.hint}") from error
    if not fits:
        raise ValueError(
            f"{name!r} is in {unit} ({describe_kind(unit) or 'no fraction'}), but flows are in {flow_unit}: "
            "write a fraction of the same kind, e.g. '%' or g/t, or convert concentrations by the density"
        )
    return factor_offset(unit, wanted)[0] * (0.01 if wanted == "wt%" else 1.0)


def _amount(flow_unit: str, unit: str, scale: float) -> tuple[str, float]:
    """Unit of a component's balance, and balance units per flow and mass fraction: t/h of g/t is g/h."""
    (top, _, per), (part, _, whole) = flow_unit.partition("/"), unit.partition("/")
    if part and whole and whole.strip() == top.strip() and part.strip() != whole.strip():
        return (f"{part.strip()}/{per.strip()}" if per else part.strip()), 1.0 / scale
    return flow_unit, 1.0


def _part(name: str, c: Component, pure: list[str], solids: Array, flow_unit: str) -> Part:
    assert c.unit is not None
    assert c.of is not None
    scale = _scale(name, c.unit, flow_unit)
    constant = np.full(len(pure), np.nan)
    for i, what in enumerate(pure):
        if what and what not in ("solids", "liquid"):
            constant[i] = 1.0 if what == name else 0.0
        elif (c.of == "solids" and solids[i] == 0.0) or (c.of == "liquid" and solids[i] == 1.0):
            constant[i] = 0.0
    return Part(name, c.unit, scale, c.of, constant, *_amount(flow_unit, c.unit, scale))


def _pure(network: Network, options: MixtureOptions, named: dict[str, Component]) -> list[str]:
    """What each stream is nothing but; an empty text for mixtures."""
    out = []
    allowed = [*named, "solids", "liquid"] if options.solids else [*named, "rest"]
    for stream, what in zip(network.streams, network.of_streams("pure"), strict=True):
        if what and what not in allowed:
            hint = did_you_mean(what, allowed) or f"write one of {', '.join(allowed)}"
            raise ValueError(f"stream {stream!r} is said to be pure {what!r}, which is not listed; {hint}")
        if what == "rest" and options.complete:
            raise ValueError(f"stream {stream!r} is pure 'rest', but the list of components is said to be complete")
        out.append(what or "")
    return out


def _check_slurry(options: MixtureOptions) -> None:
    if options.solids:
        return
    for key, used in (("moisture", options.moisture), ("density", options.density is not None)):
        if used:
            raise ValueError(f"{key} needs a solids fraction: add its unit, e.g. solids: '%'")


def _ores(network: Network, options: MixtureOptions, solids: Array) -> tuple[dict[str, Ore], tuple[str, ...]]:
    """Kinds of solids in use, and the kind of each stream (empty where it has no pulp density)."""
    density = options.density
    stated = network.of_streams("ore")
    if density is None:
        named = next((s for s, o in zip(network.streams, stated, strict=True) if o), None)
        if named:
            raise ValueError(f"stream {named!r} names an ore, but no density is declared under mixture")
        return {}, ("",) * len(stated)
    try:
        fits = describe_kind(density.unit) == "mass per volume"
    except UnitProblem as error:
        raise ValueError(f"density: {error.message}; {error.hint}") from error
    if not fits:
        raise ValueError(f"density is in {density.unit}, which is no mass per volume; write e.g. unit: kg/L")
    ores = {"ore": Ore(solids=density.solids, sigma=density.sigma), **density.ores}
    for name, ore in ores.items():
        if ore.solids == density.liquid:
            raise ValueError(
                f"solids of {name!r} and liquid are equally dense, so a density does not tell the solids fraction"
            )
        if ore.sigma is not None and ore.solids is None:
            raise ValueError(f"the solids density of {name!r} has a sigma, but no value")
    kinds = []
    for i, (stream, ore) in enumerate(zip(network.streams, stated, strict=True)):
        if ore and ore not in ores:
            hint = did_you_mean(ore, ores) or f"known are {', '.join(ores)}"
            raise ValueError(f"stream {stream!r} names ore {ore!r}, which is not under density.ores; {hint}")
        kinds.append("" if solids[i] == 0.0 else ore or "ore")
    used = {k: v for k, v in ores.items() if k in kinds}
    return used, tuple(kinds)


def _complete(options: MixtureOptions, parts: tuple[Part, ...]) -> frozenset[str]:
    phases = {p.phase for p in parts}
    if isinstance(options.complete, bool):
        complete: set[Any] = set(phases) if options.complete else set()
    else:
        complete = set(options.complete)
    for phase in sorted(complete):
        listed = [p.name for p in parts if p.phase == phase]
        if len(listed) < 2:
            raise ValueError(
                f"the components of the {phase} are said to be complete, but "
                f"{'only ' + listed[0] + ' is' if listed else 'none is'} listed; list all, or leave complete out"
            )
    return frozenset(complete)


def _nodes(network: Network, system: System, declares: bool, pure: list[str]) -> Nodes:
    splits = network.of_nodes("splits", False)
    growing = system.find("accumulation")
    stores = (
        {n for n, s in zip(network.nodes, network.of_nodes("stores", False), strict=True) if s}
        if declares
        else set(growing.items if growing is not None else ())
    )
    storing = tuple(n for n in network.nodes if n in stores)
    simple, pairs, places = set(), [], []
    for k in np.flatnonzero(splits):
        node = network.nodes[int(k)]
        into, out = np.flatnonzero(network.target == k), np.flatnonzero(network.source == k)
        if out.size < 2:
            raise ValueError(f"node {node!r} splits, but only {out.size} of its streams leaves it; draw the others")
        first = int(out[0])
        if into.size == 1 and node not in stores:
            simple.add(int(k))
            first = int(into[0])
        group = [first, *(int(j) for j in out if j != first)]
        kinds = {pure[j] for j in group}
        if len(kinds) > 1:
            raise ValueError(
                f"node {node!r} splits, so its streams have one composition, but only some of them are said to be pure"
            )
        if kinds == {""}:
            pairs += [(first, j) for j in group[1:]]
            places += [node] * (len(group) - 1)
    mixing = np.array([k for k in range(len(network.nodes)) if k not in simple], dtype=np.int64)
    return Nodes(mixing, storing, np.array(pairs, dtype=np.int64).reshape(-1, 2), tuple(places))


def _check_node_names(network: Network, named: dict[str, Component], slurry: bool, declares: bool) -> None:
    known = [*named, "solids", "liquid"] if slurry else list(named)
    for node, options in network.node_options.items():
        if options.get("loses") and not declares:
            raise ValueError(
                f"node {node!r}: loses changes the total balance, which another domain has written; leave that domain "
                "(fluid) out, since mixture balances the total mass as well"
            )
        for what in options.get("loses") or ():
            if what not in known:
                hint = did_you_mean(what, known) or f"write one of {', '.join(known)}"
                raise ValueError(f"node {node!r} loses {what!r}, which is no component; {hint}")
        stream = options.get("leak_of")
        touching = (*network.entering(node), *network.leaving(node)) if node in network.nodes else ()
        if stream and stream not in touching:
            raise ValueError(
                f"node {node!r}: leak_of names {stream!r}, which does not touch it; "
                f"{did_you_mean(stream, touching) or 'write one of ' + ', '.join(touching)}"
            )
