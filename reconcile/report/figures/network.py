"""The network of a case with what was read and what was made of it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING

from ..canvas import Canvas, cut, text_width
from ..drawing import Drawn, Stroke, lay_out
from ..numbers import plain, signed
from ..symbols import symbol_of
from ..words import suspects_of
from .sheet import Figure

if TYPE_CHECKING:
    from ...results import Result
    from ...snapshot import Snapshot

__all__ = ["MOST_STREAMS", "network"]

MOST_STREAMS = 150
NEIGHBOURHOOD = 60
"""Beyond `MOST_STREAMS` streams only so many are drawn, those nearest to the suspects."""

SIZE, LINE_HEIGHT, MOST_QUANTITIES, LEGEND = 12.0, 15.0, 3, 40.0
RANK = {"suspect": 3, "tied": 2, "cannot tell": 2}


@dataclass(frozen=True)
class _Line:
    """One quantity of a stream, in words."""

    text: str
    before: str
    after: str
    unit: str
    quantity: str
    word: str
    read: bool


def network(result: Result, index: int = 0) -> Figure | None:
    """Draw the network of one snapshot: streams with raw and adjusted values, nodes with their ratio.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.

    Returns
    -------
    Figure or None
        None for a case without streams.
    """
    if result.spec is None or not result.spec.streams:
        return None
    s = result.snapshot(index)
    spec = result.spec
    nodes = list(spec.nodes)
    number = {name: k for k, name in enumerate(nodes)}
    paths = {n: (number.get(p.source, -1), number.get(p.target, -1)) for n, p in spec.streams.items()}
    told = {name: _quantities(s, name) for name in paths}
    suspects = {x.item: "suspect" if not x.tied_with else "tied" for x in suspects_of(s)}
    chosen = list(paths)
    if len(chosen) > MOST_STREAMS:
        chosen = _nearest(paths, nodes, told, suspects)
    kept = [k for k in range(len(nodes)) if any(k in paths[n] for n in chosen)]
    place = {k: i for i, k in enumerate(kept)}
    ratios = _ratios(s)
    names = [nodes[k] for k in kept]
    sizes = [_node_size(n, ratios.get(n)) for n in names]
    ends = [tuple(place.get(k, -1) for k in paths[n]) for n in chosen]
    labels = [_label_size(n, told[n]) for n in chosen]
    drawn = lay_out(sizes, ends, labels)  # type: ignore[arg-type]
    c = Canvas(max(drawn.width, _legend_width()), drawn.height + LEGEND)
    thick = _widths(s, chosen)
    for n, stroke, wide in zip(chosen, drawn.strokes, thick, strict=True):
        _stroke(c, stroke, told[n], wide)
    for n, (w, h), centre in zip(names, sizes, drawn.centres, strict=True):
        _node(c, n, (w, h), centre, ratios.get(n), suspects.get(n, ""))
    for n, stroke in zip(chosen, drawn.strokes, strict=True):
        _label(c, n, told[n], stroke)
    _legend(c, drawn)
    part = "" if len(chosen) == len(paths) else f" {len(chosen)} of {len(paths)} streams are drawn, near the suspects."
    named = [f"{symbol_of(w)} {n}" for n, w in ((n, _word(told[n])) for n in chosen) if w in RANK]
    description = (
        f"Network with {len(chosen)} streams at {_few(names)}, with raw and adjusted values"
        + (f"; marked: {', '.join(named[:6])}." if named else "; no stream is marked.")
        + part
    )
    rows = [
        (n, spec.streams[n].source, spec.streams[n].target, q.quantity, q.before or "not read", q.after, q.unit, q.word)
        for n in chosen
        for q in told[n] or [_Line("", "", "-", "", "-", "", False)]
    ]
    header = ("stream", "from", "to", "quantity", "read", "adjusted", "unit", "word")
    return Figure("network", "The network", description, c, header, rows, stretches=False)


def _few(names: Sequence[str]) -> str:
    return ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")


def _quantities(s: Snapshot, stream: str) -> list[_Line]:
    """What is known of a stream, its flow first."""
    found = [v for v in s.variables if v.name.startswith(f"{stream}.")]
    read = {r.reads for r in s.readings if r.kind == "meter" and math.isfinite(r.reading)}
    # Of the same thing in two measures (moles, mass) the one that is read is told.
    told = [v for v in found if v.name in read or not any(n.startswith(f"{v.name}.") for n in read)]
    found = [v for v in told if v.name in read or "." not in v.name[len(stream) + 1 :]]
    found.sort(key=lambda v: v.name != f"{stream}.flow")
    out = []
    for v in found:
        meters = [r for r in s.readings if r.kind == "meter" and r.reads == v.name and math.isfinite(r.reading)]
        after = plain(v.adjusted, v.sigma)
        quantity = v.name[len(stream) + 1 :]
        if meters:
            worst = max(meters, key=lambda r: RANK.get(r.word, 0))
            before = plain(worst.reading, min(worst.sigma_before, worst.sigma) or worst.sigma_before)
            after = plain(worst.adjusted, min(worst.sigma_before, worst.sigma) or worst.sigma_before)
            out.append(_Line(f"{before} → {after}", before, after, worst.unit, quantity, worst.word, True))
        else:
            text = f"= {after}" if v.klass == "known" else f"→ {after}" if after != "-" else "unknown"
            out.append(_Line(text, "", after, v.unit, quantity, v.klass, v.klass == "known"))
    return out


def _shown(lines: Sequence[_Line]) -> list[_Line]:
    """Lines of a label: the first, then those that are named, then those that are read."""
    rest = sorted(lines[1:], key=lambda q: (-RANK.get(q.word, 0), not q.read))
    return [*lines[:1], *rest][:MOST_QUANTITIES]


def _word(lines: Sequence[_Line]) -> str:
    return max((q.word for q in lines), key=lambda w: RANK.get(w, 0), default="")


def _texts(name: str, lines: Sequence[_Line]) -> list[tuple[str, str]]:
    """Lines of a label and the word of each."""
    shown = _shown(lines)
    out = [(cut(name, 150), _word(shown[:1]))]
    for q in shown:
        symbol = f"{symbol_of(q.word)} " if q.word in RANK else ""
        what = "" if q.quantity == "flow" else f"{cut(q.quantity, 84)} "
        out.append((f"{symbol}{what}{q.text}" + (f" {q.unit}" if len(q.unit) <= 8 else ""), q.word))
    if len(lines) > len(shown):
        out.append((f"and {len(lines) - len(shown)} more", ""))
    return out


def _label_size(name: str, lines: Sequence[_Line]) -> tuple[float, float]:
    texts = _texts(name, lines)
    return max(text_width(t, SIZE) for t, _ in texts) + 14, LINE_HEIGHT * len(texts) + 8


def _ratios(s: Snapshot) -> dict[str, float]:
    """Largest ratio of the balances of each node that can be formed from readings."""
    out: dict[str, float] = {}
    for b in s.balances:
        if b.node and math.isfinite(b.ratio) and abs(b.ratio) >= abs(out.get(b.node, 0.0)):
            out[b.node] = b.ratio
    return out


def _node_size(name: str, ratio: float | None) -> tuple[float, float]:
    texts = [cut(name, 130, 13), _ratio_text(ratio)]
    return max(text_width(texts[0], 13), text_width(texts[1], 11), 44) + 22, 46.0


def _ratio_text(ratio: float | None) -> str:
    return "not all read" if ratio is None else f"ratio {signed(ratio, 0.1)}"


def _widths(s: Snapshot, streams: Sequence[str]) -> list[float]:
    flows = {v.name.removesuffix(".flow"): abs(v.adjusted) for v in s.variables if v.name.endswith(".flow")}
    largest = max((f for n, f in flows.items() if math.isfinite(f)), default=0.0)
    if largest <= 0:
        return [1.8] * len(streams)
    return [
        1.4 + 2.8 * math.sqrt(flows[n] / largest) if n in flows and math.isfinite(flows[n]) else 1.4 for n in streams
    ]


def _nearest(
    paths: dict[str, tuple[int, int]],
    nodes: Sequence[str],
    told: dict[str, list[_Line]],
    suspects: dict[str, str],
) -> list[str]:
    """Streams nearest to what is named; where nothing is, to the first node."""
    reached = {k for n, (a, b) in paths.items() if _word(told[n]) in RANK for k in (a, b) if k >= 0}
    reached |= {k for k, n in enumerate(nodes) if n in suspects}
    reached = reached or {0}
    chosen: dict[str, None] = {}
    while len(chosen) < NEIGHBOURHOOD:
        ring = [n for n, ends in paths.items() if n not in chosen and any(k in reached for k in ends)]
        if not ring:
            break
        for n in ring[: NEIGHBOURHOOD - len(chosen)]:
            chosen[n] = None
        reached |= {k for n in ring for k in paths[n] if k >= 0}
    return [n for n in paths if n in chosen]


# ------------------------------------------------------------------ strokes


def _data(stroke: Stroke) -> str:
    """Path data: curves between heights, rounded corners for recycles."""
    p = stroke.points
    out = [f"M{p[0][0]:.1f} {p[0][1]:.1f}"]
    if stroke.recycle:
        for before, corner, after in zip(p[:-2], p[1:-1], p[2:], strict=True):
            r = min(8.0, _length(before, corner) / 2, _length(corner, after) / 2)
            a, b = _towards(corner, before, r), _towards(corner, after, r)
            out.append(f"L{a[0]:.1f} {a[1]:.1f}Q{corner[0]:.1f} {corner[1]:.1f} {b[0]:.1f} {b[1]:.1f}")
        out.append(f"L{p[-1][0]:.1f} {p[-1][1]:.1f}")
        return "".join(out)
    for (x1, y1), (x2, y2) in pairwise(p):
        if abs(y1 - y2) < 0.5:
            out.append(f"L{x2:.1f} {y2:.1f}")
        else:
            middle = (x1 + x2) / 2
            out.append(f"C{middle:.1f} {y1:.1f} {middle:.1f} {y2:.1f} {x2:.1f} {y2:.1f}")
    return "".join(out)


def _length(a: tuple[float, float], b: tuple[float, float]) -> float:
    return math.hypot(a[0] - b[0], a[1] - b[1])


def _towards(a: tuple[float, float], b: tuple[float, float], r: float) -> tuple[float, float]:
    whole = _length(a, b) or 1.0
    return a[0] + (b[0] - a[0]) * r / whole, a[1] + (b[1] - a[1]) * r / whole


def _stroke(c: Canvas, stroke: Stroke, lines: Sequence[_Line], wide: float) -> None:
    word = _word(lines)
    tip, before = stroke.points[-1], stroke.points[-2]
    head = 9 + wide
    # The line ends within the arrow head, so that its tip stays sharp.
    end = (tip[0] - math.copysign(0.7 * head, tip[0] - before[0]), tip[1])
    d = _data(Stroke((*stroke.points[:-1], end), stroke.label, stroke.recycle))
    if word in RANK:
        # Two parallel lines: a style that survives grey print.
        c.path(d, "mark", wide + 4)
        c.path(d, "card", wide + 1)
        role = "mark"
    else:
        role = "ink"
        c.path(d, role, wide, None if any(q.read for q in lines) else "6 4")
    c.arrow_head(tip, (tip[0] - before[0], 0.0), role, head)


def _label(c: Canvas, name: str, lines: Sequence[_Line], stroke: Stroke) -> None:
    texts = _texts(name, lines)
    x, base = stroke.label
    for i, (text, word) in enumerate(texts):
        y = base - 9 - LINE_HEIGHT * (len(texts) - 1 - i)
        role = "mark" if word in RANK else "ink" if i == 0 else "soft"
        c.text((x, y), text, role, SIZE, "middle", bold=i == 0 or word in RANK)


def _node(
    c: Canvas, name: str, size: tuple[float, float], centre: tuple[float, float], ratio: float | None, word: str
) -> None:
    (w, h), (x, y) = size, centre
    if word:
        c.box(x - w / 2 - 4, y - h / 2 - 4, w + 8, h + 8, "card", edge="mark", edge_width=1.5, round_=12)
    c.box(
        x - w / 2,
        y - h / 2,
        w,
        h,
        "glow" if word else "wash",
        edge="mark" if word else "main",
        edge_width=1.5,
        round_=9,
    )
    mark = f"{symbol_of(word)} " if word else ""
    c.text((x, y - 2), mark + cut(name, 130, 13), "ink", 13, "middle", bold=True)
    c.text((x, y + 14), _ratio_text(ratio), "ink", 11, "middle")


_LEGEND = (
    ("read", "read → adjusted"),
    ("unread", "not read"),
    ("named", "✗ suspect, ? tied"),
    ("", "ratio: closure of raw readings over its spread"),
)


def _legend_width() -> float:
    return 16.0 + sum((34 if kind else 0) + text_width(text, SIZE) + 20 for kind, text in _LEGEND)


def _legend(c: Canvas, drawn: Drawn) -> None:
    y = drawn.height + LEGEND - 18
    x = 16.0
    for kind, text in _LEGEND:
        if kind == "named":
            c.line((x, y - 4), (x + 28, y - 4), "mark", 6)
            c.line((x, y - 4), (x + 28, y - 4), "card", 3)
        elif kind:
            c.line((x, y - 4), (x + 28, y - 4), "ink", 2, "6 4" if kind == "unread" else None)
        x += 34 if kind else 0
        c.text((x, y), text, "soft", SIZE)
        x += text_width(text, SIZE) + 20
