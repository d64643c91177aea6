"""What a chemostat case must say before anything is computed: nitrogen source, wet or dry, formulas that can be read."""

import pytest
from chemostat_by_hand import CASE

import reconcile


def test_reduction_without_a_nitrogen_source_asks_which_it_is(write_case):
    text = CASE.replace("nitrogen_source: NH3", "conserve: [C, reduction]")
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(text))
    message = str(caught.value)
    assert "case.yaml" in message
    assert "the degree of reduction of a compound with nitrogen depends on the nitrogen source" in message
    assert "which is it: NH3 (N counts -3), NO3 (+5) or N2 (0)? State e.g. nitrogen_source: NH3" in message
    assert "[nitrogen-source-missing]" in message


@pytest.mark.parametrize("said", ["gas: true", "gas: yes", "gas: '%'"])
def test_a_percentage_of_a_gas_that_is_neither_wet_nor_dry(write_case, said):
    text = CASE.replace("species: carbon_dioxide}", "species: [carbon_dioxide, oxygen], " + said + "}")
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(text))
    message = str(caught.value)
    assert "does not say whether fractions and flow are of the wet or the dry gas" in message
    assert "write gas: dry" in message
    line = 1 + text[: text.index("offgas:  {path")].count("\n")
    assert f"case.yaml:{line}:" in message


def test_a_fraction_of_a_gas_of_which_nothing_is_said(write_case):
    text = CASE.replace("species: carbon_dioxide}", "species: [carbon_dioxide, oxygen]}").replace(
        "reads: offgas.carbon_dioxide, unit: mmol/h, sigma: 0.9 mmol/h",
        "reads: offgas.oxygen.fraction, unit: '%', sigma: 0.05 % absolute",
    )
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(text))
    message = str(caught.value)
    assert "there is no variable 'offgas.oxygen.fraction'" in message
    # The question that decides is asked: wet or dry.
    assert "Write gas: dry (water taken out before the analyser) or gas: wet" in message


def test_a_gas_volume_of_which_nothing_is_said(write_case):
    said = "species: [carbon_dioxide, oxygen], volume_at: '0 C, 101.325 kPa'}"
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(CASE.replace("species: carbon_dioxide}", said)))
    message = str(caught.value)
    assert "'offgas' has a gas volume, but not whether it is dry or wet" in message
    assert "write gas: dry or gas: wet" in message


def test_a_formula_that_cannot_be_read_stands_with_its_line(write_case):
    path = write_case(CASE.replace("CH1.8O0.5N0.2", "CH1.8O0.5N0.2x"))
    with pytest.raises(reconcile.InputError, match=r"case\.yaml:7:\d+: .*unexpected x at position 14"):
        reconcile.load_case(path)


def test_all_mistakes_of_the_domain_at_once(write_case):
    text = CASE.replace("acetate: C2H4O2", "acetate: C2H4Oz").replace("CH1.8O0.5N0.2", "CH1.8O0.5N0.2x")
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(text))
    assert "C2H4Oz" in str(caught.value)
    assert "CH1.8O0.5N0.2x" in str(caught.value)
