"""Builds the elements domain without a case file, and adjusts readings of it."""

import numpy as np
import scipy.linalg
from reconcile_elements import Elements
from reconcile_elements.options import ElementsNode, ElementsOptions, ElementsStream

from reconcile import Network, System

FERMENTATION = {
    "glucose": "C6H12O6",
    "oxygen": "O2",
    "carbon_dioxide": "CO2",
    "biomass": "CH1.8O0.5N0.2",
    "ammonia": "NH3",
    "water": "H2O",
}
CHEMOSTAT = {
    "feed": ("outside", "reactor", "glucose"),
    "uptake": ("outside", "reactor", "oxygen"),
    "base": ("outside", "reactor", "ammonia"),
    "offgas": ("reactor", "outside", "carbon_dioxide"),
    "harvest": ("reactor", "outside", ["biomass", "water"]),
}
STORY = ("feed.glucose", "uptake.oxygen", "offgas.carbon_dioxide", "harvest.biomass")


def network(streams, nodes):
    """Network from (source, target, species or options); options pass the domain's models, as a case file's do."""
    options = {
        name: ElementsStream(**(held if isinstance(held, dict) else {"species": held})).model_dump()
        for name, (_, _, held) in streams.items()
    }
    return Network.from_paths(
        {name: path[:2] for name, path in streams.items()},
        stream_options=options,
        node_options={name: ElementsNode(**said).model_dump() for name, said in nodes.items()},
    )


def build(streams, nodes, **options):
    system = System()
    with system.written_by("elements"):
        Elements().build(network(streams, nodes), system, ElementsOptions(**options))
    return system


def chemostat(streams=None, node=None, **options):
    said = {"unit": "mmol/h", "species": FERMENTATION, **options}
    return build(streams or CHEMOSTAT, {"reactor": node or {"reacts": True}}, **said)


def checks(system, measured, x=None):
    """Orthonormal rows over the measured variables that remain once all others are eliminated."""
    at = np.zeros(system.size) if x is None else x
    jacobian = system.equations.jacobian(at).toarray()
    columns = [system.column(name) for name in measured]
    faults = [c for b in system.blocks if b.fault is not None for c in range(b.start, b.stop)]
    others = [c for c in range(system.size) if c not in columns and c not in faults and c not in system.fixed]
    left = scipy.linalg.null_space(jacobian[:, others].T).T if others else np.eye(len(jacobian))
    reduced = left @ jacobian[:, columns]
    return scipy.linalg.orth(reduced.T, rcond=1e-10).T


def projector(rows):
    basis = scipy.linalg.orth(np.asarray(rows, dtype=float).T, rcond=1e-10)
    return basis @ basis.T


def objective(solution):
    return float(solution.parity @ solution.parity)
