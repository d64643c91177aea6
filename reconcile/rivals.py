"""Says so where the balances have two answers."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from .errors import Notice

if TYPE_CHECKING:
    from .adjust.table import Table
    from .model import Model

__all__ = ["rival_notices"]


def rival_notices(table: Table, model: Model, labels: Sequence[str]) -> list[Notice]:
    """One notice for all snapshots in which another start ended at another answer."""
    found = [g for g in table.groups if g.rival is not None]
    if not found:
        return []
    first = found[0]
    rival = first.rival
    assert rival is not None
    name, unit = model.names[rival.column], model.units[rival.column]
    where = (
        "" if table.size == 1 else f" in {len(found)} of {table.size} snapshots, the first {labels[int(first.rows[0])]}"
    )
    given, left = float(first.x[0, rival.column]), float((first.parity[0] ** 2).sum())
    return [
        Notice(
            "two-answers",
            f"two answers close the balances{where}: {name} at {given:.6g} {unit}, as given here, with χ² {left:.4g}; or at "
            f"{rival.value:.6g} {unit}, with χ² {rival.objective:.4g}. If the other is meant, state its value under design: "
            "or a bound that excludes this one",
        )
    ]
