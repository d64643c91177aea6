"""From network and options to a checked plan: what each stream holds and what each node does.

All that contradicts itself is found here, before a balance is written, and reported together.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from fractions import Fraction
from typing import Any

from reconcile import Network, did_you_mean

from .formula import SYMBOLS, Formula, parse_formula
from .options import ElementsOptions, require_basis
from .plan import REDUCTION, NodePlan, Plan, StreamPlan
from .possible import check_plan
from .reactions import CHARGE, parse_reaction, require_balanced
from .reduction import reduction_weights
from .refusal import Mistakes, Refusal

__all__ = ["make_plan"]

# Losses are offered by themselves where a stream is one of these; anything else has to say so.
_GASES = ("O2", "N2", "CO2", "CO", "H2", "CH4", "NH3", "H2S", "Ar", "He")
_AIR = {"O2": 0.2095, "CO2": 0.0004}  # dry air, rounded (O2 20.95 %: US Standard Atmosphere 1976, 0.209476)


def make_plan(network: Network, options: ElementsOptions) -> Plan:
    """Check network and options against each other.

    Raises
    ------
    Refusal
        With everything that was found.
    """
    mistakes = Mistakes()
    formulas = {name: parse_formula(text) for name, text in options.species.items()}
    hidden = {name: parse_formula(text) for name, text in options.hidden.items()}
    mistakes.unknown(options.inert, formulas, "inert")
    mistakes.unknown(options.weighed, formulas, "weighed")
    mistakes.unknown(options.air or {}, formulas, "air")
    reactions = _reactions(mistakes, options, formulas)
    conserve, weights = _conserved(mistakes, options, formulas, hidden)
    water = {n for n, f in formulas.items() if dict(f.composition) == {"H": 2, "O": 1} and not f.charge}
    streams = _streams(mistakes, network, formulas, water)
    nodes = _nodes(mistakes, network, options, formulas)
    air = options.air or _air(formulas, options.inert)
    plan = Plan(options, formulas, hidden, streams, nodes, conserve, weights, reactions, air, water)
    if not mistakes:
        check_plan(mistakes, plan)
    mistakes.raise_if_any()
    return plan


def _reactions(
    mistakes: Mistakes, options: ElementsOptions, formulas: Mapping[str, Formula]
) -> dict[str, dict[str, Fraction]]:
    read = {}
    for name, text in options.reactions.items():
        if name in formulas:
            mistakes.add("name-clash", f"{name!r} is both a species and a reaction", "rename one")
        try:
            read[name] = parse_reaction(text, formulas, name=f"reaction {name!r}")
            require_balanced(read[name], formulas, name=f"reaction {name!r}", tolerance=options.reaction_tolerance)
        except Refusal as error:
            mistakes.extend(error.mistakes)
    return read


def _conserved(
    mistakes: Mistakes, options: ElementsOptions, formulas: Mapping[str, Formula], hidden: Mapping[str, Formula]
) -> tuple[tuple[str, ...], dict[str, Fraction]]:
    reacting = [f for n, f in formulas.items() if n not in options.inert]
    present = list(dict.fromkeys(e for f in reacting for e in f.composition))
    if any(f.charge for f in reacting):
        present.append(CHARGE)
    if options.conserve is None:
        return tuple(present), {}
    for row in options.conserve:
        if row != REDUCTION and row not in present:
            known = [*present, REDUCTION]
            hint = did_you_mean(row, known) or f"write any of {', '.join(known)}"
            what = "occurs in no species that reacts" if row in SYMBOLS or row == CHARGE else "is no element"
            mistakes.add("conserve-unknown", f"conserve: {row!r} {what}", hint)
    weights: dict[str, Fraction] = {}
    if REDUCTION in options.conserve:
        elements = dict.fromkeys(e for f in (*reacting, *hidden.values()) for e in f.composition)
        try:
            weights = reduction_weights(elements, options.nitrogen_source, options.references)
        except Refusal as error:
            mistakes.extend(error.mistakes)
    return tuple(options.conserve), weights


def _air(formulas: Mapping[str, Formula], inert: Iterable[str]) -> dict[str, float]:
    air = {n: _AIR[f.text] for n, f in formulas.items() if f.text in _AIR}
    rest = [n for n, f in formulas.items() if f.text == "N2" or n in inert]
    if rest and air:
        air[rest[0]] = 1.0 - sum(air.values())
    return air


def _streams(
    mistakes: Mistakes, network: Network, formulas: Mapping[str, Formula], water: set[str]
) -> tuple[StreamPlan, ...]:
    plans = []
    for index, name in enumerate(network.streams):
        said: Mapping[str, Any] = network.stream_options.get(name, {})
        composition = said.get("composition")
        held = said.get("species") or (list(composition) if composition else None)
        if held is None and name in formulas:
            held = name
        if held is None:
            mistakes.add(
                "stream-species",
                f"stream {name!r} does not say what it holds",
                f"write species: [...] with any of {', '.join(formulas)}",
            )
            continue
        species = (held,) if isinstance(held, str) else tuple(dict.fromkeys(held))
        mistakes.unknown(species, formulas, f"stream {name!r}")
        gas = said.get("gas")
        try:
            require_basis(gas)
        except Refusal as error:
            for m in error.mistakes:
                mistakes.add(m.code, f"stream {name!r}: {m.message}", m.hint)
        if gas == "wet" and not composition and not water & set(species):
            mistakes.add(
                "wet-gas-water",
                f"stream {name!r} is a wet gas, but water is not among its species",
                "add the water, or write gas: dry",
            )
        if said.get("volume_at") and gas is None and not composition and len(species) > 1:
            mistakes.add(
                "wet-or-dry",
                f"stream {name!r} has a gas volume, but not whether it is dry or wet",
                "write gas: dry or gas: wet",
            )
        fixed = _composition(mistakes, name, composition, species) if composition else None
        current = bool(said.get("current"))
        if current and any(f.composition or f.charge != -1 for f in map(formulas.get, species) if f):
            mistakes.add("current-electrons", f"stream {name!r} is no stream of electrons", "give it species e-")
        leak = said.get("can_leak")
        plans.append(
            StreamPlan(
                name,
                int(network.source[index]),
                int(network.target[index]),
                species,
                fixed,
                gas if gas in ("dry", "wet") else None,
                said.get("volume_at"),
                current,
                bool(gas) or all(formulas[s].text in _GASES for s in species if s in formulas)
                if leak is None
                else bool(leak),
            )
        )
    return tuple(plans)


def _composition(
    mistakes: Mistakes, stream: str, said: Mapping[str, Any], species: tuple[str, ...]
) -> dict[str, float]:
    if set(said) != set(species):
        mistakes.add("composition-species", f"stream {stream!r}: species and composition differ", "leave species out")
    rest = [s for s, v in said.items() if v == "rest"]
    numbers = {s: float(v) for s, v in said.items() if v != "rest"}
    total = sum(numbers.values())
    if len(rest) > 1 or any(v < 0 for v in numbers.values()):
        mistakes.add("composition-sum", f"stream {stream!r}: 'rest' may stand once, and no fraction is below 0", "")
    elif (rest and total > 1) or (not rest and abs(total - 1) > 1e-6):
        hint = "write fractions between 0 and 1; 20.95 % is 0.2095" if total > 2 else "write rest for the remainder"
        mistakes.add("composition-sum", f"stream {stream!r}: the composition adds up to {total:g}, not 1", hint)
    return {s: 1.0 - total if s in rest else numbers[s] / (1.0 if rest else total or 1.0) for s in said}


def _nodes(
    mistakes: Mistakes, network: Network, options: ElementsOptions, formulas: Mapping[str, Formula]
) -> tuple[NodePlan, ...]:
    plans = []
    for name in network.nodes:
        said = network.node_options.get(name, {})
        reacts = said.get("reacts", False)
        stored = tuple(said.get("accumulates", ()))
        mistakes.unknown(stored, formulas, f"node {name!r} accumulates")
        chosen = () if isinstance(reacts, bool) else tuple(reacts)
        for reaction in chosen:
            if reaction not in options.reactions:
                mistakes.add(
                    "reaction-unknown",
                    f"node {name!r}: there is no reaction {reaction!r}",
                    did_you_mean(reaction, options.reactions) or "declare it under domains: elements: reactions",
                )
        mode = "reactions" if chosen else "elements" if reacts is True else "mixes"
        plans.append(NodePlan(name, mode, chosen, stored))
    return tuple(plans)
