"""Gas volumes against CODATA, IAPWS and published worked examples."""

import iapws
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from reconcile_elements.gas import (
    CONDITIONS,
    KPA_PER_MMHG,
    Conditions,
    btps_to_stpd,
    conditions,
    dry_fraction,
    inert_balance,
    molar_flow,
    molar_volume,
    saturation_pressure,
    volume_factor,
    wet_fraction,
)
from reconcile_elements.refusal import Refusal


@pytest.mark.parametrize(
    ("name", "litres"),
    # CODATA 2018: molar volume of ideal gas at 273.15 K, printed truncated after eight decimals
    [("0 C, 101.325 kPa", 22.41396954), ("0 C, 100 kPa", 22.71095464)],
)
def test_molar_volume(name, litres):
    assert molar_volume(conditions(name)) == pytest.approx(litres, abs=1e-8)


def test_choice_of_standard_moves_a_flow():
    normal, warm = CONDITIONS["0 C, 101.325 kPa"], CONDITIONS["25 C, 101.325 kPa"]
    assert molar_flow(22.41396954, normal) == pytest.approx(1.0, abs=1e-9)
    # 298.15/273.15: nine per cent between two gases that are both called standard
    assert volume_factor(normal, warm) == pytest.approx(1.091525, abs=1e-6)


def test_unknown_reference_lists_the_known_ones():
    with pytest.raises(Refusal, match="does not state a temperature and a pressure") as caught:
        conditions("standard")
    assert caught.value.code == "gas-reference"
    assert "15 C, 101.325 kPa" in str(caught.value)


@pytest.mark.parametrize(
    ("kelvin", "megapascal"),
    # IAPWS-IF97, table 35: check values of the saturation-pressure equation
    [(300.0, 0.353658941e-2), (500.0, 0.263889776e1), (600.0, 0.123443146e2)],
)
def test_saturation_pressure_check_values(kelvin, megapascal):
    assert saturation_pressure(kelvin - 273.15) / 1e3 == pytest.approx(megapascal, rel=2e-9)


@pytest.mark.parametrize("celsius", [0.5, 20.0, 30.0, 37.0, 60.0, 99.9])
def test_saturation_pressure_against_iapws(celsius):
    theirs = iapws.IAPWS97(T=celsius + 273.15, x=0).P * 1e3
    assert saturation_pressure(celsius) == pytest.approx(theirs, rel=1e-8)


def test_saturation_pressure_in_the_physiologist_s_unit():
    # 47 mmHg at 37 C, the figure of every respiration table; 46.0 mmHg at 36.6 C from the polynomial that a
    # maker of physiological recorders prints for its oxygen channel (46.0 mmHg, read to one decimal)
    assert saturation_pressure(37.0) / KPA_PER_MMHG == pytest.approx(47.0, abs=0.15)
    assert saturation_pressure(36.6) / KPA_PER_MMHG == pytest.approx(46.0, abs=0.15)


def test_saturation_pressure_refuses_ice():
    with pytest.raises(Refusal, match=r"outside 0 to 373\.946"):
        saturation_pressure(-5.0)


def test_btps_to_stpd():
    # 0.826, the factor of respiratory physiology for 37 C, 760 mmHg and 47 mmHg of water
    assert btps_to_stpd(water_kpa=47 * KPA_PER_MMHG) == pytest.approx(0.826, abs=0.0005)
    assert btps_to_stpd() == pytest.approx(0.826, abs=0.0005)


def test_no_dry_gas_left():
    with pytest.raises(Refusal, match="no dry gas is left"):
        volume_factor(Conditions(100, 101.325, ""), CONDITIONS["0 C, 101.325 kPa"], water_kpa=101.4)


