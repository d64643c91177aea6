"""Balances of mixtures: closed by a simulated truth, exact derivatives, and the formulas of the trade."""

import numpy as np
import pytest
from bare_systems import adjust, point, relative_closure
from hypothesis import given
from hypothesis import strategies as st
from mixture_helpers import build, network
from reconcile_fluid import Fluid
from reconcile_fluid.domain import FluidOptions

from reconcile import System

CELL = {"feed": ("outside", "cell"), "conc": ("cell", "outside"), "tail": ("cell", "outside")}


def finite_differences(equations, x):
    out = np.zeros(equations.shape)
    for j in range(x.size):
        step = 1e-6 * max(1.0, abs(x[j]))
        up, down = x.copy(), x.copy()
        up[j] += step
        down[j] -= step
        out[:, j] = (equations.closure(up) - equations.closure(down)) / (2 * step)
    return out


def check_jacobian(system, x):
    exact = system.equations.jacobian(x).toarray()
    scale = np.abs(exact).max(axis=1, keepdims=True)
    np.testing.assert_allclose(exact / scale, finite_differences(system.equations, x) / scale, atol=2e-8)


# ------------------------------------------------------------------ two products, units


@pytest.mark.parametrize(
    ("unit", "scale"), [("fraction", 1.0), ("%", 1e-2), ("wt%", 1e-2), ("g/t", 1e-6), ("kg/kg", 1.0), ("g/kg", 1e-3)]
)
def test_every_basis_means_the_same_mass(unit, scale):
    system = build(network(CELL), unit="t/h", components={"Cu": unit})
    feed, conc, grades = 100.0, 9.0, {"feed": 0.008, "conc": 0.08, "tail": 8e-5 / 0.91}
    values = {"feed.flow": feed, "conc.flow": conc, "tail.flow": feed - conc}
    grades["tail"] = (feed * grades["feed"] - conc * grades["conc"]) / (feed - conc)
    for s, g in grades.items():
        values[f"{s}.Cu"] = g / scale
        values[f"{s}.remainder"] = 1.0 - g
    x = point(system, values)
    assert relative_closure(system, x).max() < 1e-13
    check_jacobian(system, x)


def test_a_gold_balance_is_told_in_grams():
    system = build(network(CELL), unit="t/h", components={"Au": "g/t", "Cu": "%"})
    assert system.unit(system.column("cell.holdup.Au")) == "g/h"
    assert system.unit(system.column("cell.holdup.Cu")) == "t/h"
    gold = next(r for r in system.row_blocks if r.kind == "Au")
    x = np.zeros(system.size)
    for name, value in {"feed.flow": 10, "feed.Au": 2.0, "cell.holdup.Au": 20.0}.items():
        x[system.column(name)] = value
    assert system.equations.closure(x)[gold.start] == pytest.approx(0.0, abs=1e-12)


@given(
    f=st.floats(0.5, 2.0),
    c=st.floats(10.0, 40.0),
    t=st.floats(0.01, 0.2),
)
def test_without_redundancy_it_is_the_two_product_formula(f, c, t):
    # Yield Y = (f - t)/(c - t), recovery R = Y c/f: textbook formula of mineral processing (mass and metal balance
    # solved by hand).
    system = build(network(CELL), unit="t/h", components={"Cu": "%"})
    readings = {
        "feed.flow": (250.0, 2.0),
        "feed.Cu": (f, 0.02 * f),
        "conc.Cu": (c, 0.02 * c),
        "tail.Cu": (t, 0.05 * t),
    }
    x, solution = adjust(system, readings)
    assert solution.parity.size == 0
    y = (f - t) / (c - t)
    assert x["conc.flow"] == pytest.approx(250.0 * y, rel=1e-9)
    assert x["tail.flow"] == pytest.approx(250.0 * (1 - y), rel=1e-9)
    assert x["conc.flow"] * x["conc.Cu"] / (250.0 * x["feed.Cu"]) == pytest.approx(y * c / f, rel=1e-9)


def test_a_tail_below_its_detection_limit_leaves_a_range_of_yields():
    # An invented flotation test: feed 0.80 %, concentrate 8.9 %, tail somewhere between 0 and 0.10 % Cu.
    # Yields and recoveries by the two-product formula, worked by hand.
    system = build(network(CELL), unit="t/h", components={"Cu": "%"})
    for tail, yield_, recovery in [(0.0, 0.0899, 1.000), (0.05, 0.0847, 0.943), (0.10, 0.0795, 0.885)]:
        x, _ = adjust(
            system,
            {"feed.flow": (1.0, 0.01), "feed.Cu": (0.80, 0.01), "conc.Cu": (8.9, 0.1)},
            fixed={"tail.Cu": tail},
        )
        assert x["conc.flow"] == pytest.approx(yield_, abs=5e-5)
        assert x["conc.flow"] * x["conc.Cu"] / 0.80 == pytest.approx(recovery, abs=7e-4)


