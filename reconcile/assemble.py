"""From a checked case to a model: network, balances of the domains, readings with units and sigmas."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from . import units
from .bounds import refuse_conflicts
from .case.load import read_what_stands
from .case.references import check_references
from .case.spec import CaseSpec, DomainModels, KnownSpec, MeterSpec, SharedErrorSpec
from .case.trajectory import TrajectorySpec, check_log, check_rates
from .domains import Plugins
from .doubts import doubts_of_case
from .errors import InputError, Notice, Problems
from .model import Model, Reading, SharedError, build_model
from .network import Network
from .system import System

__all__ = ["Assembled", "assemble", "option_models"]

MOST_BALANCES, MOST_VARIABLES = 6000, 12_000
"""What fits: 5000 balances took 1.9 GB and 11 s on one core; memory grows with their square, time with their cube."""


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
    _refuse_large(system, problems)
    if spec.trajectory is not None:
        _inventories(spec, spec.trajectory, system, problems)
    check_references(spec, system.units(), problems, lambda name: plugins.missing(name, network, chosen_options))
    problems.raise_if_any()
    stays = spec.trajectory.constant_errors if spec.trajectory else ()
    shared = [cause for s in (*spec.shared_errors.values(), *stays) for cause in _causes(s)]
    readings = [_meter(m, system) for m in spec.meters.values()]
    readings += [_prior(k, system) for k in spec.known.values() if k.sigma is not None]
    fixed = {
        k.variable: _to_variable(k.value, k.unit, k.variable, system) for k in spec.known.values() if k.sigma is None
    }
    design = {name: _to_variable(value, unit, name, system) for name, (value, unit) in spec.design.items()}
    model = build_model(system, readings, fixed=fixed, shared=shared, design=design)
    refuse_conflicts(model, spec, problems)
    problems.raise_if_any()
    chosen = [plugins.domains[d].domain for d in spec.domains]
    return Assembled(
        spec,
        network,
        system,
        model,
        tuple(d.caution for d in chosen if d.caution),
        (*plugins.notices, *doubts_of_case(spec)),
    )


def option_models(plugins: Plugins) -> dict[str, DomainModels]:
    """Return the option models of every loaded domain, by its name."""
    return {
        name: DomainModels(
            i.domain.options, i.domain.stream_options, i.domain.node_options, i.domain.needs_streams, i.domain.version
        )
        for name, i in plugins.domains.items()
    }


def _inventories(spec: CaseSpec, trajectory: TrajectorySpec, system: System, problems: Problems) -> None:
    """Declare the inventories that tie windows; one window alone says nothing of them but their reading."""
    check_rates(trajectory, system.units(), spec.where, problems)
    check_log(trajectory, spec.campaign, spec.meters, spec.where, problems)
    problems.raise_if_any()
    with system.written_by("trajectory"):
        for inventory in trajectory.inventories.values():
            item, _, quantity = inventory.name.partition(".")
            system.variables(quantity, [item], unit=inventory.unit)


def _to_variable(value: float, unit: str, name: str, system: System) -> float:
    factor, offset = units.factor_offset(unit, system.unit(system.column(name)))
    return factor * value + offset


def _meter(m: MeterSpec, system: System) -> Reading:
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
        span=span, origin=origin,
    )  # fmt: skip


def _prior(k: KnownSpec, system: System) -> Reading:
    assert k.sigma is not None
    factor, offset = units.factor_offset(k.unit, system.unit(system.column(k.variable)))
    relative, absolute = k.sigma.relative, k.sigma.absolute
    return Reading(
        f"known:{k.variable}", ((k.variable, 1.0),), k.unit, relative, absolute, factor, offset,
        kind="prior", value=k.value, origin="known: " + " and ".join(p.text for p in k.sigma.components),
    )  # fmt: skip


def _refuse_large(system: System, problems: Problems) -> None:
    """Refuse what would not fit into memory: balances are adjusted as full matrices."""
    balances, variables = system.equations.shape
    if balances <= MOST_BALANCES and variables <= MOST_VARIABLES:
        return
    writers = sorted({b.writer for b in system.row_blocks})
    problems.add(
        "too-large",
        f"{balances} balances in {variables} variables, written by {', '.join(writers)}; a case holds at most "
        f"{MOST_BALANCES} balances in {MOST_VARIABLES} variables",
        "cut the network where streams are measured, and make a case of each part",
    )
    problems.raise_if_any()


def _causes(spec: SharedErrorSpec) -> list[SharedError]:
    """Causes behind several meters: one where they move together, else one for each direction of the correlations."""
    relative = np.array([law.relative for law in spec.sigma])
    absolute = np.array([law.absolute for law in spec.sigma])
    if spec.correlations is None:
        return [SharedError(spec.name, spec.meters, tuple(relative), tuple(absolute))]
    index = {t: i for i, t in enumerate(spec.meters)}
    matrix = np.eye(len(index))
    for a, b, rho in spec.correlations:
        matrix[index[a], index[b]] = matrix[index[b], index[a]] = rho
    values, vectors = np.linalg.eigh(matrix)
    none = np.zeros(len(index))
    out: list[SharedError] = []
    # Parts in percent and absolute parts have their own causes, since they move independently of each other.
    for part in ((relative, none), (none, absolute)):
        if not np.any(part[0]) and not np.any(part[1]):
            continue
        for value, vector in zip(values, vectors.T, strict=True):
            shape = np.sqrt(value) * vector
            name = f"{spec.name} {len(out) + 1}"
            out.append(SharedError(name, spec.meters, tuple(shape * part[0]), tuple(shape * part[1])))
    return out
