"""Degrees of reduction, balanced and independent reactions: published figures and exact algebra."""

from fractions import Fraction
from math import gcd

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from reconcile_elements.exact import null_space, rank
from reconcile_elements.formula import parse_formula
from reconcile_elements.reactions import (
    composition_matrix,
    imbalance,
    independent_reactions,
    parse_reaction,
    require_balanced,
)
from reconcile_elements.reduction import degree_of_reduction, reduction_weights
from reconcile_elements.refusal import Refusal


def species(**formulas):
    return {name: parse_formula(text) for name, text in formulas.items()}


FERMENTATION = species(
    glucose="C6H12O6", oxygen="O2", ammonia="NH3", biomass="CH1.8O0.5N0.2", carbon_dioxide="CO2", water="H2O"
)


@pytest.mark.parametrize(
    ("organism", "formula", "gamma"),
    # Degrees of reduction with respect to ammonia, as printed in tables of bioprocess-engineering courses after
    # Doran, "Bioprocess Engineering Principles", ch. 4; per C-mol, printed with two decimals
    [
        ("Aerobacter aerogenes", "CH1.83O0.55N0.25", 3.98),
        ("Escherichia coli", "CH1.77O0.49N0.24", 4.07),
        ("Klebsiella aerogenes", "CH1.75O0.43N0.22", 4.23),
        ("Paracoccus denitrificans", "CH1.81O0.51N0.20", 4.19),
        ("Pseudomonas C12B", "CH2.00O0.52N0.23", 4.27),
        ("Candida utilis", "CH1.83O0.54N0.10", 4.45),
        ("Saccharomyces cerevisiae", "CH1.64O0.52N0.16", 4.12),
        ("Saccharomyces cerevisiae (2)", "CH1.81O0.51N0.17", 4.28),
        ("average", "CH1.79O0.50N0.20", 4.19),
    ],
)
def test_published_degrees_of_reduction(organism, formula, gamma):
    assert float(degree_of_reduction(formula, "NH3")) == pytest.approx(gamma, abs=0.0005), organism


@pytest.mark.parametrize(
    ("formula", "nitrogen", "gamma"),
    [
        # definitions: the references are zero, an electron is one, O2 takes four
        ("CO2", None, 0),
        ("H2O", None, 0),
        ("H+", None, 0),
        ("NH3", "NH3", 0),
        ("NH4+", "NH3", 0),
        ("NO3-", "NO3", 0),
        ("HNO3", "NO3", 0),
        ("N2", "N2", 0),
        ("SO4-2", None, 0),
        ("HPO4^2-", None, 0),
        ("NaCl", None, 0),
        ("e-", None, 1),
        ("O2", None, -4),
        ("H2", None, 2),
        ("CH4", None, 8),
        ("C6H12O6", None, 24),
        ("C2H6O", None, 12),
        ("C2H4O2", None, 8),
        ("C2H3O2-", None, 8),
        ("NO3-", "NH3", -8),
        ("NH3", "NO3", 8),
        ("NH3", "N2", 3),
        ("CH1.8O0.5N0.2", "NH3", Fraction(21, 5)),
        ("CH1.8O0.5N0.2", "NO3", Fraction(29, 5)),
        ("CH1.8O0.5N0.2", "N2", Fraction(24, 5)),
        ("H2S", None, 8),
    ],
)
def test_degree_of_reduction_by_definition(formula, nitrogen, gamma):
    assert degree_of_reduction(formula, nitrogen) == gamma


def test_degree_of_reduction_asks_for_the_nitrogen_source():
    with pytest.raises(Refusal) as caught:
        degree_of_reduction("CH1.8O0.5N0.2")
    assert caught.value.code == "nitrogen-source-missing"
    assert "which is it: NH3 (N counts -3), NO3 (+5) or N2 (0)?" in str(caught.value)


def test_nitrogen_source_must_be_known():
    with pytest.raises(Refusal, match="write NH3, NO3 or N2"):
        degree_of_reduction("NH3", "urea")


