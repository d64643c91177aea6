"""Possible faults of this domain: hidden products, gas lost before its meter, air drawn in."""

from __future__ import annotations

from collections import defaultdict
from fractions import Fraction

from reconcile import Expression, System

from .formula import Formula
from .plan import Plan, StreamPlan
from .possible import can_form
from .reduction import degree_of_reduction
from .refusal import Refusal
from .vector import Key, Vector

__all__ = ["Faults"]


class Faults:
    """Possible faults of nodes, and how each enters the net amounts or the element rows."""

    def __init__(self, plan: Plan, system: System, vector: Vector) -> None:
        unit = plan.options.unit
        self.hidden: dict[str, list[tuple[int, Formula]]] = defaultdict(list)
        for name, formula in plan.hidden.items():
            places = [n.name for i, n in enumerate(plan.nodes) if n.mode == "elements" and can_form(plan, i, formula)]
            kind = f"hidden_{name}"
            block = system.faults(
                kind,
                places,
                unit=unit,
                lower=0,
                says=f"{{size}} {{unit}} of {name} ({_describe(plan, formula)}) formed at {{item}} and not measured",
                separate=f"analyse what leaves {{item}} for {name} (HPLC, GC or an enzyme kit), and weigh the feed bottle",
            )
            vector.add(block, [(n, kind) for n in places])
            for n in places:
                self.hidden[n].append((vector.at[n, kind], formula))
        leaving = [p for p in plan.streams if p.source >= 0]
        self.lost: dict[Key, int] = {}
        for species in plan.formulas:
            pure = [p.name for p in leaving if p.can_leak and not in_proportion(p) and species in p.species]
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
        self.whole = [p for p in leaving if p.can_leak and in_proportion(p)]
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


def in_proportion(p: StreamPlan) -> bool:
    """Whether a loss takes the species of a stream in proportion, its fractions being known or analysed."""
    return bool(p.gas or p.composition)


def _describe(plan: Plan, formula: Formula) -> str:
    """Formula, with its electrons per carbon and what has as many: the reason why two explanations look alike."""

    def per_carbon(of: Formula) -> Fraction:
        return degree_of_reduction(of, plan.options.nitrogen_source, plan.options.references) / of["C"]

    try:
        own = per_carbon(formula) if formula["C"] else None
        alike = [n for n, f in plan.formulas.items() if f["C"] and own is not None and per_carbon(f) == own]
    except Refusal:
        return formula.text
    if own is None:
        return formula.text
    return f"{formula.text}, {float(own):.3g} electrons per carbon" + (f" like {' and '.join(alike)}" if alike else "")
