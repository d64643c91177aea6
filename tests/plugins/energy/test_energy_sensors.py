"""Swapped temperature sensors: told from the sign of the heat."""

import numpy as np
import pytest
from energy_helpers import network
from reconcile_energy import swapped_pairs

PATHS = {"supply": ("outside", "radiators"), "return": ("radiators", "outside")}
HOUSE = network(PATHS, nodes={"radiators": {"heat": "removed"}})
SIGMA = {"supply": 0.1, "return": 0.1}


def test_heat_that_flows_backwards_asks_for_a_swap():
    # Invented heat meter: supply 38, return 62 degC at positive flow, sensors good to 0.1 K.
    (pair,) = swapped_pairs(HOUSE, {"supply": 38.0, "return": 62.0}, SIGMA, {"supply": 1.2})
    assert (pair.node, pair.entering, pair.leaving) == ("radiators", "supply", "return")
    assert pair.rise == pytest.approx(24.0)
    assert pair.sigmas == pytest.approx(24.0 / np.sqrt(0.02))
    assert "radiators cools down its stream" in str(pair)
    assert "the temperature rises by 24" in str(pair)
    assert "swapped?" in str(pair)


@pytest.mark.parametrize(
    ("temperature", "flow"),
    [
        ({"supply": 62.0, "return": 38.0}, {"supply": 1.2}),  # as it should be
        ({"supply": 38.0, "return": 62.0}, {"supply": -1.2}),  # reverse flow explains it
        ({"supply": 38.0, "return": 62.0}, {"supply": 0.0}),  # nothing flows
        ({"supply": 38.0, "return": 38.3}, {"supply": 1.2}),  # within the noise
        ({"supply": 38.0}, {"supply": 1.2}),  # one sensor only
        ({"supply": 38.0, "return": np.nan}, {"supply": 1.2}),  # no reading
    ],
)
def test_no_question_without_reason(temperature, flow):
    assert swapped_pairs(HOUSE, temperature, SIGMA, flow) == ()


def test_both_sides_of_an_exchanger_are_looked_at():
    net = network(
        {"a": ("outside", "warm"), "b": ("warm", "outside"), "c": ("outside", "cold"), "d": ("cold", "outside")},
        nodes={"warm": {"exchanges_with": "cold"}},
    )
    sigma = dict.fromkeys("abcd", 0.1)
    found = swapped_pairs(net, {"a": 60.0, "b": 80.0, "c": 15.0, "d": 35.0}, sigma)
    assert [p.node for p in found] == ["warm"]
    found = swapped_pairs(net, {"a": 60.0, "b": 80.0, "c": 45.0, "d": 35.0}, sigma)
    assert [p.node for p in found] == ["warm", "cold"]  # worst first
    assert "cold warms up its stream" in str(found[1])


def test_nodes_without_a_direction_are_passed_over():
    assert swapped_pairs(network(PATHS), {"supply": 38.0, "return": 62.0}, SIGMA) == ()
