"""Who flows into whom: nodes, streams and their incidence matrix."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from types import MappingProxyType
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

__all__ = ["OUTSIDE", "Network"]

OUTSIDE = "outside"
"""Name of the environment: what enters comes from it, what leaves goes to it."""


def _frozen(items: Mapping[str, Mapping[str, Any]] | None) -> Mapping[str, Mapping[str, Any]]:
    return MappingProxyType({k: MappingProxyType(dict(v)) for k, v in (items or {}).items()})


@dataclass(frozen=True)
class Network:
    """Nodes joined by directed streams; read-only once made.

    Attributes
    ----------
    nodes : tuple of str
        Node names, without `OUTSIDE`.
    streams : tuple of str
        Stream names.
    source, target : ndarray of int, shape (n_streams,)
        Index of the node that a stream leaves and enters; -1 is `OUTSIDE`.
    stream_options, node_options : mapping of name to mapping
        What the case file said of a stream or node beside its path, already checked by the domain that asked for it.
    """

    nodes: tuple[str, ...]
    streams: tuple[str, ...]
    source: npt.NDArray[np.int64]
    target: npt.NDArray[np.int64]
    stream_options: Mapping[str, Mapping[str, Any]] = field(default_factory=lambda: _frozen(None))
    node_options: Mapping[str, Mapping[str, Any]] = field(default_factory=lambda: _frozen(None))

    def __post_init__(self) -> None:
        for name in ("source", "target"):
            array = np.array(getattr(self, name), dtype=np.int64)
            if array.shape != (len(self.streams),):
                raise ValueError(f"{name} must hold one node index for each of the {len(self.streams)} streams")
            if array.size and (array.min() < -1 or array.max() >= len(self.nodes)):
                raise ValueError(f"{name} holds an index that is no node")
            array.setflags(write=False)
            object.__setattr__(self, name, array)
        object.__setattr__(self, "nodes", tuple(self.nodes))
        object.__setattr__(self, "streams", tuple(self.streams))
        object.__setattr__(self, "stream_options", _frozen(self.stream_options))
        object.__setattr__(self, "node_options", _frozen(self.node_options))
        if OUTSIDE in self.nodes:
            raise ValueError(f"{OUTSIDE!r} is the environment and cannot be a node")
        for kind, names in (("node", self.nodes), ("stream", self.streams)):
            if len(set(names)) != len(names):
                double = next(n for n in names if names.count(n) > 1)
                raise ValueError(f"{kind} {double!r} is named twice")

    def __reduce__(self) -> tuple[Any, ...]:
        options = tuple({k: dict(v) for k, v in o.items()} for o in (self.stream_options, self.node_options))
        return Network, (self.nodes, self.streams, self.source, self.target, *options)

    @classmethod
    def from_paths(
        cls,
        paths: Mapping[str, tuple[str, str]] | Iterable[tuple[str, str, str]],
        *,
        nodes: Sequence[str] = (),
        stream_options: Mapping[str, Mapping[str, Any]] | None = None,
        node_options: Mapping[str, Mapping[str, Any]] | None = None,
    ) -> Network:
        """Make a network from ``stream: (from, to)``; nodes appear in the order in which streams name them.

        Parameters
        ----------
        paths : mapping of stream name to (source, target), or triples (stream, source, target)
            `OUTSIDE` stands for the environment.
        nodes : sequence of str, optional
            Node names to put first, in this order.
        stream_options, node_options : mapping, optional
            See the attributes.

        Returns
        -------
        Network
        """
        triples = [(name, a, b) for name, (a, b) in paths.items()] if isinstance(paths, Mapping) else list(paths)
        number: dict[str, int] = {OUTSIDE: -1}
        for name in nodes:
            number.setdefault(name, len(number) - 1)
        for _, a, b in triples:
            number.setdefault(a, len(number) - 1)
            number.setdefault(b, len(number) - 1)
        del number[OUTSIDE]
        look = {**number, OUTSIDE: -1}
        return cls(
            nodes=tuple(number),
            streams=tuple(t[0] for t in triples),
            source=np.array([look[t[1]] for t in triples], dtype=np.int64),
            target=np.array([look[t[2]] for t in triples], dtype=np.int64),
            stream_options=stream_options or {},
            node_options=node_options or {},
        )

    @cached_property
    def incidence(self) -> sp.csr_array:
        """Incidence matrix, shape (n_nodes, n_streams): +1 into a node, -1 out of it."""
        n = len(self.streams)
        into = np.flatnonzero(self.target >= 0)
        out = np.flatnonzero(self.source >= 0)
        rows = np.concatenate([self.target[into], self.source[out]])
        columns = np.concatenate([into, out])
        values = np.concatenate([np.ones(into.size), -np.ones(out.size)])
        return sp.csr_array((values, (rows, columns)), shape=(len(self.nodes), n))

    @cached_property
    def inflow(self) -> sp.csr_array:
        """Positive part of the incidence matrix, shape (n_nodes, n_streams): 1 where a stream enters."""
        return self.incidence.maximum(0)

    @cached_property
    def outflow(self) -> sp.csr_array:
        """Negative part of the incidence matrix with its sign removed: 1 where a stream leaves."""
        return (-self.incidence).maximum(0)

    def of_streams(self, key: str, default: Any = None) -> list[Any]:
        """Return the option `key` of each stream, `default` where a stream does not state it."""
        return [self.stream_options.get(s, {}).get(key, default) for s in self.streams]

    def of_nodes(self, key: str, default: Any = None) -> list[Any]:
        """Return the option `key` of each node, `default` where a node does not state it."""
        return [self.node_options.get(s, {}).get(key, default) for s in self.nodes]

    def node_name(self, index: int) -> str:
        """Name of a node index, `OUTSIDE` for -1."""
        return OUTSIDE if index < 0 else self.nodes[index]

    def entering(self, node: str) -> tuple[str, ...]:
        """Names of the streams that flow into a node."""
        k = self.nodes.index(node)
        return tuple(self.streams[j] for j in np.flatnonzero(self.target == k))

    def leaving(self, node: str) -> tuple[str, ...]:
        """Names of the streams that flow out of a node."""
        k = self.nodes.index(node)
        return tuple(self.streams[j] for j in np.flatnonzero(self.source == k))
