"""Writes a checked plan into a system: amounts, gases, masses, and the balances of nodes.

All amounts, stores, extents and possible faults are entries of one vector; the balances of all nodes are then
sparse matrices times that vector, plus the few products in which a composition or a fraction is a variable.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import scipy.sparse as sp

from reconcile import System, stack

from .formula import Formula
from .gas import conditions, molar_volume
from .layout import REDUCTION, NodePlan, Plan, StreamPlan
from .masses import FARADAY, STANDARD_WEIGHTS, molar_mass
from .options import unit_parts
from .reactions import CHARGE, degree_of_reduction
from .refusal import Mistake, Refusal

if TYPE_CHECKING:
    from reconcile import Expression

__all__ = ["write"]

_WORDS = {"C": "carbon", "H": "hydrogen", "O": "oxygen", "N": "nitrogen", "S": "sulfur", "P": "phosphorus"}


Key = tuple[str, str]
Terms = dict[int, float]


class _Vector:
    """Blocks of variables put below one another, each entry found by a key."""

    def __init__(self) -> None:
        self.blocks: list[Expression] = []
        self.at: dict[Key, int] = {}

    def add(self, block: Expression, keys: Sequence[Key]) -> None:
        first = len(self.at)
        self.blocks.append(block)
        self.at.update({key: first + i for i, key in enumerate(keys)})

    @property
    def expression(self) -> Expression:
        return stack(self.blocks)


def write(plan: Plan, system: System) -> None:
    """Declare all variables and faults, and require all balances."""
    amounts = _amounts(plan, system)
    _mixtures(plan, system, amounts)
    fractions = _gases(plan, system, amounts)
    _masses(plan, system, amounts)
    _currents(plan, system, amounts)
    _nodes(plan, system, amounts, fractions)


def _amounts(plan: Plan, system: System) -> _Vector:
    """``stream.species`` for every species of every stream; ``node.species.accumulation``."""
    amounts = _Vector()
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


def _rows(terms: Sequence[Terms], columns: int) -> sp.csr_array:
    entries = [(r, c, v) for r, row in enumerate(terms) for c, v in row.items()]
    r, c, v = (np.array(x) for x in zip(*entries, strict=True)) if entries else (np.zeros(0, int),) * 3
    return sp.csr_array((v.astype(float), (r, c)), shape=(len(terms), columns))


def _mixtures(plan: Plan, system: System, amounts: _Vector) -> None:
    """Streams of known composition: each amount is a fixed share of the flow."""
    mixed = [p for p in plan.streams if p.composition]
    if not mixed:
        return
    flow = system.variables("flow", [p.name for p in mixed], unit=plan.options.unit, lower=0)
    shares = [(i, p, s) for i, p in enumerate(mixed) for s in p.species]
    pick = [{amounts.at[p.name, s]: 1.0} for _, p, s in shares]
    part = [{i: (p.composition or {})[s]} for i, p, s in shares]
    system.require(
        _rows(pick, len(amounts.at)) @ amounts.expression - _rows(part, len(mixed)) @ flow == 0,
        names=[f"{p.name} {s} share" for _, p, s in shares],
        kind="composition",
        unit=plan.options.unit,
        nodes=[p.name for _, p, s in shares],
    )
    _volumes(plan, system, mixed, flow)


def _gases(plan: Plan, system: System, amounts: _Vector) -> _Vector:
    """Gases that are analysed: ``stream.flow`` and ``stream.species.fraction``, both dry or both wet."""
    gases = [p for p in plan.streams if p.gas and not p.composition]
    fractions = _Vector()
    if not gases:
        return fractions
    unit = plan.options.unit
    flow = system.variables("flow", [p.name for p in gases], unit=unit, lower=0)
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
    pick = _rows([{amounts.at[p.name, s]: 1.0} for _, p, s in parts], len(amounts.at))
    share = _rows([{fractions.at[p.name, s]: 1.0} for _, p, s in parts], len(fractions.at))
    whose = _rows([{i: 1.0} for i, _, _ in parts], len(gases))
    system.require(
        pick @ vector - (whose @ flow) * (share @ fractions.expression) == 0,
        names=[f"{p.name} {s} share" for _, p, s in parts],
        kind="composition",
        unit=unit,
        nodes=[p.name for _, p, _ in parts],
    )
    total = _rows([{amounts.at[p.name, s]: 1.0 for s in p.counted(plan.water)} for p in gases], len(amounts.at))
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
    """``stream.volume_flow`` at stated conditions."""
    chosen = [(i, p) for i, p in enumerate(streams) if p.volume_at]
    if not chosen:
        return
    unit = unit_parts(plan.options.unit)["volume"]
    volume = system.variables("volume_flow", [p.name for _, p in chosen], unit=unit, lower=0)
    factors = _rows([{i: molar_volume(conditions(p.volume_at or ""))} for i, p in chosen], len(streams))
    system.require(
        volume - factors @ flow == 0,
        names=[f"{p.name} volume at {p.volume_at}" for _, p in chosen],
        kind="gas volume",
        unit=unit,
        nodes=[p.name for _, p in chosen],
    )


def _masses(plan: Plan, system: System, amounts: _Vector) -> None:
    """``stream.species.mass``, by molar mass or by an (uncertain) carbon fraction that all streams share."""
    unit = unit_parts(plan.options.unit)["mass"]
    for species, how in plan.options.weighed.items():
        holders = [p.name for p in plan.streams if species in p.species]
        if not holders:
            continue
        formula = plan.formulas[species]
        mass = system.variables(f"{species}.mass", holders, unit=unit, lower=0)
        amount = _rows([{amounts.at[s, species]: 1.0} for s in holders], len(amounts.at)) @ amounts.expression
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


def _currents(plan: Plan, system: System, amounts: _Vector) -> None:
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
        electrons = _rows([{amounts.at[p.name, p.species[0]]: 1.0}], len(amounts.at)) @ amounts.expression
        system.require(
            current - FARADAY * rate * electrons == 0,
            names=[f"{p.name} Faraday"],
            kind="current",
            unit="A",
            nodes=[p.name],
        )


# ------------------------------------------------------------------ nodes


class _Faults:
    """Possible faults of nodes, and how each enters the net amounts or the element rows."""

    def __init__(self, plan: Plan, system: System, vector: _Vector) -> None:
        unit = plan.options.unit
        self.hidden: dict[str, list[tuple[int, Formula]]] = defaultdict(list)
        places = [n.name for n in plan.nodes if n.mode == "elements"]
        for name, formula in plan.hidden.items() if places else ():
            kind = f"hidden_{name}"
            block = system.faults(
                kind,
                places,
                unit=unit,
                lower=0,
                says=f"{{size}} {{unit}} of {name} ({_describe(plan, formula)}) formed at {{item}} and not measured",
                separate=f"analyse what leaves {{item}} for {name}",
            )
            vector.add(block, [(n, kind) for n in places])
            for n in places:
                self.hidden[n].append((vector.at[n, kind], formula))
        leaving = [p for p in plan.streams if p.source >= 0]
        self.lost: dict[Key, int] = {}
        for species in plan.formulas:
            pure = [p.name for p in leaving if p.can_leak and not _whole(p) and species in p.species]
            if pure:
                kind = f"{species}.lost"
                block = system.faults(
                    kind,
                    pure,
                    unit=unit,
                    lower=0,
                    says=f"{{size}} {{unit}} of {species} lost from {{item}} before its meter",
                    separate="check the gas line of {item} for leaks with soap solution or a bubble test",
                )
                vector.add(block, [(s, kind) for s in pure])
                self.lost.update({(s, species): vector.at[s, kind] for s in pure})
        self.drawn: dict[str, int] = {}
        oxygen = {n for n, f in plan.formulas.items() if f.text == "O2"}
        drawing = [p.name for p in leaving if p.gas and p.can_leak and plan.air and oxygen & set(p.species)]
        if drawing:
            block = system.faults(
                "air_drawn_in",
                drawing,
                unit=unit,
                lower=0,
                says="{size} {unit} of air drawn into {item} before its meter",
                separate="feed nitrogen to {item} with the process off: any oxygen the analyser shows is air",
            )
            vector.add(block, [(s, "air_drawn_in") for s in drawing])
            self.drawn = {s: vector.at[s, "air_drawn_in"] for s in drawing}
        self.whole = [p for p in leaving if p.can_leak and _whole(p)]
        self.whole_lost: Expression | None = None
        if self.whole:
            self.whole_lost = system.faults(
                "gas_lost",
                [p.name for p in self.whole],
                unit=unit,
                lower=0,
                says="{size} {unit} of gas lost from {item} before its meter",
                separate="check the line of {item} for leaks with soap solution or a bubble test",
            )


def _whole(p: StreamPlan) -> bool:
    """Whether a loss takes the species of a stream in proportion, its fractions being known or analysed."""
    return bool(p.gas or p.composition)


def _describe(plan: Plan, formula: Formula) -> str:
    """Formula, with its electrons per carbon: what makes two explanations look alike."""
    try:
        gamma = degree_of_reduction(formula, plan.options.nitrogen_source, plan.options.references)
    except Refusal:
        return formula.text
    return f"{formula.text}, {float(gamma / formula['C']):.3g} electrons per carbon" if formula["C"] else formula.text


class _Sheet:
    """Rows being written: linear terms, and products of a net amount with a parameter or of a loss with a fraction."""

    def __init__(self) -> None:
        self.names: list[str] = []
        self.nodes: list[str] = []
        self.kinds: list[str] = []
        self.linear: list[Terms] = []
        self.losses: list[dict[Key, float]] = []
        self.products: list[tuple[int, Terms, int, float]] = []

    def row(self, node: str, kind: str, name: str) -> int:
        self.names.append(name)
        self.nodes.append(node)
        self.kinds.append(kind)
        self.linear.append(defaultdict(float))
        self.losses.append(defaultdict(float))
        return len(self.names) - 1


def _nodes(plan: Plan, system: System, vector: _Vector, fractions: _Vector) -> None:
    extents = [(n.name, r) for n in plan.nodes for r in n.reactions]
    for reaction in plan.reactions:
        places = [n for n, r in extents if r == reaction]
        if places:
            block = system.variables(reaction, places, unit=plan.options.unit)
            vector.add(block, [(n, reaction) for n in places])
    faults = _Faults(plan, system, vector)
    parameters, at = _parameters(plan, system)
    sheet = _Sheet()
    for index, node in enumerate(plan.nodes):
        net = {s: _net(plan, index, s, vector, faults) for s in plan.formulas}
        net = {s: pair for s, pair in net.items() if pair[0] or pair[1]}
        _write_species(plan, node, net, vector, sheet)
        if node.mode == "elements":
            _write_elements(plan, node, net, faults, at, sheet)
    _require(plan, system, sheet, vector, fractions, faults, parameters)


def _net(plan: Plan, index: int, species: str, vector: _Vector, faults: _Faults) -> tuple[Terms, dict[Key, float]]:
    """What of a species enters a node less what leaves it or stays, faults included."""
    terms: Terms = {}
    losses: dict[Key, float] = {}
    for p in plan.streams:
        if p.source == index and p.name in faults.drawn and plan.air.get(species) and species in p.species:
            terms[faults.drawn[p.name]] = plan.air[species]
        if species not in p.species or (p.source != index and p.target != index):
            continue
        terms[vector.at[p.name, species]] = 1.0 if p.target == index else -1.0
        if p.source == index:
            if (p.name, species) in faults.lost:
                terms[faults.lost[p.name, species]] = -1.0
            elif p in faults.whole:
                losses[p.name, species] = -1.0
    stored = (plan.nodes[index].name, f"{species}.accumulation")
    if stored in vector.at:
        terms[vector.at[stored]] = -1.0
    return terms, losses


def _write_species(
    plan: Plan, node: NodePlan, net: dict[str, tuple[Terms, dict[Key, float]]], vector: _Vector, sheet: _Sheet
) -> None:
    """Species that do not react at the node, or react only by stated reactions."""
    for species, (terms, losses) in net.items():
        if node.mode == "elements" and species not in plan.options.inert:
            continue
        r = sheet.row(node.name, "species", f"{node.name} {species}")
        sheet.linear[r].update(terms)
        sheet.losses[r].update(losses)
        for reaction in node.reactions:
            if species in plan.reactions[reaction]:
                sheet.linear[r][vector.at[node.name, reaction]] = float(plan.reactions[reaction][species])


def _write_elements(
    plan: Plan,
    node: NodePlan,
    net: dict[str, tuple[Terms, dict[Key, float]]],
    faults: _Faults,
    parameters: dict[Key, int],
    sheet: _Sheet,
) -> None:
    """Rows of elements, of charge and of the degree of reduction."""
    reacting = [s for s in net if s not in plan.options.inert]
    for row in plan.conserve:
        if not any(_varies(plan, s, row) or plan.content(plan.formulas[s], row) for s in reacting):
            continue
        r = sheet.row(node.name, _WORDS.get(row, row), f"{node.name} {_WORDS.get(row, row)}")
        for species in reacting:
            terms, losses = net[species]
            fixed, varying = _coefficient(plan, species, row, parameters)
            for column, value in terms.items():
                sheet.linear[r][column] += fixed * value
            for key, value in losses.items():
                sheet.losses[r][key] += fixed * value
            sheet.products.extend((r, terms, parameter, weight) for parameter, weight in varying.items())
        for column, formula in faults.hidden[node.name]:
            sheet.linear[r][column] -= float(plan.content(formula, row))


def _varies(plan: Plan, species: str, row: str) -> bool:
    sigmas = plan.options.uncertain.get(species, {})
    return row in sigmas or (row == REDUCTION and bool(sigmas))


def _coefficient(plan: Plan, species: str, row: str, parameters: dict[Key, int]) -> tuple[float, Terms]:
    """Fixed part, and weights of uncertain subscripts, of what one mol of a species holds."""
    formula = plan.formulas[species]
    if row == CHARGE or not _varies(plan, species, row):
        return float(plan.content(formula, row)), {}
    if row != REDUCTION or REDUCTION in plan.options.uncertain[species]:
        return 0.0, {parameters[species, row]: 1.0}
    weights: Terms = {}
    fixed = -formula.charge
    for element, count in formula.composition.items():
        if element in plan.options.uncertain[species]:
            weights[parameters[species, element]] = float(plan.weights[element])
        else:
            fixed += plan.weights[element] * count
    return float(fixed), weights


def _parameters(plan: Plan, system: System) -> tuple[_Vector, dict[Key, int]]:
    """Uncertain compositions: one shared variable each, known to its sigma."""
    vector = _Vector()
    for species, sigmas in plan.options.uncertain.items():
        for row, sigma in sigmas.items():
            value = float(plan.content(plan.formulas[species], row))
            quantity = "degree_of_reduction" if row == REDUCTION else f"atoms.{row}"
            block = system.variables(quantity, [species], unit="fraction", lower=0, start=value)
            system.prior(block, value, sigma, origin=f"{plan.formulas[species].text}, stated uncertainty of {row}")
            vector.add(block, [(species, row)])
    return vector, vector.at


def _require(
    plan: Plan,
    system: System,
    sheet: _Sheet,
    vector: _Vector,
    fractions: _Vector,
    faults: _Faults,
    parameters: _Vector,
) -> None:
    if not sheet.names:
        return
    total = _rows(sheet.linear, len(vector.at)) @ vector.expression
    if faults.whole_lost is not None and any(sheet.losses):
        total = total + _lost(sheet, fractions, faults.whole, faults.whole_lost)
    if sheet.products:
        nets = _rows([terms for _, terms, _, _ in sheet.products], len(vector.at)) @ vector.expression
        which = _rows([{p: 1.0} for _, _, p, _ in sheet.products], len(parameters.at)) @ parameters.expression
        place = sp.csr_array(
            (
                [w for _, _, _, w in sheet.products],
                ([r for r, _, _, _ in sheet.products], range(len(sheet.products))),
            ),
            shape=(len(sheet.names), len(sheet.products)),
        )
        total = total + place @ (nets * which)
    for kind in dict.fromkeys(sheet.kinds):
        chosen = [i for i, k in enumerate(sheet.kinds) if k == kind]
        system.require(
            total[chosen] == 0,
            names=[sheet.names[i] for i in chosen],
            kind=kind,
            unit=plan.options.unit,
            nodes=[sheet.nodes[i] for i in chosen],
        )


def _lost(sheet: _Sheet, fractions: _Vector, whole: Sequence[StreamPlan], lost: Expression) -> Expression:
    """Gas lost before the meter takes every species along in its share of the gas."""
    position = {p.name: i for i, p in enumerate(whole)}
    known = {p.name: p.composition for p in whole if p.composition}
    varying = [k for k in dict.fromkeys(k for row in sheet.losses for k in row) if k in fractions.at]
    linear: list[Terms] = []
    for row in sheet.losses:
        terms: Terms = defaultdict(float)
        for (stream, species), value in row.items():
            if stream in known:
                terms[position[stream]] += known[stream][species] * value
        linear.append(terms)
    out = _rows(linear, lost.size) @ lost
    if varying:
        flows = _rows([{position[s]: 1.0} for s, _ in varying], lost.size) @ lost
        shares = _rows([{fractions.at[k]: 1.0} for k in varying], len(fractions.at)) @ fractions.expression
        place = _rows([{j: row[k] for j, k in enumerate(varying) if k in row} for row in sheet.losses], len(varying))
        out = out + place @ (flows * shares)
    return out
