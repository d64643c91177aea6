"""Heat balances with constant heat capacities: closed by hand-worked truths, exact derivatives, faults."""

import numpy as np
import pytest
from bare_systems import adjust, point, relative_closure
from energy_helpers import build, network
from hypothesis import given
from hypothesis import strategies as st
from reconcile_energy import Energy
from reconcile_energy.options import EnergyOptions
from reconcile_mixture import Mixture
from reconcile_mixture.options import MixtureOptions

from reconcile import System

EXCHANGER = {
    "hot_in": ("outside", "hot_side"),
    "hot_out": ("hot_side", "outside"),
    "cold_in": ("outside", "cold_side"),
    "cold_out": ("cold_side", "outside"),
}
OIL_AND_WATER = {s: {"heat_capacity": "2.1 kJ/(kg K)"} for s in ("hot_in", "hot_out")}


def check_jacobian(system, x):
    exact = system.equations.jacobian(x).toarray()
    numeric = np.zeros_like(exact)
    for j in range(x.size):
        step = 1e-5 * max(1.0, abs(x[j]))
        up, down = x.copy(), x.copy()
        up[j] += step
        down[j] -= step
        numeric[:, j] = (system.equations.closure(up) - system.equations.closure(down)) / (2 * step)
    scale = np.abs(exact).max(axis=1, keepdims=True)
    np.testing.assert_allclose(exact / scale, numeric / scale, atol=1e-7)


# ------------------------------------------------------------------ worked by hand


def exchanger(**nodes):
    hot = {"exchanges_with": "cold_side"} | nodes.pop("hot_side", {})
    return network(EXCHANGER, OIL_AND_WATER, {"hot_side": hot, **nodes})


def test_heat_exchanger_by_hand():
    # Oil 4 kg/s, 2.1 kJ/(kg K), 90 -> 70 degC gives 168 kW; water 2 kg/s, 4.2 kJ/(kg K) takes it: 20 K warmer.
    system = build(exchanger(), heat_capacity="4.2 kJ/(kg K)")
    values = {"hot_in.flow": 4, "hot_out.flow": 4, "cold_in.flow": 2, "cold_out.flow": 2, "hot_side.transfer": 168}
    x = point(
        system,
        values
        | {"hot_in.temperature": 90, "hot_out.temperature": 70}
        | {"cold_in.temperature": 15, "cold_out.temperature": 35},
    )
    assert relative_closure(system, x).max() < 1e-14
    check_jacobian(system, x)


def test_heat_exchanger_finds_the_temperature_that_is_not_read():
    system = build(exchanger(), heat_capacity="4.2 kJ/(kg K)")
    readings = {"hot_in.flow": (4, 0.1), "cold_in.flow": (2, 0.1), "hot_in.temperature": (90, 0.2)}
    readings |= {"hot_out.temperature": (70, 0.2), "cold_in.temperature": (15, 0.2)}
    x, solution = adjust(system, readings)
    assert solution.parity.size == 0
    assert x["cold_out.temperature"] == pytest.approx(35.0, rel=1e-10)
    assert x["hot_side.transfer"] == pytest.approx(168.0, rel=1e-10)


def test_a_lossy_exchanger_gives_its_colder_side_less():
    system = build(exchanger(hot_side={"loss": True}), heat_capacity="4.2 kJ/(kg K)")
    values = {f"{s}.flow": f for s, f in zip(EXCHANGER, (4, 4, 2, 2), strict=True)}
    temperatures = {f"{s}.temperature": t for s, t in zip(EXCHANGER, (90, 70, 15, 34), strict=True)}
    x = point(system, values | temperatures | {"hot_side.transfer": 159.6, "hot_side.heat_loss": 8.4})
    assert relative_closure(system, x).max() < 1e-14
    # an expected loss is a variable, an unexpected one a possible fault
    fault_of = {b.name(c): b.fault for b in system.blocks for c in range(b.start, b.stop)}
    assert fault_of["hot_side.heat_loss"] is None
    assert fault_of["cold_side.heat_loss"] is not None


