"""Water and steam: published verification points of the formulation, derivatives, and balances of steam users."""

import sys

import iapws
import numpy as np
import pytest
from bare_systems import adjust, point, relative_closure
from click.testing import CliRunner
from energy_helpers import build, network
from reconcile_energy import enthalpy
from test_energy_balances import check_jacobian

from reconcile import MissingExtra
from reconcile.cli import main

# ------------------------------------------------------------------ the formulation


def test_published_verification_points():
    # IAPWS R7-97(2012), tables 5, 15, 35 and 36.
    assert enthalpy.water(np.array([300 - 273.15]), np.array([30.0]))[0] == pytest.approx(115.331273, rel=1e-8)
    assert enthalpy.steam(np.array([700 - 273.15]), np.array([300.0]))[0] == pytest.approx(2631.49474, rel=1e-8)
    assert enthalpy.boiling_point(np.array([26.3889776]))[0] == pytest.approx(500 - 273.15, abs=1e-6)
    assert enthalpy.boiling_point(np.array([100.0]))[0] == pytest.approx(584.149488 - 273.15, abs=1e-6)


def test_the_library_keeps_to_the_published_volume():
    # Same report, table 5: v at 300 K and 3 MPa is 0.100215168e-2 m3/kg.
    assert iapws.IAPWS97(T=300, P=3).v == pytest.approx(0.100215168e-2, rel=1e-8)


def test_published_heat_capacity():
    # Same report, table 5: cp at 300 K and 3 MPa is 4.17301218 kJ/(kg K) (value from memory).
    by_t, _ = enthalpy.water_slopes(np.array([300 - 273.15]), np.array([30.0]))
    assert by_t[0] == pytest.approx(4.17301218, rel=1e-8)


def test_saturated_water_and_steam_at_one_bar():
    # Steam tables, from memory: at 1 bar 99.6 degC, 417.4 kJ/kg liquid, 2675 kJ/kg vapour.
    p = np.array([1.0, 1.0, 1.0])
    h = enthalpy.saturated(p, np.array([0.0, 1.0, 0.5]))
    assert h[0] == pytest.approx(417.4, abs=0.1)
    assert h[1] == pytest.approx(2675, abs=0.5)
    assert h[2] == pytest.approx(0.5 * (h[0] + h[1]), rel=1e-12)
    assert enthalpy.boiling_point(p)[0] == pytest.approx(99.6, abs=0.05)


@pytest.mark.parametrize(
    ("law", "first", "second"),
    [
        ("water", [20.0, 95.0, 250.0], [3.0, 10.0, 100.0]),
        ("steam", [150.0, 300.0, 500.0], [2.0, 10.0, 60.0]),
        ("saturated", [1.0, 10.0, 100.0], [0.0, 0.7, 1.0]),
    ],
)
def test_slopes_against_differences(law, first, second):
    a, b = np.array(first), np.array(second)
    value, slopes = getattr(enthalpy, law), getattr(enthalpy, f"{law}_slopes")(a, b)
    for k, slope in enumerate(slopes):
        step = 1e-4
        up, down = [a.copy(), b.copy()], [a.copy(), b.copy()]
        up[k] += step
        down[k] -= step
        np.testing.assert_allclose(slope, (value(*up) - value(*down)) / (2 * step), rtol=2e-6, atol=1e-7)


def test_outside_the_formula_there_is_no_number():
    one = np.array([1.0])
    assert np.isnan(enthalpy.water(-5 * one, one)).all()
    assert np.isnan(enthalpy.water(400 * one, one)).all()
    assert np.isnan(enthalpy.steam(900 * one, one)).all()
    assert np.isnan(enthalpy.saturated(250 * one, one)).all()
    assert np.isnan(enthalpy.boiling_point(0.001 * one)).all()


# ------------------------------------------------------------------ balances


def test_a_throttling_calorimeter_tells_the_quality():
    # Wet steam at 10 bar expands without work to 1 bar and 120 degC. By steam tables (from memory) the enthalpy behind
    # is 2716.6 kJ/kg, and at 10 bar 762.7 (liquid) and 2777.1 kJ/kg (vapour): x = 0.970.
    net = network(
        {"sample": ("outside", "throttle"), "expanded": ("throttle", "outside")},
        {"sample": {"medium": "saturated", "pressure": "10 bar"}, "expanded": {"medium": "steam", "pressure": "1 bar"}},
    )
    system = build(net)
    x, _ = adjust(system, {"sample.flow": (0.01, 1e-4), "expanded.temperature": (120.0, 0.5)})
    assert x["sample.quality"] == pytest.approx(0.970, abs=5e-4)
    assert x["sample.temperature"] == pytest.approx(179.9, abs=0.05)


