"""Which streams run against the main direction of a network, and in which layer each node belongs."""

from __future__ import annotations

from collections.abc import Sequence

__all__ = ["against", "levels"]

PASSES = 24


def against(count: int, streams: Sequence[tuple[int, int]]) -> set[int]:
    """Streams that are drawn as recycles: few, and those that run back towards the inlets.

    Orders of the nodes are tried by walking from the inlets, in depth and in breadth; each is improved by moving single
    nodes to their best place. What then runs backwards in the best order is set aside.
    """
    inner = [(a, b, j) for j, (a, b) in enumerate(streams) if a >= 0 and b >= 0]
    inlets = [b for a, b in streams if a < 0 and b >= 0]
    fed = {b for _, b, _ in inner}
    starts = list(dict.fromkeys([*inlets, *(k for k in range(count) if k not in fed), *range(count)]))
    out: list[list[int]] = [[] for _ in range(count)]
    for a, b, _ in inner:
        out[a].append(b)
    distance = _distances(count, out, starts)
    weighed = [(a, b, 3 if distance[b] <= distance[a] else 4) for a, b, _ in inner if a != b]
    tried = []
    for order in (_in_depth(count, out, starts), sorted(range(count), key=lambda k: distance[k])):
        place = {k: i for i, k in enumerate(_sifted(order, weighed))}
        found = {j for a, b, j in inner if place[a] >= place[b]}
        cost = sum(w for a, b, w in weighed if place[a] >= place[b])
        tried.append((cost, max(levels(count, streams, found), default=0), found))
    # Of equally good orders the one with fewer layers shows the main direction better.
    return min(tried, key=lambda t: t[:2])[2]


def _in_depth(count: int, out: Sequence[Sequence[int]], starts: Sequence[int]) -> list[int]:
    """Nodes so that each stands before what is only reached through it."""
    seen = [False] * count
    finished: list[int] = []
    for start in starts:
        if seen[start]:
            continue
        seen[start] = True
        walk = [(start, iter(out[start]))]
        while walk:
            following = next((b for b in walk[-1][1] if not seen[b]), None)
            if following is None:
                finished.append(walk.pop()[0])
            else:
                seen[following] = True
                walk.append((following, iter(out[following])))
    return finished[::-1]


def _distances(count: int, out: Sequence[Sequence[int]], starts: Sequence[int]) -> list[int]:
    """Steps from the first inlet to each node; what it does not reach is counted from the next one, and so on."""
    distance = [-1] * count
    for start in starts:
        ring, steps = [start] if distance[start] < 0 else [], 0
        while ring:
            for k in ring:
                distance[k] = steps
            ring = list(dict.fromkeys(b for a in ring for b in out[a] if distance[b] < 0))
            steps += 1
    return distance


def _sifted(order: list[int], weighed: Sequence[tuple[int, int, int]]) -> list[int]:
    """Move single nodes to where the least runs backwards, until nothing gets better."""
    pull: dict[int, dict[int, int]] = {k: {} for k in order}
    entering = dict.fromkeys(order, 0)
    for a, b, w in weighed:
        # Standing behind its source a stream stops running backwards, standing behind its target it starts to.
        pull[b][a] = pull[b].get(a, 0) - w
        pull[a][b] = pull[a].get(b, 0) + w
        entering[b] += w
    for _ in range(PASSES):
        better = False
        for node in list(order):
            at = order.index(node)
            rest = order[:at] + order[at + 1 :]
            cost = lowest = here = entering[node]
            where = 0
            for i, k in enumerate(rest, 1):
                cost += pull[node].get(k, 0)
                if i == at:
                    here = cost
                if cost < lowest:
                    lowest, where = cost, i
            if lowest < here:
                order = [*rest[:where], node, *rest[where:]]
                better = True
        if not better:
            break
    return order


def levels(count: int, streams: Sequence[tuple[int, int]], back: set[int]) -> list[int]:
    """Longest path from the left; nodes without a way in are pulled to the right, beside what they feed."""
    ahead = [(a, b) for j, (a, b) in enumerate(streams) if j not in back and a >= 0 and b >= 0 and a != b]
    level = [0] * count
    for _ in range(count):
        changed = False
        for a, b in ahead:
            if level[b] < level[a] + 1:
                level[b] = level[a] + 1
                changed = True
        if not changed:
            break
    entered = {b for _, b in ahead}
    for k in range(count):
        follow = [level[b] for a, b in ahead if a == k]
        if k not in entered and follow:
            level[k] = min(follow) - 1
    return level
