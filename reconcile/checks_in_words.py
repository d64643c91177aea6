"""Checks and dependent balances of a linearisation in words."""

from __future__ import annotations

import numpy as np

from .adjust.eliminate import dependent_rows
from .adjust.structure import checks
from .adjust.table import Group
from .model import Model

__all__ = ["checks_in_words", "dependent_in_words", "sum_in_words"]


def sum_in_words(terms: dict[str, float]) -> str:
    """Write a weighted sum of names, e.g. ``F + R - D``."""
    text = ""
    for name, c in terms.items():
        c = round(c, 9)
        sign = (" - " if c < 0 else " + ") if text else ("-" if c < 0 else "")
        text += f"{sign}{name}" if abs(c) == 1 else f"{sign}{abs(c):.4g} * {name}"
    return text


def checks_in_words(model: Model, group: Group) -> tuple[str, ...]:
    """Every independent check as a combination of the things that are read.

    For a case with products the linearised check is shown by the balances it combines.
    """
    present = np.setdiff1d(group.present, group.absent)
    columns = group.columns[present]
    taken = np.isin(np.arange(model.size), [*columns, *model.fixed])
    free = np.flatnonzero(~taken)
    combined = checks(group.jacobian[:, columns], group.jacobian[:, free])
    out = []
    for row in combined:
        if not group.equations.is_linear:
            out.append(" with ".join(model.row_names[int(k)] for k in np.flatnonzero(row)))
            continue
        weights = row @ group.jacobian[:, columns]
        terms = {model.tags[present[j]]: weights[j] for j in np.flatnonzero(np.abs(weights) > 1e-9)}
        lead = abs(next(iter(terms.values())))
        constant = float(
            row @ group.equations.rhs - row @ group.jacobian[:, list(model.fixed)] @ list(model.fixed.values())
        )
        right = 0.0 if abs(constant) < 1e-12 else constant / lead
        out.append(f"{sum_in_words({k: v / lead for k, v in terms.items()})} = {right:g}")
    return tuple(out)


def dependent_in_words(model: Model, group: Group) -> tuple[str, ...]:
    """Balances that others imply: true, but no further check."""
    live = [c for c in range(model.size) if c not in model.fixed]
    out = []
    for row in dependent_rows(group.jacobian[:, live]):
        names = [model.row_names[int(k)] for k in np.flatnonzero(row)]
        if len(names) == 1:
            out.append(f"{names[0]} says nothing about what is read or unknown here")
        else:
            out.append(f"{names[-1]} follows from {', '.join(names[:-1])}")
    return tuple(out)
