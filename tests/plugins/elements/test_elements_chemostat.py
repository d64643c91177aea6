"""A chemostat, from case file to words: invented figures first, then fifteen published steady states.

Expected values of the invented figures were computed independently (full KKT solve, one reading freed at a time).
"""

import csv

import pytest
from reconcile_elements.formula import parse_formula
from reconcile_elements.masses import molar_mass

import reconcile

CASE = """
reconcile: 1
title: Chemostat (invented figures)
domains:
  elements:
    unit: mmol/h
    species: {glucose: C6H12O6, oxygen: O2, carbon_dioxide: CO2, biomass: CH1.8O0.5N0.2, ammonia: NH3, water: H2O}
    hidden: {acetate: C2H4O2, ethanol: C2H6O}
    nitrogen_source: NH3
nodes:
  reactor: {reacts: true}
streams:
  feed:    {path: outside -> reactor, species: glucose}
  uptake:  {path: outside -> reactor, species: oxygen}
  base:    {path: outside -> reactor, species: ammonia}
  offgas:  {path: reactor -> outside, species: carbon_dioxide}
  harvest: {path: reactor -> outside, species: [biomass, water]}
meters:
  glucose: {reads: feed.glucose, unit: mmol/h, sigma: 0.2 mmol/h}
  O2:      {reads: uptake.oxygen, unit: mmol/h, sigma: 0.9 mmol/h}
  CO2:     {reads: offgas.carbon_dioxide, unit: mmol/h, sigma: 0.9 mmol/h}
  biomass: {reads: harvest.biomass, unit: mmol/h, sigma: 1.2 mmol/h}
"""
TAGS = ["glucose", "O2", "CO2", "biomass"]
LOW_CO2 = dict(zip(TAGS, [10.1, 28.2, 26.4, 30.6], strict=True))
HIDDEN = dict(zip(TAGS, [10.05, 29.1, 29.6, 24.4], strict=True))


@pytest.fixture
def case(write_case):
    return reconcile.load_case(write_case(CASE))


def left(snapshot):
    return {f.candidate.name: f.left for f in snapshot.faults}


def test_low_carbon_dioxide(case):
    s = case.run(LOW_CO2).snapshot(0)
    assert s.test.objective == pytest.approx(8.1274, abs=5e-4)
    assert (s.test.checks, s.test.limit) == (2, pytest.approx(5.9915, abs=5e-5))
    assert [s.reading(t).adjusted for t in TAGS] == pytest.approx([9.9507, 26.7677, 28.3361, 31.3683], abs=5e-5)
    assert [s.reading(t).sigma for t in TAGS] == pytest.approx([0.1511, 0.6046, 0.5897, 0.889], abs=1e-4)
    co2 = s.fault("CO2")
    assert (co2.size, co2.sigma) == pytest.approx((-3.3923, 1.1913), abs=5e-4)
    found = left(s)
    freed = {"CO2": 0.019, "O2": 3.5122, "glucose": 6.8298, "biomass": 7.219}
    assert {t: found[t] for t in freed} == pytest.approx(freed, abs=5e-4)
    assert found["reactor.hidden_acetate"] == pytest.approx(6.83, abs=5e-3)
    assert found["reactor.hidden_ethanol"] == pytest.approx(8.01, abs=5e-3)


def test_a_lost_gas_is_the_twin_of_a_low_reading(case):
    result = case.run(LOW_CO2)
    s = result.snapshot(0)
    lost = s.fault("offgas.carbon_dioxide.lost")
    assert lost.left == pytest.approx(s.fault("CO2").left, abs=1e-9)
    assert lost.size == pytest.approx(3.3923, abs=5e-4)
    text = " ".join(result.summary().split())
    assert "3.4 mmol/h of carbon_dioxide lost from offgas before its meter" in text
    assert "No reading here can tell these apart" in text


def test_a_hidden_product_and_its_twin(case):
    result = case.run(HIDDEN)
    s = result.snapshot(0)
    assert s.test.objective == pytest.approx(10.9537, abs=5e-4)
    glucose, acetate = s.fault("glucose"), s.fault("reactor.hidden_acetate")
    assert (glucose.size, glucose.sigma) == pytest.approx((0.9955, 0.3053), abs=5e-4)
    assert (acetate.size, acetate.sigma) == pytest.approx((2.99, 0.92), abs=5e-3)
    assert glucose.left == pytest.approx(acetate.left, abs=1e-9)
    assert glucose.left == pytest.approx(0.3193, abs=5e-4)
    assert s.fault("biomass").left == pytest.approx(0.6277, abs=5e-4)
    assert s.fault("reactor.hidden_ethanol").left == pytest.approx(4.56, abs=5e-3)
    assert s.fault("CO2").left == pytest.approx(8.1135, abs=5e-4)


