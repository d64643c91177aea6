"""A run with meters left out beside the run with all of them."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .layout import table, wrap
from .numbers import plain, signed

if TYPE_CHECKING:
    from ..results import Result

__all__ = ["render_comparison"]


def render_comparison(before: Result, after: Result, snapshot: int = 0) -> str:
    """Compare two results of the same case, variable by variable, for one snapshot.

    Parameters
    ----------
    before : Result
        With all meters.
    after : Result
        With some left out.
    snapshot : int
        Counted from 0.

    Returns
    -------
    str
    """
    left_out = ", ".join(after.excluded)
    rows = []
    for j, name in enumerate(before.variables):
        a, sa = before.adjusted[snapshot, j], before.sigmas[snapshot, j]
        b, sb = after.adjusted[snapshot, j], after.sigmas[snapshot, j]
        rows.append(
            (name, before.units[j], plain(a, sa), plain(sa, sa), plain(b, sb), plain(sb, sb), signed(b - a, sb))
        )
    header = ("WHAT IF", "unit", "with all", "±", f"without {left_out}", "±", "change")
    lost = int(before.checks[snapshot] - after.checks[snapshot])
    text = (
        f"Leaving out {left_out} costs {lost} of {int(before.checks[snapshot])} checks; "
        f"χ² {before.objective[snapshot]:.2f} becomes {after.objective[snapshot]:.2f}"
        + (f" (limit {after.limit[snapshot]:.2f})." if after.checks[snapshot] else ", and no check is left.")
    )
    unknown = [n for j, n in enumerate(after.variables) if after.adjusted[snapshot, j] != after.adjusted[snapshot, j]
               and before.adjusted[snapshot, j] == before.adjusted[snapshot, j]]  # fmt: skip
    if unknown:
        text += f" No longer calculable: {', '.join(unknown)}."
    return table(header, rows, left=(0, 1)) + "\n" + wrap(text) + "\n"
