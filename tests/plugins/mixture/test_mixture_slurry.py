"""Slurries: metals on dry solids, moisture, pulp densities with a shared density of the solids."""

import numpy as np
import pytest
from bare_systems import adjust, point, relative_closure
from mixture_helpers import build, network
from reconcile_mixture import pulp_density, solids_fraction
from test_mixture_balances import check_jacobian

CYCLONE = {"feed": ("outside", "cyclone"), "over": ("cyclone", "outside"), "under": ("cyclone", "outside")}


def test_published_slurry_specific_gravity():
    # Hydraulic Institute engineering data (public repository hydraulic-institute/edb), section IIB-3:
    # liquid 1.2, solids 2.2, 35 % solids by weight -> 1.43 (printed to two decimals).
    assert pulp_density(0.35, 2.2, 1.2) == pytest.approx(1.43, abs=0.005)


def test_density_and_solids_fraction_are_inverse():
    w = np.linspace(0.0, 1.0, 11)
    np.testing.assert_allclose(solids_fraction(pulp_density(w, 2.7, 0.998), 2.7, 0.998), w, atol=1e-14)
    np.testing.assert_allclose(pulp_density([0.0, 1.0], 2.7, 0.998), [0.998, 2.7])


def test_equal_densities_say_nothing_of_the_solids():
    with pytest.raises(ValueError, match="equally dense"):
        solids_fraction(1.0, 1.0, 1.0)


def truth(system):
    """A cyclone that sends 60 % of the water and 30 % of the solids over the top."""
    dry = {"feed": 50.0, "over": 15.0, "under": 35.0}
    water = {"feed": 75.0, "over": 45.0, "under": 30.0}
    gold = {"over": 1.5, "under": 4.0}
    gold["feed"] = (15.0 * 1.5 + 35.0 * 4.0) / 50.0
    values = {"ore.solids_density": 2.9}
    for s in dry:
        flow = dry[s] + water[s]
        values |= {f"{s}.flow": flow, f"{s}.solids_flow": dry[s], f"{s}.solids": 100 * dry[s] / flow}
        values |= {f"{s}.moisture": 100 * water[s] / flow, f"{s}.Au": gold[s]}
        values[f"{s}.density"] = flow / (dry[s] / 2.9 + water[s] / 1.0)  # volumes add, worked without the formula
        values[f"{s}.solids.remainder"] = 1 - gold[s] * 1e-6
    return values


OPTIONS = {"unit": "t/h", "components": {"Au": "g/t"}, "solids": "%", "moisture": True}


@pytest.mark.parametrize("sigma", [None, 0.05])
def test_a_simulated_truth_closes_every_row(sigma):
    density = {"unit": "t/m3", "liquid": 1.0, "solids": 2.9, "sigma": sigma}
    system = build(network(CYCLONE), density=density, **OPTIONS)
    x = point(system, truth(system))
    assert relative_closure(system, x).max() < 1e-13
    check_jacobian(system, x)
    rows = dict(zip(system.row_names(), system.equations.jacobian(x).toarray(), strict=True))
    lost = rows["cyclone Au"][system.column("under.loss")]
    # a ton of underflow pulp carries its share of solids, and these their gold
    assert lost == pytest.approx(-35.0 / 65.0 * 4.0, rel=1e-12)
    assert rows["cyclone solids"][system.column("under.loss")] == pytest.approx(-35.0 / 65.0)
    assert rows["cyclone mass"][system.column("under.loss")] == -1.0


def test_solids_density_is_exact_or_uncertain_or_unknown():
    base = {"unit": "t/m3", "liquid": 1.0}
    exact = build(network(CYCLONE), density=base | {"solids": 2.9}, **OPTIONS)
    column = exact.column("ore.solids_density")
    assert exact.fixed == {column: 2.9}
    assert exact.column("ore.wrong_density")
    uncertain = build(network(CYCLONE), density=base | {"solids": 2.9, "sigma": 0.05}, **OPTIONS)
    assert not uncertain.fixed
    assert uncertain.priors[0].values == pytest.approx([2.9])
    with pytest.raises(KeyError):  # the stated value itself may be named as wrong, so there is no second fault
        uncertain.column("ore.wrong_density")
    unknown = build(network(CYCLONE), density=base, **OPTIONS)
    assert not unknown.fixed
    assert not unknown.priors


