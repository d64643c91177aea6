"""How far each reading was moved, in its own sigmas, beside its test value."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..canvas import Canvas, Scale, cut, text_width, ticks
from ..numbers import signed
from ..symbols import symbol_of
from .sheet import Figure

if TYPE_CHECKING:
    from ...results import Result
    from ...snapshot_lines import ReadingLine

__all__ = ["adjustments"]

ROW, TOP, WIDTH, LABELS = 34.0, 46.0, 760.0, 170.0


def adjustments(result: Result, index: int = 0) -> Figure | None:
    """Draw the adjustments of one snapshot in sigmas; a thin bar is the test value, a dashed line its limit.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    Figure or None
        None where no reading was there.
    """
    s = result.snapshot(index)
    lines = [r for r in s.readings if math.isfinite(r.in_sigmas)]
    if not lines:
        return None
    limit = s.meter_tests.limit if s.meter_tests.worst >= 0 else math.nan
    sizes = [abs(v) for r in lines for v in (r.in_sigmas, r.z) if math.isfinite(v)]
    reach = 1.08 * max([*sizes, limit if math.isfinite(limit) else 0.0, 1.0])
    left = min(LABELS, 20 + max(text_width(_name(r), 13) for r in lines))
    says = [_said(r) for r in lines]
    right = 14 + max(text_width(t, 12) for t in says)
    height = TOP + ROW * len(lines) + 26
    c = Canvas(WIDTH, height)
    x = Scale(-reach, reach, left + 8, WIDTH - right - 8)
    _frame(c, x, limit, height)
    for i, (r, said) in enumerate(zip(lines, says, strict=True)):
        _row(c, x, r, said, TOP + ROW * i, left, WIDTH - right + 4)
    worst = max(lines, key=lambda r: abs(r.z) if math.isfinite(r.z) else -1.0)
    description = (
        f"Adjustment of {len(lines)} readings in their own sigmas (thick bars) and test values z (thin bars)"
        + (f", compared with {limit:.2f}" if math.isfinite(limit) else "")
        + (f"; the largest test value is {worst.z:+.2f}, of {_name(worst)}." if math.isfinite(worst.z) else ".")
    )
    rows = [
        (_name(r), signed(r.adjustment, r.sigma_before), r.unit, signed(r.in_sigmas, 0.1), signed(r.z, 0.1), r.word)
        for r in lines
    ]
    header = ("reading", "moved by", "unit", "in sigmas", "z", "word")
    return Figure("adjustments", "How far each reading was moved", description, c, header, rows)


def _name(r: ReadingLine) -> str:
    return r.tag.removeprefix("known:")


def _said(r: ReadingLine) -> str:
    moved = f"{signed(r.adjustment, r.sigma_before)} {r.unit}"
    return moved if r.klass == "checked" else "not checked"


def _frame(c: Canvas, x: Scale, limit: float, height: float) -> None:
    bottom = height - 26
    c.box(x.start, 18, 22, 9, "main")
    c.text((x.start + 28, 26), "moved, in sigmas", "ink", 12)
    key = x.start + 28 + text_width("moved, in sigmas", 12) + 18
    c.box(key, 20.5, 22, 4, "ink")
    c.text((key + 28, 26), "test value z", "ink", 12)
    for v in ticks(x.low, x.high, 7):
        c.line((x(v), TOP - 8), (x(v), bottom), "hair")
        c.text((x(v), bottom + 17), f"{v:+g}" if v else "0", "soft", 12, "middle")
    c.line((x(0), TOP - 8), (x(0), bottom), "ink", 1)
    if math.isfinite(limit):
        for v in (-limit, limit):
            c.line((x(v), TOP - 8), (x(v), bottom), "mark", 1.5, "6 4")
        c.text((x(limit), TOP - 12), f"limit {limit:.2f}", "mark", 12, "middle")


def _row(c: Canvas, x: Scale, r: ReadingLine, said: str, top: float, left: float, right: float) -> None:
    named = r.word in ("suspect", "tied", "cannot tell")
    role = "mark" if named else "main"
    symbol = symbol_of(r.word)
    c.text((left, top + 20), cut(_name(r), left - 18, 13), "ink", 13, "end", bold=named)
    if named:
        c.text(
            (left - text_width(cut(_name(r), left - 18, 13), 13) - 6, top + 20), symbol, "mark", 13, "end", bold=True
        )
    if r.klass != "checked":
        c.box(x(0) - 5, top + 10, 10, 10, None, edge="soft", edge_width=1.5)
    else:
        a, b = sorted((x(0), x(r.in_sigmas)))
        c.box(a, top + 7, max(b - a, 1.0), 11, role, edge="ink" if named else None, edge_width=1.2)
        if math.isfinite(r.z):
            a, b = sorted((x(0), x(r.z)))
            c.box(a, top + 21, max(b - a, 1.0), 4, "ink")
    c.text((right, top + 20), said, "mark" if named else "soft", 12)
