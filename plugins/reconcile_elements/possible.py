"""What a plan may still contradict: compositions, species that nothing can use or make, products that cannot form."""

from __future__ import annotations

from collections.abc import Mapping

from reconcile import did_you_mean

from .exact import null_space
from .formula import Formula
from .plan import REDUCTION, Plan
from .reactions import CHARGE
from .refusal import Mistakes

__all__ = ["can_form", "check_plan"]


def check_plan(mistakes: Mistakes, plan: Plan) -> None:
    """Record whatever cannot be: called with a plan whose parts are sound each by itself."""
    _uncertain(mistakes, plan)
    _weighed(mistakes, plan)
    for index in range(len(plan.nodes)):
        _possible(mistakes, plan, index)
    _hidden(mistakes, plan)


def _uncertain(mistakes: Mistakes, plan: Plan) -> None:
    mistakes.unknown(plan.options.uncertain, plan.formulas, "uncertain")
    for name, sigmas in plan.options.uncertain.items():
        if name not in plan.formulas:
            continue
        formula = plan.formulas[name]
        for row in sigmas:
            if row == REDUCTION and (REDUCTION not in plan.conserve or len(sigmas) > 1):
                mistakes.add(
                    "uncertain-reduction",
                    f"uncertain: {name!r} gives a sigma of the degree of reduction",
                    "that needs conserve: [C, reduction] and no sigmas of subscripts beside it",
                )
            elif row != REDUCTION and row not in formula.composition:
                mistakes.add(
                    "uncertain-element",
                    f"uncertain: {row!r} does not occur in {name!r} ({formula.text})",
                    did_you_mean(row, [*formula.composition, REDUCTION]),
                )
        if "C" in sigmas and name in plan.options.weighed:
            mistakes.add(
                "uncertain-carbon",
                f"{name!r} is weighed, and its carbon subscript is uncertain as well",
                "write the formula per carbon and put the uncertainty into weighed: sigma",
            )
        for stream in plan.streams:
            if name in stream.species and stream.gas and stream.can_leak:
                mistakes.add(
                    "uncertain-gas",
                    f"{name!r} has an uncertain composition, but is in the gas {stream.name!r} that may leak",
                    "write can_leak: false for that stream",
                )
        reactions = [r for n in plan.nodes for r in n.reactions if name in plan.reactions.get(r, {})]
        if reactions:
            mistakes.add(
                "uncertain-reaction",
                f"{name!r} has an uncertain composition, but takes part in reaction {reactions[0]!r}",
                "its coefficients follow from the composition; conserve elements there with reacts: true",
            )


def _weighed(mistakes: Mistakes, plan: Plan) -> None:
    for name, how in plan.options.weighed.items():
        if how.carbon_fraction is not None and not plan.formulas[name]["C"]:
            mistakes.add("weighed-carbon", f"weighed: {name!r} has no carbon", "leave carbon_fraction out")
        if how.sigma is not None and how.carbon_fraction is None:
            mistakes.add("weighed-sigma", f"weighed: {name!r} has a sigma of nothing", "add carbon_fraction")


def _possible(mistakes: Mistakes, plan: Plan, index: int) -> None:
    """Refuse what can only come or only go, and yet has nothing to become or to be made from."""
    node = plan.nodes[index]
    into = {s for p in plan.streams if p.target == index for s in p.species}
    out = {s for p in plan.streams if p.source == index for s in p.species}
    present = [s for s in plan.formulas if s in into | out]
    if node.mode == "elements":
        reacting = [s for s in present if s not in plan.options.inert]
        free = _changeable(plan, {s: plan.formulas[s] for s in reacting})
    else:
        free = {s for r in node.reactions for s in plan.reactions[r]}
        for species in free - set(present) - set(node.accumulates):
            using = [r for r in node.reactions if species in plan.reactions[r]]
            if len(using) == 1:
                mistakes.add(
                    "species-nowhere",
                    f"reaction {using[0]!r} at {node.name!r} makes or uses {species!r}, which no stream there holds",
                    "add it to a stream; it needs no meter",
                )
    for species in present:
        if species in free or species in node.accumulates or (species in into and species in out):
            continue
        way = "enters" if species in into else "leaves"
        if node.mode == "elements" and species not in plan.options.inert:
            mistakes.add(
                "no-reaction",
                f"{species!r} {way} {node.name!r}, but no reaction among {', '.join(present)} can "
                f"{'use' if way == 'enters' else 'make'} it when {', '.join(plan.conserve)} are conserved",
                "add the species that is missing as a stream without a meter (water, ammonia, H+, ...), or shorten "
                "conserve, e.g. [C, reduction]",
            )
        else:
            other = "leaves" if way == "enters" else "enters"
            mistakes.add(
                "species-one-way",
                f"{species!r} {way} {node.name!r} but never {other} it, and nothing there makes or uses it",
                "if it reacts there write reacts: true (or the reactions), else add it to a stream",
            )


def _changeable(plan: Plan, formulas: Mapping[str, Formula]) -> set[str]:
    """Species that take part in some reaction among these that keeps what is conserved."""
    matrix = [[plan.content(f, row) for f in formulas.values()] for row in plan.conserve]
    basis = null_space(matrix, len(formulas))
    return {s for j, s in enumerate(formulas) if any(v[j] for v in basis)}


def can_form(plan: Plan, index: int, formula: Formula) -> bool:
    """Whether a product of this formula can form at a node from what is there."""
    here = {s for p in plan.streams if index in (p.source, p.target) for s in p.species} - set(plan.options.inert)
    return "" in _changeable(plan, {**{s: plan.formulas[s] for s in plan.formulas if s in here}, "": formula})


def _hidden(mistakes: Mistakes, plan: Plan) -> None:
    """Refuse products that cannot form: a fault of theirs would break the balances instead of explaining them."""
    places = [i for i, n in enumerate(plan.nodes) if n.mode == "elements"]
    if plan.hidden and not places:
        mistakes.add(
            "hidden-nowhere",
            f"hidden: {', '.join(plan.hidden)} cannot form, since no node reacts freely",
            "write reacts: true at the node where it may form, or leave hidden out",
        )
        return
    known = {e for n, f in plan.formulas.items() if n not in plan.options.inert for e in f.composition}
    for name, formula in plan.hidden.items():
        missing = [e for e in formula.composition if e not in known]
        if missing:
            mistakes.add(
                "hidden-element",
                f"hidden: {name!r} ({formula.text}) holds {', '.join(missing)}, which no species here brings",
                "correct the formula, or add the species that brings it",
            )
        elif formula.charge and not {CHARGE, REDUCTION} & set(plan.conserve) and "H" in plan.conserve:
            mistakes.add(
                "hidden-charge",
                f"hidden: {name!r} ({formula.text}) is charged, but charge is not conserved here",
                "write the formula of its acid or base without a charge, e.g. C2H4O2 for acetate",
            )
        elif not any(can_form(plan, i, formula) for i in places):
            mistakes.add(
                "hidden-impossible",
                f"hidden: no reaction among the species of any node makes {name!r} ({formula.text}) "
                f"when {', '.join(plan.conserve)} are conserved",
                "add the species that is missing (water, ammonia, H+, ...), or leave it out",
            )
