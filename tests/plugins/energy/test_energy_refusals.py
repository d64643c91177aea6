"""What the energy domain refuses, and what it says to write instead."""

import pytest
from energy_helpers import build, network
from reconcile_energy import Energy
from reconcile_energy.options import EnergyOptions

from reconcile import System

PATHS = {"in": ("outside", "box"), "out": ("box", "outside")}
WATER = {"heat_capacity": "4.18 kJ/(kg K)"}


@pytest.mark.parametrize(
    ("flow_unit", "options", "says"),
    [
        ("kg/h", {}, "'in' has neither a heat_capacity nor a medium.*4.18"),
        ("kg/h", {"heat_capacity": 4.18}, r"4.18 of what.*kJ/\(kg K\)"),
        ("kg/h", {"heat_capacity": "4.18"}, "4.18 of what"),
        ("kg/h", {"heat_capacity": "4.18 kJ"}, "heat_capacity of 'in' is in kJ"),
        ("kg/h", {"heat_capacity": "-1 kJ/(kg K)"}, "must be above zero"),
        ("kg/h", {"heat_capacity": "many"}, "heat_capacity of 'in'.*number"),
        ("L/min", WATER, "'in' has no density"),
        ("L/min", WATER | {"density": 1.0}, "1.0 of what"),
        ("L/min", WATER | {"density": "1 bar"}, "density of 'in' is in bar"),
        ("kg/h", WATER | {"unit": "degC"}, "unit is in degC.*kW"),
        ("kg/h", WATER | {"unit": "kWh"}, "unit is in kWh.*kW"),
        ("kg/h", WATER | {"temperature": "kW"}, "temperature is in kW"),
        ("kg/h", WATER | {"pressure": "barg"}, "pressure is in barg.*gauge"),
        ("kg/h", WATER | {"reference": "20"}, "reference is 20 of what"),
        ("bar", WATER, "flows are in bar.*carries no heat"),
    ],
)
def test_options_that_contradict_themselves(flow_unit, options, says):
    with pytest.raises(ValueError, match=says):
        build(network(PATHS), flow_unit, **options)


@pytest.mark.parametrize(
    ("streams", "nodes", "options", "says"),
    [
        ({"in": {"medium": "water", **WATER}}, {}, WATER, "keep one of the two"),
        ({"in": {"medium": "water", "pressure": "3 barg"}}, {}, WATER, "gauge"),
        ({"in": {"medium": "water", "pressure": 3}}, {}, WATER, "3(.0)? of what"),
        ({"in": {"quality": 0.9}}, {}, WATER, "only medium: saturated"),
        ({"in": {"medium": "water"}}, {}, WATER | {"reference": "20 degC"}, "zero at 0.01 degC"),
        ({}, {"box": {"splits": True}}, WATER, "only 1 of its streams"),
        ({}, {"box": {"exchanges_with": "box"}}, WATER, "with itself"),
        ({}, {"box": {"exchanges_with": "boxx"}}, WATER, "no node; did you mean 'box'"),
        ({}, {"box": {"leak_of": "ou"}}, WATER, "does not touch it; did you mean 'out'"),
    ],
)
def test_streams_and_nodes_that_contradict_the_case(streams, nodes, options, says):
    with pytest.raises(ValueError, match=says):
        build(network(PATHS, streams, nodes), **options)


def test_an_exchange_that_is_said_twice():
    paths = {"a": ("outside", "x"), "b": ("x", "outside"), "c": ("outside", "y"), "d": ("y", "outside")}
    net = network(paths, nodes={"x": {"exchanges_with": "y"}, "y": {"exchanges_with": "x"}})
    with pytest.raises(ValueError, match="say it once, at the warmer side"):
        build(net, **WATER)


def test_steam_by_the_mole():
    net = network(PATHS, {s: {"medium": "steam"} for s in PATHS})
    with pytest.raises(ValueError, match="tabulated by mass"):
        build(net, "mol/s")


def test_without_flows():
    with pytest.raises(ValueError, match="add the domain fluid"):
        Energy().build(network(PATHS), System(), EnergyOptions(**WATER))
