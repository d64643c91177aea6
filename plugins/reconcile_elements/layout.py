"""From network and options to a checked plan: what each stream holds and what each node does.

All that contradicts itself is found here, before a balance is written, and reported together.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any

from reconcile import Network, did_you_mean

from .formula import SYMBOLS, Formula, parse_formula
from .options import ElementsOptions, require_basis
from .reactions import CHARGE, null_space, parse_reaction, reduction_weights, require_balanced
from .refusal import Mistakes, Refusal

__all__ = ["REDUCTION", "NodePlan", "Plan", "StreamPlan", "make_plan"]

REDUCTION = "reduction"
"""Word under ``conserve`` for the balance of the degree of reduction."""

# Losses are offered by themselves where a stream is one of these; anything else has to say so.
_GASES = ("O2", "N2", "CO2", "CO", "H2", "CH4", "NH3", "H2S", "Ar", "He")
_AIR = {"O2": 0.2095, "CO2": 0.0004}  # dry air, rounded (O2 20.95 %: US Standard Atmosphere 1976, 0.209476)


@dataclass(frozen=True)
class StreamPlan:
    """What one stream holds and how it is measured.

    Attributes
    ----------
    name : str
    source, target : int
        Node indices, -1 outside.
    species : tuple of str
    composition : mapping of str to float, or None
        Known mole fractions.
    gas : {"dry", "wet"} or None
    volume_at : str or None
        Reference conditions of the volume flow.
    current : bool
        Electrons, read as a current.
    can_leak : bool
        Whether a loss before the meter is a possible fault.
    """

    name: str
    source: int
    target: int
    species: tuple[str, ...]
    composition: Mapping[str, float] | None = None
    gas: str | None = None
    volume_at: str | None = None
    current: bool = False
    can_leak: bool = False

    def counted(self, water: set[str]) -> tuple[str, ...]:
        """Species that the flow and the fractions of a gas are made of."""
        return tuple(s for s in self.species if self.gas != "dry" or s not in water)


@dataclass(frozen=True)
class NodePlan:
    """What one node conserves: species, elements, or species with reactions."""

    name: str
    mode: str  # "mixes", "elements" or "reactions"
    reactions: tuple[str, ...] = ()
    accumulates: tuple[str, ...] = ()


@dataclass(frozen=True)
class Plan:
    """Everything that the balances are written from; nothing in it contradicts itself.

    Attributes
    ----------
    formulas, hidden : mapping of str to Formula
    streams, nodes : tuple
    conserve : tuple of str
        Elements, ``charge``, ``reduction``.
    weights : mapping of str to Fraction
        Electrons per atom, when ``reduction`` is conserved.
    reactions : mapping of str to mapping of str to Fraction
    air : mapping of str to float
        Mole fractions of air.
    """

    options: ElementsOptions
    formulas: Mapping[str, Formula]
    hidden: Mapping[str, Formula]
    streams: tuple[StreamPlan, ...]
    nodes: tuple[NodePlan, ...]
    conserve: tuple[str, ...]
    weights: Mapping[str, Fraction]
    reactions: Mapping[str, Mapping[str, Fraction]]
    air: Mapping[str, float]
    water: set[str] = field(default_factory=set)

    def content(self, formula: Formula, row: str) -> Fraction:
        """How much of a conserved quantity one mol of the formula holds."""
        if row == CHARGE:
            return formula.charge
        if row == REDUCTION:
            return sum((self.weights[e] * n for e, n in formula.composition.items()), -formula.charge)
        return formula[row]


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
    _known(mistakes, options.inert, formulas, "inert")
    _known(mistakes, options.weighed, formulas, "weighed")
    _known(mistakes, options.air or {}, formulas, "air")
    reactions = _reactions(mistakes, options, formulas)
    conserve, weights = _conserved(mistakes, options, formulas, hidden)
    water = {n for n, f in formulas.items() if dict(f.composition) == {"H": 2, "O": 1} and not f.charge}
    streams = _streams(mistakes, network, formulas, water)
    nodes = _nodes(mistakes, network, options, formulas)
    air = options.air or _air(formulas, options.inert)
    plan = Plan(options, formulas, hidden, streams, nodes, conserve, weights, reactions, air, water)
    if not mistakes:
        _uncertain(mistakes, plan)
        _weighed(mistakes, plan)
        for index in range(len(nodes)):
            _possible(mistakes, plan, index)
    mistakes.raise_if_any()
    return plan


def _known(mistakes: Mistakes, names: Iterable[str], known: Iterable[str], where: str) -> None:
    known = list(known)
    for name in names:
        if name not in known:
            mistakes.add(
                "species-unknown",
                f"{where}: {name!r} is not one of the species",
                did_you_mean(name, known) or f"known: {', '.join(known)}",
            )


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
        _known(mistakes, species, formulas, f"stream {name!r}")
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
        _known(mistakes, stored, formulas, f"node {name!r} accumulates")
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


def _uncertain(mistakes: Mistakes, plan: Plan) -> None:
    _known(mistakes, plan.options.uncertain, plan.formulas, "uncertain")
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
        matrix = [[plan.content(plan.formulas[s], row) for s in reacting] for row in plan.conserve]
        basis = null_space(matrix, len(reacting))
        free = {s for j, s in enumerate(reacting) if any(v[j] for v in basis)}
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
