"""The charge domain: circuits, solutions, Faraday's law, against published worked examples."""

from __future__ import annotations

import csv

import numpy as np
import pytest
from reconcile_elements.formula import parse_formula

import reconcile

HEAD = "reconcile: 1\ntitle: Test (invented)\n"


def run(write_case, text, values):
    return reconcile.load_case(write_case(HEAD + text)).run(values)


CIRCUIT = """
domains: {charge: {unit: A}}
nodes: {b: {reference: true}}
streams:
  i1: {path: b -> a, conductor: true, source: true}
  i2: {path: a -> b, conductor: true}
  i3: {path: a -> b, conductor: true, source: true}
meters:
  VA: {reads: a.potential, unit: V, sigma: 1 V}
known:
  i1.resistance: {value: 10 V/A}
  i2.resistance: {value: 15 V/A}
  i3.resistance: {value: 12 V/A}
  i1.emf: {value: 2 V}
  i3.emf: {value: -12 V}
"""


def test_two_mesh_circuit(write_case):
    # Worked answer on a public homework site (read as a search excerpt): i1 = i2 + i3, 10 i1 + 15 i2 = 2,
    # 15 i2 - 12 i3 = 12 gives -0.28, 0.32, -0.6 A.
    result = run(write_case, CIRCUIT, {"VA": 4.8})
    value = dict(zip(result.variables, result.adjusted[0], strict=True))
    # Everything is known, so the reading of the potential is checked by one equation and adjusted to 15 * 0.32 V.
    assert [value[f"i{k}.current"] for k in (1, 2, 3)] == pytest.approx([-0.28, 0.32, -0.6], abs=1e-9)


def test_a_balanced_bridge_carries_no_current(write_case):
    # Public textbook-companion repository: arms 6, 3, 4 and 2 ohm, so the detector current is zero whatever its own
    # resistance is.
    for detector in (1, 10, 1000):
        text = f"""
domains: {{charge: {{unit: A}}}}
nodes: {{c: {{reference: true}}}}
streams:
  feed: {{path: c -> a, conductor: true, source: true}}
  ab: {{path: a -> b, conductor: true}}
  ad: {{path: a -> d, conductor: true}}
  bc: {{path: b -> c, conductor: true}}
  dc: {{path: d -> c, conductor: true}}
  bd: {{path: b -> d, conductor: true}}
meters:
  U: {{reads: a.potential, unit: V, sigma: 0.1 V}}
known:
  feed.resistance: {{value: 0.1 V/A}}
  feed.emf: {{value: 10 V}}
  ab.resistance: {{value: 6 V/A}}
  ad.resistance: {{value: 3 V/A}}
  bc.resistance: {{value: 4 V/A}}
  dc.resistance: {{value: 2 V/A}}
  bd.resistance: {{value: {detector} V/A}}
"""
        result = run(write_case, text, {"U": 9.7})
        value = dict(zip(result.variables, result.adjusted[0], strict=True))
        assert value["bd.current"] == pytest.approx(0.0, abs=1e-12)


ANALYSES = {
    # Hem, Study and Interpretation of the Chemical Characteristics of Natural Water (USGS Water-Supply Paper 2254),
    # figure 37 data as carried by a public-domain data file; mg/L. Sums in meq/L and error in percent as computed there.
    "12-6": (
        {"Ca": 43, "Mg": 20, "Na": 28, "K": 4.6, "HCO3": 254, "SO4": 8.3, "Cl": 28, "F": 0.5, "NO3": 0.1},
        5.127,
        5.153,
        -0.25,
    ),
    "15-1": ({"Ca": 48, "Mg": 3.6, "Na": 2.1, "HCO3": 152, "SO4": 3.2, "Cl": 8}, 2.783, 2.783, -0.01),
    "17-3": (
        {"Ca": 49, "Mg": 18, "Na": 168, "HCO3": 202, "SO4": 44, "Cl": 246, "F": 0.1, "NO3": 2.2},
        11.234,
        11.206,
        0.12,
    ),
    "10": ({"Ca": 37, "Mg": 24, "Na": 611, "HCO3": 429, "SO4": 1010, "Cl": 82, "F": 0.6}, 30.398, 30.404, -0.01),
}
CHARGES = {"Ca": 2, "Mg": 2, "Na": 1, "K": 1, "HCO3": -1, "SO4": -2, "Cl": -1, "F": -1, "NO3": -1}


@pytest.mark.parametrize("sample", ANALYSES)
def test_published_ion_balances(write_case, sample):
    ions, cations, anions, percent = ANALYSES[sample]
    listed = "\n".join(f"        {k}: {{charge: {CHARGES[k]}, unit: mg/L, as: {k}}}" for k in ions)
    meters = "\n".join(f"  {k}: {{reads: water.{k}, unit: mg/L, sigma: 3 % of reading}}" for k in ions)
    text = f"domains:\n  charge:\n    circuit: false\n    solutions:\n      water:\n{listed}\nstreams: {{}}\nmeters:\n{meters}\n"
    balance = run(write_case, text, ions).snapshot(0).balances[0]
    assert balance.inflow == pytest.approx(cations, abs=0.012)
    assert balance.outflow == pytest.approx(anions, abs=0.012)
    assert 100 * balance.before / (balance.inflow + balance.outflow) == pytest.approx(percent, abs=0.012)


