"""What each meter can show: the share of its error that would be seen, and the smallest bias that is noticed."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..canvas import Canvas, Scale, cut, text_width, ticks
from ..numbers import plain
from .sheet import Figure

if TYPE_CHECKING:
    from ...coverage import Coverage, CoverageLine

__all__ = ["detectability"]

ROW, TOP, WIDTH = 28.0, 58.0, 760.0


def detectability(found: Coverage) -> Figure | None:
    """Draw share checked and smallest detectable bias of every reading.

    Parameters
    ----------
    found : Coverage

    Returns
    -------
    Figure or None
        None without readings.
    """
    lines = [x for x in found.lines if math.isfinite(x.share) and x.kind != "shared error"]
    if not lines:
        return None
    left = min(190.0, 14 + max(text_width(_name(x), 13) for x in lines))
    half = (WIDTH - left - 24) / 2
    height = TOP + ROW * len(lines) + 26
    bottom = height - 26
    c = Canvas(WIDTH, height)
    share = Scale(0.0, 1.0, left + 10, left + half - 90)
    ratios = [x.smallest / x.sigma_before for x in lines if math.isfinite(x.smallest) and x.sigma_before > 0]
    # A reading that is hardly checked would squeeze all others: bars end in an arrow there, the number stays.
    reach = max(6.0, min(max(ratios, default=6.0), 4 * sorted(ratios)[len(ratios) // 2] if ratios else 6.0))
    room = max(text_width(_small(x), 12) for x in lines) + 20
    size = Scale(0.0, reach * 1.02, left + half - 20, max(WIDTH - room, left + half + 60))
    c.text((share.start, 22), "Share of an error that shows", "ink", 12, bold=True)
    c.text((size.start, 22), f"Smallest bias noticed ({100 * found.power:g} %), in sigmas", "ink", 12, bold=True)
    for scale, values in ((share, [0.0, 0.5, 1.0]), (size, ticks(0.0, reach, 4))):
        for v in values:
            c.line((scale(v), TOP - 12), (scale(v), bottom), "hair")
            text = f"{100 * v:.0f} %" if scale is share else f"{v:g}"
            c.text((scale(v), bottom + 17), text, "soft", 12, "middle")
        c.line((scale(0), TOP - 12), (scale(0), bottom), "ink")
    for i, x in enumerate(lines):
        y = TOP + ROW * i
        c.text((left, y + 13), cut(_name(x), left - 8, 13), "ink", 13, "end")
        if x.share == 0:
            c.box(share(0) - 5, y + 3, 10, 10, None, edge="soft", edge_width=1.5)
            c.text((share(0) + 12, y + 13), "○ not checked", "soft", 12)
            c.text((size(0) + 8, y + 13), "never", "soft", 12)
            continue
        c.box(share(0), y + 3, share(x.share) - share(0), 10, "main")
        c.text((share(x.share) + 6, y + 13), f"{100 * x.share:.0f} %", "soft", 12)
        ratio = x.smallest / x.sigma_before if x.sigma_before > 0 else math.inf
        c.box(size(0), y + 3, size(ratio) - size(0), 10, "wash", edge="main")
        end = size(ratio)
        if size.beyond(ratio):
            c.arrow_head((end + 8, y + 8), (1, 0), "main", 9)
            end += 8
        c.text((end + 6, y + 13), _small(x), "soft", 12)
    weakest = min(lines, key=lambda x: x.share)
    description = (
        f"For {len(lines)} readings the share of an error that the balances would show, and the smallest bias noticed with "
        f"{100 * found.power:g} % chance at {100 * found.level:g} % false alarms; least is checked of {_name(weakest)}, "
        f"{100 * weakest.share:.0f} %."
    )
    rows = [
        (
            _name(x), x.unit, f"{100 * x.share:.1f} %", plain(x.sigma_before, x.sigma_before),
            f"{x.smallest:.3g}" if math.isfinite(x.smallest) else "never", _percent(x),
            f"{x.smallest_of_all:.3g}" if math.isfinite(x.smallest_of_all) else "never",
        )
        for x in lines
    ]  # fmt: skip
    header = ("reading", "unit", "share checked", "sigma", "smallest", "of the value", "smallest when all are tested")
    return Figure("detectability", "What each reading's check is worth", description, c, header, rows)


def _name(x: CoverageLine) -> str:
    return x.item


def _percent(x: CoverageLine) -> str:
    if not math.isfinite(x.smallest) or not math.isfinite(x.value) or x.value == 0:
        return "-"
    return f"{100 * x.smallest / abs(x.value):.1f} %"


def _small(x: CoverageLine) -> str:
    if not math.isfinite(x.smallest):
        return "never"
    share = _percent(x)
    return f"{float(f'{x.smallest:.2g}'):g} {x.unit}" + (f" = {share}" if share != "-" and len(x.unit) < 7 else "")
