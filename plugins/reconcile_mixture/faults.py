"""Losses that a mixture may suffer: of a stream's material at either end, of a pure component, of a fluid's leak."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from reconcile import Expression, Network, System

from .layout import Plan

__all__ = ["Losses", "declare_losses"]

Ints = npt.NDArray[np.int64]


@dataclass
class Losses:
    """Possible losses as terms of the balances; matrices have one row per node.

    Attributes
    ----------
    carried : list of (matrix, amounts, streams)
        Material of a stream: its components go along.
    pure : list of (matrix, amounts, names)
        Pure components, and the parts they belong to.
    elsewhere : list of int
        Entries of `carried` whose total another domain has written into its balance.
    """

    carried: list[tuple[sp.csr_array, Expression, Ints]] = field(default_factory=list)
    pure: list[tuple[sp.csr_array, Expression, frozenset[str]]] = field(default_factory=list)
    elsewhere: list[int] = field(default_factory=list)

    def total(self) -> list[tuple[sp.csr_array, Expression]]:
        """Terms of the total balance of every node."""
        carried = [(m, a) for i, (m, a, _) in enumerate(self.carried) if i not in self.elsewhere]
        return carried + [(m, a) for m, a, _ in self.pure]


def _at(nodes: npt.ArrayLike, count: int) -> sp.csr_array:
    where = np.atleast_1d(np.asarray(nodes, dtype=np.int64))
    return sp.csr_array((np.ones(where.size), (where, np.arange(where.size))), shape=(count, where.size))


def declare_losses(plan: Plan, network: Network, system: System) -> Losses:
    """Declare every loss that the case allows.

    A loss changes the total balance as well. Where another domain has written that balance, only that domain's own
    leak can be used: it is given the composition of a stream of its node.

    Parameters
    ----------
    plan : Plan
    network : Network
    system : System

    Returns
    -------
    Losses
    """
    out = Losses()
    if plan.declares_flow:
        if plan.options.losses:
            _stream_losses(plan, network, system, out)
        _pure_losses(plan, network, system, out)
    else:
        _follow_leak(network, system, out)
    return out


def _stream_losses(plan: Plan, network: Network, system: System, out: Losses) -> None:
    """Material of a stream lost at the node it comes from or goes to; one of those that look alike."""
    ends = (
        (
            "loss",
            network.source,
            "{size} {unit} of the material of {item} lost before it is measured",
            "look for spillage, overflow or an undrawn stream between the unit and the meter of {item}",
        ),
        (
            "spill",
            network.target,
            "{size} {unit} of the material of {item} lost after it is measured",
            "look for spillage, overflow or an undrawn stream between the meter of {item} and the next unit",
        ),
    )
    stands_for = _compositions(network, plan)
    seen: set[tuple[int, int]] = set()
    for kind, end, says, separate in ends:
        rows = []
        # By name: which of several streams stands for all must not depend on the order of the file.
        for j in sorted(range(len(network.streams)), key=lambda i: network.streams[i]):
            key = (int(end[j]), stands_for.get((int(end[j]), j), j))
            if key[0] >= 0 and key not in seen:
                seen.add(key)
                rows.append(j)
        rows.sort()
        if rows:
            streams = np.array(rows, dtype=np.int64)
            amount = system.faults(
                kind,
                [network.streams[j] for j in rows],
                unit=plan.flow_unit,
                lower=0,
                says=says,
                separate=separate,
            )
            out.carried.append((_at(end[streams], len(network.nodes)), amount, streams))


def _compositions(network: Network, plan: Plan) -> dict[tuple[int, int], int]:
    """Map (node, stream) to the stream that stands for all those of the node with the same composition."""
    out = {}
    for (one, other), name in zip(plan.nodes.equal, plan.nodes.equal_at, strict=True):
        out[network.nodes.index(name), int(other)] = int(one)
    for k, name in enumerate(network.nodes):
        into, leaving = np.flatnonzero(network.target == k), np.flatnonzero(network.source == k)
        if into.size == leaving.size == 1 and name not in plan.nodes.storing:
            out[k, int(leaving[0])] = int(into[0])
    return out


def _pure_losses(plan: Plan, network: Network, system: System, out: Losses) -> None:
    """Pure components that a node is said to lose."""
    lost = network.of_nodes("loses") or []
    phase_of = {p.name: p.phase for p in plan.parts}
    for name in ("solids", "liquid", *phase_of):
        nodes = [k for k, names in enumerate(lost) if name in (names or ())]
        if not nodes:
            continue
        amount = system.faults(
            f"loss.{name}",
            [network.nodes[k] for k in nodes],
            unit=plan.flow_unit,
            lower=0,
            says=f"{{size}} {{unit}} of {name} lost at {{item}}",
            separate=f"look for {name} that leaves {{item}} by itself: evaporation, dust, overflow",
        )
        solids = {"solids"} if name == "solids" or phase_of.get(name) == "solids" else set()
        out.pure.append((_at(nodes, len(network.nodes)), amount, frozenset({name} | solids)))


def _follow_leak(network: Network, system: System, out: Losses) -> None:
    """Give the leaks of the domain that declared the flows the composition of a stream of their node."""
    leak = system.find("leak")
    nodes = [n for n in leak.items if n in network.nodes] if leak is not None else []
    if leak is None or not nodes:
        return
    stated = dict(zip(network.nodes, network.of_nodes("leak_of"), strict=True))
    streams = []
    for n in nodes:
        candidates = network.leaving(n) or network.entering(n)
        if stated[n] is None and len(candidates) > 1:
            raise ValueError(
                f"a leak at node {n!r} would carry the material of one of {', '.join(sorted(candidates))}: write which, "
                f"e.g. nodes: {{{n}: {{leak_of: {sorted(candidates)[0]}}}}}, or leave leaks out"
            )
        streams.append(network.streams.index(stated[n] or candidates[0]))
    out.elsewhere.append(len(out.carried))
    out.carried.append(
        (
            _at([network.nodes.index(n) for n in nodes], len(network.nodes)),
            leak[nodes],
            np.array(streams, dtype=np.int64),
        )
    )