PERCENT = [
    0.29, 2.91, 1.13, -4.93, 3.35, 0.22, 2.08, 0.11, 4.74, 1.15, 3.09,
    3.51, 0.76, 1.82, 4.92, 4.87, 4.76, 1.82, 2.37, 4.79, 2.98,
]  # fmt: skip


def test_published_stream_samples(datasets):
    # US Geological Survey stream samples (station 05079250, public domain), rows 2 to 22; the published percent difference
    # is 100 (c - a) / (c + a), from unrounded figures.
    case = reconcile.load_case(datasets / "stream_water")
    with (datasets / "stream_water" / "readings.csv").open() as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == len(PERCENT) == 21
    signs = {"H_ion": 1, "Ca": 1, "Mg": 1, "Na": 1, "K": 1, "Alk": -1, "NO2NO3": -1, "Cl": -1, "SO4": -1, "F": -1}
    for row, percent in zip(rows, PERCENT, strict=True):
        read = {k: float(row[k]) if row[k] else 0.0 for k in signs}
        cations = sum(v for k, v in read.items() if signs[k] > 0)
        anions = sum(v for k, v in read.items() if signs[k] < 0)
        assert 100 * (cations - anions) / (cations + anions) == pytest.approx(percent, abs=0.03)
    result = case.run()
    assert result.size == 21
    # The samples beyond about 4 % are those that disagree with 3 % per ion.
    flagged = {result.labels[i] for i in np.flatnonzero(result.suspicious)}
    assert "5" in flagged
    assert "2" not in flagged


def test_a_sample_without_alkalinity_is_not_condemned(datasets):
    # Row 1 of the same source lacks alkalinity: cations 7.972, anions 0.537 meq/L, published difference 87.37 %. Taken for
    # zero, the missing anion condemns a good sample; as what it is, unmeasured, it is calculated, and nothing is checked.
    assert pytest.approx(87.37, abs=0.025) == 100 * (7.972 - 0.537) / (7.972 + 0.537)
    case = reconcile.load_case(datasets / "stream_water")
    read = {"H_ion": 0.001, "Ca": 4.5, "Mg": 3.0, "Na": 0.4, "K": 0.071, "NO2NO3": 0.01, "Cl": 0.2, "SO4": 0.327}
    assert sum(list(read.values())[:5]) == pytest.approx(7.972)
    assert sum(list(read.values())[5:]) == pytest.approx(0.537)
    s = case.run({**read, "Alk": np.nan, "F": np.nan}).snapshot(0)
    assert s.test.checks == 0
    # less 0.010 meq/L of fluoride, which the case knows beforehand
    assert s.variable("sample.Alk").adjusted == pytest.approx(7.972 - 0.537 - 0.010, abs=1e-9)
    zero = case.run({**read, "Alk": 0.0, "F": np.nan}, percent_at="reading").snapshot(0)
    assert zero.test.objective > zero.test.limit


def test_reference_seawater_is_neutral(write_case):
    # Millero, Feistel, Wright & McDougall 2008, Deep-Sea Res. I 55, 50: mole fractions times 1e7; from memory, cross-read
    # in an open package. Designed to be neutral to the last digit.
    moles = {
        "Na": 4188071,
        "Mg": 471678,
        "Ca": 91823,
        "K": 91159,
        "Sr": 810,
        "Cl": 4874839,
        "SO4": 252152,
        "HCO3": 15340,
        "Br": 7520,
        "CO3": 2134,
        "BOH4": 900,
        "F": 610,
        "OH": 71,
    }
    charge = {
        "Na": 1,
        "Mg": 2,
        "Ca": 2,
        "K": 1,
        "Sr": 2,
        "Cl": -1,
        "SO4": -2,
        "HCO3": -1,
        "Br": -1,
        "CO3": -2,
        "BOH4": -1,
        "F": -1,
        "OH": -1,
    }
    listed = "\n".join(f"        {k}: {{charge: {charge[k]}, unit: mmol/L}}" for k in moles)
    meters = "\n".join(f"  {k}: {{reads: sea.{k}, unit: mmol/L, sigma: 1 % of reading}}" for k in moles)
    text = f"domains:\n  charge:\n    circuit: false\n    solutions:\n      sea:\n{listed}\nstreams: {{}}\nmeters:\n{meters}\n"
    balance = run(write_case, text, {k: float(v) for k, v in moles.items()}).snapshot(0).balances[0]
    assert balance.before == pytest.approx(0.0, abs=1e-9)
    # The same table: fractions add up to one, and the mean molar mass is 31.4038218 g/mol with the atomic weights of 2005.
    weights = {"H": 1.00794, "B": 10.811, "C": 12.0107, "O": 15.9994, "F": 18.9984032, "Na": 22.98976928, "Mg": 24.305}
    weights |= {"S": 32.065, "Cl": 35.453, "K": 39.0983, "Ca": 40.078, "Br": 79.904, "Sr": 87.62}
    written = {"BOH4": "B(OH)4", "BOH3": "B(OH)3"}
    whole = moles | {"BOH3": 2807, "CO2": 86}
    assert sum(whole.values()) == 10_000_000
    mass = sum(
        amount * sum(float(n) * weights[e] for e, n in parse_formula(written.get(k, k)).composition.items())
        for k, amount in whole.items()
    )
    assert mass / 1e7 == pytest.approx(31.4038218, abs=1e-7)


