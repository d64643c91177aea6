"""Which test holds which published figure; the source stands beside each figure, in the test itself."""

import ast
from pathlib import Path

import pytest

TESTS = Path(__file__).parents[1]

PUBLISHED = {
    # charge
    "reference seawater: neutral, fractions add up to one, mean molar mass": [
        "plugins/charge/test_charge_domain.py::test_reference_seawater_is_neutral"
    ],
    "four groundwater analyses in mg/L": ["plugins/charge/test_charge_domain.py::test_published_ion_balances"],
    "stream samples with published percent differences, one without alkalinity": [
        "plugins/charge/test_charge_domain.py::test_published_stream_samples",
        "plugins/charge/test_charge_domain.py::test_a_sample_without_alkalinity_is_not_condemned",
    ],
    "circuit of two meshes": ["plugins/charge/test_charge_domain.py::test_two_mesh_circuit"],
    "rank of a reduced incidence matrix": [
        "plugins/charge/test_charge_domain.py::test_the_rank_of_a_published_incidence_matrix"
    ],
    "balanced bridge": ["plugins/charge/test_charge_domain.py::test_a_balanced_bridge_carries_no_current"],
    "losses of the IEEE 14- and 118-bus cases": [
        "oracles/test_power_networks.py::test_losses_and_currents_of_the_ieee_cases"
    ],
    # elements
    "molar masses from the standard atomic weights": ["plugins/elements/test_elements_masses.py::test_molar_mass"],
    "degrees of reduction of nine organisms": [
        "plugins/elements/test_elements_reactions.py::test_published_degrees_of_reduction"
    ],
    "two thirds of the carbon to biomass": [
        "plugins/elements/test_elements_reactions.py::test_two_thirds_of_the_carbon_to_biomass"
    ],
    "carbon and nitrogen recoveries of fifteen E. coli chemostats": [
        "plugins/elements/test_elements_chemostat.py::test_published_recoveries_of_carbon_and_nitrogen"
    ],
    "carbon recoveries of ten E. coli chemostats": [
        "plugins/elements/test_elements_balances.py::test_published_carbon_recoveries"
    ],
    "electrochemical equivalents": [
        "plugins/elements/test_elements_masses.py::test_faraday",
        "plugins/charge/test_charge_domain.py::test_electrochemical_equivalents",
    ],
    "core metabolism of E. coli: 72 x 95, rank 67, growth 0.8739215": [
        "oracles/test_core_metabolism.py::test_size_and_rank",
        "oracles/test_core_metabolism.py::test_all_reactions_but_growth_conserve_elements_and_charge",
        "oracles/test_core_metabolism.py::test_growth_rate_as_published",
    ],
    # energy
    "verification points of IAPWS-IF97": [
        "plugins/energy/test_energy_steam.py::test_published_verification_points",
        "plugins/energy/test_energy_steam.py::test_the_library_keeps_to_the_published_volume",
        "plugins/elements/test_elements_gas.py::test_saturation_pressure_check_values",
    ],
    # fluid and gas
    "pressure drop of a needle, and a flow in CGS units": [
        "plugins/fluid/test_fluid_domain.py::test_poiseuille_against_published_numbers"
    ],
    "specific gravity of a slurry": ["plugins/mixture/test_mixture_slurry.py::test_published_slurry_specific_gravity"],
    "oxygen uptake from a Douglas bag": [
        "plugins/elements/test_elements_gas.py::test_douglas_bag",
        "plugins/elements/test_elements_gases.py::test_douglas_bag",
    ],
    "BTPS to STPD, and water vapour at body temperature": [
        "plugins/elements/test_elements_gas.py::test_btps_to_stpd",
        "plugins/elements/test_elements_gas.py::test_saturation_pressure_in_the_physiologist_s_unit",
    ],
    # perfusion
    "oxygen content and delivery": ["plugins/perfusion/test_perfusion_domain.py::test_oxygen_content_and_delivery"],
    "Huefner number and solubility": [
        "plugins/perfusion/test_perfusion_domain.py::test_constants_of_the_oxygen_content"
    ],
    "Fick: flow and extraction": ["plugins/perfusion/test_perfusion_domain.py::test_fick"],
    "clearance of a dialyser": [
        "plugins/perfusion/test_perfusion_domain.py::test_dialyser_clearance_with_ultrafiltration"
    ],
    # uncertainty
    "correlated readings of an impedance (GUM H.2)": [
        "plugins/test_published_uncertainties.py::test_resistance_reactance_and_impedance_from_correlated_readings"
    ],
    "orifice plate": ["plugins/test_published_uncertainties.py::test_flow_through_an_orifice_plate"],
}


@pytest.mark.parametrize("figure", PUBLISHED)
def test_is_held_by_a_test_that_asserts_something(figure):
    for place in PUBLISHED[figure]:
        file, name = place.split("::")
        tree = ast.parse((TESTS / file).read_text(encoding="utf-8"))
        (function,) = [n for n in tree.body if isinstance(n, ast.FunctionDef) and n.name == name]
        assert any(isinstance(n, ast.Assert) for n in ast.walk(function)), place
        marks = {ast.unparse(d) for d in function.decorator_list}
        assert not any("skip" in m or "xfail" in m for m in marks), place
