"""What streams carry: amounts, known mixtures, analysed gases, volumes, masses and currents."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from reconcile import Expression, System

from .gas import conditions, molar_volume
from .masses import FARADAY, STANDARD_WEIGHTS, molar_mass
from .options import unit_parts
from .plan import Plan, StreamPlan
from .refusal import Mistake, Refusal
from .vector import Vector, sparse_rows

__all__ = ["write_streams"]


def write_streams(plan: Plan, system: System) -> tuple[Vector, Vector]:
    """Declare what streams carry.

    Returns
    -------
    amounts : Vector
        Keys (stream, species), and (node, ``species.accumulation``).
    fractions : Vector
        Keys (stream, species), of analysed gases.
    """
    amounts = _amounts(plan, system)
    _mixtures(plan, system, amounts)
    fractions = _gases(plan, system, amounts)
    _pure_volumes(plan, system, amounts)
    _masses(plan, system, amounts)
    _currents(plan, system, amounts)
    return amounts, fractions


def _amounts(plan: Plan, system: System) -> Vector:
    """``stream.species`` for every species of every stream; ``node.species.accumulation``."""
    amounts = Vector()
    unit = plan.options.unit
    for species in plan.formulas:
        holders = [p.name for p in plan.streams if species in p.species]
        if holders:
            block = system.variables(species, holders, unit=unit, lower=0)
            amounts.add(block, [(s, species) for s in holders])
    for species in plan.formulas:
        stores = [n.name for n in plan.nodes if species in n.accumulates]
        if stores:
            block = system.variables(f"{species}.accumulation", stores, unit=unit)
            amounts.add(block, [(n, f"{species}.accumulation") for n in stores])
    return amounts


def _mixtures(plan: Plan, system: System, amounts: Vector) -> None:
    """Streams of known composition: each amount is a fixed share of the flow."""
    mixed = [p for p in plan.streams if p.composition]
    if not mixed:
        return
    flow = system.variables("total", [p.name for p in mixed], unit=plan.options.unit, lower=0)
    shares = [(i, p, s) for i, p in enumerate(mixed) for s in p.species]
    # Divided by the share: a trace would otherwise be a row far below the accuracy of the others.
    pick, part = [], []
    for i, p, s in shares:
        share = (p.composition or {})[s]
        pick.append({amounts.at[p.name, s]: 1.0 / share if share else 1.0})
        part.append({i: 1.0} if share else {})
    system.require(
        sparse_rows(pick, len(amounts.at)) @ amounts.expression - sparse_rows(part, len(mixed)) @ flow == 0,
        names=[f"{p.name} {s} share" for _, p, s in shares],
        kind="composition",
        unit=plan.options.unit,
        nodes=[p.name for _, p, s in shares],
    )
    _volumes(plan, system, mixed, flow)


def _gases(plan: Plan, system: System, amounts: Vector) -> Vector:
    """Gases that are analysed: ``stream.total`` and ``stream.species.fraction``, both dry or both wet."""
    gases = [p for p in plan.streams if p.gas and not p.composition]
    fractions = Vector()
    if not gases:
        return fractions
    unit = plan.options.unit
    flow = system.variables("total", [p.name for p in gases], unit=unit, lower=0)
    parts = [(i, p, s) for i, p in enumerate(gases) for s in p.counted(plan.water)]
    for species in plan.formulas:
        holders = [p.name for _, p, s in parts if s == species]
        if holders:
            start = np.array([1.0 / len(p.species) for _, p, s in parts if s == species])
            block = system.variables(
                f"{species}.fraction", holders, unit="fraction", lower=0, upper=1, start=plan.air.get(species, start)
            )
            fractions.add(block, [(name, species) for name in holders])
    vector = amounts.expression
    pick = sparse_rows([{amounts.at[p.name, s]: 1.0} for _, p, s in parts], len(amounts.at))
    share = sparse_rows([{fractions.at[p.name, s]: 1.0} for _, p, s in parts], len(fractions.at))
    whose = sparse_rows([{i: 1.0} for i, _, _ in parts], len(gases))
    system.require(
        pick @ vector - (whose @ flow) * (share @ fractions.expression) == 0,
        names=[f"{p.name} {s} share" for _, p, s in parts],
        kind="composition",
        unit=unit,
        nodes=[p.name for _, p, _ in parts],
    )
    total = sparse_rows([{amounts.at[p.name, s]: 1.0 for s in p.counted(plan.water)} for p in gases], len(amounts.at))
    system.require(
        total @ vector - flow == 0,
        names=[f"{p.name} {p.gas} gas" for p in gases],
        kind="gas",
        unit=unit,
        nodes=[p.name for p in gases],
    )
    _volumes(plan, system, gases, flow)
    return fractions


def _volumes(plan: Plan, system: System, streams: Sequence[StreamPlan], flow: Expression) -> None:
    """``stream.volume_flow`` at stated conditions, from the total amounts of these streams."""
    chosen = [(i, p) for i, p in enumerate(streams) if p.volume_at]
    if not chosen:
        return
    unit = unit_parts(plan.options.unit)["volume"]
    volume = system.variables("volume_flow", [p.name for _, p in chosen], unit=unit, lower=0)
    factors = sparse_rows([{i: molar_volume(conditions(p.volume_at or ""))} for i, p in chosen], len(streams))
    system.require(
        volume - factors @ flow == 0,
        names=[f"{p.name} volume at {p.volume_at}" for _, p in chosen],
        kind="gas volume",
        unit=unit,
        nodes=[p.name for _, p in chosen],
    )


def _pure_volumes(plan: Plan, system: System, amounts: Vector) -> None:
    """Volume flow of streams that are one gas alone: nothing to analyse, nothing to dry."""
    pure = [p for p in plan.streams if p.volume_at and not p.gas and not p.composition]
    if pure:
        rows = sparse_rows([{amounts.at[p.name, p.species[0]]: 1.0} for p in pure], len(amounts.at))
        _volumes(plan, system, pure, rows @ amounts.expression)


def _masses(plan: Plan, system: System, amounts: Vector) -> None:
    """``stream.species.mass``, by molar mass or by an (uncertain) carbon fraction that all streams share."""
    unit = unit_parts(plan.options.unit)["mass"]
    for species, how in plan.options.weighed.items():
        holders = [p.name for p in plan.streams if species in p.species]
        if not holders:
            continue
        formula = plan.formulas[species]
        mass = system.variables(f"{species}.mass", holders, unit=unit, lower=0)
        amount = sparse_rows([{amounts.at[s, species]: 1.0} for s in holders], len(amounts.at)) @ amounts.expression
        if how.carbon_fraction is None:
            balance = mass - molar_mass(formula) * amount
        else:
            fraction = system.variables(
                "carbon_fraction", [species], unit="fraction", lower=0, upper=1, start=how.carbon_fraction
            )
            if how.sigma is None:
                system.fix(fraction, how.carbon_fraction)
            else:
                system.prior(fraction, how.carbon_fraction, how.sigma, origin=f"carbon fraction of {species}")
            balance = mass * fraction - float(STANDARD_WEIGHTS["C"] * formula["C"]) * amount
        system.require(
            balance == 0, names=[f"{s} {species} mass" for s in holders], kind="mass", unit=unit, nodes=holders
        )


def _currents(plan: Plan, system: System, amounts: Vector) -> None:
    """``stream.current`` in A of a stream of electrons, by Faraday's law."""
    for p in plan.streams:
        if not p.current:
            continue
        rate = unit_parts(plan.options.unit)["mol_per_second"]
        if rate is None:
            raise Refusal(
                Mistake(
                    "current-unit",
                    f"a current needs amounts per time, not {plan.options.unit}",
                    "write e.g. unit: mol/h",
                )
            )
        current = system.find("current", [p.name])
        if current is None:
            current = system.variables("current", [p.name], unit="A")
        electrons = sparse_rows([{amounts.at[p.name, p.species[0]]: 1.0}], len(amounts.at)) @ amounts.expression
        system.require(
            current - FARADAY * rate * electrons == 0,
            names=[f"{p.name} Faraday"],
            kind="current",
            unit="A",
            nodes=[p.name],
        )
