"""A sheet to draw on: lines, boxes and text as SVG, in roles instead of colours."""

from __future__ import annotations

import math
from collections.abc import Sequence

from .markup import Markup, element, join

__all__ = ["HATCH", "Canvas", "Scale", "cut", "text_width", "tick_text", "ticks"]

Point = tuple[float, float]

_NARROW = frozenset("iIjlt.,:;'|!()[]{} fr-/1")
_WIDE = frozenset("mwMW@%→±χσΣ")

HATCH = Markup(
    '<pattern id="hatch-of-flows" width="6" height="6" patternUnits="userSpaceOnUse" patternTransform="rotate(45)">'
    '<line x1="0" y1="0" x2="0" y2="6" class="s-mark" stroke-width="2"/></pattern>'
)
"""Hatching for flagged spans; a document defines it once."""


def text_width(text: str, size: float = 12.0) -> float:
    """Width of a text in pixels, estimated from above for the fonts that pages ask for."""
    units = 0.0
    for c in text:
        units += 0.34 if c in _NARROW else 0.88 if c in _WIDE else 0.69 if c.isupper() else 0.58
    return units * size


def cut(text: str, width: float, size: float = 12.0) -> str:
    """Shorten a text to a width; the end, which tells tags apart most often, is kept too."""
    if text_width(text, size) <= width:
        return text
    keep = len(text)
    while keep > 2 and text_width(text[: keep - keep // 3] + "…" + text[len(text) - keep // 3 :], size) > width:
        keep -= 1
    return text[: keep - keep // 3] + "…" + text[len(text) - keep // 3 :]


def ticks(low: float, high: float, count: int = 5) -> list[float]:
    """Round numbers between two values, about so many."""
    if not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        return [low] if math.isfinite(low) else []
    rough = (high - low) / max(count, 1)
    power = 10.0 ** math.floor(math.log10(rough))
    step = next(s * power for s in (1.0, 2.0, 2.5, 5.0, 10.0) if s * power >= rough * (1 - 1e-9))
    first = math.ceil(low / step - 1e-9)
    return [k * step for k in range(first, math.floor(high / step + 1e-9) + 1)]


def tick_text(value: float, step: float) -> str:
    """Show a tick with just as many decimals as its step needs."""
    places = next((d for d in range(10) if abs(round(step, d) - step) <= 1e-9 * abs(step)), 10)
    text = f"{value:.{places}f}"
    return text if len(text) < 9 else f"{value:.3g}"


class Scale:
    """A straight map from values to pixels."""

    def __init__(self, low: float, high: float, start: float, end: float) -> None:
        if not high > low:
            low, high = low - 1.0, low + 1.0
        self.low, self.high, self.start, self.end = low, high, start, end

    def __call__(self, value: float) -> float:
        """Pixel of a value; beyond the ends it stays at the end."""
        inside = min(max(value, self.low), self.high)
        return self.start + (inside - self.low) / (self.high - self.low) * (self.end - self.start)

    def beyond(self, value: float) -> bool:
        """Whether a value lies off the sheet."""
        return not self.low <= value <= self.high


class Canvas:
    """Collects shapes. Every shape has a role of the palette, so that pages can change between light and dark.

    Parameters
    ----------
    width, height : float
        Pixels.
    """

    def __init__(self, width: float, height: float) -> None:
        self.width, self.height = width, height
        self._shapes: list[Markup] = []

    def add(self, shape: Markup) -> None:
        """Add a shape that was made elsewhere."""
        self._shapes.append(shape)

    def line(
        self, a: Point, b: Point, role: str = "ink", width: float = 1.0, dash: str | None = None, cap: str | None = None
    ) -> None:
        """Draw a straight line."""
        self.add(
            element(
                "line", x1=float(a[0]), y1=float(a[1]), x2=float(b[0]), y2=float(b[1]), class_=f"s-{role}",
                stroke_width=width, stroke_dasharray=dash, stroke_linecap=cap,
            )
        )  # fmt: skip

    def path(self, d: str, role: str = "ink", width: float = 1.5, dash: str | None = None) -> None:
        """Draw a curve given as path data."""
        self.add(
            element("path", d=d, class_=f"s-{role}", stroke_width=width, stroke_dasharray=dash, stroke_linejoin="round")
        )

    def polyline(self, points: Sequence[Point], role: str = "ink", width: float = 1.5, dash: str | None = None) -> None:
        """Draw a line through points."""
        if len(points) > 1:
            self.path("M" + "L".join(f"{_n(x)} {_n(y)}" for x, y in points), role, width, dash)

    def area(self, points: Sequence[Point], role: str = "wash") -> None:
        """Fill the area that points enclose."""
        if len(points) > 2:
            d = "M" + "L".join(f"{_n(x)} {_n(y)}" for x, y in points) + "Z"
            self.add(element("path", d=d, class_=f"f-{role}"))

    def box(
        self,
        x: float,
        y: float,
        width: float,
        height: float,
        role: str | None = "main",
        *,
        edge: str | None = None,
        edge_width: float = 1.0,
        dash: str | None = None,
        round_: float = 0.0,
        hatched: bool = False,
    ) -> None:
        """Draw a rectangle: filled with a role, with an edge, or hatched."""
        classes = " ".join(([f"s-{edge}"] if edge else []) + ([f"f-{role}"] if role else []))
        style = "fill:url(#hatch-of-flows)" if hatched else "fill:none" if not role else None
        self.add(
            element(
                "rect", x=float(x), y=float(y), width=float(max(width, 0.0)), height=float(max(height, 0.0)),
                rx=round_ or None, class_=classes or None, stroke_width=edge_width if edge else None,
                stroke_dasharray=dash, style=style,
            )
        )  # fmt: skip

    def dot(self, at: Point, radius: float = 3.0, role: str = "main", *, hollow: bool = False) -> None:
        """Draw a disc, or a ring."""
        classes = f"s-{role} f-card" if hollow else f"f-{role}"
        self.add(
            element(
                "circle", cx=float(at[0]), cy=float(at[1]), r=float(radius), class_=classes,
                stroke_width=1.5 if hollow else None,
            )
        )  # fmt: skip

    def arrow_head(self, tip: Point, direction: Point, role: str = "ink", size: float = 8.0) -> None:
        """Draw a slim arrow head with its tip at a point."""
        length = math.hypot(*direction) or 1.0
        u, v = direction[0] / length, direction[1] / length
        x, y = tip
        base = (x - size * u, y - size * v)
        half = 0.45 * size
        points = [(x, y), (base[0] - half * v, base[1] + half * u), (base[0] + half * v, base[1] - half * u)]
        self.area(points, role)

    def text(
        self,
        at: Point,
        text: str,
        role: str = "ink",
        size: float = 12.0,
        anchor: str = "start",
        *,
        bold: bool = False,
        halo: bool = False,
    ) -> None:
        """Write a line of text, its baseline at a point."""
        self.add(
            element(
                "text", text, x=float(at[0]), y=float(at[1]), class_=f"f-{role}" + (" halo" if halo else ""),
                font_size=size, text_anchor=None if anchor == "start" else anchor,
                font_weight="600" if bold else None,
            )
        )  # fmt: skip

    def markup(self) -> Markup:
        """All shapes, in the order in which they were drawn."""
        return join(*self._shapes)


def _n(value: float) -> str:
    return f"{value:.1f}".removesuffix(".0")
