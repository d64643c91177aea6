"""Analysed gases: the inert balance, dry and wet, volumes at stated conditions, losses and air."""

import numpy as np
import pytest
from bare_systems import adjust
from elements_helpers import build, objective
from reconcile_elements.gas import conditions as at
from reconcile_elements.gas import inert_balance, molar_volume, wet_fraction

SPECIES = {"oxygen": "O2", "carbon_dioxide": "CO2", "nitrogen": "N2", "water": "H2O", "carbon": "CH2O"}
AIR = {"oxygen": 0.2095, "carbon_dioxide": 0.0004, "nitrogen": "rest"}
NORMAL = "0 C, 101.325 kPa"


def fermenter(gas="dry", **offgas):
    held = ["oxygen", "carbon_dioxide", "nitrogen", *(["water"] if gas == "wet" else [])]
    return build(
        {
            "air": ("outside", "reactor", {"composition": AIR, "volume_at": NORMAL}),
            "feed": ("outside", "reactor", "carbon"),
            "offgas": ("reactor", "outside", {"species": held, "gas": gas, "volume_at": NORMAL, **offgas}),
            "broth": ("reactor", "outside", "water"),
        },
        {"reactor": {"reacts": True}},
        unit="mol/h",
        species=SPECIES,
        inert=["nitrogen"],
    )


READINGS = {"air.volume_flow": (60.0, 0.1), "feed.carbon": (0.0525, 0.001)}  # L/h and mol/h


def check_inert_balance(x):
    uptake = x["air.oxygen"] - x["offgas.oxygen"]
    output = x["offgas.carbon_dioxide"] - x["air.carbon_dioxide"]
    # the substrate is a carbohydrate: RQ is 1, so the readings are moved until uptake equals output
    assert uptake == pytest.approx(output, rel=1e-8)
    haldane = inert_balance(
        oxygen_in=0.2095,
        carbon_dioxide_in=0.0004,
        oxygen_out=x["offgas.oxygen.fraction"],
        carbon_dioxide_out=x["offgas.carbon_dioxide.fraction"],
        inflow=x["air.total"],
    )
    assert uptake == pytest.approx(haldane.oxygen_uptake, rel=1e-8)
    assert x["offgas.total"] == pytest.approx(haldane.outflow, rel=1e-8)
    assert x["air.total"] * molar_volume(at(NORMAL)) == pytest.approx(x["air.volume_flow"], rel=1e-12)


ANALYSES = {"offgas.oxygen.fraction": (0.19, 5e-4), "offgas.carbon_dioxide.fraction": (0.0195, 5e-4)}


def test_inert_balance_of_a_dry_gas():
    # the dry off-gas of an aerated culture: flow out is not measured, it follows from the nitrogen
    x, _ = adjust(fermenter(), {**READINGS, **ANALYSES})
    check_inert_balance(x)


@pytest.mark.parametrize(
    ("oxygen", "carbon_dioxide", "sigma"),
    [(0.19, 0.0195, 5e-4), (0.19, 0.0195, 5e-6), (0.15, 0.05, 5e-4), (0.2, 0.0099, 5e-4)],
)
def test_inert_balance_without_a_second_amount(oxygen, carbon_dioxide, sigma):
    # The one check holds at any flow, so the coefficient of the flow fades at the solution. By hand: RQ 1 and nitrogen in
    # = nitrogen out ask that the two fractions add up to those of air, 0.2099, and each takes half of what is missing
    analyses = {"offgas.oxygen.fraction": (oxygen, sigma), "offgas.carbon_dioxide.fraction": (carbon_dioxide, sigma)}
    x, solution = adjust(fermenter(), {"air.volume_flow": (60.0, 0.1), **analyses})
    check_inert_balance(x)
    missing = 0.2099 - oxygen - carbon_dioxide
    assert solution.adjuster.checks == 1
    assert objective(solution) == pytest.approx(missing**2 / (2 * sigma**2), rel=1e-9, abs=1e-12)
    assert x["offgas.oxygen.fraction"] == pytest.approx(oxygen + missing / 2, rel=1e-12)
    assert x["air.volume_flow"] == pytest.approx(60.0, rel=1e-12)


def test_readings_that_only_a_gas_without_flow_would_fit():
    # 1980 sigmas apart: it is cheaper to take the flow for zero, where fractions mean nothing
    analyses = {"offgas.oxygen.fraction": (0.15, 5e-6), "offgas.carbon_dioxide.fraction": (0.05, 5e-6)}
    values, solution = adjust(fermenter(), {"air.volume_flow": (60.0, 0.1), **analyses})
    assert values["air.volume_flow"] == pytest.approx(0.0, abs=1e-30)
    assert objective(solution) == pytest.approx((60.0 / 0.1) ** 2)


def test_douglas_bag():
    # University of Glasgow worked example: VE 8.36 L/min STPD, FEO2 16.8 %, FECO2 4.1 %; printed VO2 0.347 and VCO2
    # 0.340. The body is a node whose fuel is not measured: carbohydrate and fat, so that any RQ is possible
    system = build(
        {
            "inspired": (
                "outside",
                "body",
                {
                    "composition": {"oxygen": 0.2093, "carbon_dioxide": 0.0003, "nitrogen": "rest"},
                    "volume_at": NORMAL,
                },
            ),
            "fuel": ("outside", "body", ["carbon", "fat"]),
            "expired": (
                "body",
                "outside",
                {"species": ["oxygen", "carbon_dioxide", "nitrogen"], "gas": "dry", "volume_at": NORMAL},
            ),
            "water": ("body", "outside", "water"),
        },
        {"body": {"reacts": True}},
        unit="mol/min",
        species=SPECIES | {"fat": "C55H104O6"},
        inert=["nitrogen"],
    )
    x, solution = adjust(
        system,
        {
            "expired.volume_flow": (8.36, 0.05),
            "expired.oxygen.fraction": (0.168, 0.0005),
            "expired.carbon_dioxide.fraction": (0.041, 0.0005),
        },
    )
    litres = molar_volume(at(NORMAL))
    assert objective(solution) == pytest.approx(0.0, abs=1e-12)  # nothing is redundant in a Douglas bag
    assert x["inspired.volume_flow"] == pytest.approx(8.37, abs=0.005)
    assert litres * (x["inspired.oxygen"] - x["expired.oxygen"]) == pytest.approx(0.347, abs=0.0005)
    assert litres * (x["expired.carbon_dioxide"] - x["inspired.carbon_dioxide"]) == pytest.approx(0.340, abs=0.0005)


