"""Large networks stay sparse: as many numbers as the balances have terms, and no step that walks over streams."""

import sys
import tracemalloc

import numpy as np
import pytest
from reconcile_fluid.domain import Fluid
from reconcile_fluid.options import FluidOptions

from reconcile import Network, System


def large_network(streams):
    """Random arcs between a third as many nodes, some of them to the outside."""
    rng = np.random.default_rng(3)
    nodes = streams // 3
    source, target = rng.integers(-1, nodes, size=(2, streams))
    target[source == target] = -1
    source[source == target] = 0
    return Network(tuple(f"n{i}" for i in range(nodes)), tuple(f"s{i}" for i in range(streams)), source, target)


def check_fluid(streams):
    network = large_network(streams)
    tracemalloc.start()
    system = System()
    Fluid().build(network, system, FluidOptions(unit="kg/h"))
    equations = system.equations
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    nodes = len(network.nodes)
    # Flows, and a leak at every node; a term for each end of a stream that is a node, and one for the leak.
    assert equations.shape == (nodes, streams + nodes)
    ends = int((network.source >= 0).sum() + (network.target >= 0).sum())
    assert equations.linear.nnz == ends + nodes
    assert peak < 1500 * streams  # bytes: a dense matrix would take 3 * streams for each stream
    # Against sums that never saw a matrix.
    flow = np.random.default_rng(4).uniform(1, 2, streams)
    x = np.concatenate([flow, np.zeros(nodes)])
    inside = network.target >= 0
    want = np.bincount(network.target[inside], flow[inside], minlength=nodes)
    inside = network.source >= 0
    want -= np.bincount(network.source[inside], flow[inside], minlength=nodes)
    np.testing.assert_allclose(equations.closure(x), want, atol=1e-12 * 2 * streams)
    assert equations.jacobian(x).nnz == equations.linear.nnz
    assert system.name(streams) == "n0.leak"
    assert system.row_names()[-1] == f"n{nodes - 1} flow"


def test_a_fluid_network_of_a_hundred_thousand_streams():
    check_fluid(100_000)


@pytest.mark.slow
def test_a_fluid_network_of_a_million_streams():
    check_fluid(1_000_000)


def test_operations_on_expressions_do_not_walk_over_streams():
    """Products of flows and fractions at a hundred thousand streams: a bounded number of calls, whatever the size."""

    def calls(streams):
        network = large_network(streams)
        incidence = network.incidence
        system = System()
        flow = system.variables("flow", network.streams, unit="kg/h")
        fraction = system.variables("salt", network.streams, unit="1")
        count = 0

        def count_calls(frame, event, argument):
            nonlocal count
            count += event == "call"

        sys.setprofile(count_calls)
        try:
            system.require(incidence @ (flow * fraction) == 0, names=network.nodes, kind="salt")
            system.require(2 * (incidence @ flow) - 1.0 == 0, names=network.nodes, kind="mass")
            equations = system.equations
            x = np.ones(2 * streams)
            equations.closure(x)
            equations.jacobian(x)
            equations.largest_term(x)
            equations.split_terms(x)
        finally:
            sys.setprofile(None)
        assert equations.products.shape == (2 * len(network.nodes), streams)
        return count

    assert calls(60_000) <= calls(600) * 1.1


def test_balances_written_one_by_one():
    system = System()
    flow = system.variables("flow", [f"s{i}" for i in range(501)], unit="kg/h")
    for i in range(500):
        system.require(flow[[i]] - flow[[i + 1]] == 0, names=[f"pipe {i}"], kind="mass")
    equations = system.equations
    assert equations.shape == (500, 501)
    assert equations.linear.nnz == 1000
    assert [system.rows_of(i).names[0] for i in (0, 99, 499)] == ["pipe 0", "pipe 99", "pipe 499"]
    np.testing.assert_allclose(equations.closure(np.arange(501.0)), -1)