def test_element_without_usual_end_state_is_asked_for():
    with pytest.raises(Refusal, match="Fe has no usual end state") as caught:
        degree_of_reduction("Fe+2")
    assert caught.value.code == "reduction-reference-missing"
    assert degree_of_reduction("Fe+2", references={"Fe": "Fe+3"}) == 1
    assert degree_of_reduction("H2S", references={"S": "H2S"}) == 0


def test_reference_compound_must_fit():
    with pytest.raises(Refusal, match="cannot be the reference compound of Fe"):
        degree_of_reduction("Fe+2", references={"Fe": "FeCl3"})


def test_weights_are_the_row_combination_in_which_water_and_ammonia_drop_out():
    rows, matrix = composition_matrix(list(FERMENTATION.values()))
    weights = reduction_weights(rows, "NH3")
    combined = [sum(weights[r] * row[j] for r, row in zip(rows, matrix, strict=True)) for j in range(len(FERMENTATION))]
    assert dict(zip(FERMENTATION, combined, strict=True)) == {
        "glucose": 24,
        "oxygen": -4,
        "ammonia": 0,
        "biomass": Fraction(21, 5),
        "carbon_dioxide": 0,
        "water": 0,
    }


@pytest.mark.parametrize(
    ("substrate", "expected"),
    # Shuler & Kargi, "Bioprocess Engineering", example 7.1 (values from memory): two thirds of the carbon becomes
    # biomass C4.4H7.3N0.86O1.2; mol O2, NH3, biomass, CO2, H2O per mol substrate
    [("C16H34", (12.427, 2.085, 2.424, 5.333, 11.28)), ("C6H12O6", (1.473, 0.782, 0.909, 2.0, 3.854))],
)
def test_two_thirds_of_the_carbon_to_biomass(substrate, expected):
    names = ("substrate", "oxygen", "ammonia", "biomass", "carbon_dioxide", "water")
    formulas = (substrate, "O2", "NH3", "C4.4H7.3N0.86O1.2", "CO2", "H2O")
    table = {n: parse_formula(f) for n, f in zip(names, formulas, strict=True)}
    _, matrix = composition_matrix(list(table.values()))
    signs = np.array([-1, -1, -1, 1, 1, 1])
    a = np.array(matrix, dtype=float) * signs
    carbon = float(table["substrate"]["C"])
    condition = np.array([2 / 3 * carbon, 0, 0, -4.4, 0, 0])
    solution = np.linalg.solve(np.vstack([a, condition, [1, 0, 0, 0, 0, 0]]), [0, 0, 0, 0, 0, 1.0])
    # the printed hexadecane coefficients of NH3, biomass and CO2 round to the last digit; water is printed as 11.28
    assert solution[1:] == pytest.approx(expected, abs=0.0013)
    require_balanced(dict(zip(names, signs * solution, strict=True)), table, tolerance=1e-12)


def test_independent_reactions_of_a_fermentation():
    found = independent_reactions(FERMENTATION)
    # six species, rank 4: two reactions; oxidation of the substrate and growth span them
    assert len(found) == 2
    assert all(not imbalance(reaction, FERMENTATION) for reaction in found)


@pytest.mark.parametrize(
    ("table", "expected"),
    [
        # steam reforming: methane reforming and shift (two independent reactions, Smith & Missen 1982)
        (species(a="CH4", b="H2O", c="CO", d="CO2", e="H2"), 2),
        # water alone dissociates; an element balance and charge leave one reaction
        (species(a="H2O", b="H+", c="OH-"), 1),
        # isomers: a reaction without any change of elements
        (species(a="C6H12O6", b="C6H12O6"), 1),
        (species(a="NaCl", b="H2O"), 0),
        (species(a="e-", b="Fe+2", c="Fe+3"), 1),
    ],
)
def test_number_of_independent_reactions(table, expected):
    assert len(independent_reactions(table)) == expected


def test_small_whole_coefficients():
    (reaction,) = independent_reactions(species(fuel="C4H10", oxygen="O2", carbon_dioxide="CO2", water="H2O"))
    assert reaction == {"fuel": -2, "oxygen": -13, "carbon_dioxide": 8, "water": 10}
    # permanganate and oxalate, the classroom redox equation: 2, 5, 16, 2, 10, 8
    (reaction,) = independent_reactions(species(a="MnO4-", b="C2O4-2", c="H+", d="Mn+2", e="CO2", f="H2O"))
    assert reaction == {"a": -2, "b": -5, "c": -16, "d": 2, "e": 10, "f": 8}