# ------------------------------------------------------------------ published distillation column


COLUMN = {"F1": ("outside", "column"), "F2": ("column", "outside"), "F3": ("column", "outside")}
# Flows and mass fractions with standard deviations: Program for North American Mobility in Higher Education,
# Module "Basic Concepts in Data Reconciliation", Tier 1, Table 4.1. Its reconciled table solves another problem
# (component flows weighted), so the expected values were computed apart, by Newton on the optimality conditions and
# by sequential quadratic programming, which agree.
DISTILLATION = {
    "F1.flow": (1095.475, 4.8),
    "F1.x1": (0.4822, 0.0048),
    "F1.x2": (0.517, 0.0052),
    "F2.flow": (478.402, 3.9),
    "F2.x1": (0.941, 0.0094),
    "F2.x2": (0.0501, 0.0005),
    "F3.flow": (488.232, 4.4),
    "F3.x1": (0.0197, 0.0002),
    "F3.x2": (0.9748, 0.0097),
}


@pytest.mark.parametrize(
    ("complete", "expected", "objective", "checks"),
    [
        (
            False,
            (
                "1043.7924348098 0.4777086308 0.518210734 514.1661291006 0.9494847941 0.0500944859 "
                "529.6263057093 0.0197039565 0.9726623287"
            ),
            290.3270524946,
            3,
        ),
        (
            True,
            (
                "1043.7336483643 0.4785127141 0.5214872859 514.7987850403 0.9499149732 0.0500850268 "
                "528.934863324 0.0197089425 0.9802910575"
            ),
            291.4243576329,
            5,
        ),
    ],
)
def test_binary_distillation(complete, expected, objective, checks):
    system = build(network(COLUMN), unit="kg/h", components=["x1", "x2"], complete=complete)
    x, solution = adjust(system, DISTILLATION)
    np.testing.assert_allclose(
        [x[n] for n in DISTILLATION], np.array(expected.split(), float), rtol=1e-9, atol=5e-11
    )  # ten decimals
    assert (solution.parity**2).sum() == pytest.approx(objective, rel=1e-9)
    assert solution.parity.size == checks


def test_a_complete_list_makes_the_last_balance_follow():
    system = build(network(COLUMN), unit="kg/h", components=["x1", "x2"], complete=True)
    assert system.row_names() == ["column mass", "column x1", "F1 sum", "F2 sum", "F3 sum"]
    rng = np.random.default_rng(4)
    feed, top = 100.0, 37.0
    w = rng.uniform(0.1, 0.9, 2)
    values = {"F1.flow": feed, "F2.flow": top, "F3.flow": feed - top}
    mixed = (top * w[0] + (feed - top) * w[1]) / feed
    for s, one in zip(("F1", "F2", "F3"), (mixed, *w), strict=True):
        values |= {f"{s}.x1": one, f"{s}.x2": 1 - one}
    x = point(system, values)
    assert relative_closure(system, x).max() < 1e-14
    jacobian = system.equations.jacobian(x).toarray()
    assert np.linalg.matrix_rank(jacobian) == jacobian.shape[0]  # nothing is written twice


# ------------------------------------------------------------------ beside the domain fluid


def test_beside_fluid_the_total_is_written_once():
    net = network({"a": ("outside", "mixer"), "b": ("outside", "mixer"), "c": ("mixer", "outside")})
    system = System()
    with system.written_by("fluid"):
        Fluid().build(net, system, FluidOptions(unit="kg/h"))
    build(net, system, components=["salt"])
    assert system.row_names() == ["mixer flow", "mixer salt", "a sum", "b sum", "c sum"]
    x = point(
        system,
        {"a.flow": 10, "b.flow": 30, "c.flow": 40, "a.salt": 0.2, "b.salt": 0.04, "c.salt": 0.08}
        | {"a.remainder": 0.8, "b.remainder": 0.96, "c.remainder": 0.92},
    )
    assert np.abs(system.equations.closure(x)).max() < 1e-14
    # the leak of the fluid domain carries the composition of what leaves the node
    leak = system.equations.jacobian(x).toarray()[:, system.column("mixer.leak")]
    np.testing.assert_allclose(leak[:2], [-1.0, -0.08])