def test_pressure_and_temperature_of_boiling_water_check_each_other():
    net = network(
        {"wet": ("outside", "pipe"), "out": ("pipe", "outside")},
        {s: {"medium": "saturated"} for s in ("wet", "out")},
    )
    system = build(net)
    readings = {"wet.flow": (1.0, 0.01), "wet.pressure": (10.0, 0.05), "wet.temperature": (181.0, 0.5)}
    _, solution = adjust(system, readings | {"wet.quality": (0.95, 0.01)})
    assert solution.parity.size == 1
    # boiling point at 10 bar 179.89 degC, slope about 4.4 K/bar (steam tables, from memory)
    expected = (181.0 - 179.89) / np.hypot(0.5, 4.4 * 0.05)
    assert abs(solution.parity[0]) == pytest.approx(expected, rel=0.02)


@pytest.mark.parametrize("temperature", ["degC", "K"])
def test_a_simulated_desuperheater_closes(temperature):
    net = network(
        {"steam": ("outside", "mixer"), "spray": ("outside", "mixer"), "out": ("mixer", "outside")},
        {"steam": {"medium": "steam"}, "spray": {"medium": "water", "pressure": "60 bar"}, "out": {"medium": "steam"}},
    )
    system = build(net, "t/h", unit="MW", temperature=temperature)
    hot, cold = (
        enthalpy.steam(np.array([450.0]), np.array([40.0]))[0],
        enthalpy.water(np.array([100.0]), np.array([60.0]))[0],
    )
    out = enthalpy.steam(np.array([300.0]), np.array([38.0]))[0]
    spray = 50.0 * (hot - out) / (out - cold)
    shift = 273.15 if temperature == "K" else 0.0
    values = {"steam.flow": 50, "spray.flow": spray, "out.flow": 50 + spray}
    values |= {"steam.temperature": 450 + shift, "spray.temperature": 100 + shift, "out.temperature": 300 + shift}
    x = point(system, values | {"steam.pressure": 40, "spray.pressure": 60, "out.pressure": 38})
    assert relative_closure(system, x).max() < 1e-12
    check_jacobian(system, x)
    # and the kernel finds the spray flow from the temperatures
    readings = {n: (v, 0.01) for n, v in values.items() if n not in ("spray.flow", "out.flow")}
    found, _ = adjust(system, readings | {"steam.pressure": (40, 0.1), "out.pressure": (38, 0.1)})
    assert found["spray.flow"] == pytest.approx(spray, rel=1e-8)


def test_condensing_steam_heats_water_of_constant_heat_capacity():
    net = network(
        {
            "steam": ("outside", "shell"),
            "condensate": ("shell", "outside"),
            "cold": ("outside", "tubes"),
            "warm": ("tubes", "outside"),
        },
        {
            "steam": {"medium": "saturated", "pressure": "3 bar", "quality": 1.0},
            "condensate": {"medium": "saturated", "pressure": "3 bar", "quality": 0.0},
            "cold": {"heat_capacity": "4.18 kJ/(kg K)"},
            "warm": {"heat_capacity": "4.18 kJ/(kg K)"},
        },
        {"shell": {"exchanges_with": "tubes"}},
    )
    system = build(net)
    x, _ = adjust(system, {"cold.flow": (10.0, 0.1), "cold.temperature": (20.0, 0.1), "warm.temperature": (70.0, 0.1)})
    # heat of evaporation at 3 bar 2163 kJ/kg (steam tables, from memory)
    assert x["steam.flow"] == pytest.approx(10 * 4.18 * 50 / 2163, rel=5e-4)
    assert x["shell.transfer"] == pytest.approx(2090, rel=1e-9)


def test_without_the_library_the_extra_is_named(monkeypatch):
    enthalpy.tables.cache_clear()
    for module in [m for m in sys.modules if m == "iapws" or m.startswith("iapws.")]:
        monkeypatch.delitem(sys.modules, module)
    monkeypatch.setitem(sys.modules, "iapws", None)
    net = network(
        {"a": ("outside", "n"), "b": ("n", "outside")},
        {s: {"medium": "water", "pressure": "3 bar"} for s in ("a", "b")},
    )
    with pytest.raises(MissingExtra, match=r"iapws.*\[steam\]"):
        build(net)
    enthalpy.tables.cache_clear()


def test_a_missing_library_reaches_the_command_line_as_such(datasets, monkeypatch):
    enthalpy.tables.cache_clear()
    for module in [m for m in sys.modules if m == "iapws" or m.startswith("iapws.")]:
        monkeypatch.delitem(sys.modules, module)
    monkeypatch.setitem(sys.modules, "iapws", None)
    ran = CliRunner().invoke(main, ["check", str(datasets / "heat_recovery")])
    enthalpy.tables.cache_clear()
    assert ran.exit_code == 2
    assert "reconcile-flows[steam]" in ran.stderr
    assert "author" not in ran.stderr