def test_the_words_name_the_tie_its_reason_and_the_test(case):
    text = " ".join(case.run(HIDDEN).summary().split())
    assert "glucose reads high by 1.00 mmol/h" in text
    assert "2.99 mmol/h of acetate (C2H4O2, 4 electrons per carbon like glucose) formed at reactor" in text
    assert "No reading here can tell these apart" in text
    assert "analyse what leaves reactor for acetate (HPLC, GC or an enzyme kit), and weigh the feed bottle" in text


def test_a_product_cannot_be_formed_at_a_negative_rate(case):
    # more carbon out than in: only a negative product would explain it, and none is offered
    s = case.run({**HIDDEN, "glucose": 8.0}).snapshot(0)
    assert s.test.objective > s.test.limit
    offered = {f.candidate.name for a in s.accounts.ranked for e in a.alternatives for f in e.faults}
    assert offered
    assert not any("hidden" in name for name in offered)


def test_a_formula_that_cannot_be_read_stands_with_its_line(write_case):
    path = write_case(CASE.replace("CH1.8O0.5N0.2", "CH1.8O0.5N0.2x"))
    with pytest.raises(reconcile.InputError, match=r"case\.yaml:7:\d+: .*unexpected x at position 14"):
        reconcile.load_case(path)


def test_reduction_without_a_nitrogen_source_asks(write_case):
    text = CASE.replace("nitrogen_source: NH3", "conserve: [C, reduction]")
    with pytest.raises(reconcile.InputError, match=r"which is it: NH3 .N counts -3., NO3 .* or N2"):
        reconcile.load_case(write_case(text))


def test_a_percentage_of_a_gas_that_is_neither_wet_nor_dry(write_case):
    text = CASE.replace("species: carbon_dioxide}", "species: [carbon_dioxide, oxygen], gas: true}")
    with pytest.raises(reconcile.InputError, match=r"of the wet or the dry gas.*write gas: dry"):
        reconcile.load_case(write_case(text))


# ------------------------------------------------------------------ fifteen published steady states


def published(datasets):
    with (datasets / "chemostat" / "published.csv").open(encoding="utf-8") as file:
        return [{k: float(v) for k, v in row.items()} for row in csv.DictReader(file)]


def mol(formula):
    return molar_mass(parse_formula(formula))


def test_published_recoveries_of_carbon_and_nitrogen(datasets):
    # Kayser et al. (2005) Microbiology 151:693, Table 1. The carbon and nitrogen content of the dry mass is not in the
    # transcription; 0.406 and 0.104 g/g reproduce all thirty printed recoveries
    for row in published(datasets):
        d = row["D_per_h"]
        carbon = d * (row["biomass_g_l"] * 0.4059 / 12.011 + 6 * row["glucose_g_l"] / mol("C6H12O6"))
        carbon += d * 2 * row["acetate_g_l"] / mol("C2H4O2") + row["co2_transfer_g_l_h"] / mol("CO2")
        nitrogen = row["biomass_g_l"] * 0.1038 / 14.007 + row["ammonium_g_l"] / mol("NH4+")
        assert 100 * carbon / (d * 60 / mol("C6H12O6")) == pytest.approx(row["c_recovery_pct"], abs=0.8)
        assert 100 * nitrogen / 0.1334 == pytest.approx(row["n_recovery_pct"], abs=0.8)


def test_readings_are_the_published_figures_times_the_dilution_rate(datasets):
    with (datasets / "chemostat" / "readings.csv").open(encoding="utf-8") as file:
        rates = list(csv.DictReader(file))
    table = published(datasets)
    assert len(rates) == len(table) == 15
    for rate, row in zip(rates, table, strict=True):
        assert float(rate["biomass"]) == pytest.approx(row["D_per_h"] * row["biomass_g_l"], rel=1e-4)
        assert float(rate["feed_N"]) == pytest.approx(row["D_per_h"] * 133.4, rel=1e-4)
        assert float(rate["O2"]) == row["o2_transfer_g_l_h"]


def test_twelve_states_agree_and_the_gap_is_found(datasets):
    result = reconcile.load_case(datasets / "chemostat").run()
    agrees = result.p_value >= 0.05
    # the printed carbon recoveries of states 13 to 15 are 93, 76 and 89 %; all others lie between 93 and 101 %
    assert list(agrees) == [True] * 12 + [False] * 3
    assert list(result.checks) == [3] * 15
    assert result.objective[13] == max(result.objective)
    assert result.objective[13] > 100