@pytest.mark.parametrize("reference", [None, "25 degC", "300 K", "-40 degF"])
@pytest.mark.parametrize("temperature", ["degC", "K", "degF"])
def test_mixing_does_not_depend_on_reference_or_scale(reference, temperature):
    # 1 kg/s at 80 degC and 3 kg/s at 20 degC give 4 kg/s at 35 degC.
    net = network({"a": ("outside", "mixer"), "b": ("outside", "mixer"), "c": ("mixer", "outside")})
    system = build(net, heat_capacity="4.18 kJ/(kg K)", reference=reference, temperature=temperature)
    scale = {"degC": lambda t: t, "K": lambda t: t + 273.15, "degF": lambda t: 1.8 * t + 32.0}[temperature]
    readings = {"a.flow": (1, 0.01), "b.flow": (3, 0.01)}
    readings |= {"a.temperature": (scale(80.0), 0.1), "b.temperature": (scale(20.0), 0.1)}
    x, _ = adjust(system, readings)
    assert x["c.temperature"] == pytest.approx(scale(35.0), rel=1e-10)


@pytest.mark.parametrize(
    ("flow_unit", "flow", "unit", "heat"),
    [
        ("kg/s", 0.5, "kW", 41.8),
        ("kg/h", 1800.0, "kW", 41.8),
        ("t/h", 1.8, "kW", 41.8),
        ("kg/min", 30.0, "W", 41800.0),
        ("kg/h", 1800.0, "MJ/h", 150.48),
        ("m3/h", 1.8, "kW", 41.8),
        ("L/min", 30.0, "kW", 41.8),
        ("kg", 1800.0, "MJ", 150.48),
    ],
)
def test_units_of_flow_and_heat(flow_unit, flow, unit, heat):
    # 0.5 kg/s of water warmed by 20 K: 0.5 * 4.18 * 20 = 41.8 kW = 150.48 MJ/h; density 1000 kg/m3 for volumes.
    net = network({"in": ("outside", "heater"), "out": ("heater", "outside")}, nodes={"heater": {"heat": True}})
    density = {"density": "1000 kg/m3"} if flow_unit in ("m3/h", "L/min") else {}
    system = build(net, flow_unit, heat_capacity="4.18 kJ/(kg K)", unit=unit, **density)
    x, _ = adjust(
        system,
        {"in.flow": (flow, 0.01 * flow), "in.temperature": (10, 0.1), "out.temperature": (30, 0.1)},
    )
    assert x["heater.duty"] == pytest.approx(heat, rel=1e-12)


def test_molar_flows_take_a_molar_heat_capacity():
    net = network({"in": ("outside", "heater"), "out": ("heater", "outside")}, nodes={"heater": {"heat": True}})
    system = build(net, "mol/s", heat_capacity="29.1 J/(mol K)", unit="W")
    x, _ = adjust(system, {"in.flow": (2, 0.1), "in.temperature": (20, 0.1), "out.temperature": (30, 0.1)})
    assert x["heater.duty"] == pytest.approx(2 * 29.1 * 10)


@pytest.mark.parametrize(("heat", "sign"), [("supplied", 1.0), ("removed", -1.0)])
def test_a_duty_is_positive_in_its_stated_direction(heat, sign):
    net = network({"in": ("outside", "coil"), "out": ("coil", "outside")}, nodes={"coil": {"heat": heat}})
    system = build(net, heat_capacity="4 kJ/(kg K)")
    x = point(
        system,
        {"in.flow": 1, "out.flow": 1, "in.temperature": 40, "out.temperature": 40 + sign * 10, "coil.duty": 40},
    )
    assert relative_closure(system, x).max() < 1e-14


# ------------------------------------------------------------------ splitters, stores, leaks


def test_a_tee_has_one_temperature_and_no_energy_balance():
    net = network(
        {"in": ("outside", "tee"), "left": ("tee", "outside"), "right": ("tee", "outside")},
        nodes={"tee": {"splits": True}},
    )
    system = build(net, heat_capacity="4.18 kJ/(kg K)")
    assert system.row_names() == ["tee flow", "left temperature like in", "right temperature like in"]


