"""Balances of charge: circuits, solutions, cells."""

from __future__ import annotations

from typing import ClassVar

import numpy as np
from pydantic import BaseModel

from reconcile import OUTSIDE, Domain, Expression, Network, System, units

from .options import ChargeNode, ChargeOptions, ChargeStream, Electrolysis
from .solutions import equivalents_per_unit

FARADAY = 96485.33212
"""C/mol, exact to the digits given (CODATA 2018: the product of two defined constants)."""


class Charge(Domain):
    """Charge: currents balance at every node, solutions are neutral, cells obey Faraday's law.

    Variables: ``stream.current``; with resistances ``node.potential``, ``stream.resistance``, ``stream.emf``;
    ``sample.ION`` concentrations; ``cell.efficiency``. Possible faults: ``node.leakage``, ``sample.missing_anion``,
    ``sample.missing_cation``.
    """

    name: ClassVar[str] = "charge"
    version: ClassVar[str] = "1.0"
    summary: ClassVar[str] = (
        "currents and potentials, electroneutrality of solutions, Faraday's law; leakage, missing ions"
    )
    options: ClassVar[type[BaseModel]] = ChargeOptions
    stream_options: ClassVar[type[BaseModel]] = ChargeStream
    node_options: ClassVar[type[BaseModel]] = ChargeNode
    needs_streams: ClassVar[bool] = False
    after: ClassVar[tuple[str, ...]] = ("elements", "fluid")
    forgotten: ClassVar[tuple[str, ...]] = (
        "unmetered loads and standby consumers",
        "on-site generation",
        "the neutral conductor",
        "alkalinity, when ions are listed",
        "ammonium and organic acids",
    )
    caution: ClassVar[str] = (
        "A current that does not balance may be an earth fault or a leakage current. Work on electrical installations is "
        "for qualified persons under local codes; never open the secondary circuit of a current transformer to check it. "
        "An ion balance that closes does not make water fit to drink or to discharge: limits and licensed laboratories do."
    )

    def build(self, network: Network, system: System, options: ChargeOptions) -> None:
        """Write the balances of circuits, solutions and cells that the options ask for."""
        if options.circuit:
            _circuit(network, system, options)
        for sample, ions in options.solutions.items():
            factors = {name: equivalents_per_unit(sample, name, ion) for name, ion in ions.items()}
            total: Expression | None = None
            for name, ion in ions.items():
                concentration = system.variables(name, [sample], unit=ion.unit, lower=0)
                term = concentration * (factors[name] * (1.0 if ion.charge > 0 else -1.0))
                total = term if total is None else total + term
            if total is None:
                raise ValueError(f"solution {sample!r} lists no ions")
            for kind, sign in (("missing_cation", 1.0), ("missing_anion", -1.0)):
                word = kind.split("_")[1]
                missing = system.faults(
                    kind,
                    [sample],
                    unit="meq/L",
                    lower=0,
                    says=f"{{size}} {{unit}} of {word}s in {{item}} are not listed",
                    separate=f"analyse {{item}} for further {word}s",
                )
                total = total + sign * missing
            system.require(
                total == 0, names=[f"{sample} neutrality"], kind="electroneutrality", unit="meq/L", nodes=[sample]
            )
        for cell, law in options.electrolysis.items():
            _faraday(system, cell, law, options)


def _circuit(network: Network, system: System, options: ChargeOptions) -> None:
    current = system.variables("current", network.streams, unit=options.unit)
    closure = network.incidence @ current
    if options.leakage:
        closure = closure - system.faults(
            "leakage",
            network.nodes,
            unit=options.unit,
            says="{size} {unit} leaking away (or, if negative, in) at {item}",
            separate="have a qualified person measure the earth leakage at {item}",
        )
    system.require(
        closure == 0,
        names=[f"{n} current" for n in network.nodes],
        kind="current",
        unit=options.unit,
        nodes=network.nodes,
    )
    conductors = [s for s, c in zip(network.streams, network.of_streams("conductor", False), strict=True) if c]
    if not conductors:
        return
    number = {s: i for i, s in enumerate(network.streams)}
    ends = {
        s: (network.node_name(int(network.source[number[s]])), network.node_name(int(network.target[number[s]])))
        for s in conductors
    }
    nodes = list(dict.fromkeys(n for pair in ends.values() for n in pair))
    potential = system.variables("potential", nodes, unit=options.potential_unit)
    reference = [n for n, chosen in zip(network.nodes, network.of_nodes("reference", False), strict=True) if chosen]
    if OUTSIDE in nodes and not reference:
        reference = [OUTSIDE]
    if len(reference) != 1 or reference[0] not in nodes:
        raise ValueError("potentials need one node as their zero; write nodes: {name: {reference: true}}")
    system.fix(potential[reference], 0.0)
    resistance = system.variables(
        "resistance", conductors, unit=f"({options.potential_unit})/({options.unit})", lower=0
    )
    rise = potential[[ends[s][1] for s in conductors]] - potential[[ends[s][0] for s in conductors]]
    sources = [s for s, c in zip(network.streams, network.of_streams("source", False), strict=True) if c]
    outside = sorted(set(sources) - set(conductors))
    if outside:
        raise ValueError(f"stream {outside[0]!r} has a source but is no conductor; write conductor: true")
    if sources:
        emf = system.variables("emf", sources, unit=options.potential_unit)
        place = np.zeros((len(conductors), len(sources)))
        place[[conductors.index(s) for s in sources], range(len(sources))] = 1.0
        rise = rise - place @ emf
    system.require(
        rise + resistance * current[conductors] == 0,
        names=[f"{s} voltage" for s in conductors],
        kind="potential",
        unit=options.potential_unit,
        nodes=conductors,
    )


def _faraday(system: System, cell: str, law: Electrolysis, options: ChargeOptions) -> None:
    """Write ``efficiency * current = sum of electrons * rate * F``."""
    item, _, quantity = law.current.partition(".")
    current = system.find(quantity, [item])
    if current is None:
        raise ValueError(f"cell {cell!r}: there is no variable {law.current!r}; name a current such as supply.current")
    carried: Expression | None = None
    for name, electrons in law.products.items():
        item, _, quantity = name.partition(".")
        if not quantity:
            raise ValueError(f"cell {cell!r}: {name!r} is no variable; write e.g. gas.H2")
        rate = system.find(quantity, [item])
        unit = law.unit
        if rate is None:
            rate = system.variables(quantity, [item], unit=law.unit, lower=0)
        else:
            unit = next(u for n, u in system.units().items() if n == name)
        # A mole per second carries F coulomb per second and electron.
        try:
            per_second = units.difference_factor(unit, "mol/s")
            ampere = units.difference_factor(options.unit, "A")
        except ValueError as error:
            raise ValueError(f"cell {cell!r}: Faraday's law needs molar rates and a current ({error})") from None
        term = rate * (electrons * per_second * FARADAY / ampere)
        carried = term if carried is None else carried + term
    if carried is None:
        raise ValueError(f"cell {cell!r} names no products")
    if law.efficiency:
        efficiency = system.variables("efficiency", [cell], unit="fraction", lower=0, upper=1, start=1.0)
        current = efficiency * current
    system.require(current - carried == 0, names=[f"{cell} charge"], kind="Faraday", unit=options.unit, nodes=[cell])
