"""From a checked case to a model: network, balances of the domains, readings with units and sigmas."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from . import units
from .case.load import read_what_stands
from .case.references import check_references
from .case.spec import CaseSpec, DomainModels, KnownSpec, MeterSpec, SharedErrorSpec
from .domains import Plugins
from .errors import InputError, Notice, Problems
from .model import Model, Reading, SharedError, build_model
from .network import Network
from .system import System

__all__ = ["Assembled", "assemble", "option_models"]


@dataclass(frozen=True)
class Assembled:
    """A case with its balances written and its readings placed.

    Attributes
    ----------
    spec : CaseSpec
    network : Network
    system : System
    model : Model
    cautions : tuple of str
        What the trades of the domains want said with every result.
    notices : tuple of Notice
    """

    spec: CaseSpec
    network: Network
    system: System
    model: Model
    cautions: tuple[str, ...]
    notices: tuple[Notice, ...]


def assemble(path: str | Path, plugins: Plugins) -> Assembled:
    """Read a case and write its balances.

    Parameters
    ----------
    path : path
        The case file.
    plugins : Plugins
        The loaded domains.

    Returns
    -------
    Assembled

    Raises
    ------
    InputError
        With every problem of the file.
    PluginError
        If a domain failed.
    """
    problems = Problems(str(path))
    spec = read_what_stands(path, problems, option_models=option_models(plugins))
    if spec is None:
        problems.raise_if_any()
    assert spec is not None
    network = Network.from_paths(
        {name: (s.source, s.target) for name, s in spec.streams.items()},
        stream_options={name: s.options for name, s in spec.streams.items()},
        node_options=spec.nodes,
    )
    system = System()
    chosen_options = []
    for name, raw in spec.domains.items():
        kind = plugins.domains[name].domain.options
        chosen_options.append((name, None if kind is None else kind.model_validate(raw)))
    try:
        plugins.build(network, system, chosen_options)
    except InputError as refused:
        problems.extend(refused.problems)
        problems.raise_if_any()
    check_references(spec, system.units(), problems)
    problems.raise_if_any()
    shared, independent = _shared_errors(spec.shared_errors)
    readings = [_meter(m, system, independent.get(m.tag, 1.0)) for m in spec.meters.values()]
    readings += [_prior(k, system) for k in spec.known.values() if k.sigma is not None]
    fixed = {
        k.variable: _to_variable(k.value, k.unit, k.variable, system) for k in spec.known.values() if k.sigma is None
    }
    design = {name: _to_variable(value, unit, name, system) for name, (value, unit) in spec.design.items()}
    model = build_model(system, readings, fixed=fixed, shared=shared, design=design)
    chosen = [plugins.domains[d].domain for d in spec.domains]
    return Assembled(
        spec,
        network,
        system,
        model,
        tuple(d.caution for d in chosen if d.caution),
        (*plugins.notices, *_doubts(spec)),
    )


def option_models(plugins: Plugins) -> dict[str, DomainModels]:
    """Return the option models of every loaded domain, by its name."""
    return {
        name: DomainModels(i.domain.options, i.domain.stream_options, i.domain.node_options)
        for name, i in plugins.domains.items()
    }


def _to_variable(value: float, unit: str, name: str, system: System) -> float:
    factor, offset = units.factor_offset(unit, system.unit(system.column(name)))
    return factor * value + offset


def _meter(m: MeterSpec, system: System, independent: float) -> Reading:
    base = system.unit(system.column(m.reads[0][0]))
    factor, offset = units.factor_offset(m.unit, base)
    reads = []
    for name, coefficient in m.reads:
        own = units.difference_factor(system.unit(system.column(name)), base)
        reads.append((name, coefficient * own))
    relative, absolute = m.sigma.relative, m.sigma.absolute
    span = math.nan if m.span is None else m.span[1] - m.span[0]
    origin = " and ".join(p.text for p in m.sigma.components)
    return Reading(
        m.tag, tuple(reads), m.unit, relative, absolute, factor, offset,
        span=span, origin=origin, independent=independent,
    )  # fmt: skip


def _prior(k: KnownSpec, system: System) -> Reading:
    assert k.sigma is not None
    factor, offset = units.factor_offset(k.unit, system.unit(system.column(k.variable)))
    relative, absolute = k.sigma.relative, k.sigma.absolute
    return Reading(
        f"known:{k.variable}", ((k.variable, 1.0),), k.unit, relative, absolute, factor, offset,
        kind="prior", value=k.value, origin="known: " + " and ".join(p.text for p in k.sigma.components),
    )  # fmt: skip


def _shared_errors(specs: Any) -> tuple[list[SharedError], dict[str, float]]:
    """Causes behind several meters; correlations are split into causes and what is each meter's own."""
    out: list[SharedError] = []
    independent: dict[str, float] = {}
    for spec in specs.values():
        if spec.correlations:
            out.extend(_from_correlations(spec, independent))
        else:
            out.append(_one_cause(spec))
    return out, independent


def _one_cause(spec: SharedErrorSpec) -> SharedError:
    relative, absolute = (tuple(getattr(law, part) for law in spec.sigma) for part in ("relative", "absolute"))
    return SharedError(spec.name, spec.meters, relative, absolute)


def _from_correlations(spec: SharedErrorSpec, independent: dict[str, float]) -> list[SharedError]:
    index = {t: i for i, t in enumerate(spec.meters)}
    matrix = np.eye(len(index))
    for a, b, rho in spec.correlations or ():
        matrix[index[a], index[b]] = matrix[index[b], index[a]] = rho
    own = 0.5 * float(np.linalg.eigvalsh(matrix)[0])
    values, vectors = np.linalg.eigh(matrix - own * np.eye(len(index)))
    for tag in spec.meters:
        independent[tag] = math.sqrt(own)
    none = (0.0,) * len(index)
    return [
        SharedError(f"{spec.name} {c + 1}", spec.meters, none, none, tuple(math.sqrt(v) * vectors[:, c]))
        for c, v in enumerate(values)
        if v > 1e-14
    ]


def _doubts(spec: CaseSpec) -> list[Notice]:
    """Things that are allowed and yet deserve a second look."""
    out = []
    laws = {tuple((p.kind, p.value) for p in m.sigma.components) for m in spec.meters.values()}
    if len(spec.meters) > 2 and laws == {(("absolute", 1.0),)}:
        out.append(
            Notice(
                "same-sigma", f"All {len(spec.meters)} sigmas are 1. The weights then depend on the units. Intended?"
            )
        )
    guessed = [m.tag for m in spec.meters.values() if m.sigma.marked_guess]
    if guessed:
        out.append(
            Notice("guessed-sigma", f"The sigma of {', '.join(guessed)} is a guess that the case marks as such.")
        )
    return out
