"""Formulae: notation, exactness, refusals with a position, and round trips."""

import pickle
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st
from reconcile_elements.formula import SYMBOLS, parse_formula
from reconcile_elements.refusal import Refusal


def composition(text):
    return {element: str(count) for element, count in parse_formula(text).composition.items()}


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("C6H12O6", {"C": "6", "H": "12", "O": "6"}),
        ("CH1.8O0.5N0.2", {"C": "1", "H": "9/5", "O": "1/2", "N": "1/5"}),
        ("C₆H₁₂O₆", {"C": "6", "H": "12", "O": "6"}),
        ("CO", {"C": "1", "O": "1"}),
        ("Co", {"Co": "1"}),
        ("NO", {"N": "1", "O": "1"}),
        ("No", {"No": "1"}),
        ("Ca3(PO4)2", {"Ca": "3", "P": "2", "O": "8"}),
        ("K4[Fe(CN)6]", {"K": "4", "Fe": "1", "C": "6", "N": "6"}),
        ("K4[Fe(CN)6].3H2O", {"K": "4", "Fe": "1", "C": "6", "N": "6", "H": "6", "O": "3"}),
        ("CH3(CH2)6CH3", {"C": "8", "H": "18"}),
        ("CuSO4.5H2O", {"Cu": "1", "S": "1", "O": "9", "H": "10"}),
        ("CuSO4·5H2O", {"Cu": "1", "S": "1", "O": "9", "H": "10"}),
        ("CaSO4·0.5H2O", {"Ca": "1", "S": "1", "O": "9/2", "H": "1"}),
        ("CaSO4.0.5H2O", {"Ca": "1", "S": "1", "O": "9/2", "H": "1"}),
        ("CaSO4.H2O", {"Ca": "1", "S": "1", "O": "5", "H": "2"}),
        ("CaCl2.NH3", {"Ca": "1", "Cl": "2", "N": "1", "H": "3"}),
        ("CaCl2·2NH3", {"Ca": "1", "Cl": "2", "N": "2", "H": "6"}),
        ("3CdSO4·8H2O", None),
        # the stated rule: water at the very end makes the full stop a hydrate's, elsewhere it is a decimal point
        ("MgCl2.6H2O", {"Mg": "1", "Cl": "2", "H": "12", "O": "6"}),
        ("CO0.5H2", {"C": "1", "O": "1/2", "H": "2"}),
        ("C1.5H2O1", {"C": "3/2", "H": "2", "O": "1"}),
    ],
)
def test_composition(text, expected):
    if expected is None:
        with pytest.raises(Refusal, match="unexpected 3 at position 1"):
            parse_formula(text)
    else:
        assert composition(text) == expected


@pytest.mark.parametrize(
    ("text", "charge"),
    [
        ("Na+", 1),
        ("Cl-", -1),
        ("NH4+", 1),
        ("NO3-", -1),
        ("HCO3-", -1),
        ("Ca++", 2),
        ("S--", -2),
        ("SO4-2", -2),
        ("SO4^2-", -2),
        ("SO4^-2", -2),
        ("SO4^(2-)", -2),
        ("SO₄²⁻", -2),
        ("NH₄⁺", 1),
        ("Fe+3", 3),
        ("Fe^3+", 3),
        ("[Fe(CN)6]-3", -3),
        ("CH1.5O-0.5", Fraction(-1, 2)),
        ("C2H3O2\N{MINUS SIGN}", -1),
        ("H2O", 0),
    ],
)
def test_charge(text, charge):
    assert parse_formula(text).charge == charge


def test_electron():
    electron = parse_formula("e-")
    assert (dict(electron.composition), electron.charge) == ({}, -1)


@pytest.mark.parametrize(
    ("text", "code", "says"),
    [
        ("CH1.8O0.5N0.2x", "formula-unexpected", "unexpected x at position 14"),
        ("NA", "formula-unknown-element", "unknown element 'A' at position 2; did you mean 'Na'?"),
        ("nacl", "formula-unexpected", "unexpected n at position 1; did you mean 'Na'?"),
        ("Xx", "formula-unknown-element", "unknown element 'Xx' at position 1"),
        ("D2O", "formula-unknown-element", "unknown element 'D' at position 1"),
        ("NaCl(aq)", "formula-unexpected", "unexpected a at position 6; leave the state of aggregation out"),
        ("C6(H", "formula-bracket", "bracket at position 3 is never closed"),
        ("((H2)", "formula-bracket", "bracket at position 1 is never closed"),
        ("(C]", "formula-unexpected", "unexpected ] at position 3; it closes no open bracket"),
        ("H2)", "formula-unexpected", "unexpected ) at position 3; it closes no open bracket"),
        ("C()", "formula-unexpected", "unexpected ) at position 3"),
        ("C0", "formula-zero", "subscript 0 at position 2; leave the element out"),
        ("CH1,8", "formula-unexpected", "unexpected , at position 4; decimals are written with a point"),
        ("C 6", "formula-unexpected", "write the formula without spaces"),
        ("", "formula-empty", "formula is empty"),
        ("  ", "formula-empty", "formula is empty"),
        ("e", "formula-unexpected", "the electron is written e-"),
        ("+2", "formula-unexpected", "unexpected + at position 1"),
        ("H2O·", "formula-unexpected", "unexpected · at position 4"),
        ("C.", "formula-unexpected", "unexpected . at position 2"),
        ("Fe3+", "formula-charge-ambiguous", "write 'Fe+3' for charge 3+, or 'Fe3+1' for charge 1+"),
        ("I3-", "formula-charge-ambiguous", "'3' at position 2 may be a subscript or the charge"),
        ("SO42-", "formula-charge-ambiguous", "write 'SO4-2' for charge 2-"),
        ("[Fe(CN)6]3-", "formula-charge-ambiguous", "write '[Fe(CN)6]-3' for charge 3-"),
    ],
)
def test_refusals(text, code, says):
    with pytest.raises(Refusal) as caught:
        parse_formula(text)
    assert caught.value.code == code
    assert says in str(caught.value)


@pytest.mark.parametrize("written", ["Fe+3", "I3-1", "SO4-2", "[Fe(CN)6]-3", "SO42-1"])
def test_what_a_refusal_proposes_is_accepted(written):
    assert parse_formula(written).charge != 0


COUNTS = st.one_of(
    st.integers(1, 400).map(Fraction),
    st.integers(1, 9999).filter(lambda n: n % 1000).map(lambda n: Fraction(n, 1000)),
)


def decimal(count):
    if count.denominator == 1:
        return "" if count == 1 else str(count)
    return f"{float(count):.3f}"


@given(
    st.dictionaries(st.sampled_from(SYMBOLS), COUNTS, min_size=1, max_size=8),
    st.integers(-9, 9),
)
def test_what_is_written_is_read_back(counts, charge):
    text = "".join(element + decimal(count) for element, count in counts.items())
    if charge:
        text += f"{charge:+d}"
    read = parse_formula(text)
    assert dict(read.composition) == counts
    assert read.charge == charge


@given(st.text(max_size=12))
def test_any_text_is_read_or_refused(text):
    try:
        read, code = parse_formula(text), "formula-"
    except Refusal as error:
        read, code = None, error.code
    assert code.startswith("formula-")
    assert read is None or all(count > 0 for count in read.composition.values())


def test_formula_pickles_and_compares():
    formula = parse_formula("CuSO4.5H2O")
    again = pickle.loads(pickle.dumps(formula))
    assert again == formula
    assert hash(again) == hash(formula)