def test_pulp_densities_alone_give_the_dilution_formula():
    # Solids split of a cyclone from three percent-solids figures: with dilution D = (100 - s)/s,
    # underflow share of the dry solids = (D_over - D_feed)/(D_over - D_under); textbook formula of mineral processing.
    system = build(network(CYCLONE), density={"unit": "t/m3", "liquid": 1.0, "solids": 2.9}, **OPTIONS)
    want = truth(system)
    readings = {f"{s}.density": (want[f"{s}.density"], 0.005) for s in CYCLONE}
    x, solution = adjust(system, readings | {"feed.flow": (125.0, 1.0)})
    d = {s: (100 - x[f"{s}.solids"]) / x[f"{s}.solids"] for s in CYCLONE}
    assert x["under.solids_flow"] / x["feed.solids_flow"] == pytest.approx(
        (d["over"] - d["feed"]) / (d["over"] - d["under"]), rel=1e-9
    )
    assert x["under.solids_flow"] == pytest.approx(35.0, rel=1e-8)
    assert solution.parity.size == 0


def test_a_wrong_solids_density_shifts_all_pulp_densities_together():
    system = build(network(CYCLONE), density={"unit": "t/m3", "liquid": 1.0, "solids": 2.9}, **OPTIONS)
    x = point(system, truth(system))
    column = system.equations.jacobian(x).toarray()[:, system.column("ore.wrong_density")]
    hit = {n for n, v in zip(system.row_names(), column, strict=True) if v != 0}
    assert hit == {"feed density", "over density", "under density"}


def test_two_ores_have_densities_of_their_own():
    net = network(
        {"a": ("outside", "mill"), "b": ("outside", "mill"), "out": ("mill", "outside")},
        streams={"a": {"ore": "hard"}, "out": {"ore": "blend"}},
    )
    density = {"unit": "t/m3", "liquid": 1.0, "solids": 2.7, "ores": {"hard": {"solids": 3.2}, "blend": {}}}
    system = build(net, unit="t/h", components={"Cu": "%"}, solids="%", density=density)
    fixed = {system.name(c): v for c, v in system.fixed.items()}
    assert fixed == {"hard.solids_density": 3.2, "ore.solids_density": 2.7}
    assert system.column("blend.solids_density")


def test_pure_liquid_and_dry_solids_beside_slurries():
    net = network(
        {"ore": ("outside", "mill"), "water": ("outside", "mill"), "pulp": ("mill", "outside")},
        streams={"water": {"pure": "liquid"}, "ore": {"pure": "solids"}},
    )
    density = {"unit": "t/m3", "liquid": 1.0, "solids": 2.7}
    system = build(
        net,
        unit="t/h",
        components={"Cu": {"unit": "%"}, "Cl": {"unit": "mg/kg", "of": "liquid"}},
        solids="%",
        density=density,
    )
    values = {"ore.flow": 40, "water.flow": 60, "pulp.flow": 100, "pulp.solids": 40, "pulp.solids_flow": 40}
    values |= {"ore.Cu": 1.1, "pulp.Cu": 1.1, "water.Cl": 200, "pulp.Cl": 200, "ore.solids_density": 2.7}
    values |= {"ore.density": 2.7, "pulp.density": pulp_density(0.4, 2.7, 1.0)}
    values |= {"ore.solids.remainder": 0.989, "pulp.solids.remainder": 0.989}
    values |= {"water.liquid.remainder": 1 - 2e-4, "pulp.liquid.remainder": 1 - 2e-4}
    x = point(system, values)
    assert relative_closure(system, x).max() < 1e-13
    check_jacobian(system, x)
    for absent in ("water.Cu", "ore.Cl", "water.solids", "ore.solids", "water.density"):
        with pytest.raises(KeyError):
            system.column(absent)


def test_water_that_evaporates_takes_nothing_along():
    net = network(
        {"wet": ("outside", "dryer"), "cake": ("dryer", "outside")},
        nodes={"dryer": {"loses": ["liquid", "Cu"]}},
    )
    system = build(net, unit="t/h", components={"Cu": "%"}, solids="%", holdup=False)
    rows = dict(zip(system.row_names(), system.equations.jacobian(np.ones(system.size)).toarray(), strict=True))
    hit = lambda name: {r: v[system.column(name)] for r, v in rows.items() if v[system.column(name)] != 0}  # noqa: E731
    assert hit("dryer.loss.liquid") == {"dryer mass": -1.0}
    assert hit("dryer.loss.Cu") == {"dryer mass": -1.0, "dryer solids": -1.0, "dryer Cu": -1.0}
