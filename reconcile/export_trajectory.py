"""The corrected data set of a sequence of windows, in the files that one of single snapshots has."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from .errors import InputError, Problem, did_you_mean
from .export import Package

if TYPE_CHECKING:
    from .trajectory import Trajectory

__all__ = ["package_of_trajectory", "summary_of_trajectory"]


def package_of_trajectory(found: Trajectory) -> Package:
    """What `reconcile.export.write` writes of a sequence; every window is a snapshot with a covariance of its own."""
    names = list(found.variables)
    adjusted = pd.DataFrame(found.adjusted, columns=names)
    sigmas = pd.DataFrame(found.sigmas, columns=names)
    for frame in (adjusted, sigmas):
        frame.insert(0, "snapshot", list(found.labels))
    objective, checks, p = found.by_window
    evidence = pd.DataFrame(
        {
            "snapshot": list(found.labels),
            "seconds": found.lengths,
            "objective": objective,
            "checks": checks,
            "p_value": p,
            "word": found.word,
        }
    )
    covariance: dict[str, Any] = {
        "variables": np.array(names, dtype=np.str_),
        "group_of_snapshot": np.arange(found.size),
    }
    covariance.update({f"factor_{t}": found.factor(t) for t in range(found.size)})
    tables = {
        "adjusted": adjusted,
        "sigmas": sigmas,
        "variables": found.to_frame(),
        "evidence": evidence,
        "suspects": _suspects(found),
        "balances": _balances(found),
        "figures": _figures(found),
    }
    units = dict(zip(found.variables, found.units, strict=True))
    return Package(found.title, tables, units, covariance, summary_of_trajectory(found), found.provenance)


def _suspects(found: Trajectory) -> pd.DataFrame:
    columns = ["fault", "kind", "item", "unit", "size", "sigma", "probability", "tied_with"]
    rows = [
        (s.name, s.kind, s.item, s.unit, s.size, s.sigma, s.probability, " | ".join(s.tied_with)) for s in _named(found)
    ]
    return pd.DataFrame(rows, columns=columns)


def _named(found: Trajectory) -> tuple[Any, ...]:
    from .report.trajectory import suspects_of_trajectory

    return suspects_of_trajectory(found)


def _balances(found: Trajectory) -> pd.DataFrame:
    """Closure of every balance of the domains in every window, adjusted."""
    model = found.model
    rows = []
    for t, x in enumerate(found.solution.x):
        equations = model.with_shared(np.nan_to_num(found.base[t]))
        after, scale = equations.closure(x), equations.largest_term(x)
        for block in model.system.row_blocks:
            for j, name in enumerate(block.names):
                k = block.start + j
                rows.append((found.labels[t], name, block.kind, block.unit, block.writer, after[k], scale[k]))
    columns = ["snapshot", "balance", "kind", "unit", "domain", "after", "largest_term"]
    return pd.DataFrame(rows, columns=columns)


def _figures(found: Trajectory) -> pd.DataFrame:
    from .figures import parse_figure

    columns = ["snapshot", "figure", "formula", "value", "sigma", "sigma_without_covariance", "reason"]
    rows: list[tuple[Any, ...]] = []
    position = {v: i for i, v in enumerate(found.variables)}
    for name, text in found.spec.figures.items():
        figure = parse_figure(text)
        for used in figure.names:
            if used not in position:
                words = f"figure {name!r} uses {used!r}, which is no variable"
                raise InputError(Problem("figure-variable", words, did_you_mean(used, position)))
        for t in range(found.size):
            values = {v: float(found.adjusted[t, position[v]]) for v in figure.names}
            unknown = [v for v, value in values.items() if not np.isfinite(value)]
            reason = f"{', '.join(unknown)} cannot be calculated" if unknown else ""
            value = sigma = diagonal = float("nan")
            if not unknown:
                try:
                    value, slopes = figure.value(values)
                    places, slope = [position[v] for v in slopes], np.array(list(slopes.values()))
                    sigma = float(np.linalg.norm(slope @ found.factor(t)[places]))
                    diagonal = float(np.linalg.norm(slope * found.sigmas[t, places]))
                except (ZeroDivisionError, ValueError, OverflowError):
                    reason = "it has no value here (division by zero or the like)"
            rows.append((found.labels[t], name, text, value, sigma, diagonal, reason))
    return pd.DataFrame(rows, columns=columns)


def summary_of_trajectory(found: Trajectory) -> dict[str, Any]:
    """Machine-readable summary of a sequence; safe for JSON."""
    from .report.trajectory import verdict_of_trajectory

    test = found.test
    return {
        "title": found.title,
        "verdict": verdict_of_trajectory(found),
        "windows": found.size,
        "evidence": {
            "word": found.word,
            "objective": test.objective,
            "checks": test.checks,
            "limit": test.limit if test.checks else None,
            "p_value": test.p if test.checks else None,
        },
        "suspects": [s.as_dict() for s in _named(found)],
        "inventories": {i.name: i.unit for i in found.trajectory.inventories.values()},
        "read_at": "end" if found.trajectory.at_end else "start",
        "beyond": {n: {"value": v, "sigma": s} for n, (v, s) in found.outer.items()},
        "left_out": dict(found.excluded),
        "cautions": list(found.cautions),
        "notices": [{"code": n.code, "message": n.message} for n in found.notices],
        "provenance": dict(found.provenance),
    }