def test_douglas_bag():
    # University of Glasgow, Exercise Science, section 3: VE 8.36 L/min STPD, O2 16.8 %, CO2 4.1 %; inspired air
    # 20.93, 0.03 and 79.04 %. Printed: VI 8.37, VO2 0.347, VCO2 0.340 L/min
    found = inert_balance(
        oxygen_in=0.2093, carbon_dioxide_in=0.0003, oxygen_out=0.168, carbon_dioxide_out=0.041, outflow=8.36
    )
    assert found.inflow == pytest.approx(8.37, abs=0.005)
    assert found.oxygen_uptake == pytest.approx(0.347, abs=0.0005)
    assert found.carbon_dioxide_output == pytest.approx(0.340, abs=0.0005)


FRACTION = st.floats(0.0, 0.3)


@given(FRACTION, FRACTION, FRACTION, FRACTION, st.floats(0.1, 100.0))
def test_inert_balance_from_either_side(o_in, c_in, o_out, c_out, flow):
    fractions = {"oxygen_in": o_in, "carbon_dioxide_in": c_in, "oxygen_out": o_out, "carbon_dioxide_out": c_out}
    there = inert_balance(**fractions, inflow=flow)
    back = inert_balance(**fractions, outflow=there.outflow)
    assert back.inflow == pytest.approx(flow, rel=1e-12)
    assert back.oxygen_uptake == pytest.approx(there.oxygen_uptake, rel=1e-9, abs=1e-12 * flow)


@given(FRACTION, st.floats(0.0, 0.5))
def test_drying_and_wetting_are_inverse(fraction, water):
    assert wet_fraction(dry_fraction(fraction, water), water) == pytest.approx(fraction, abs=1e-15)


def test_wet_and_dry_analysis_agree_once_water_is_counted():
    # exhaled gas saturated at 30 C and 101.325 kPa: 4.2 % water, which a dry analyser does not see
    water = saturation_pressure(30.0) / 101.325
    assert water == pytest.approx(0.0419, abs=0.0001)
    dry = inert_balance(
        oxygen_in=0.2095, carbon_dioxide_in=0.0004, oxygen_out=0.19, carbon_dioxide_out=0.018, inflow=60.0
    )
    wet = inert_balance(
        oxygen_in=0.2095,
        carbon_dioxide_in=0.0004,
        oxygen_out=wet_fraction(0.19, water),
        carbon_dioxide_out=wet_fraction(0.018, water),
        water_out=water,
        inflow=60.0,
    )
    assert wet.oxygen_uptake == pytest.approx(dry.oxygen_uptake, rel=1e-12)
    assert wet.outflow == pytest.approx(dry.outflow / (1 - water), rel=1e-12)
    # taken for dry, the wet readings would give an uptake that is a third too large
    wrong = inert_balance(
        oxygen_in=0.2095,
        carbon_dioxide_in=0.0004,
        oxygen_out=wet_fraction(0.19, water),
        carbon_dioxide_out=wet_fraction(0.018, water),
        inflow=60.0,
    )
    assert wrong.oxygen_uptake > 1.3 * dry.oxygen_uptake


def test_percent_given_as_fraction_is_refused():
    with pytest.raises(Refusal, match=r"20\.95 % is 0\.2095"):
        inert_balance(oxygen_in=20.95, carbon_dioxide_in=0.04, oxygen_out=19.0, carbon_dioxide_out=1.0, inflow=1.0)


@pytest.mark.parametrize("flows", [{}, {"inflow": 1.0, "outflow": 1.0}])
def test_exactly_one_flow(flows):
    with pytest.raises(Refusal, match="exactly one of inflow and outflow"):
        inert_balance(oxygen_in=0.2, carbon_dioxide_in=0.0, oxygen_out=0.2, carbon_dioxide_out=0.0, **flows)


def test_arrays_are_welcome():
    found = inert_balance(
        oxygen_in=0.2095,
        carbon_dioxide_in=0.0004,
        oxygen_out=[0.19, 0.2],
        carbon_dioxide_out=[0.018, 0.008],
        inflow=1.0,
    )
    assert found.oxygen_uptake.shape == (2,)
    assert np.all(np.diff(found.oxygen_uptake) < 0)
