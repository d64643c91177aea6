"""Writes the energy balances: heat carried, exchanged, supplied, stored and lost."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from reconcile import Expression, Network, System

from . import enthalpy
from .layout import Plan

__all__ = ["write"]

Ints = npt.NDArray[np.int64]


def _place(rows: npt.ArrayLike, count: int) -> sp.csr_array:
    """Matrix that puts entry j into row ``rows[j]`` of `count`."""
    where = np.atleast_1d(np.asarray(rows, dtype=np.int64))
    return sp.csr_array((np.ones(where.size), (where, np.arange(where.size))), shape=(count, where.size))


def write(plan: Plan, network: Network, system: System) -> None:
    """Declare the variables of the plan and write all its balances.

    Parameters
    ----------
    plan : Plan
    network : Network
    system : System

    Raises
    ------
    MissingExtra
        If a stream is water or steam and the library of the steam tables is not installed.
    """
    if plan.having("water", "steam", "saturated").size:
        enthalpy.tables()
    states = _declare(plan, network, system)
    _write_nodes(plan, network, system, states)
    _write_splits(plan, network, system, states)


# ------------------------------------------------------------------ variables


def _declare(plan: Plan, network: Network, system: System) -> dict[str, Expression]:
    """Temperature of every stream; pressure and quality of those that need it, over all streams."""
    count, options = len(network.streams), plan.options
    factor, offset = plan.to_celsius
    temperature = system.variables(
        "temperature",
        network.streams,
        unit=options.temperature,
        start=(_typical_temperature(plan) - offset) / factor,
    )
    states = {"temperature": temperature}
    wet = plan.having("water", "steam", "saturated")
    if wet.size:
        pressure = system.variables(
            "pressure", [network.streams[j] for j in wet], unit=options.pressure, lower=0, start=5.0 / plan.to_bar
        )
        known = np.flatnonzero(np.isfinite(plan.pressure[wet]))
        if known.size:
            system.fix(pressure[known], plan.pressure[wet][known])
        states["pressure"] = _place(wet, count) @ pressure
    boiling = plan.having("saturated")
    if boiling.size:
        items = [network.streams[j] for j in boiling]
        quality = system.variables("quality", items, unit="fraction", lower=0, upper=1, start=0.9)
        known = np.flatnonzero(np.isfinite(plan.quality[boiling]))
        if known.size:
            system.fix(quality[known], plan.quality[boiling][known])
        states["quality"] = _place(boiling, count) @ quality
        law = system.apply(
            enthalpy.boiling_point,
            states["pressure"][boiling] * plan.to_bar,
            derivatives=enthalpy.boiling_point_slope,
        )
        system.require(
            factor * temperature[boiling] + offset - law == 0,
            names=[f"{s} boiling point" for s in items],
            kind="boiling point",
            unit="degC",
        )
    return states


def _typical_temperature(plan: Plan) -> npt.NDArray[np.float64]:
    """Somewhere inside the range of each medium, degC."""
    return np.array([{"steam": 200.0, "saturated": 150.0}.get(m, 50.0) for m in plan.medium])


def _heat(plan: Plan, amount: Expression, streams: Ints, system: System, states: dict[str, Expression]) -> Expression:
    """Heat that these amounts of material of these streams carry, in the unit of heat."""
    total: Expression | None = None
    medium = np.array(plan.medium, dtype=object)[streams]
    factor, offset = plan.to_celsius
    for name in ("", "water", "steam", "saturated"):
        rows = np.flatnonzero(medium == name)
        if not rows.size:
            continue
        here = streams[rows]
        part = amount[rows]
        if name == "":
            carried = part * (states["temperature"][here] - plan.reference) * (plan.carried * plan.capacity)[here]
        else:
            first = states["quality"][here] if name == "saturated" else factor * states["temperature"][here] + offset
            pressure = states["pressure"][here] * plan.to_bar
            arguments = (pressure, first) if name == "saturated" else (first, pressure)
            carried = plan.carried[here] * system.apply(
                _Carried(getattr(enthalpy, name)),
                part,
                *arguments,
                derivatives=_CarriedSlopes(getattr(enthalpy, name), getattr(enthalpy, f"{name}_slopes")),
            )
        placed = _place(rows, len(streams)) @ carried
        total = placed if total is None else total + placed
    assert total is not None
    return total


class _Carried:
    """Amount times specific enthalpy."""

    def __init__(self, law: Any) -> None:
        self.law = law

    def __call__(self, amount: Any, a: Any, b: Any) -> Any:
        return amount * self.law(a, b)


class _CarriedSlopes:
    """Its derivatives."""

    def __init__(self, law: Any, slopes: Any) -> None:
        self.law, self.slopes = law, slopes

    def __call__(self, amount: Any, a: Any, b: Any) -> Any:
        by_a, by_b = self.slopes(a, b)
        return self.law(a, b), amount * by_a, amount * by_b


# ------------------------------------------------------------------ balances over nodes


def _write_nodes(plan: Plan, network: Network, system: System, states: dict[str, Expression]) -> None:
    nodes, unit = plan.nodes, plan.options.unit
    count = len(network.nodes)
    index = {n: k for k, n in enumerate(network.nodes)}
    every = np.arange(len(network.streams), dtype=np.int64)
    flow = system.find("flow", network.streams)
    assert flow is not None
    closure = network.incidence @ _heat(plan, flow, every, system, states)
    duties = (*nodes.supplied, *nodes.removed)
    if duties:
        duty = system.variables("duty", duties, unit=unit, lower=0)
        sign = np.repeat([1.0, -1.0], [len(nodes.supplied), len(nodes.removed)])
        closure = closure + _place([index[n] for n in duties], count) @ (duty * sign)
    if nodes.exchanges:
        warm, cold = zip(*nodes.exchanges, strict=True)
        transfer = _declare_transfers(nodes.exchanges, unit, system)
        matrix = _place([index[n] for n in cold], count) - _place([index[n] for n in warm], count)
        closure = closure + matrix @ transfer
    if nodes.storing:
        stored = system.variables("stored_heat", nodes.storing, unit=unit)
        closure = closure - _place([index[n] for n in nodes.storing], count) @ stored
    if nodes.losing:
        lost = system.variables("heat_loss", nodes.losing, unit=unit, lower=0)
        closure = closure - _place([index[n] for n in nodes.losing], count) @ lost
    for rows, amount, streams in _material_losses(plan, network, system):
        closure = closure - _place(rows, count) @ _heat(plan, amount, streams, system, states)
    tight = [n for n in nodes.balanced if n not in nodes.losing]
    if plan.options.losses and tight:
        lost = system.faults(
            "heat_loss",
            tight,
            unit=unit,
            lower=0,
            says="{size} {unit} of heat lost at {item}",
            separate="look for missing insulation, a stream or a steam trap that is not drawn at {item}",
        )
        closure = closure - _place([index[n] for n in tight], count) @ lost
    if nodes.balanced:
        system.require(
            closure[[index[n] for n in nodes.balanced]] == 0,
            names=[f"{n} energy" for n in nodes.balanced],
            kind="energy",
            unit=unit,
            nodes=nodes.balanced,
        )


def _declare_transfers(exchanges: tuple[tuple[str, str], ...], unit: str, system: System) -> Expression:
    return system.variables("transfer", [warm for warm, _ in exchanges], unit=unit, lower=0)


def _material_losses(plan: Plan, network: Network, system: System) -> list[tuple[Ints, Expression, Ints]]:
    """Possible losses that other domains declared: nodes, amounts, and the streams whose heat they carry."""
    out = []
    stream_of = {s: j for j, s in enumerate(network.streams)}
    leak = system.find("leak")
    if leak is not None:
        nodes = [n for n in leak.items if n in plan.leak_of]
        if nodes:
            rows = np.array([network.nodes.index(n) for n in nodes])
            out.append((rows, leak[nodes], np.array([stream_of[plan.leak_of[n]] for n in nodes])))
    for kind, end in (("loss", network.source), ("spill", network.target)):
        lost = system.find(kind)
        streams = [s for s in lost.items if s in stream_of] if lost is not None else []
        if lost is not None and streams:
            where = np.array([stream_of[s] for s in streams])
            out.append((end[where], lost[streams], where))
    return out


def _write_splits(plan: Plan, network: Network, system: System, states: dict[str, Expression]) -> None:
    """One temperature, and one quality, for the streams that leave a splitter."""
    pairs = plan.nodes.equal
    if not pairs.size:
        return
    medium = np.array(plan.medium, dtype=object)
    both = (medium[pairs] == "saturated").all(axis=1)
    for what, unit, keep in (
        ("temperature", plan.options.temperature, np.arange(len(pairs))),
        ("quality", "fraction", np.flatnonzero(both)),
    ):
        if not keep.size:
            continue
        one, other = pairs[keep, 0], pairs[keep, 1]
        system.require(
            states[what][other] - states[what][one] == 0,
            names=[f"{network.streams[j]} {what} like {network.streams[i]}" for i, j in pairs[keep]],
            kind=f"{what} split",
            unit=unit,
            nodes=[plan.nodes.equal_at[k] for k in keep],
        )
