"""What the mixture domain refuses, and what it says to write instead."""

import pytest
from mixture_helpers import build, network
from pydantic import ValidationError
from reconcile_fluid import Fluid
from reconcile_fluid.domain import FluidOptions
from reconcile_mixture.options import MixtureOptions

from reconcile import System

CELL = {"feed": ("outside", "cell"), "conc": ("cell", "outside"), "tail": ("cell", "outside")}
DENSITY = {"unit": "t/m3", "liquid": 1.0, "solids": 2.7}


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"components": ["Cu"]}, "unit is missing.*unit: t/h"),
        ({"unit": "m3/h", "components": ["Cu"]}, "m3/h, a volume.*declare the flows as mass"),
        ({"unit": "bar", "components": ["Cu"]}, "neither a mass nor an amount"),
        ({"unit": "kg/hr.", "components": ["Cu"]}, "kg/hr"),
        ({"unit": "t/h", "components": []}, "components is empty"),
        ({"unit": "t/h", "components": ["Cu", "Cu"]}, "'Cu' is listed twice"),
        ({"unit": "t/h", "components": {"Cu": "g/L"}}, "'Cu' is in g/L .*'%' or g/t"),
        ({"unit": "t/h", "components": {"O2": "vol%"}}, "'O2' is in vol%"),
        ({"unit": "t/h", "components": {"Cu": "prozent"}}, "unit of 'Cu'"),
        ({"unit": "t/h", "components": {"Cu": {"of": "solids"}}}, "no solids fraction is declared"),
        ({"unit": "t/h", "components": {"Cu": {"of": "stream"}}, "solids": "%"}, "of: solids or of: liquid"),
        ({"unit": "t/h", "components": ["Cu"], "complete": True}, "only Cu is listed"),
        ({"unit": "t/h", "components": ["a", "b"], "complete": ["liquid"]}, "none is listed"),
        ({"unit": "t/h", "components": ["Cu"], "moisture": True}, "moisture needs a solids fraction"),
        ({"unit": "t/h", "components": ["Cu"], "density": DENSITY}, "density needs a solids fraction"),
        (
            {"unit": "t/h", "components": ["Cu"], "solids": "%", "density": DENSITY | {"unit": "bar"}},
            "no mass per volume",
        ),
        (
            {"unit": "t/h", "components": ["Cu"], "solids": "%", "density": DENSITY | {"solids": 1.0}},
            "equally dense",
        ),
        (
            {
                "unit": "t/h",
                "components": ["Cu"],
                "solids": "%",
                "density": {"unit": "t/m3", "liquid": 1.0, "sigma": 0.1},
            },
            "has a sigma, but no value",
        ),
    ],
)
def test_options_that_contradict_themselves(options, says):
    with pytest.raises(ValueError, match=says):
        build(network(CELL), **options)


@pytest.mark.parametrize(
    ("streams", "nodes", "says"),
    [
        ({"feed": {"pure": "Cuu"}}, {}, "pure 'Cuu'.*did you mean 'Cu'"),
        ({"feed": {"ore": "hard"}}, {}, "names an ore, but no density"),
        ({}, {"cell": {"loses": ["water"]}}, "loses 'water'.*Cu"),
        ({}, {"cell": {"leak_of": "tial"}}, "does not touch it; did you mean 'tail'"),
        ({"conc": {"pure": "Cu"}}, {"cell": {"splits": True}}, "only some of them are said to be pure"),
    ],
)
def test_streams_and_nodes_that_contradict_the_case(streams, nodes, says):
    with pytest.raises(ValueError, match=says):
        build(network(CELL, streams, nodes), unit="t/h", components=["Cu", "Fe"])


def test_rest_of_a_complete_list():
    with pytest.raises(ValueError, match="said to be complete"):
        build(network(CELL, {"feed": {"pure": "rest"}}), unit="t/h", components=["Cu", "Fe"], complete=True)


def test_a_splitter_with_one_branch():
    net = network({"a": ("outside", "tee"), "b": ("tee", "outside")}, nodes={"tee": {"splits": True}})
    with pytest.raises(ValueError, match="splits, but only 1 of its streams leaves it"):
        build(net, unit="t/h", components=["Cu"])


def test_an_unlisted_ore():
    net = network(CELL, {"feed": {"ore": "hrad"}})
    density = DENSITY | {"ores": {"hard": {"solids": 3.0}}}
    with pytest.raises(ValueError, match=r"'hrad'.*did you mean 'hard'"):
        build(net, unit="t/h", components=["Cu"], solids="%", density=density)


def test_flows_in_volume_of_another_domain():
    system = System()
    Fluid().build(network(CELL), system, FluidOptions(unit="L/min"))
    with pytest.raises(ValueError, match="L/min, a volume"):
        build(network(CELL), system, components=["Cu"])


def test_a_second_unit_for_the_same_flows():
    system = System()
    Fluid().build(network(CELL), system, FluidOptions(unit="kg/h"))
    with pytest.raises(ValueError, match="declared in kg/h already"):
        build(network(CELL), system, unit="t/h", components=["Cu"])


def test_pure_losses_beside_fluid():
    net = network(CELL, nodes={"cell": {"loses": ["Cu"]}})
    system = System()
    Fluid().build(net, system, FluidOptions(unit="kg/h"))
    with pytest.raises(ValueError, match="leave that domain"):
        build(net, system, components=["Cu"])


@pytest.mark.parametrize("name", ["flow", "solids", "a.b", ""])
def test_names_that_are_taken(name):
    with pytest.raises(ValidationError, match="cannot name a component"):
        MixtureOptions(unit="t/h", components=[name])
