"""Meters that could be added, ranked for one goal."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..canvas import Canvas, Scale, cut, text_width, ticks
from .sheet import Figure

if TYPE_CHECKING:
    from ...planner import Placements

__all__ = ["placements"]

ROW, TOP, WIDTH, MOST = 28.0, 50.0, 760.0, 12


def placements(found: Placements, most: int = MOST) -> Figure | None:
    """Draw what a goal's number is now and would be with each added meter, the best first.

    Parameters
    ----------
    found : Placements
    most : int
        At most so many.

    Returns
    -------
    Figure or None
        None where nothing was offered.
    """
    ranked = [p for p in found.ranked if p.effect][:most] or list(found.ranked[:3])
    if not ranked:
        return None
    names = [" and ".join(found.offers[m].variable for m in p.meters) for p in ranked]
    left = min(250.0, 14 + max(text_width(n, 13) for n in names))
    height = TOP + ROW * len(ranked) + 26
    bottom = height - 26
    before = ranked[0].before
    finite = [v for p in ranked for v in (p.before, p.after) if math.isfinite(v)]
    c = Canvas(WIDTH, height)
    x = Scale(0.0, 1.05 * max([*finite, 1e-300]), left + 10, WIDTH - 130)
    unit = f" ({found.unit})" if found.unit else ""
    c.text((left + 10, 20), f"{found.measure}{unit} with this meter added", "ink", 12, bold=True)
    for v in ticks(0.0, x.high, 5):
        c.line((x(v), TOP - 10), (x(v), bottom), "hair")
        c.text((x(v), bottom + 17), f"{v:g}", "soft", 12, "middle")
    c.line((x(0), TOP - 10), (x(0), bottom), "ink")
    for i, (p, name) in enumerate(zip(ranked, names, strict=True)):
        y = TOP + ROW * i
        c.text((left, y + 13), cut(name, left - 8, 13), "ink", 13, "end")
        if math.isfinite(p.after):
            c.box(x(0), y + 3, x(p.after) - x(0), 11, "main" if p.effect else "wash", edge=None if p.effect else "main")
        price = f", price {p.price:g}" if p.price else ""
        c.text((x(p.after) + 8 if math.isfinite(p.after) else x(0) + 8, y + 13), _value(p.after) + price, "soft", 12)
    if math.isfinite(before):
        c.line((x(before), TOP - 10), (x(before), bottom), "mark", 1.5, "6 4")
        c.text((x(before), TOP - 14), f"now {before:.3g}", "mark", 12, "middle")
    best = ranked[0]
    description = (
        f"Goal: {found.goal}. {found.measure.capitalize()}{unit} is {_value(before)} now; the best single addition, "
        f"{names[0]}, makes it {_value(best.after)}."
        if best.effect
        else f"Goal: {found.goal}. No meter that was offered changes anything."
    )
    rows = [
        (
            n,
            _value(p.before),
            _value(p.after),
            f"{p.price:g}" if p.price else "-",
            str(p.checks),
            "yes" if p.effect else "no",
        )
        for n, p in zip(names, ranked, strict=True)
    ]
    return Figure(
        "placements",
        "Which meter to add",
        description,
        c,
        ("a meter on", "now", "then", "price", "checks", "effect"),
        rows,
    )


def _value(value: float) -> str:
    return f"{value:.3g}" if math.isfinite(value) else "never"