MATRICES = st.integers(1, 5).flatmap(
    lambda m: st.integers(1, 7).flatmap(
        lambda n: st.lists(
            st.lists(st.fractions(-4, 9, max_denominator=10), min_size=n, max_size=n), min_size=m, max_size=m
        )
    )
)


@given(MATRICES)
@settings(deadline=None)
def test_null_space_is_exact_and_complete(matrix):
    columns = len(matrix[0])
    basis = null_space(matrix, columns)
    assert len(basis) == columns - rank(matrix)
    for vector in basis:
        assert all(sum(a * v for a, v in zip(row, vector, strict=True)) == 0 for row in matrix)
        assert gcd(*vector) == 1
    if basis:
        assert rank([[Fraction(v) for v in vector] for vector in basis]) == len(basis)


@given(MATRICES)
@settings(deadline=None)
def test_rank_agrees_with_the_transpose(matrix):
    assert rank(matrix) == rank([list(column) for column in zip(*matrix, strict=True)])


def test_null_space_without_rows():
    assert null_space([], 2) == [[-1, 0], [0, -1]]


def test_reaction_is_read():
    text = "glucose + 6 oxygen -> 6 carbon_dioxide + 6 water"
    read = parse_reaction(text, FERMENTATION)
    assert read == {"glucose": -1, "oxygen": -6, "carbon_dioxide": 6, "water": 6}
    require_balanced(read, FERMENTATION)
    halves = parse_reaction("1/6 glucose + oxygen -> carbon_dioxide + 1.0 water", FERMENTATION)
    assert halves == {k: v / 6 for k, v in read.items()}


def test_species_with_a_plus_in_its_name():
    table = species(**{"H2": "H2", "H+": "H+", "e-": "e-"})
    assert parse_reaction("H2 -> 2 H+ + 2 e-", table) == {"H2": -1, "H+": 2, "e-": 2}


@pytest.mark.parametrize(
    ("text", "code", "says"),
    [
        ("glucose + oxygen", "reaction-arrow", "needs exactly one '->'"),
        ("glucose -> water -> oxygen", "reaction-arrow", "needs exactly one '->'"),
        ("glucos -> water", "reaction-species", "did you mean 'glucose'?"),
        ("6oxygen -> water", "reaction-species", "'6oxygen' is not one of the species"),
        ("x oxygen -> water", "reaction-term", "cannot read 'x oxygen'"),
        ("0 oxygen -> water", "reaction-term", "coefficient 0 of oxygen"),
        ("water -> water", "reaction-empty", "changes nothing"),
        (" -> ", "reaction-empty", "changes nothing"),
    ],
)
def test_reaction_refusals(text, code, says):
    with pytest.raises(Refusal) as caught:
        parse_reaction(text, FERMENTATION, name="growth")
    assert caught.value.code == code
    assert says in str(caught.value)
    assert "growth" in str(caught.value)


def test_unbalanced_reaction_names_both_sides():
    read = parse_reaction("glucose + 5 oxygen -> 6 carbon_dioxide + 6 water", FERMENTATION)
    with pytest.raises(Refusal, match="respiration is not balanced: O 16 on the left, 18 on the right"):
        require_balanced(read, FERMENTATION, name="respiration")
    charged = species(**{"Fe+2": "Fe+2", "Fe+3": "Fe+3"})
    with pytest.raises(Refusal, match="charge 2 on the left, 3 on the right"):
        require_balanced(parse_reaction("Fe+2 -> Fe+3", charged), charged)


def test_rounded_coefficients_need_a_stated_tolerance():
    rounded = {"glucose": -1, "oxygen": -5.999, "carbon_dioxide": 6, "water": 6}
    with pytest.raises(Refusal, match="not balanced"):
        require_balanced(rounded, FERMENTATION)
    require_balanced(rounded, FERMENTATION, tolerance=1e-3)
