"""The same optimum as general optimisers of scipy, which know nothing of networks or factorisations.

Their own stopping rules leave them within about 1e-6 sigma of the optimum, so that is what is compared.
"""

import numpy as np
import pytest
import scipy.sparse as sp
from random_networks import consistent_flows, random_network
from scipy.linalg import lstsq
from scipy.optimize import LinearConstraint, NonlinearConstraint, minimize

from reconcile.adjust.answers import solve_and_check
from reconcile.adjust.dense import prepare
from reconcile.adjust.solve import Problem
from reconcile.network import Network
from reconcile.system import System


def network_case(seed, nodes=9, streams=20, share=0.75):
    rng = np.random.default_rng(seed)
    a = random_network(rng, nodes, streams).incidence.toarray()
    sigma = 10.0 ** rng.uniform(-0.5, 0.5, streams)
    mask = rng.random(streams) < share
    mask[0] = True
    return a, mask, sigma, consistent_flows(rng, a) + sigma * rng.normal(size=streams)


def independent(a):
    """Rows of full rank: general solvers stumble over dependent ones."""
    keep = []
    for i in range(len(a)):
        if np.linalg.matrix_rank(a[[*keep, i]]) > len(keep):
            keep.append(i)
    return a[keep]


@pytest.mark.parametrize("seed", range(6))
def test_linear_balances_by_a_trust_region_method(seed):
    a, mask, sigma, y = network_case(seed)
    adjuster = prepare(a[:, mask], a[:, ~mask], sigma[mask])
    x, parity = adjuster.adjust(y[mask][None], np.zeros(len(a)))
    scale = np.where(mask, sigma, 10.0)
    weight = np.where(mask, 1.0, 0.0)
    target = np.where(mask, y / scale, 0.0)
    hessian = sp.diags_array(weight).tocsc()
    found = minimize(
        lambda v: 0.5 * (weight * (v - target) ** 2).sum(),
        np.zeros(len(y)),
        jac=lambda v: weight * (v - target),
        hess=lambda v: hessian,
        method="trust-constr",
        constraints=LinearConstraint(independent(a) * scale, 0, 0),
        options={"gtol": 1e-11, "xtol": 1e-12, "maxiter": 3000},
    )
    np.testing.assert_allclose(x[0] / sigma[mask], (found.x * scale)[mask] / sigma[mask], rtol=0, atol=1e-6)
    assert (parity**2).sum() == pytest.approx(2 * found.fun, rel=1e-7)


@pytest.mark.parametrize("seed", range(6))
def test_linear_balances_by_ordinary_least_squares_over_cycles(seed):
    """Another route: every flow as a combination of the network's own cycles, no constraint left."""
    a, mask, sigma, y = network_case(seed)
    adjuster = prepare(a[:, mask], a[:, ~mask], sigma[mask])
    x, parity = adjuster.adjust(y[mask][None], np.zeros(len(a)))
    _, s, vt = np.linalg.svd(a)
    cycles = vt[(s > 1e-10).sum() :].T
    found, *_ = lstsq(cycles[mask] / sigma[mask][:, None], y[mask] / sigma[mask], cond=1e-12)
    np.testing.assert_allclose(x[0] / sigma[mask], (cycles @ found)[mask] / sigma[mask], rtol=0, atol=1e-10)
    left = (y - cycles @ found)[mask] / sigma[mask]
    assert (parity**2).sum() == pytest.approx((left**2).sum(), rel=1e-10)


def flowing_network(rng, nodes, streams):
    """A random network in which every stream flows, the way it is drawn, and its flows."""
    while True:
        network = random_network(rng, nodes, streams)
        flows = consistent_flows(rng, network.incidence.toarray())
        if np.abs(flows).min() > 2:
            break
    back = flows < 0
    source, target = np.where(back, [network.target, network.source], [network.source, network.target])
    return Network(network.nodes, network.streams, source, target), np.abs(flows)


def circuit(seed, nodes=4, streams=9, components=2, share=0.8):
    """Flows and fractions of a random network, total and component balances, and what is read; figures invented."""
    rng = np.random.default_rng(seed)
    network, flows = flowing_network(rng, nodes, streams)
    system = System()
    flow = system.variables("flow", network.streams, unit="kg/h", lower=0)
    system.require(network.incidence @ flow == 0, names=[f"total {n}" for n in network.nodes], kind="mass")
    through = network.incidence.toarray() * flows
    basis = np.linalg.svd(through)[2][nodes:].T
    truth = [flows]
    for c in range(components):
        fraction = system.variables(f"c{c}", network.streams, unit="1", lower=0, upper=1)
        system.require(
            network.incidence @ (flow * fraction) == 0, names=[f"{n} c{c}" for n in network.nodes], kind=f"c{c}"
        )
        truth.append(basis @ (basis.T @ rng.uniform(0.1, 0.9, streams)))
    read = rng.random((components + 1) * streams) < share
    read[:streams:3] = True
    sigma = np.concatenate([0.02 * flows, np.full(components * streams, 0.01)])
    return system, np.concatenate(truth), sigma, read, rng


@pytest.mark.parametrize("seed", range(8))
def test_products_by_a_trust_region_method(seed):
    system, truth, sigma, read, rng = circuit(seed)
    y = truth + sigma * rng.normal(size=truth.size)
    equations = system.equations
    columns = np.flatnonzero(read)
    problem = Problem(
        equations=lambda _: equations,
        sigma=lambda _: sigma[columns],
        columns=columns,
        readings=y[columns],
        fixed=np.zeros(0, dtype=np.int64),
        start=np.where(read, np.nan, truth * 1.05),
        value_dependent=False,
        settle=False,
        lower=np.full(truth.size, -np.inf),
        upper=np.full(truth.size, np.inf),
    )
    solution = solve_and_check(problem, names=system.name, row_names=lambda i: system.row_names()[i])
    objective = float(solution.parity @ solution.parity)

    scale = np.where(read, sigma, np.maximum(np.abs(truth), 0.1))
    weight = read.astype(float)
    size = np.maximum(equations.largest_term(truth), 1e-6)

    def hessian(v, multipliers):
        pull = equations.products.T @ (multipliers / size)
        i, j = equations.pairs.T
        half = sp.csr_array((pull * scale[i] * scale[j], (i, j)), shape=(v.size, v.size))
        return half + half.T

    found = minimize(
        lambda v: 0.5 * (weight * (v - y / scale) ** 2).sum(),
        truth / scale,
        jac=lambda v: weight * (v - y / scale),
        hess=lambda v: sp.diags_array(weight).tocsc(),
        method="trust-constr",
        constraints=NonlinearConstraint(
            lambda v: equations.closure(v * scale) / size,
            0,
            0,
            jac=lambda v: sp.csr_array(equations.jacobian(v * scale) * scale / size[:, None]),
            hess=hessian,
        ),
        options={"gtol": 1e-10, "xtol": 1e-12, "maxiter": 2000},
    )
    assert found.constr_violation < 1e-8
    assert objective == pytest.approx(2 * found.fun, rel=1e-6, abs=1e-9)
    known = np.zeros(truth.size, dtype=bool)
    known[columns] = True
    np.testing.assert_allclose((solution.x / scale)[known], found.x[known], rtol=0, atol=1e-4)
    assert np.all(
        np.abs(equations.closure(solution.x)) <= 1e-9 * np.maximum(equations.largest_term(solution.x), 1e-300)
    )
