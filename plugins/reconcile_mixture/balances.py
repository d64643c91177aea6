"""Writes the balances of a mixture: totals, components, sums, splits and pulp densities."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import partial

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from reconcile import Expression, Network, System

from .faults import Losses, declare_losses
from .layout import Part, Plan
from .slurry import pulp_density, pulp_density_slopes

__all__ = ["write"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass
class _Written:
    """Variables on their way into the balances.

    Attributes
    ----------
    flow : Expression, one entry per stream
    solids : Expression or None
        Solids fraction of every stream, 0 to 1; affine.
    phase_flow : dict of str to Expression
        Flow of each phase, one entry per stream; affine.
    fraction : dict of str to Expression
        Mass fraction in its phase of every component, one entry per stream; affine.
    """

    flow: Expression
    solids: Expression | None = None
    phase_flow: dict[str, Expression] = field(default_factory=dict)
    fraction: dict[str, Expression] = field(default_factory=dict)


def place(rows: npt.ArrayLike, count: int) -> sp.csr_array:
    """Matrix that puts entry j into row ``rows[j]`` of `count`, shape (count, len(rows))."""
    where = np.atleast_1d(np.asarray(rows, dtype=np.int64))
    return sp.csr_array((np.ones(where.size), (where, np.arange(where.size))), shape=(count, where.size))


def write(plan: Plan, network: Network, system: System) -> None:
    """Declare the variables of the plan and write all its balances.

    Parameters
    ----------
    plan : Plan
    network : Network
    system : System
    """
    written = _declare(plan, network, system)
    losses = declare_losses(plan, network, system)
    if plan.declares_flow:
        _write_totals(plan, network, system, written.flow, losses)
    for part in plan.balanced:
        _write_component(plan, part, network, system, written, losses)
    _write_splits(plan, network, system, written)
    for phase in ("stream", "solids", "liquid"):
        _write_sums(plan, phase, network, system, written)
    if plan.options.density is not None:
        _write_densities(plan, network, system, written)


# ------------------------------------------------------------------ variables


def _declare(plan: Plan, network: Network, system: System) -> _Written:
    streams = network.streams
    flow = system.find("flow", streams)
    if flow is None:
        flow = system.variables("flow", streams, unit=plan.flow_unit, lower=0)
    out = _Written(flow, phase_flow={"stream": flow})
    if plan.solids is not None:
        out.solids = _fraction(plan.solids, network, system)
        out.fraction["solids"] = out.solids
        out.phase_flow["solids"] = _solids_flow(plan, plan.solids, network, system, out)
        out.phase_flow["liquid"] = flow - out.phase_flow["solids"]
        if plan.options.moisture:
            _write_moisture(plan.solids, network, system)
    for part in plan.parts:
        out.fraction[part.name] = _fraction(part, network, system)
    return out


def _fraction(part: Part, network: Network, system: System) -> Expression:
    """Declare a fraction where it is a variable; return it over all streams as a mass fraction."""
    count = len(network.streams)
    items = [network.streams[j] for j in part.streams]
    known = np.where(np.isnan(part.constant), 0.0, part.constant)
    if not items:  # an expression needs a system: borrow it from any variable
        return 0.0 * _flow(network, system) + known
    variable = system.variables(
        part.name,
        items,
        unit=part.unit,
        lower=0,
        upper=1.0 / part.scale,
        start=min(0.1 / part.scale, 10.0),
    )
    return part.scale * (place(part.streams, count) @ variable) + known


def _flow(network: Network, system: System) -> Expression:
    flow = system.find("flow", network.streams)
    assert flow is not None
    return flow


def _solids_flow(plan: Plan, solids: Part, network: Network, system: System, written: _Written) -> Expression:
    """Flow of dry solids, a variable of its own, since grades are multiplied with it."""
    count, where = len(network.streams), solids.streams
    known = np.where(np.isnan(solids.constant), 0.0, solids.constant)
    constant = written.flow * known
    if not where.size:
        return constant
    items = [network.streams[j] for j in where]
    dry = system.variables("solids_flow", items, unit=plan.flow_unit, lower=0)
    assert written.solids is not None
    system.require(
        written.flow[where] * written.solids[where] - dry == 0,
        names=[f"{s} solids" for s in items],
        kind="solids flow",
        unit=plan.flow_unit,
    )
    return place(where, count) @ dry + constant


def _write_moisture(solids: Part, network: Network, system: System) -> None:
    items = [network.streams[j] for j in solids.streams]
    full = 1.0 / solids.scale
    moisture = system.variables("moisture", items, unit=solids.unit, lower=0, upper=full)
    fraction = system.find("solids", items)
    assert fraction is not None
    system.require(
        fraction + moisture == full, names=[f"{s} moisture" for s in items], kind="moisture", unit=solids.unit
    )


# ------------------------------------------------------------------ balances over nodes


def _write_totals(plan: Plan, network: Network, system: System, flow: Expression, losses: Losses) -> None:
    closure = network.incidence @ flow
    storing = plan.nodes.storing
    if storing:
        growth = system.variables("accumulation", storing, unit=plan.flow_unit)
        closure = closure - place([network.nodes.index(n) for n in storing], len(network.nodes)) @ growth
    for matrix, amount in losses.total():
        closure = closure - matrix @ amount
    system.require(
        closure == 0,
        names=[f"{n} mass" for n in network.nodes],
        kind="mass",
        unit=plan.flow_unit,
        nodes=network.nodes,
    )


def _write_component(
    plan: Plan, part: Part, network: Network, system: System, written: _Written, losses: Losses
) -> None:
    """Balance of one component over every node that does not merely split."""
    nodes = plan.nodes.mixing
    if not nodes.size:
        return
    names = [network.nodes[k] for k in nodes]
    closure = network.incidence @ _amount(plan, part, written)
    closure = part.amount * closure[nodes]
    storing = [n for n in plan.nodes.storing if n in names]
    if storing:
        growth = system.variables(f"accumulation.{part.name}", storing, unit=part.amount_unit)
        closure = closure - place([names.index(n) for n in storing], len(names)) @ growth
    for matrix, amount, streams in losses.carried:
        lost = part.amount * _carried(part, amount, streams, system, written)
        closure = closure - matrix[nodes] @ lost
    for matrix, amount, holds in losses.pure:
        if part.name in holds:
            closure = closure - matrix[nodes] @ (part.amount * amount)
    if plan.options.holdup:
        steady = [n for n in names if n not in storing]
        if steady:
            gathered = system.faults(
                f"holdup.{part.name}",
                steady,
                unit=part.amount_unit,
                says=f"{{size}} {{unit}} of {part.name} gathered in {{item}} (negative: came out of its inventory)",
                separate="sample {item} at the start and the end of the period, or take a longer period: "
                "what gathers must come out again",
            )
            closure = closure - place([names.index(n) for n in steady], len(names)) @ gathered
    system.require(
        closure == 0,
        names=[f"{n} {part.name}" for n in names],
        kind=part.name,
        unit=part.amount_unit,
        nodes=names,
    )


def _amount(plan: Plan, part: Part, written: _Written) -> Expression:
    """Flow of a component in every stream."""
    if part is plan.solids:
        return written.phase_flow["solids"]
    return written.phase_flow[part.phase] * written.fraction[part.name]


def _carried(part: Part, amount: Expression, streams: Ints, system: System, written: _Written) -> Expression:
    """How much of a component goes along with these amounts of material of these streams."""
    fraction = written.fraction[part.name][streams]
    if part.phase == "stream":
        return amount * fraction
    assert written.solids is not None
    solids = written.solids[streams]
    phase = solids if part.phase == "solids" else 1.0 - solids
    # three factors: no product of two affine expressions
    return system.apply(_triple, amount, phase, fraction, derivatives=_triple_slopes)


def _triple(a: Array, b: Array, c: Array) -> Array:
    return a * b * c


def _triple_slopes(a: Array, b: Array, c: Array) -> tuple[Array, Array, Array]:
    return b * c, a * c, a * b


# ------------------------------------------------------------------ rows of streams


def _write_splits(plan: Plan, network: Network, system: System, written: _Written) -> None:
    """Equal composition of the streams that leave a splitter."""
    pairs = plan.nodes.equal
    if not pairs.size:
        return
    last = {plan.of(phase)[-1].name for phase in plan.complete}
    parts = [*([plan.solids] if plan.solids else []), *(p for p in plan.parts if p.name not in last)]
    for part in parts:
        variable = np.isnan(part.constant)
        keep = np.flatnonzero(variable[pairs].all(axis=1))
        if not keep.size:
            continue
        fraction = written.fraction[part.name]
        one, other = pairs[keep, 0], pairs[keep, 1]
        system.require(
            (fraction[other] - fraction[one]) / part.scale == 0,
            names=[f"{network.streams[j]} {part.name} like {network.streams[i]}" for i, j in pairs[keep]],
            kind=f"{part.name} split",
            unit=part.unit,
            nodes=[plan.nodes.equal_at[k] for k in keep],
        )


def _write_sums(plan: Plan, phase: str, network: Network, system: System, written: _Written) -> None:
    """Fractions of a phase sum to 1, with what is not listed."""
    parts = plan.of(phase)
    if not parts:
        return
    where = parts[0].streams  # a stream has all components of a phase as variables, or none
    if not where.size:
        return
    items = [network.streams[j] for j in where]
    total = sum((written.fraction[p.name][where] for p in parts[1:]), start=written.fraction[parts[0].name][where])
    prefix = "" if phase == "stream" else f"{phase}."
    if phase not in plan.complete:
        total = total + system.variables(f"{prefix}remainder", items, unit="fraction", lower=0, upper=1)
    system.require(
        total == 1,
        names=[f"{s} {prefix.replace('.', ' ')}sum" for s in items],
        kind=f"{prefix.replace('.', ' ')}sum",
        unit="fraction",
    )


def _write_densities(plan: Plan, network: Network, system: System, written: _Written) -> None:
    """Pulp density of every stream with solids; the density of the solids is shared by all streams of an ore."""
    density, solids = plan.options.density, written.solids
    assert density is not None
    assert solids is not None
    where = np.flatnonzero([bool(o) for o in plan.ore_of])
    if not where.size:
        return
    items, ores = [network.streams[j] for j in where], list(plan.ores)
    shared = system.variables("solids_density", ores, unit=density.unit, lower=0, start=2.5 * density.liquid)
    true = _stated_density(plan, shared, ores, density.unit, system)
    pick = place([ores.index(plan.ore_of[j]) for j in where], len(ores)).T
    pulp = system.variables("density", items, unit=density.unit, lower=0, start=1.5 * density.liquid)
    law = system.apply(
        partial(pulp_density, liquid_density=density.liquid),
        solids[where],
        pick @ true,
        derivatives=partial(pulp_density_slopes, liquid_density=density.liquid),
    )
    system.require(pulp - law == 0, names=[f"{s} density" for s in items], kind="density", unit=density.unit)


def _stated_density(plan: Plan, shared: Expression, ores: list[str], unit: str, system: System) -> Expression:
    """Solids densities as the balances see them: what is stated as exact may still be wrong."""
    exact = [o for o in ores if plan.ores[o].solids is not None and plan.ores[o].sigma is None]
    for ore in ores:
        value, sigma = plan.ores[ore].solids, plan.ores[ore].sigma
        if value is not None and sigma is None:
            system.fix(shared[ore], value)
        elif value is not None and sigma is not None:
            system.prior(shared[ore], value, sigma, origin=f"solids density of {ore}, stated under mixture")
    if not exact:
        return shared
    wrong = system.faults(
        "wrong_density",
        exact,
        unit=unit,
        says="the solids of {item} are denser than stated by {size} {unit}",
        separate="weigh dried solids of {item} in a pycnometer; entrained air makes a pulp look lighter, too",
    )
    return shared + place([ores.index(o) for o in exact], len(ores)) @ wrong
