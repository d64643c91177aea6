"""How far each balance was from closing with the raw readings, and that it closes after adjustment."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..canvas import Canvas, Scale, cut, text_width, ticks
from ..numbers import plain, signed
from .sheet import Figure

if TYPE_CHECKING:
    from ...results import Result

__all__ = ["balances"]

ROW, TOP, WIDTH = 30.0, 46.0, 760.0


def balances(result: Result, index: int = 0) -> Figure | None:
    """Draw the closures of one snapshot in their expected spreads, before and after.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    Figure or None
        None where no balance can be formed from readings alone.
    """
    s = result.snapshot(index)
    lines = [b for b in s.balances if math.isfinite(b.ratio)]
    if not lines:
        return None
    left = min(220.0, 14 + max(text_width(b.name, 13) for b in lines))
    says = [f"{signed(b.before, b.spread)} {b.unit}, ratio {b.ratio:+.2f}" for b in lines]
    right = 14 + max(text_width(t, 12) for t in says)
    height = TOP + ROW * len(lines) + 26
    bottom = height - 26
    reach = 1.08 * max(3.0, *(abs(b.ratio) for b in lines))
    c = Canvas(WIDTH, height)
    x = Scale(-reach, reach, left + 8, WIDTH - right - 8)
    c.box(x(-2), TOP - 8, x(2) - x(-2), bottom - TOP + 8, "wash")
    c.dot((x.start + 5, 22), 5, "main")
    c.text((x.start + 15, 26), "raw readings", "ink", 12)
    key = x.start + 15 + text_width("raw readings", 12) + 16
    c.line((key, 16), (key, 28), "ink", 2.5)
    c.text((key + 8, 26), "after adjustment", "ink", 12)
    key += 8 + text_width("after adjustment", 12) + 16
    c.box(key, 16, 16, 12, "wash")
    c.text((key + 22, 26), "±2 spreads", "ink", 12)
    for v in ticks(-reach, reach, 7):
        c.line((x(v), TOP - 8), (x(v), bottom), "hair")
        c.text((x(v), bottom + 17), f"{v:+g}" if v else "0", "soft", 12, "middle")
    for i, (b, said) in enumerate(zip(lines, says, strict=True)):
        y = TOP + ROW * i + ROW / 2
        far = abs(b.ratio) > s.nodal.limit if math.isfinite(s.nodal.limit) else False
        role = "mark" if far else "main"
        c.text((left, y + 4), cut(b.name, left - 8, 13), "ink", 13, "end", bold=far)
        c.line((x(0), y), (x(b.ratio), y), role, 2.5, "5 3" if far else None)
        c.line((x(0), y - 7), (x(0), y + 7), "ink", 2.5)
        c.dot((x(b.ratio), y), 5, role)
        c.text((WIDTH - right + 4, y + 4), said, role if far else "soft", 12)
    worst = max(lines, key=lambda b: abs(b.ratio))
    description = (
        f"Closure of {len(lines)} balances with the raw readings, in the spread that their sigmas let expect; "
        f"the largest is {worst.ratio:+.2f} spreads at {worst.name}. After adjustment all of them close, as they must."
    )
    rows = [
        (b.name, b.unit, signed(b.before, b.spread), plain(b.spread, b.spread), signed(b.ratio, 0.1), f"{b.after:.1e}")
        for b in lines
    ]
    header = ("balance", "unit", "closure before", "expected spread", "ratio", "closure after")
    return Figure("balances", "Balances before and after", description, c, header, rows)
