"""The invented heat recovery of the data sets, from case file to the question of swapped sensors."""

from pathlib import Path

import numpy as np
import pytest
from reconcile_energy import enthalpy
from reconcile_energy.sensors import section

from reconcile.run import load_case

FOLDER = Path(__file__).parents[3] / "datasets" / "heat_recovery"


@pytest.fixture(scope="module")
def result():
    return load_case(FOLDER).run()


def test_sound_hours_agree(result):
    assert set(result.checks[:8]) == {2}
    assert (result.p_value[:8] > 0.05).all()


def test_heat_is_balanced_by_hand(result):
    x = dict(zip(result.variables, result.adjusted[:8].T, strict=True))
    water = x["cold_water.flow"] / 3600 * 4.18
    recovered = x["hot_product.flow"] / 3600 * 3.2 * (x["hot_product.temperature"] - x["cool_product.temperature"])
    np.testing.assert_allclose(
        recovered, water * (x["warm_water.temperature"] - x["cold_water.temperature"]), rtol=1e-9
    )
    one, zero = np.ones(8), np.zeros(8)
    evaporation = enthalpy.saturated(x["steam.pressure"], one) - enthalpy.saturated(3.9 * one, zero)
    heated = water * (x["hot_water.temperature"] - x["warm_water.temperature"])
    np.testing.assert_allclose(x["steam.flow"] / 3600 * evaporation, heated, rtol=1e-9)


def test_swapped_sensors_are_asked_for(result):
    (found,) = section(result)
    assert "from cold_water to warm_water" in found.text
    assert "in 4 of 12 snapshots" in found.text
    assert "product_side" not in found.text


def test_no_section_without_reason():
    case = load_case(FOLDER)
    table = case.read()
    assert section(case.run(dict(zip(table.columns, table.values[0], strict=True)))) == []


def test_swapped_hours_are_solved_and_do_not_agree(result):
    assert not result.table.failed
    assert (result.objective[8:] > 1e4).all()


def test_the_readings_put_right_agree(result):
    case = load_case(FOLDER)
    table = case.read()
    read = dict(zip(table.columns, table.values[8], strict=True))
    read["TT-3"], read["TT-4"] = read["TT-4"], read["TT-3"]
    assert case.run(read).objective[0] == pytest.approx(1.25, abs=5e-3)
