"""Random networks for the tests of the kernel."""

import numpy as np
from hypothesis import strategies as st
from scipy.linalg import null_space

from reconcile.network import Network

INVENTED = "names and figures are invented"


def random_network(rng: np.random.Generator, nodes: int, streams: int) -> Network:
    """A connected multigraph with `nodes` nodes and the environment; parallel streams may happen, loops do not."""
    arcs = []
    for k in range(nodes):  # a random tree that holds the environment, -1
        arcs.append((int(rng.integers(-1, k)), k))
    while len(arcs) < max(streams, nodes):
        a, b = rng.integers(-1, nodes, size=2)
        if a != b:
            arcs.append((int(a), int(b)))
    flip = rng.random(len(arcs)) < 0.5
    arcs = [(b, a) if f else (a, b) for (a, b), f in zip(arcs, flip, strict=True)]
    order = rng.permutation(len(arcs))
    source, target = np.array(arcs)[order].T
    return Network(tuple(f"node {k}" for k in range(nodes)), tuple(f"s{j}" for j in range(len(arcs))), source, target)


def consistent_flows(rng: np.random.Generator, a: np.ndarray, size: float = 100.0) -> np.ndarray:
    """Flows that close all balances up to rounding, of about this size."""
    basis = null_space(a)
    if basis.shape[1] == 0:
        return np.zeros(a.shape[1])
    x = basis @ rng.normal(size=basis.shape[1])
    return size * x / max(np.abs(x).max(), 1e-300)


@st.composite
def networks(draw, max_nodes=6, max_extra=8):
    """(rng, network, measured mask): some streams measured, at least one."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    nodes = draw(st.integers(1, max_nodes))
    network = random_network(rng, nodes, nodes + draw(st.integers(0, max_extra)))
    n = len(network.streams)
    mask = rng.random(n) < draw(st.sampled_from([0.4, 0.7, 1.0]))
    mask[rng.integers(n)] = True
    return rng, network, mask
