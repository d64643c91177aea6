"""What the elements domain asks for when a case reads a variable of a gas that is not there. The case is invented."""

from __future__ import annotations

import pytest

import reconcile
from reconcile.errors import InputError

CASE = """\
reconcile: 1
domains:
  elements:
    unit: mol/h
    species: {oxygen: O2, carbon_dioxide: CO2, nitrogen: N2, water: H2O, glucose: C6H12O6}
    inert: [nitrogen]
nodes: {reactor: {reacts: true}}
streams:
  air: {path: outside -> reactor, composition: {oxygen: 0.2095, carbon_dioxide: 0.0004, nitrogen: rest}, volume_at: "0 C, 101.325 kPa"}
  feed: {path: outside -> reactor, species: glucose}
  offgas: {path: reactor -> outside, species: [oxygen, carbon_dioxide, nitrogen]%s}
  broth: {path: reactor -> outside, species: water}
meters:
  V: {reads: air.volume_flow, unit: L/h, sigma: 1 %% of reading}
  X: {reads: %s, unit: "%s", sigma: 1 %% of reading}
"""


def refused(write_case, reads, unit="%", offgas=""):
    with pytest.raises(InputError) as caught:
        reconcile.load_case(write_case(CASE % (offgas, reads, unit)))
    (problem,) = caught.value.problems
    assert problem.code == "unknown-variable"
    assert (problem.where.line, problem.where.file.endswith("case.yaml")) == (15, True)
    return str(problem)


def test_a_fraction_of_a_gas_of_no_basis_is_asked_for_it(write_case):
    said = refused(write_case, "offgas.oxygen.fraction")
    assert "oxygen is a fraction of the gas in stream 'offgas': of wet or of dry gas?" in said
    assert "Write gas: dry (water taken out before the analyser) or gas: wet" in said
    assert "offgas has:" not in said
    reconcile.load_case(write_case(CASE % (", gas: dry", "offgas.oxygen.fraction", "%")))


@pytest.mark.parametrize(
    ("reads", "unit", "offgas", "says"),
    [
        ("offgas.total", "mol/h", "", "stream 'offgas' does not say whether it is wet or dry gas"),
        ("offgas.volume_flow", "L/h", "", "State the conditions of its volume as well, e.g. volume_at: 0 C, 101.325 kPa"),
        ("offgas.volume_flow", "L/h", ", gas: dry", "at which conditions its volume is stated, standard or those of the line"),
        ("offgas.water.fraction", "%", "", "stream 'offgas' does not hold water: it holds oxygen, carbon_dioxide, nitrogen"),
        ("air.oxygen.fraction", "%", "", "the composition of stream 'air' is stated; leave composition out if oxygen is read"),
    ],
)  # fmt: skip
def test_what_else_a_gas_waits_for(write_case, reads, unit, offgas, says):
    assert says in refused(write_case, reads, unit, offgas)


def test_what_is_no_matter_of_gas_keeps_the_nearest_name(write_case):
    assert "did you mean 'offgas.oxygen'?" in refused(write_case, "offgas.oxygn", "mol/h")
    assert "wet" not in refused(write_case, "offgas.helium.fraction")
