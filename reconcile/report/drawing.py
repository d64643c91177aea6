"""Where nodes and streams of a network lie on a sheet: layers from left to right, recycles in lanes below.

Layered drawing after Sugiyama, Tagawa & Toda 1981 (IEEE Trans. Syst. Man Cybern. 11, 109): streams against the main
direction are set aside, nodes get layers by longest path, labels are nodes of layers of their own so that they cannot
overlap, crossings are reduced by medians, and heights follow from a least-squares fit that keeps the order. Nothing
here is random, so the same case gives the same sheet.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

from .layers import against, levels

__all__ = ["Drawn", "Stroke", "lay_out"]

Point = tuple[float, float]

GAP_X, GAP_Y, LANE, MARGIN, SWEEPS = 34.0, 18.0, 18.0, 16.0, 24
BELOW, STUB, TURN = 4.0, 14.0, 8.0
"""Room that a stream takes below its label; its straight end before a node, where the arrow head
lies; the distance between recycles that turn beside the same layer."""


@dataclass(frozen=True)
class Stroke:
    """Where one stream runs.

    Attributes
    ----------
    points : tuple of (x, y)
        From its source to its target; between two points of the same height straight, otherwise curved, or, for a
        recycle, with rounded corners.
    label : (x, y)
        Middle of the lower edge of its label; the stream runs along that edge.
    recycle : bool
        Whether it runs against the main direction.
    """

    points: tuple[Point, ...]
    label: Point
    recycle: bool


@dataclass(frozen=True)
class Drawn:
    """A network on a sheet.

    Attributes
    ----------
    width, height : float
    centres : tuple of (x, y)
        Of the nodes.
    strokes : tuple of Stroke
    """

    width: float
    height: float
    centres: tuple[Point, ...]
    strokes: tuple[Stroke, ...]


@dataclass
class _Cell:
    """Something with a place in a layer: a node, the label of a stream, or a bend (of no size).

    `y` is where streams meet it: half-way down a node, `above` of it over `y` and `below` of it under `y`.
    """

    layer: int
    width: float
    above: float
    below: float
    is_node: bool = False
    y: float = 0.0
    x: float = 0.0

    @property
    def height(self) -> float:
        return self.above + self.below


def lay_out(
    nodes: Sequence[tuple[float, float]],
    streams: Sequence[tuple[int, int]],
    labels: Sequence[tuple[float, float]],
) -> Drawn:
    """Lay out a network.

    Parameters
    ----------
    nodes : sequence of (width, height)
        Size of each node.
    streams : sequence of (source, target)
        Indices of nodes; -1 is the outside.
    labels : sequence of (width, height)
        Size of the label of each stream.

    Returns
    -------
    Drawn
    """
    back = against(len(nodes), streams)
    level = levels(len(nodes), streams, back)
    cells: list[_Cell] = [_Cell(2 * level[k] + 1, w, h / 2, h / 2, True) for k, (w, h) in enumerate(nodes)]
    chains: dict[int, list[int]] = {}
    links: list[tuple[int, int]] = []
    for j, (a, b) in enumerate(streams):
        if j in back:
            continue
        first = 2 * level[a] + 2 if a >= 0 else 2 * level[b]
        last = 2 * level[b] if b >= 0 else first
        chain = []
        for layer in range(first, last + 1):
            w, h = labels[j] if layer == first else (0.0, 0.0)
            cells.append(_Cell(layer, w, h, BELOW if h else 0.0))
            chain.append(len(cells) - 1)
        chains[j] = chain
        whole = ([a] if a >= 0 else []) + chain + ([b] if b >= 0 else [])
        links += list(pairwise(whole))
    layers = _ordered(cells, links)
    _heights(cells, layers, links)
    edges = _columns(cells, layers, streams, back)
    top = min((c.y - c.above for c in cells), default=0.0)
    for c in cells:
        c.y += MARGIN - top
    floor = max((c.y + c.below for c in cells), default=0.0)
    ports = _ports(cells, streams, chains, back)
    strokes: list[Stroke | None] = [None] * len(streams)
    for j, chain in chains.items():
        strokes[j] = _forward(cells, streams[j], chain, ports[j])
    lanes, floor = _lanes(cells, streams, labels, back, floor)
    turns = _turns(cells, streams, lanes)
    for j in back:
        start, end = (cells[k] for k in streams[j])
        right, left = edges[start.layer][1] + turns[j][0], edges[end.layer][0] - turns[j][1]
        strokes[j] = _recycle(start, end, ports[j], (right, left), lanes[j])
    reach = [p for s in strokes if s is not None for p in s.points]
    low = min([0.0, *(x for x, _ in reach)])
    width = max([c.x + c.width / 2 for c in cells] + [x for x, _ in reach], default=0.0) + MARGIN
    shift = MARGIN / 2 - low if low < 0 else 0.0
    return Drawn(
        width + shift,
        floor + MARGIN,
        tuple((c.x + shift, c.y) for c in cells[: len(nodes)]),
        tuple(_moved(s, shift) for s in strokes if s is not None),
    )


def _moved(s: Stroke, shift: float) -> Stroke:
    if not shift:
        return s
    return Stroke(tuple((x + shift, y) for x, y in s.points), (s.label[0] + shift, s.label[1]), s.recycle)


# ------------------------------------------------------------------ order within layers


def _ordered(cells: list[_Cell], links: Sequence[tuple[int, int]]) -> list[list[int]]:
    """Order of the cells of each layer with few crossings: sweeps of barycentres, the best seen is kept."""
    depth = max((c.layer for c in cells), default=-1) + 1
    layers: list[list[int]] = [[] for _ in range(depth)]
    for k, c in enumerate(cells):
        layers[c.layer].append(k)
    left: list[list[int]] = [[] for _ in cells]
    right: list[list[int]] = [[] for _ in cells]
    for a, b in links:
        right[a].append(b)
        left[b].append(a)
    best, fewest = [list(x) for x in layers], _crossings(layers, right)
    for sweep in range(SWEEPS):
        if fewest == 0:
            break
        forward = sweep % 2 == 0
        near = left if forward else right
        for layer in layers if forward else layers[::-1]:
            place = {k: i for row in layers for i, k in enumerate(row)}
            middle = {k: sum(place[n] for n in near[k]) / len(near[k]) if near[k] else float(place[k]) for k in layer}
            layer.sort(key=lambda k: middle[k])
        count = _crossings(layers, right)
        if count < fewest:
            best, fewest = [list(x) for x in layers], count
    return best


def _crossings(layers: Sequence[Sequence[int]], right: Sequence[Sequence[int]]) -> int:
    total = 0
    for layer, following in pairwise(layers):
        place = {k: i for i, k in enumerate(following)}
        ends = [place[b] for k in layer for b in sorted(right[k], key=lambda b: place[b])]
        total += sum(1 for i in range(len(ends)) for j in range(i + 1, len(ends)) if ends[i] > ends[j])
    return total


# ------------------------------------------------------------------ coordinates


def _heights(cells: list[_Cell], layers: Sequence[Sequence[int]], links: Sequence[tuple[int, int]]) -> None:
    """Heights that pull linked cells level while the order and the distances within each layer stay."""
    near: list[list[int]] = [[] for _ in cells]
    for a, b in links:
        near[a].append(b)
        near[b].append(a)
    for layer in layers:
        y = 0.0
        for k in layer:
            y += cells[k].above
            cells[k].y = y
            y += cells[k].below + GAP_Y
        for k in layer:
            cells[k].y -= y / 2
    for sweep in range(2 * SWEEPS):
        for layer in layers if sweep % 2 == 0 else layers[::-1]:
            wanted = [sum(cells[n].y for n in near[k]) / len(near[k]) if near[k] else cells[k].y for k in layer]
            weight = [float(len(near[k])) + (0.0 if cells[k].is_node else 1.0) for k in layer]
            for k, y in zip(layer, _kept_apart(cells, layer, wanted, weight), strict=True):
                cells[k].y = y


def _kept_apart(cells: list[_Cell], layer: Sequence[int], wanted: list[float], weight: list[float]) -> list[float]:
    """Nearest heights in the sense of least squares that keep the order and the distances (pooled neighbours)."""
    offset, offsets = 0.0, []
    for i, k in enumerate(layer):
        if i:
            before = cells[layer[i - 1]]
            offset += before.below + cells[k].above + GAP_Y
        offsets.append(offset)
    pools: list[list[float]] = []
    for w, o, g in zip(wanted, offsets, weight, strict=True):
        pools.append([w - o, g or 1.0, 1])
        while len(pools) > 1 and pools[-2][0] > pools[-1][0]:
            v2, g2, n2 = pools.pop()
            v1, g1, n1 = pools.pop()
            pools.append([(v1 * g1 + v2 * g2) / (g1 + g2), g1 + g2, n1 + n2])
    flat = [v for v, _, n in pools for _ in range(int(n))]
    return [f + o for f, o in zip(flat, offsets, strict=True)]


def _columns(
    cells: list[_Cell], layers: Sequence[Sequence[int]], streams: Sequence[tuple[int, int]], back: set[int]
) -> list[tuple[float, float]]:
    """Left and right edge of each layer, with room beside it for recycles; sets the middle of each cell."""
    leaving = Counter(cells[streams[j][0]].layer for j in back)
    entering = Counter(cells[streams[j][1]].layer for j in back)
    edges = []
    x = MARGIN
    for number, layer in enumerate(layers):
        x += TURN * entering[number]
        width = max((cells[k].width for k in layer), default=0.0)
        for k in layer:
            cells[k].x = x + width / 2
        edges.append((x, x + width))
        x += width + (GAP_X if width else 0.0) + TURN * leaving[number]
    return edges


# ------------------------------------------------------------------ strokes


def _ports(
    cells: list[_Cell], streams: Sequence[tuple[int, int]], chains: dict[int, list[int]], back: set[int]
) -> list[tuple[float, float]]:
    """Height at which each stream leaves its source and enters its target, spread along the sides of the node."""
    leave: dict[int, list[tuple[float, int]]] = {}
    enter: dict[int, list[tuple[float, int]]] = {}
    for j, (a, b) in enumerate(streams):
        last = float("inf")
        if a >= 0:
            leave.setdefault(a, []).append((last if j in back else cells[chains[j][0]].y, j))
        if b >= 0:
            enter.setdefault(b, []).append((last if j in back else cells[chains[j][-1]].y, j))
    out = [[0.0, 0.0] for _ in streams]
    for side, table in enumerate((leave, enter)):
        for node, found in table.items():
            c = cells[node]
            for i, (_, j) in enumerate(sorted(found)):
                out[j][side] = c.y + c.height * ((i + 1) / (len(found) + 1) - 0.5)
    return [(a, b) for a, b in out]


def _forward(cells: list[_Cell], ends: tuple[int, int], chain: Sequence[int], port: tuple[float, float]) -> Stroke:
    points: list[Point] = []
    a, b = ends
    if a >= 0:
        points.append((cells[a].x + cells[a].width / 2, port[0]))
    for k in chain:
        c = cells[k]
        points.append((c.x - c.width / 2, c.y))
        if c.width:
            points.append((c.x + c.width / 2, c.y))
    if b >= 0:
        edge = cells[b].x - cells[b].width / 2
        points += [(edge - STUB, port[1]), (edge, port[1])]
    first = cells[chain[0]]
    return Stroke(tuple(points), (first.x, first.y), False)


def _lanes(
    cells: list[_Cell],
    streams: Sequence[tuple[int, int]],
    labels: Sequence[tuple[float, float]],
    back: set[int],
    floor: float,
) -> tuple[dict[int, float], float]:
    """Height of the lane of each recycle below everything else; the shortest lies highest."""
    spans = []
    for j in sorted(back):
        a, b = streams[j]
        low, high = sorted((cells[a].x, cells[b].x))
        half = max((high - low) / 2, labels[j][0] / 2) + 2 * GAP_X
        # Of equal spans the one that starts lowest lies highest, so that loops nest instead of crossing.
        spans.append((high - low, -cells[a].y, j, (low + high) / 2 - half, (low + high) / 2 + half))
    rows: list[list[tuple[float, float, int]]] = []
    for _, _, j, low, high in sorted(spans):
        row = next((r for r in rows if all(high < x or low > y for x, y, _ in r)), None)
        if row is None:
            rows.append([(low, high, j)])
        else:
            row.append((low, high, j))
    lanes: dict[int, float] = {}
    for row in rows:
        floor += LANE + max(labels[j][1] for _, _, j in row)
        lanes.update({j: floor for _, _, j in row})
    return lanes, floor


def _turns(
    cells: list[_Cell], streams: Sequence[tuple[int, int]], lanes: dict[int, float]
) -> dict[int, tuple[float, float]]:
    """How far from the layers of its ends each recycle turns: the deeper its lane, the farther out."""
    used: tuple[Counter[int], Counter[int]] = (Counter(), Counter())
    turns = {}
    for j in sorted(lanes, key=lambda k: (lanes[k], k)):
        place = []
        for side, end in enumerate(streams[j]):
            layer = cells[end].layer
            place.append(TURN * (1.5 + used[side][layer]) + (STUB if side else 0.0))
            used[side][layer] += 1
        turns[j] = (place[0], place[1])
    return turns


def _recycle(a: _Cell, b: _Cell, port: tuple[float, float], turn: tuple[float, float], lane: float) -> Stroke:
    right, left = turn
    points = (
        (a.x + a.width / 2, port[0]), (right, port[0]), (right, lane), (left, lane), (left, port[1]),
        (b.x - b.width / 2, port[1]),
    )  # fmt: skip
    return Stroke(points, ((right + left) / 2, lane), True)
