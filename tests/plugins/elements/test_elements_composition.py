"""Uncertain biomass: shared subscripts, a shared degree of reduction, a shared carbon content."""

import numpy as np
import pytest
from bare_systems import adjust
from elements_helpers import CHEMOSTAT, FERMENTATION, STORY, build, chemostat, objective

READINGS = dict(zip(STORY, [(10.1, 0.2), (28.2, 0.9), (26.4, 0.9), (30.6, 1.2)], strict=True))
NO_WATER = {k: v for k, v in CHEMOSTAT.items() if k != "base"} | {"harvest": ("reactor", "outside", "biomass")}


def by_reduction(**options):
    return chemostat(NO_WATER, conserve=["C", "reduction"], nitrogen_source="NH3", **options)


def with_priors(system, readings):
    """Readings and the priors that the domain declared; priors count like readings."""
    x, solution = adjust(system, readings)
    return x, objective(solution)


def test_a_certain_composition_is_the_limit_of_an_uncertain_one():
    x, certain = with_priors(by_reduction(), READINGS)
    y, nearly = with_priors(by_reduction(uncertain={"biomass": {"reduction": 1e-7}}), READINGS)
    assert nearly == pytest.approx(certain, rel=1e-6)
    assert y["harvest.biomass"] == pytest.approx(x["harvest.biomass"], rel=1e-6)
    assert y["biomass.degree_of_reduction"] == pytest.approx(4.2, abs=1e-9)


def test_uncertain_degree_of_reduction_against_a_direct_fit():
    # 3 % on gamma = 0.126: minimise the same sum of squares by brute force
    from scipy.optimize import minimize

    found, chi2 = with_priors(by_reduction(uncertain={"biomass": {"reduction": 0.126}}), READINGS)
    (s, us), (o, uo), (c, uc), (b, ub) = READINGS.values()

    def cost(v):
        glucose, gamma, biomass = v
        co2 = 6 * glucose - biomass
        oxygen = (24 * glucose - gamma * biomass) / 4
        pulls = [(glucose - s) / us, (oxygen - o) / uo, (co2 - c) / uc, (biomass - b) / ub, (gamma - 4.2) / 0.126]
        return float(np.square(pulls).sum())

    best = minimize(cost, [10.0, 4.2, 31.0], method="Nelder-Mead", options={"xatol": 1e-10, "fatol": 1e-12})
    assert chi2 == pytest.approx(best.fun, rel=1e-6)
    assert [found[n] for n in ("feed.glucose", "biomass.degree_of_reduction", "harvest.biomass")] == pytest.approx(
        best.x, rel=1e-5
    )


def test_uncertain_subscripts_give_the_variance_of_gamma():
    # gamma = 4 + H - 2 O - 3 N: sigma 0.126 from H alone is the same thing as sigma 0.126 of gamma
    _, by_gamma = with_priors(by_reduction(uncertain={"biomass": {"reduction": 0.126}}), READINGS)
    y, by_hydrogen = with_priors(by_reduction(uncertain={"biomass": {"H": 0.126}}), READINGS)
    assert by_hydrogen == pytest.approx(by_gamma, rel=1e-9)
    assert y["biomass.atoms.H"] != pytest.approx(1.8, abs=1e-3)
    # and with all four elements conserved, water and ammonia unmeasured, nothing changes
    _, by_elements = with_priors(chemostat(uncertain={"biomass": {"H": 0.126}}), READINGS)
    assert by_elements == pytest.approx(by_gamma, rel=1e-8)


def test_one_composition_is_shared_by_all_streams():
    streams = {
        "feed_1": ("outside", "first", "glucose"),
        "air_1": ("outside", "first", "oxygen"),
        "gas_1": ("first", "outside", "carbon_dioxide"),
        "broth": ("first", "second", "biomass"),
        "feed_2": ("outside", "second", "glucose"),
        "air_2": ("outside", "second", "oxygen"),
        "gas_2": ("second", "outside", "carbon_dioxide"),
        "harvest": ("second", "outside", "biomass"),
    }
    reacts = {"first": {"reacts": True}, "second": {"reacts": True}}
    options = {"unit": "mmol/h", "species": FERMENTATION, "conserve": ["C", "reduction"], "nitrogen_source": "NH3"}
    system = build(streams, reacts, uncertain={"biomass": {"reduction": 0.5}}, **options)
    assert sum(n.endswith("degree_of_reduction") for n in system.names()) == 1
    # the first reactor, read well, teaches the composition (gamma 4.5) to the second
    known = {
        "feed_1.glucose": (10.0, 1e-4),
        "gas_1.carbon_dioxide": (30.0, 1e-4),
        "air_1.oxygen": ((240 - 4.5 * 30) / 4, 1e-4),
        "feed_2.glucose": (10.0, 1e-4),
        "gas_2.carbon_dioxide": (30.0, 1e-4),
    }
    x, _ = adjust(system, known)
    assert x["biomass.degree_of_reduction"] == pytest.approx(4.5, abs=1e-4)
    assert x["air_2.oxygen"] == pytest.approx((240 - 4.5 * 30) / 4, abs=1e-3)


def test_weighed_by_molar_mass():
    system = chemostat(weighed={"glucose": {}})
    assert system.units()["feed.glucose.mass"] == "mg/h"
    x, _ = adjust(system, {"feed.glucose.mass": (1801.56, 1.0)})
    assert x["feed.glucose"] == pytest.approx(10.0, rel=1e-6)


@pytest.mark.parametrize("sigma", [None, 0.012])
def test_weighed_by_carbon_content(sigma):
    # 0.406 g C per g dry mass with its ash: 29.58 g/C-mol instead of the 24.63 of the ash-free formula
    system = chemostat(weighed={"biomass": {"carbon_fraction": 0.406, "sigma": sigma}})
    x, _ = adjust(system, {"harvest.biomass.mass": (1000.0, 1.0)}, fixed=None)
    assert x["harvest.biomass"] == pytest.approx(1000 * 0.406 / 12.011, rel=1e-6)
    assert x["biomass.carbon_fraction"] == pytest.approx(0.406, abs=1e-9)
