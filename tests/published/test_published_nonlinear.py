"""Published cases with products or functions of the unmeasured variables."""

import numpy as np
import pytest
from published_cases import COMPUTED, adjust_system, load, matches_print, network_of

from reconcile.system import System

# ---------------------------------------------------------------- power flow in three buses


def flow_of(branch):
    """Active and reactive power into a branch at its first end, and all partial derivatives, per unit.

    S = U_i conj((U_i - U_j) y) with y = g + jb = 1 / (R + jX).
    """
    y = 1.0 / complex(*branch)
    g, b = y.real, y.imag

    def active(vi, vj, a, c):
        d = a - c
        return g * vi**2 - vi * vj * (g * np.cos(d) + b * np.sin(d))

    def active_slopes(vi, vj, a, c):
        d = a - c
        turn = vi * vj * (g * np.sin(d) - b * np.cos(d))
        return 2 * g * vi - vj * (g * np.cos(d) + b * np.sin(d)), -vi * (g * np.cos(d) + b * np.sin(d)), turn, -turn

    def reactive(vi, vj, a, c):
        d = a - c
        return -b * vi**2 - vi * vj * (g * np.sin(d) - b * np.cos(d))

    def reactive_slopes(vi, vj, a, c):
        d = a - c
        turn = -vi * vj * (g * np.cos(d) + b * np.sin(d))
        return -2 * b * vi - vj * (g * np.sin(d) - b * np.cos(d)), -vi * (g * np.sin(d) - b * np.cos(d)), turn, -turn

    return (active, active_slopes), (reactive, reactive_slopes)


@pytest.fixture(scope="module")
def buses():
    raw = load("abur_exposito_3bus_ac")
    system = System()
    v = system.variables("voltage", ["1", "2", "3"], unit="", lower=0, start=1.0)
    angle = system.variables("angle", ["1", "2", "3"], unit="rad", start=0.0)
    system.fix(angle["1"], 0.0)
    power = system.variables("power", [n for n in raw["readings"] if n[0] in "PQ"], unit="")
    for kind, which in (("P", 0), ("Q", 1)):
        for end in ("12", "13"):
            i, j = end
            function, slopes = flow_of(raw["branches"][f"{i}-{j}"])[which]
            there = system.apply(function, v[i], v[j], angle[i], angle[j], derivatives=slopes)
            system.require(there == power[f"{kind}{end}"], names=[f"{kind}{end}"], kind="power")
        out = None
        for branch, (i, j) in (("1-2", "21"), ("2-3", "23")):
            function, slopes = flow_of(raw["branches"][branch])[which]
            part = system.apply(function, v[i], v[j], angle[i], angle[j], derivatives=slopes)
            out = part if out is None else out + part
        system.require(out == power[f"{kind}2"], names=[f"{kind}2"], kind="power")
    names = {n: f"{n}.power" if n[0] in "PQ" else f"{n[1]}.voltage" for n in raw["readings"]}
    solution = adjust_system(system, {names[n]: tuple(r) for n, r in raw["readings"].items()})
    return raw, system, solution


def test_voltages_and_angles_as_printed(buses):
    raw, system, solution = buses
    v = [solution.x[system.column(f"{i}.voltage")] for i in "123"]
    angle = [np.degrees(solution.x[system.column(f"{i}.angle")]) for i in "123"]
    for got, figure in ((v, "voltage"), (angle, "angle_degrees")):
        stated = raw["printed"][figure]
        assert all(matches_print(g, w, stated["digits"]) for g, w in zip(got, stated["values"], strict=True))
        np.testing.assert_allclose(got, raw["computed"][figure], rtol=0, atol=COMPUTED)


def test_objective_and_tests_of_the_buses(buses):
    raw, _, solution = buses
    assert solution.adjuster.checks == raw["computed"]["checks"]
    assert abs(solution.parity @ solution.parity - raw["computed"]["objective"]) < 1e-9
    f = solution.adjuster.signatures
    z = np.abs(solution.parity @ f) / np.linalg.norm(f, axis=0)
    np.testing.assert_allclose(z, list(raw["computed"]["reading_test"].values()), rtol=0, atol=1e-7)


# ---------------------------------------------------------------- binary distillation column


def column(variant):
    raw = load("distillation_bilinear")
    network = network_of(raw)
    system = System()
    flow = system.variables("flow", network.streams, unit="kg/h", lower=0)
    x = [system.variables(f"x{k}", network.streams, unit="", lower=0, upper=1) for k in (1, 2)]
    for k, part in enumerate(x):
        system.require(network.incidence @ (flow * part) == 0, names=[f"component {k + 1}"], kind="component")
    if variant == "A":
        system.require(network.incidence @ flow == 0, names=["total"], kind="mass")
    else:
        system.require(x[0] + x[1] == 1, names=[f"sum {s}" for s in network.streams], kind="fraction")
    return raw, system, adjust_system(system, {n: tuple(r) for n, r in raw["readings"].items()})


@pytest.mark.parametrize("variant", ["A", "B"])
def test_column(variant):
    raw, system, solution = column(variant)
    want = raw["computed"][variant]
    assert abs(solution.parity @ solution.parity - want["objective"]) < 1e-8
    assert solution.adjuster.checks == want["checks"]
    for name, value in want["adjusted"].items():
        sigma = raw["readings"][name][1]
        stated_to = 0.5e-10  # ten decimals
        assert abs(solution.x[system.column(name)] - value) < 1e-7 * sigma + stated_to, name
    closure = np.abs(solution.equations.closure(solution.x))
    assert np.all(closure <= 1e-12 * solution.equations.largest_term(solution.x))


@pytest.mark.parametrize("variant", ["A", "B"])
def test_column_is_a_minimum(variant):
    """At a constrained minimum the gradient of the objective is a combination of the gradients of the balances."""
    raw, system, solution = column(variant)
    y, sigma = np.array(list(raw["readings"].values())).T
    columns = [system.column(n) for n in raw["readings"]]
    slope = np.zeros(system.size)
    slope[columns] = (solution.x[columns] - y) / sigma
    scaled = system.equations.jacobian(solution.x).toarray()
    scaled[:, columns] = scaled[:, columns] * sigma  # per sigma of each reading
    multiplier, *_ = np.linalg.lstsq(scaled.T, slope, rcond=None)
    assert np.abs(scaled.T @ multiplier - slope).max() < 1e-6 * np.abs(slope).max()