def test_dry_and_wet_analysis_of_the_same_gas_agree():
    dry, _ = adjust(fermenter(), {**READINGS, **ANALYSES})
    water = 0.042
    wet_analyses = {k: (float(wet_fraction(y, water)), u * (1 - water)) for k, (y, u) in ANALYSES.items()}
    wet, _ = adjust(fermenter("wet"), {**READINGS, **wet_analyses, "offgas.water.fraction": (water, 1e-9)})
    assert wet["offgas.oxygen"] == pytest.approx(dry["offgas.oxygen"], rel=1e-6)
    assert wet["offgas.total"] == pytest.approx(dry["offgas.total"] / (1 - water), rel=1e-6)


def true_point(system, *, uptake=2.0, air=50.0):
    """A truth computed by hand: formaldehyde-like substrate CH2O burnt with RQ 1."""
    values = {"air.total": air, "feed.carbon": uptake, "broth.water": uptake}
    shares = {"oxygen": 0.2095, "carbon_dioxide": 0.0004, "nitrogen": 0.7901}
    for s, y in shares.items():
        values[f"air.{s}"] = y * air
    out = {"oxygen": values["air.oxygen"] - uptake, "carbon_dioxide": values["air.carbon_dioxide"] + uptake}
    out["nitrogen"] = values["air.nitrogen"]
    total = sum(out.values())
    for s, n in out.items():
        values[f"offgas.{s}"], values[f"offgas.{s}.fraction"] = n, n / total
    litres = molar_volume(at(NORMAL))
    values |= {"offgas.total": total, "air.volume_flow": air * litres, "offgas.volume_flow": total * litres}
    x = np.zeros(system.size)
    for name, value in values.items():
        x[system.column(name)] = value
    return x


def closure(system, x):
    e = system.equations
    return np.abs(e.closure(x)) / np.maximum(e.largest_term(x), 1e-300)


def test_truth_closes_every_balance():
    system = fermenter()
    assert closure(system, true_point(system)) == pytest.approx(0.0, abs=1e-12)


def test_jacobian_against_finite_differences():
    system = fermenter()
    x = true_point(system) + 0.01
    jacobian = system.equations.jacobian(x).toarray()
    step = 1e-6
    for c in range(system.size):
        d = np.zeros(system.size)
        d[c] = step
        numeric = (system.equations.closure(x + d) - system.equations.closure(x - d)) / (2 * step)
        assert jacobian[:, c] == pytest.approx(numeric, abs=1e-6), system.name(c)


def test_gas_lost_before_its_meter_takes_all_species_along():
    system = fermenter()
    x = true_point(system)
    lost = 5.0
    for species in ("oxygen", "carbon_dioxide", "nitrogen"):
        c = system.column(f"offgas.{species}")
        x[c] -= lost * x[system.column(f"offgas.{species}.fraction")]
    for name, factor in {"total": 1.0, "volume_flow": molar_volume(at(NORMAL))}.items():
        x[system.column(f"offgas.{name}")] -= lost * factor
    assert closure(system, x).max() > 1e-3
    x[system.column("offgas.gas_lost")] = lost
    assert closure(system, x) == pytest.approx(0.0, abs=1e-12)


def test_air_drawn_in_dilutes_the_gas():
    system = fermenter()
    x = true_point(system)
    drawn = 5.0
    share = {"oxygen": 0.2095, "carbon_dioxide": 0.0004, "nitrogen": 0.7901}
    for species, y in share.items():
        x[system.column(f"offgas.{species}")] += drawn * y
    total = sum(x[system.column(f"offgas.{s}")] for s in share)
    for species in share:
        x[system.column(f"offgas.{species}.fraction")] = x[system.column(f"offgas.{species}")] / total
    x[system.column("offgas.total")] = total
    x[system.column("offgas.volume_flow")] = total * molar_volume(at(NORMAL))
    assert closure(system, x).max() > 1e-3
    x[system.column("offgas.air_drawn_in")] = drawn
    assert closure(system, x) == pytest.approx(0.0, abs=1e-12)


def test_no_loss_is_offered_where_none_is_possible():
    names = fermenter(can_leak=False).names()
    assert "offgas.gas_lost" not in names
    assert "offgas.air_drawn_in" not in names


def test_volume_of_a_single_gas():
    system = build(
        {
            "in": ("outside", "tee", {"species": "oxygen", "volume_at": "20 C, 101.325 kPa"}),
            "out": ("tee", "outside", "oxygen"),
        },
        {"tee": {}},
        unit="mmol/min",
        species={"oxygen": "O2"},
    )
    assert system.units()["in.volume_flow"] == "mL/min"
    x, _ = adjust(system, {"in.volume_flow": (240.55, 0.1)})
    assert x["out.oxygen"] == pytest.approx(10.0, abs=1e-3)  # 24.055 L/mol at 20 C
