"""Writes a checked plan into a system: what nodes conserve.

All amounts, stores, extents and possible faults are entries of one vector; the balances of all nodes are then
sparse matrices times that vector, plus the few products in which a composition or a fraction is a variable.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence

import scipy.sparse as sp

from reconcile import Expression, System

from .faults import Faults
from .plan import REDUCTION, NodePlan, Plan, StreamPlan
from .reactions import CHARGE
from .streams import write_streams
from .vector import Key, Terms, Vector, sparse_rows

__all__ = ["write"]

_WORDS = {"C": "carbon", "H": "hydrogen", "O": "oxygen", "N": "nitrogen", "S": "sulfur", "P": "phosphorus"}


def write(plan: Plan, system: System) -> None:
    """Declare all variables and faults, and require all balances."""
    amounts, fractions = write_streams(plan, system)
    _nodes(plan, system, amounts, fractions)


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


def _nodes(plan: Plan, system: System, vector: Vector, fractions: Vector) -> None:
    extents = [(n.name, r) for n in plan.nodes for r in n.reactions]
    for reaction in plan.reactions:
        places = [n for n, r in extents if r == reaction]
        if places:
            block = system.variables(reaction, places, unit=plan.options.unit)
            vector.add(block, [(n, reaction) for n in places])
    faults = Faults(plan, system, vector)
    parameters, at = _parameters(plan, system)
    sheet = _Sheet()
    for index, node in enumerate(plan.nodes):
        net = {s: _net(plan, index, s, vector, faults) for s in plan.formulas}
        made = {s for r in node.reactions for s in plan.reactions[r]}
        net = {s: pair for s, pair in net.items() if pair[0] or pair[1] or s in made}
        _write_species(plan, node, net, vector, sheet)
        if node.mode == "elements":
            _write_elements(plan, node, net, faults, at, sheet)
    _require(plan, system, sheet, vector, fractions, faults, parameters)


def _net(plan: Plan, index: int, species: str, vector: Vector, faults: Faults) -> tuple[Terms, dict[Key, float]]:
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
    plan: Plan, node: NodePlan, net: dict[str, tuple[Terms, dict[Key, float]]], vector: Vector, sheet: _Sheet
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
    faults: Faults,
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


def _parameters(plan: Plan, system: System) -> tuple[Vector, dict[Key, int]]:
    """Uncertain compositions: one shared variable each, known to its sigma."""
    vector = Vector()
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
    vector: Vector,
    fractions: Vector,
    faults: Faults,
    parameters: Vector,
) -> None:
    if not sheet.names:
        return
    total = sparse_rows(sheet.linear, len(vector.at)) @ vector.expression
    if faults.whole_lost is not None and any(sheet.losses):
        total = total + _lost(sheet, fractions, faults.whole, faults.whole_lost)
    if sheet.products:
        nets = sparse_rows([terms for _, terms, _, _ in sheet.products], len(vector.at)) @ vector.expression
        which = sparse_rows([{p: 1.0} for _, _, p, _ in sheet.products], len(parameters.at)) @ parameters.expression
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


def _lost(sheet: _Sheet, fractions: Vector, whole: Sequence[StreamPlan], lost: Expression) -> Expression:
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
    out = sparse_rows(linear, lost.size) @ lost
    if varying:
        flows = sparse_rows([{position[s]: 1.0} for s, _ in varying], lost.size) @ lost
        shares = sparse_rows([{fractions.at[k]: 1.0} for k in varying], len(fractions.at)) @ fractions.expression
        place = sparse_rows(
            [{j: row[k] for j, k in enumerate(varying) if k in row} for row in sheet.losses], len(varying)
        )
        out = out + place @ (flows * shares)
    return out