def test_a_heated_tank_with_two_outlets_keeps_its_balance():
    net = network(
        {"in": ("outside", "tank"), "left": ("tank", "outside"), "right": ("tank", "outside")},
        nodes={"tank": {"splits": True, "heat": True}},
    )
    system = build(net, heat_capacity="4.18 kJ/(kg K)")
    assert system.row_names() == ["tank flow", "tank energy", "right temperature like left"]


def test_a_leak_takes_its_heat_along():
    net = network({"in": ("outside", "pipe"), "out": ("pipe", "outside")})
    system = build(net, heat_capacity="4 kJ/(kg K)", reference="20 degC")
    x = point(system, {"in.flow": 2, "out.flow": 2, "in.temperature": 70, "out.temperature": 70})
    rows = dict(zip(system.row_names(), system.equations.jacobian(x).toarray(), strict=True))
    assert rows["pipe flow"][system.column("pipe.leak")] == -1.0
    assert rows["pipe energy"][system.column("pipe.leak")] == pytest.approx(-4 * 50)
    assert rows["pipe energy"][system.column("pipe.heat_loss")] == -1.0
    # with its heat, a leak between two equal temperatures changes no temperature: the direction of the energy row is
    # that of the mass row times the enthalpy
    x[system.column("pipe.leak")], x[system.column("in.flow")] = 0.5, 2.5
    assert np.abs(system.equations.closure(x)).max() < 1e-12


def test_losses_of_the_mixture_domain_take_their_heat_along():
    net = network({"in": ("outside", "cell"), "top": ("cell", "outside"), "low": ("cell", "outside")})
    system = System()
    Mixture().build(net, system, MixtureOptions(unit="kg/s", components=["salt"], holdup=False))
    Energy().build(net, system, EnergyOptions(heat_capacity="4 kJ/(kg K)", reference="0 degC"))
    x = np.zeros(system.size)
    for stream, t in (("in", 50.0), ("top", 40.0), ("low", 30.0)):
        x[system.column(f"{stream}.temperature")] = t
    rows = dict(zip(system.row_names(), system.equations.jacobian(x).toarray(), strict=True))
    energy = {n: rows["cell energy"][system.column(n)] for n in ("top.loss", "low.loss", "in.spill")}
    assert energy == pytest.approx({"top.loss": -160.0, "low.loss": -120.0, "in.spill": -200.0})


def test_a_tank_whose_level_moves_may_store_heat():
    net = network({"in": ("outside", "tank"), "out": ("tank", "outside")})
    net = type(net).from_paths(
        {"in": ("outside", "tank"), "out": ("tank", "outside")}, node_options={"tank": {"stores": True}}
    )
    system = build(net, heat_capacity="4 kJ/(kg K)", reference="0 degC")
    x = point(
        system,
        {"in.flow": 3, "out.flow": 2, "tank.accumulation": 1, "in.temperature": 60, "out.temperature": 50}
        | {"tank.stored_heat": 4 * (3 * 60 - 2 * 50)},
    )
    assert relative_closure(system, x).max() < 1e-14


# ------------------------------------------------------------------ invariances


@given(
    flows=st.tuples(st.floats(0.1, 50), st.floats(0.1, 50)),
    temperatures=st.tuples(st.floats(-20, 150), st.floats(-20, 150)),
)
def test_a_mixed_temperature_lies_between(flows, temperatures):
    net = network({"a": ("outside", "mixer"), "b": ("outside", "mixer"), "c": ("mixer", "outside")})
    system = build(net, heat_capacity="4.18 kJ/(kg K)")
    readings = {"a.flow": (flows[0], 0.01), "b.flow": (flows[1], 0.01)}
    readings |= {"a.temperature": (temperatures[0], 0.1), "b.temperature": (temperatures[1], 0.1)}
    x, _ = adjust(system, readings)
    low, high = sorted(temperatures)
    assert low - 1e-6 <= x["c.temperature"] <= high + 1e-6
    expected = (flows[0] * temperatures[0] + flows[1] * temperatures[1]) / sum(flows)
    assert x["c.temperature"] == pytest.approx(expected, rel=1e-9, abs=1e-7)
