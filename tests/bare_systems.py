"""Systems that domains wrote, without a case file: points of them, closures, and adjusted readings."""

import numpy as np

from reconcile.adjust.solve import Problem, solve
from reconcile.model import Reading, build_model


def point(system, values):
    """All columns from a mapping of names; faults are zero, everything else must be named."""
    x = np.full(system.size, np.nan)
    for block in system.blocks:
        if block.fault is not None:
            x[block.start : block.stop] = 0.0
    for name, value in values.items():
        x[system.column(name)] = value
    missing = [system.name(int(c)) for c in np.flatnonzero(np.isnan(x))]
    assert not missing, missing
    return x


def relative_closure(system, x):
    e = system.equations
    return np.abs(e.closure(x)) / np.maximum(e.largest_term(x), 1e-300)


def adjust(system, readings, fixed=None):
    """Adjust {variable: (value, sigma)}; return the adjusted values by name, and the solution."""
    tags = [
        Reading(name, ((name, 1.0),), system.unit(system.column(name)), 0.0, sigma)
        for name, (_, sigma) in readings.items()
    ]
    model = build_model(system, tags, fixed=fixed)
    base = model.to_base(np.array([[v for v, _ in readings.values()]]))[0]
    start = system.starts.copy()
    start[list(model.fixed)] = list(model.fixed.values())
    solution = solve(
        Problem(
            equations=model.with_shared,
            sigma=model.sigma,
            columns=model.columns,
            readings=base,
            fixed=np.array(sorted(model.fixed), dtype=np.int64),
            start=start,
            value_dependent=False,
            settle=False,
            lower=model.lower,
            upper=model.upper,
        ),
        names=lambda c: model.names[c],
        row_names=lambda r: model.row_names[r],
    )
    return dict(zip(model.names, solution.x, strict=True)), solution
