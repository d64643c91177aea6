"""Temperature sensors that are swapped: told from the sign of the heat, before any statistics."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from reconcile import Network, Section

if TYPE_CHECKING:
    from reconcile import Result

__all__ = ["SwappedPair", "section", "swapped_pairs"]

LIMIT = 3.0
"""Standard uncertainties by which a difference must have the wrong sign."""


@dataclass(frozen=True)
class SwappedPair:
    """Two temperature readings whose exchange would turn heat that flows the wrong way.

    Attributes
    ----------
    node : str
    entering, leaving : str
        Streams before and after the node.
    rise : float
        Temperature after minus before, as read; its sign contradicts what the node does.
    sigmas : float
        The same in its standard uncertainties.
    """

    node: str
    entering: str
    leaving: str
    rise: float
    sigmas: float

    def __str__(self) -> str:
        does, word = ("warms up", "falls") if self.rise < 0 else ("cools down", "rises")
        return (
            f"{self.node} {does} its stream, but from {self.entering} to {self.leaving} the temperature {word} by "
            f"{abs(self.rise):.3g} ({self.sigmas:.1f} standard uncertainties) at positive flow: are the two sensors, "
            "or their columns, swapped?"
        )


def swapped_pairs(
    network: Network,
    temperature: Mapping[str, float],
    sigma: Mapping[str, float],
    flow: Mapping[str, float] | None = None,
) -> tuple[SwappedPair, ...]:
    """Find nodes with a known direction of heat whose temperatures say the opposite.

    Parameters
    ----------
    network : Network
        Nodes that state ``heat`` or ``exchanges_with``, with one stream in and one out, are looked at.
    temperature, sigma : mapping of stream to float
        Readings and their standard uncertainties, in one unit; streams that are not read are left out.
    flow : mapping of stream to float, optional
        Readings of flow; a node whose flow reads zero or backwards is passed over.

    Returns
    -------
    tuple of SwappedPair
        Worst first.

    Notes
    -----
    A true fault such as reverse flow or a cold source looks the same; so this is a question, and no verdict.
    """
    found = []
    for node, direction in _directions(network).items():
        entering, leaving = network.entering(node), network.leaving(node)
        if len(entering) != 1 or len(leaving) != 1:
            continue
        a, b = entering[0], leaving[0]
        if not all(s in temperature and s in sigma and np.isfinite(temperature[s]) for s in (a, b)):
            continue
        if any(s in (flow or {}) and not (flow or {})[s] > 0 for s in (a, b)):
            continue
        rise = temperature[b] - temperature[a]
        spread = float(np.hypot(sigma[a], sigma[b]))
        if rise * direction < -LIMIT * spread:
            found.append(SwappedPair(node, a, b, rise, abs(rise) / spread))
    return tuple(sorted(found, key=lambda p: (-p.sigmas, p.node)))


def _directions(network: Network) -> dict[str, int]:
    """+1 where a node warms its stream, -1 where it cools it."""
    out = {}
    for node, heat in zip(network.nodes, network.of_nodes("heat", False), strict=True):
        if heat:
            out[node] = -1 if heat == "removed" else 1
    for node, other in zip(network.nodes, network.of_nodes("exchanges_with"), strict=True):
        if other:
            out.setdefault(node, -1)
            out.setdefault(other, 1)
    return out


def section(result: Result) -> list[Section]:
    """Section on sensors that look swapped, from the raw readings of all snapshots; empty where none does."""
    spec = result.spec
    if spec is None or "energy" not in spec.domains:
        return []
    network = Network.from_paths(
        {name: (s.source, s.target) for name, s in spec.streams.items()}, node_options=spec.nodes
    )
    column = {"temperature": {}, "flow": {}}  # type: dict[str, dict[str, int]]
    for j, i in enumerate(result.model.meters):
        reads = result.model.readings[i].reads
        item, _, quantity = reads[0][0].partition(".")
        if len(reads) == 1 and quantity in column:
            column[quantity].setdefault(item, j)
    counts: dict[tuple[str, str, str], list[SwappedPair]] = {}
    for row in result.readings:
        model = result.model
        base = model.to_base(np.asarray(row, dtype=float)[None])
        sigma = model.total_sigma(base[0])[model.meters]
        values = base[0][model.meters]
        pairs = swapped_pairs(
            network,
            {s: float(values[j]) for s, j in column["temperature"].items()},
            {s: float(sigma[j]) for s, j in column["temperature"].items()},
            {s: float(values[j]) for s, j in column["flow"].items() if np.isfinite(values[j])},
        )
        for pair in pairs:
            counts.setdefault((pair.node, pair.entering, pair.leaving), []).append(pair)
    if not counts:
        return []
    lines = []
    for pairs_of_node in counts.values():
        worst = max(pairs_of_node, key=lambda p: p.sigmas)
        many = f" (in {len(pairs_of_node)} of {result.size} snapshots)" if result.size > 1 else ""
        lines.append(f"{worst}{many}")
    return [Section("Temperature sensors that may be swapped", "\n".join(lines))]