def test_the_composition_of_a_leak_can_be_named():
    net = network(
        {"a": ("outside", "mixer"), "b": ("outside", "mixer"), "c": ("mixer", "outside")},
        nodes={"mixer": {"leak_of": "a"}},
    )
    system = System()
    Fluid().build(net, system, FluidOptions(unit="kg/h"))
    build(net, system, components=["salt"], holdup=False)
    x = np.zeros(system.size)
    x[system.column("a.salt")], x[system.column("c.salt")] = 0.2, 0.08
    leak = system.equations.jacobian(x).toarray()[:, system.column("mixer.leak")]
    np.testing.assert_allclose(leak[:2], [-1.0, -0.2])


# ------------------------------------------------------------------ splitters, stores, pure streams


def test_a_splitter_has_equal_compositions_and_no_component_balances():
    net = network(
        {"in": ("outside", "tee"), "left": ("tee", "outside"), "right": ("tee", "outside")},
        nodes={"tee": {"splits": True}},
    )
    system = build(net, unit="kg/h", components=["A", "B", "C"], complete=True)
    kinds = [(r.kind, len(r.names)) for r in system.row_blocks]
    # C - 1 equalities on each of two branches, the total, and three sums
    assert kinds == [("mass", 1), ("A split", 2), ("B split", 2), ("sum", 3)]
    values = {"in.flow": 10, "left.flow": 4, "right.flow": 6}
    values |= {f"{s}.{c}": w for s in net.streams for c, w in {"A": 0.5, "B": 0.3, "C": 0.2}.items()}
    x = point(system, values)
    assert np.abs(system.equations.closure(x)).max() < 1e-14
    x[system.column("right.A")] += 0.01
    x[system.column("right.C")] -= 0.01
    assert np.abs(system.equations.closure(x)).max() > 1e-3


def test_a_mixed_tank_with_two_inlets_keeps_its_balances():
    net = network(
        {"a": ("outside", "tank"), "b": ("outside", "tank"), "c": ("tank", "outside"), "d": ("tank", "outside")},
        nodes={"tank": {"splits": True}},
    )
    system = build(net, unit="kg/h", components={"salt": "%"}, losses=False, holdup=False)
    assert "tank salt" in system.row_names()
    assert "d salt like c" in system.row_names()
    assert "c salt like a" not in system.row_names()
    assert "a salt like c" not in system.row_names()


def test_a_store_gathers_components_in_its_own_way():
    net = network(
        {"in": ("outside", "bin"), "out": ("bin", "outside")},
        nodes={"bin": {"stores": True}},
    )
    system = build(net, unit="t/h", components={"Cu": "%"})
    x = point(
        system,
        {"in.flow": 100, "out.flow": 80, "bin.accumulation": 20, "in.Cu": 1.0, "out.Cu": 1.2}
        | {"bin.accumulation.Cu": 0.04, "in.remainder": 0.99, "out.remainder": 0.988},
    )
    assert np.abs(system.equations.closure(x)).max() < 1e-12
    with pytest.raises(KeyError):
        system.column("bin.holdup.Cu")


def test_a_pure_stream_needs_no_analysis():
    net = network(
        {"pulp": ("outside", "sump"), "spray": ("outside", "sump"), "out": ("sump", "outside")},
        streams={"spray": {"pure": "water"}},
    )
    system = build(net, unit="kg/h", components={"water": "%", "ash": "%"}, complete=True)
    with pytest.raises(KeyError):
        system.column("spray.water")
    values = {"pulp.flow": 60, "spray.flow": 40, "out.flow": 100, "pulp.water": 50, "pulp.ash": 50}
    x = point(system, values | {"out.water": 70, "out.ash": 30})
    assert np.abs(system.equations.closure(x)).max() < 1e-13
    check_jacobian(system, x)


def test_shuffled_streams_and_other_units_give_the_same_adjustment():
    orders = [list(COLUMN), ["F3", "F1", "F2"]]
    found = []
    for order, scale, unit in zip(orders, (1.0, 0.01), ("fraction", "%"), strict=True):
        net = network({s: COLUMN[s] for s in order})
        system = build(net, unit="kg/h", components={"x1": unit, "x2": unit}, complete=True)
        readings = {n: (v, s) if n.endswith("flow") else (v / scale, s / scale) for n, (v, s) in DISTILLATION.items()}
        x, _ = adjust(system, readings)
        found.append([x[n] * (1.0 if n.endswith("flow") else scale) for n in DISTILLATION])
    np.testing.assert_allclose(found[0], found[1], rtol=1e-9)
