"""Every published case says where its numbers come from, and is used by a test."""

import numpy as np
import pytest
from published_cases import CASES, load, network_of
from test_published_designs import DESIGNS
from test_published_linear import FIGURES, LINEAR

FILES = sorted(p.stem for p in CASES.glob("*.yaml"))
OTHERS = {"abur_exposito_3bus_ac", "distillation_bilinear", "recycle_network_7x4"}


@pytest.mark.parametrize("name", FILES)
def test_origin_is_stated(name):
    raw = load(name)
    assert raw["name"] == name
    assert len(raw["source"]) > 40
    assert raw["provenance"]
    for text in raw["provenance"].values():
        assert any(word in text for word in ("read in", "from memory", "our own", "none:")), text
    if "computed" in raw:
        assert raw["computed_by"]


def test_every_file_is_tested():
    assert set(FILES) == {*LINEAR, *DESIGNS, *OTHERS}


def test_every_linear_case_states_a_figure():
    for name in LINEAR:
        raw = load(name)
        figures = (raw.get("printed", {}).keys() | raw.get("computed", {}).keys()) - {"exact_pairs"}
        assert figures <= FIGURES.keys()
        assert figures or "equivalent" in raw, name


def test_true_flows_of_the_recycle_network_balance():
    raw = load("recycle_network_7x4")
    network = network_of(raw)
    true = np.array([raw["true"][s] for s in network.streams])
    assert np.all(network.incidence @ true == 0)
    np.testing.assert_allclose([raw["sigma"][s] for s in network.streams], 0.025 * true, rtol=1e-15)
