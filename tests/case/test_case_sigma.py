"""Sigma: each way to state it and what it means; each mistake and what to write instead."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.case import SigmaPart, SigmaSpec


def test_percent_of_reading(meter):
    sigma = meter("sigma: 1 % of reading").sigma
    assert sigma.components == (SigmaPart("reading", 0.01, "1 % of reading", "sigma"),)
    assert sigma.at(30) == pytest.approx(0.3, rel=1e-15)
    assert sigma.at(-30) == sigma.at(30)


def test_percent_of_span_is_of_the_whole_width(meter):
    found = meter("sigma: 2 % of span, span: 10 to 50 L/min")
    assert found.span == (10.0, 50.0)
    assert found.sigma.at(0) == found.sigma.at(45) == pytest.approx(0.8, rel=1e-15)


def test_a_span_in_another_unit_is_converted(meter):
    assert meter("sigma: 2 % of span, span: 0 to 2.4 m3/h").span == (0.0, pytest.approx(40, rel=1e-15))


def test_an_amount_is_converted_into_the_unit_of_the_meter(meter):
    assert meter("sigma: 0.03 m3/h").sigma.absolute == pytest.approx(0.5, rel=1e-15)


def test_a_temperature_uncertainty_has_no_offset(meter):
    assert meter("sigma: 0.9 degF", unit="degC").sigma.absolute == pytest.approx(0.5, rel=1e-15)
    assert meter("sigma: 0.2 K", unit="degC").sigma.absolute == 0.2


# JCGM 100:2008 (GUM) 4.3.7: limits +-a with nothing known between them have u = a/sqrt(3); clause from memory.
@pytest.mark.parametrize(
    ("keys", "at_20"),
    [
        ("accuracy: 0.5 L/min", 0.5 / math.sqrt(3)),
        ("accuracy: 2 % of span, span: 0 to 40 L/min", 0.8 / math.sqrt(3)),
        ("accuracy: 3 % of reading", 0.6 / math.sqrt(3)),
        ("accuracy: ± 0.5 L/min", 0.5 / math.sqrt(3)),
        ("accuracy: +/- 3 % of reading", 0.6 / math.sqrt(3)),
    ],
)
def test_an_accuracy_is_a_rectangular_limit(meter, keys, at_20):
    assert meter(keys).sigma.at(20) == pytest.approx(at_20, rel=1e-15)


# GUM 6.2.1: U = k u.
@pytest.mark.parametrize(
    ("keys", "at_20"),
    [
        ("expanded: 1.2 L/min, coverage: 2", 0.6),
        ("expanded: 1 % of reading, coverage: 2", 0.1),
        ("expanded: 1.2 L/min, coverage: 'k = 3'", 0.4),
        ("expanded: 1.2 L/min, coverage: '2'", 0.6),
    ],
)
def test_an_expanded_uncertainty_is_divided_by_its_factor(meter, keys, at_20):
    assert meter(keys).sigma.at(20) == pytest.approx(at_20, rel=1e-15)


def test_components_add_in_quadrature(meter):
    sigma = meter("sigma: [0.5 % of reading, 0.1 L/min, 0.018 m3/h]").sigma
    assert sigma.at(20) == pytest.approx(math.sqrt(0.1**2 + 0.1**2 + 0.3**2), rel=1e-14)
    assert [p.text for p in sigma.components] == ["0.5 % of reading", "0.1 L/min", "0.018 m3/h"]


# GUM F.2.2.1: a digital step has u = 0.29 of the step.
def test_a_display_step_adds_its_own_part(meter):
    sigma = meter("sigma: 0.3 L/min, resolution: 1 L/min").sigma
    assert sigma.components[1].origin == "resolution"
    assert round(sigma.components[1].value, 2) == 0.29
    assert sigma.at(5) == pytest.approx(math.sqrt(0.09 + 1 / 12), rel=1e-15)


def test_a_guess_is_accepted_and_marked(meter):
    sigma = meter("sigma: default(2 % of reading)").sigma
    assert sigma.marked_guess
    assert sigma.at(10) == pytest.approx(0.2)
    assert not meter("sigma: 2 % of reading").sigma.marked_guess


def test_percentage_points_of_a_meter_in_percent(meter, refuse_meter):
    assert meter("sigma: 0.1 % absolute", unit="vol%").sigma.absolute == pytest.approx(0.1)
    assert "0.1 % absolute" in refuse_meter("sigma: 0.1 %", unit="vol%")


@given(
    st.lists(st.tuples(st.sampled_from(["reading", "absolute"]), st.floats(1e-6, 1e3)), min_size=1, max_size=5),
    st.floats(-1e4, 1e4),
)
def test_the_total_does_not_depend_on_the_order(parts, value):
    made = [SigmaPart(kind, size, "", "sigma") for kind, size in parts]
    total = SigmaSpec(tuple(made)).at(value)
    assert SigmaSpec(tuple(reversed(made))).at(value) == pytest.approx(total, rel=1e-12)
    expected = math.sqrt(sum((s * value) ** 2 if k == "reading" else s**2 for k, s in parts))
    assert total == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("keys", "code", "says", "cure"),
    [
        ("sigma: 1 %", "percent-of-what", "of reading or of span?", "1 % of reading, or 1 % of span with e.g. span:"),
        ("accuracy: 1%", "percent-of-what", "of reading or of span?", "1 % of reading"),
        ("sigma: [1 % of reading, 2 %]", "percent-of-what", "of reading or of span?", "2 % of reading"),
        ("sigma: ", "sigma-blank", "none is guessed silently", "default(2 % of reading)"),
        ("sigma: ''", "sigma-blank", "none is guessed silently", "default(2 % of reading)"),
        ("sigma: []", "sigma-blank", "empty list", "1 % of reading"),
        ("span: 0 to 4 L/min", "sigma-missing", "none is guessed silently", "default(2 % of reading)"),
        ("sigma: 0 L/min", "sigma-zero", "force every error onto other readings", "known:"),
        ("sigma: 0", "sigma-zero", "force every error onto other readings", "known:"),
        ("sigma: 0 % of reading", "sigma-zero", "force every error onto other readings", "known:"),
        ("sigma: -1 L/min", "sigma-negative", "'-1 L/min'", "leave the sign out"),
        ("sigma: 0.2", "sigma-unit-missing", "without a unit", "write 0.2 L/min"),
        ("sigma: 1 kg/h", "sigma-unit", "kg/h (mass per time), but the value is in L/min (volume per time)", "density"),
        ("sigma: 1 kg", "sigma-unit", "kg (mass)", "measures the same as L/min"),
        ("sigma: 1 L/hr.", "unit-unknown", "'L/hr.' is not understood", "L/h"),
        ("sigma: '0,5 L/min'", "number-unreadable", "comma", "0.5 L/min"),
        ("sigma: 2 % of span", "span-missing", "no span is given", "span: 0 to 40 L/min"),
        ("expanded: 2 L/min", "coverage-missing", "no coverage factor", "coverage: 2"),
        ("expanded: 2 L/min, coverage: ", "coverage-missing", "no coverage factor", "coverage: 2"),
        ("expanded: 2 L/min, coverage: 95", "coverage-unreadable", "level of confidence", "coverage: 2"),
        ("expanded: 2 L/min, coverage: 95 %", "coverage-unreadable", "not a number", "coverage: 2"),
        ("expanded: 2 L/min, coverage: 0", "coverage-unreadable", "not a number above zero", "coverage: 2"),
        ("expanded: 2 L/min, coverage: true", "coverage-unreadable", "not a number above zero", "coverage: 2"),
        ("sigma: 2 L/min, coverage: 2", "coverage-without-expanded", "belongs to an expanded", "expanded:"),
        ("sigma: 2 L/min, accuracy: 3 L/min", "sigma-twice", "both sigma and accuracy", "keep one"),
        ("sigma: 2 % of redaing", "sigma-unreadable", "not understood", "did you mean '2 % of reading'?"),
        ("sigma: 2 % reading", "sigma-unreadable", "not understood", "did you mean '2 % of reading'?"),
        ("sigma: 2 % spam", "sigma-unreadable", "not understood", "did you mean '2 % of span'?"),
        ("sigma: 2 % of full scale", "sigma-unreadable", "not understood", "2 % of span with e.g. span:"),
        ("sigma: 2 % o.r.", "sigma-unreadable", "not understood", "2 % of reading"),
        ("sigma: 1 % of reading + 0.1 L/min", "sigma-unreadable", "not understood", "as a list"),
        ("sigma: 2 of reading", "unit-unknown", "not understood", "2 % of reading"),
        ("sigma: small", "sigma-unreadable", "not understood", "1 % of reading"),
        ("sigma: defualt(2 % of reading)", "sigma-unreadable", "not understood", "did you mean default("),
        ("accuracy: default(2 % of reading)", "sigma-unreadable", "marks a guess of a sigma", "sigma: default("),
        ("sigma: default()", "sigma-blank", "blank", "1 % of reading"),
        ("sigma: ± 0.5 L/min", "plus-minus", "a limit, or k times sigma?", "accuracy: 0.5 L/min"),
        ("sigma: {a: 1}", "sigma-unreadable", "no text", "1 % of reading"),
        ("sigma: 1 L/min, resolution: 1 %", "resolution-percent", "step of the display", "0.1 L/min"),
        ("sigma: 1 L/min, resolution: 0.1", "sigma-unit-missing", "without a unit", "0.1 L/min"),
        ("sigma: 2 % of span, span: 40 L/min", "span-unreadable", "no range", "0 to 40 L/min"),
        ("sigma: 2 % of span, span: 40 to 0 L/min", "range-reversed", "does not rise", "0 to 40 L/min"),
        ("sigma: 2 % of span, span: 0 to 40 kg/h", "unit-mismatch", "mass per time", "density"),
        ("sigma: 2 % of span, span: 0 to 40", "unit-mismatch", "plain number", "L/min"),
        ("sgima: 1 L/min", "unknown-key", "'sgima'", "did you mean 'sigma'?"),
    ],
)
def test_each_mistake_is_refused_with_its_cure(refuse_meter, keys, code, says, cure):
    message = refuse_meter(keys)
    assert message.startswith("case.yaml:8:")
    assert message.endswith(f"[{code}]")
    assert "'FT-1'" in message
    assert says in message
    assert cure in message


def test_the_place_is_that_of_the_component(refuse):
    lines = ["meters:", "  FT-1:", "    reads: supply.flow", "    unit: L/min", "    sigma:", "      - 1 % of reading"]
    assert refuse("\n".join([*lines, "      - 2 %", ""]))[0].startswith("case.yaml:13:9:")