def test_the_unit_of_analyte_has_to_be_said(write_case):
    text = """
domains:
  charge:
    circuit: false
    solutions:
      water:
        Na: {charge: 1, unit: mg/L, as: Na}
        NO3: {charge: -1, unit: mg/L}
streams: {}
meters: {Na: {reads: water.Na, unit: mg/L, sigma: 1 mg/L}}
"""
    with pytest.raises(reconcile.InputError, match="counted as what"):
        run(write_case, text, {"Na": 1.0})


def test_nitrate_as_nitrogen_and_alkalinity_as_carbonate():
    from reconcile_charge.options import Ion
    from reconcile_charge.solutions import equivalents_per_unit

    as_n = Ion.model_validate({"charge": -1, "unit": "mg/L", "as": "N"})
    as_no3 = Ion.model_validate({"charge": -1, "unit": "mg/L", "as": "NO3"})
    # 14.007 and 62.004 g/mol (IUPAC abridged atomic weights 2021).
    assert equivalents_per_unit("s", "NO3", as_n) == pytest.approx(1 / 14.007, rel=1e-9)
    assert equivalents_per_unit("s", "NO3", as_no3) == pytest.approx(1 / 62.004, rel=1e-9)
    # 50.04 g of CaCO3 per equivalent (common practice in water analysis).
    hardness = Ion.model_validate({"charge": 2, "unit": "mg/L", "as": "CaCO3"})
    assert equivalents_per_unit("s", "Ca", hardness) == pytest.approx(1 / 50.04, rel=1e-4)
    alkalinity = Ion.model_validate({"charge": -1, "unit": "mg/L", "as": "CaCO3"})
    assert equivalents_per_unit("s", "HCO3", alkalinity) == pytest.approx(1 / 50.04, rel=1e-4)


@pytest.mark.parametrize(
    ("species", "mass", "electrons", "milligrams_per_coulomb"),
    [("Ag", 107.8682, 1, 1.118), ("Cu", 63.546, 2, 0.3293), ("Al", 26.9815, 3, 0.0932), ("H2", 2.016, 2, 0.01045)],
)
def test_electrochemical_equivalents(write_case, species, mass, electrons, milligrams_per_coulomb):
    # Textbook electrochemical equivalents, from memory; CODATA F = 96485.33212 C/mol.
    text = f"""
domains:
  charge:
    electrolysis:
      cell: {{current: supply.current, products: {{gas.{species}: {electrons}}}}}
streams: {{supply: outside -> cell, back: cell -> outside}}
meters:
  I: {{reads: supply.current, unit: A, sigma: 0.1 A}}
"""
    result = run(write_case, text, {"I": 10.0})
    rate = result.snapshot(0).variable(f"gas.{species}").adjusted
    assert rate * mass * 1000 / 3600 / 10.0 == pytest.approx(milligrams_per_coulomb, abs=2e-4)


def test_a_sign_reversed_string_shows_as_twice_its_reading(datasets):
    case = reconcile.load_case(datasets / "battery_bench")
    balance = case.run({"Q0": 24.0, "Q1": -7.9, "Q2": 8.1, "Q3": 7.7}).snapshot(0).balances[0]
    assert balance.before == pytest.approx(2 * 7.9 + 0.3, abs=1e-9)


def test_the_rank_of_a_published_incidence_matrix():
    # Nahvi & Edminister, Electric Circuits, problem 4.2 (matrix read in a public textbook-companion repository).
    from reconcile.adjust.eliminate import dependent_rows

    a = np.array([[-1, 1, 0, 0, 1, 0], [0, -1, 1, 0, 0, 1], [0, 0, 0, 1, -1, -1]], dtype=float)
    assert len(dependent_rows(a)) == 0
    whole = np.vstack([a, -a.sum(axis=0)])
    implied = dependent_rows(whole)
    assert np.allclose(implied, [[1, 1, 1, 1]])
