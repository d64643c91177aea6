"""Solutes and oxygen on top of the flows of a perfusion circuit."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel

from reconcile import Domain, Expression, Network, System

from .options import PerfusionNode, PerfusionOptions, PerfusionStream

DECILITRES = {"mL/min": 100.0, "ml/min": 100.0, "L/min": 0.1, "l/min": 0.1}
"""Flow units per dL/min, for oxygen contents in mL/dL."""


class Perfusion(Domain):
    """Perfusion: what a solute brings into a node leaves it, is taken up, or is lost with the fluid.

    Works on the flows of the domain `fluid`. Variables: ``stream.SOLUTE``, ``node.SOLUTE_uptake``; for blood
    ``stream.hemoglobin``, ``stream.saturation``, ``stream.pO2``, ``stream.oxygen`` (content), ``circuit.huefner``,
    ``node.oxygen_uptake``. A loss of fluid at a node carries its solutes with it.
    """

    name: ClassVar[str] = "perfusion"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = (
        "solutes, clearance and oxygen uptake in organ, dialysis and bioreactor circuits (with fluid)"
    )
    options: ClassVar[type[BaseModel]] = PerfusionOptions
    stream_options: ClassVar[type[BaseModel]] = PerfusionStream
    node_options: ClassVar[type[BaseModel]] = PerfusionNode
    after: ClassVar[tuple[str, ...]] = ("fluid",)
    forgotten: ClassVar[tuple[str, ...]] = (
        "urine, bile, ascites and lymph",
        "samples",
        "oedema of the organ (a storage term)",
        "priming volume",
        "evaporation from the reservoir",
    )
    caution: ClassVar[str] = (
        "This is no medical device and not for decisions on the treatment of patients. Never set ultrafiltration, "
        "anticoagulation, gas flow or pump speed from adjusted values; raw readings and device alarms take priority, and an "
        "adjusted value can hide a real leak, air, a clot or a disconnection."
    )

    def build(self, network: Network, system: System, options: PerfusionOptions) -> None:
        """Write one balance per solute and node, and the oxygen content of blood."""
        flow = system.find("flow", network.streams)
        if flow is None:
            raise ValueError("perfusion needs the flows of the domain fluid; add it, e.g. fluid: {unit: mL/min}")
        unit = next(u for n, u in system.units().items() if n == f"{network.streams[0]}.flow")
        carried = flow * np.array(network.of_streams("water_fraction", 1.0), dtype=float)
        for name, solute in options.solutes.items():
            amount = f"({unit})*({solute.unit})"
            concentration = system.variables(name, network.streams, unit=solute.unit, lower=0)
            free = [s for s, f in zip(network.streams, network.of_streams("free_of", []), strict=True) if name in f]
            if free:
                system.fix(concentration[free], 0.0)
            _balance(
                network,
                system,
                name,
                network.incidence @ (carried * concentration),
                concentration,
                amount,
                solute.uptake,
            )
        _check_free(network, options)
        if options.blood is not None:
            _oxygen(network, system, flow, unit, options)


def _balance(
    network: Network,
    system: System,
    name: str,
    closure: Expression,
    content: Expression,
    unit: str,
    uptake: list[str],
    nodes: list[str] | None = None,
    factor: float = 1.0,
) -> None:
    """Require that a solute balances at nodes, uptake and losses of fluid considered."""
    where = list(network.nodes) if nodes is None else nodes
    unknown = [n for n in uptake if n not in where]
    if unknown:
        raise ValueError(f"{name} is to be taken up at {unknown[0]!r}, which is no node that carries it")
    if uptake:
        taken = system.variables(f"{name}_uptake", uptake, unit=unit)
        place = np.zeros((len(where), len(uptake)))
        place[[where.index(n) for n in uptake], range(len(uptake))] = 1.0
        closure = closure - place @ taken
    leak = system.find("leak", where)
    if leak is not None:
        closure = closure - factor * (leak * content[[_loses_like(network, n) for n in where]])
    system.require(closure == 0, names=[f"{n} {name}" for n in where], kind=name, unit=unit, nodes=where)


def _loses_like(network: Network, node: str) -> str:
    """Stream with whose composition a loss at a node leaves."""
    stated = network.node_options.get(node, {}).get("loses_like")
    if stated is not None:
        if stated not in network.streams:
            raise ValueError(f"node {node!r} is to lose fluid like {stated!r}, which is no stream")
        return str(stated)
    candidates = network.leaving(node) or network.entering(node)
    if len(candidates) > 1:
        raise ValueError(
            f"a leak at node {node!r} would carry the content of one of {', '.join(sorted(candidates))}: write which, "
            f"e.g. nodes: {{{node}: {{loses_like: {sorted(candidates)[0]}}}}}, or leave leaks out with leaks: none"
        )
    return candidates[0]


def _check_free(network: Network, options: PerfusionOptions) -> None:
    for stream, free in zip(network.streams, network.of_streams("free_of", []), strict=True):
        for name in free:
            if name not in options.solutes:
                raise ValueError(f"stream {stream!r} is free of {name!r}, which is no solute of the case")


def _oxygen(network: Network, system: System, flow: Expression, unit: str, options: PerfusionOptions) -> None:
    """Write ``content = huefner * haemoglobin * saturation + solubility * pO2`` and its balance."""
    blood = options.blood
    assert blood is not None
    unknown = [s for s in blood.streams if s not in network.streams]
    if unknown:
        raise ValueError(f"blood names {unknown[0]!r}, which is no stream")
    if unit not in DECILITRES:
        raise ValueError(f"oxygen contents are in mL/dL, so flows must be in mL/min or L/min, not {unit}")
    streams = blood.streams
    k = len(streams)
    haemoglobin = system.variables("hemoglobin", streams, unit="g/dL", lower=0, start=12.0)
    saturation = system.variables("saturation", streams, unit="fraction", lower=0, upper=1, start=0.8)
    tension = system.variables("pO2", streams, unit="mmHg", lower=0, start=80.0)
    content = system.variables("oxygen", streams, unit="mL/dL", lower=0, start=15.0)
    capacity = system.variables("oxygen_capacity", streams, unit="mL/dL", lower=0, start=16.0)
    huefner = system.variables("huefner", ["circuit"], unit="mL/g", lower=0, start=blood.huefner)
    # One number behind every stream: its error is shared, so it does not average out between artery and vein.
    system.prior(huefner, blood.huefner, blood.huefner_sigma, origin="values in use, 1.34 to 1.39 mL/g")
    every = np.ones((k, 1)) @ huefner
    system.require(
        capacity - every * haemoglobin == 0, names=[f"{s} oxygen capacity" for s in streams], kind="oxygen capacity",
        unit="mL/dL", nodes=streams,
    )  # fmt: skip
    system.require(
        content - capacity * saturation - blood.solubility * tension == 0,
        names=[f"{s} oxygen content" for s in streams],
        kind="oxygen content",
        unit="mL/dL",
        nodes=streams,
    )
    inside = [n for n in network.nodes if set(network.entering(n)) | set(network.leaving(n)) <= set(streams)]
    if not inside:
        return
    number = {n: i for i, n in enumerate(network.nodes)}
    columns = [network.streams.index(s) for s in streams]
    part = network.incidence.toarray()[np.ix_([number[n] for n in inside], columns)]
    factor = 1.0 / DECILITRES[unit]
    _balance(
        network, system, "oxygen", factor * (part @ (flow[streams] * content)), content, "mL/min",
        list(blood.uptake), inside, factor,
    )  # fmt: skip
    lost = [n for n in blood.uptake if n not in inside]
    if lost:
        raise ValueError(f"oxygen uptake at {lost[0]!r} needs every stream there to be listed under blood")
