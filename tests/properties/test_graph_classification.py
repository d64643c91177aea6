"""What can be checked and calculated, by paths and cycles of the network alone, equals what the matrices say.

With the environment as one more node: an unmeasured flow can be calculated if and only if it lies on no cycle of
unmeasured streams, that is, if it is a bridge of their graph; a measured flow is checked if and only if its ends are
not joined by unmeasured streams (Vaclavek 1969; Kretsovalis & Mah 1987). The graph side is networkx.
"""

import networkx as nx
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from random_networks import networks, random_network

from reconcile.adjust.dense import prepare
from reconcile.adjust.structure import checks, ties

ENVIRONMENT = -1


def unmeasured_graph(network, mask):
    graph = nx.MultiGraph()
    graph.add_nodes_from([ENVIRONMENT, *range(len(network.nodes))])
    for k in np.flatnonzero(~mask):
        graph.add_edge(int(network.source[k]), int(network.target[k]), key=int(k))
    return graph


def calculable(graph):
    """Streams that are bridges; of parallel streams none is."""
    simple = nx.Graph(graph)
    bridges = {frozenset(e) for e in nx.bridges(simple)}
    return {
        k for a, b, k in graph.edges(keys=True) if graph.number_of_edges(a, b) == 1 and frozenset((a, b)) in bridges
    }


def on_a_cycle(graph):
    """The same the other way round: streams whose ends stay joined without them."""
    out = set()
    for a, b, k in list(graph.edges(keys=True)):
        rest = graph.copy()
        rest.remove_edge(a, b, key=k)
        if nx.has_path(rest, a, b):
            out.add(k)
    return out


def check_against_the_graph(network, mask, sigma):
    graph = unmeasured_graph(network, mask)
    parts = {node: i for i, part in enumerate(nx.connected_components(graph)) for node in part}
    a = network.incidence.toarray()
    adjuster = prepare(a[:, mask], a[:, ~mask], sigma[mask])

    observable = set(np.flatnonzero(~mask)[adjuster.observable].tolist())
    assert observable == calculable(graph)
    apart = [parts[int(network.source[k])] != parts[int(network.target[k])] for k in np.flatnonzero(mask)]
    np.testing.assert_array_equal(adjuster.redundant, apart)
    # Joined by unmeasured streams, nodes count as one; all but one of these have a balance of their own.
    assert adjuster.checks == len(set(parts.values())) - 1
    assert len(checks(a[:, mask], a[:, ~mask])) == adjuster.checks
    return graph, adjuster


@given(networks(max_nodes=12, max_extra=18))
def test_random_networks_are_classified_as_their_graphs_say(case):
    rng, network, mask = case
    graph, _ = check_against_the_graph(network, mask, 10.0 ** rng.uniform(-2, 2, len(mask)))
    assert on_a_cycle(graph) == set(graph_keys(graph)) - calculable(graph)


def graph_keys(graph):
    return [k for _, _, k in graph.edges(keys=True)]


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("share", [0.3, 0.6, 0.8])
def test_a_hundred_and_twenty_nodes(seed, share):
    rng = np.random.default_rng(seed)
    network = random_network(rng, 120, 260)
    mask = rng.random(260) < share
    check_against_the_graph(network, mask, 10.0 ** rng.uniform(-3, 3, 260))


@given(networks(max_nodes=10, max_extra=14), st.integers(1, 4))
def test_missing_readings_are_classified_as_the_graph_without_them(case, count):
    """A reading that is missing in a snapshot is projected out; its stream is then unmeasured."""
    rng, network, mask = case
    read = np.flatnonzero(mask)
    absent = rng.choice(len(read), min(count, len(read) - 1), replace=False)
    left = mask.copy()
    left[read[absent]] = False
    a = network.incidence.toarray()
    adjuster = prepare(a[:, mask], a[:, ~mask], np.ones(mask.sum())).without(absent)
    graph = unmeasured_graph(network, left)
    bridges = calculable(graph)
    parts = {node: i for i, part in enumerate(nx.connected_components(graph)) for node in part}
    for j, k in enumerate(read):
        if left[k]:
            assert adjuster.redundant[j] == (parts[int(network.source[k])] != parts[int(network.target[k])])
            assert not adjuster.undetermined[j]
        else:
            assert adjuster.undetermined[j] == (k not in bridges)
    for j, k in enumerate(np.flatnonzero(~mask)):
        assert adjuster.observable[j] == (k in bridges)
    assert adjuster.checks == len(set(parts.values())) - 1


@given(networks(max_nodes=8, max_extra=8))
def test_each_independent_check_is_a_balance_around_some_nodes(case):
    """Coefficients of one sign, and no unmeasured stream across the boundary: a cut of the network."""
    _, network, mask = case
    a = network.incidence.toarray()
    graph = unmeasured_graph(network, mask)
    parts = list(nx.connected_components(graph))
    for row in checks(a[:, mask], a[:, ~mask]):
        inside = {int(node) for node in np.flatnonzero(row)}
        assert np.allclose(row[sorted(inside)], row[min(inside)])
        assert all(part <= inside or not part & inside for part in parts if ENVIRONMENT not in part)
        assert np.allclose(row @ a[:, ~mask], 0)


@given(networks(max_nodes=8, max_extra=8))
def test_a_known_combination_of_unknown_flows_is_a_cut_through_them(case):
    """`ties` names what is known of flows that are not known alone: it must be a balance, and hold the flow asked for."""
    _, network, mask = case
    a = network.incidence.toarray()
    adjuster = prepare(a[:, mask], a[:, ~mask], np.ones(mask.sum()))
    open_ = np.flatnonzero(~adjuster.observable)
    for variable in open_[:3]:
        combination = ties(adjuster.elimination, int(variable))
        if not combination:
            continue
        assert combination[int(variable)] == pytest.approx(1)
        assert set(combination) <= set(open_.tolist())
        vector = np.zeros((~mask).sum())
        vector[list(combination)] = list(combination.values())
        # Known: nothing that the balances leave open moves it.
        assert np.allclose(vector @ adjuster.elimination.null, 0, atol=1e-9)
