"""Shared errors and the correlations that can hold together."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.case.shared import clashing_meters

METERS = """\
meters:
  Q1: {reads: supply.flow, unit: L/min, sigma: 1 L/min}
  Q2: {reads: supply.flow, unit: m3/h, sigma: 1 % of reading}
  Q3: {reads: return.flow, unit: L/min, sigma: 1 L/min, span: 0 to 50 L/min}
shared_errors:
"""


def test_one_sigma_is_converted_into_the_unit_of_each_meter(read):
    spec = read(METERS + "  cal: {sigma: 0.06 m3/h, meters: [Q1, Q2]}\n").shared_errors["cal"]
    assert spec.meters == ("Q1", "Q2")
    assert [s.absolute for s in spec.sigma] == pytest.approx([1.0, 0.06], rel=1e-15)


def test_a_sigma_for_each_meter(read):
    text = METERS + "  cal: {meters: [Q1, Q3], sigma: {Q3: 2 % of span, Q1: [1 % of reading, 0.1 L/min]}}\n"
    first, third = read(text).shared_errors["cal"].sigma
    assert (first.relative, first.absolute) == (0.01, 0.1)
    assert third.absolute == 1.0


def test_correlations_are_kept_as_they_stand(read):
    text = (
        METERS + "  cal: {sigma: 1 % of reading, meters: [Q1, Q2, Q3], correlations: [[Q1, Q2, 0.9], [Q3, Q2, -0.2]]}\n"
    )
    assert read(text).shared_errors["cal"].correlations == (("Q1", "Q2", 0.9), ("Q3", "Q2", -0.2))


def test_tags_that_look_like_numbers(read):
    text = METERS.replace("Q1", "010") + "  cal: {sigma: 1 % of reading, meters: [010, Q2]}\n"
    assert read(text).shared_errors["cal"].meters == ("010", "Q2")


@pytest.mark.parametrize(
    ("block", "code", "cure"),
    [
        ("{sigma: 1 % of reading, meters: [Q1, Q4]}", "unknown-meter", "under meters:"),
        ("{sigma: 1 % of reading, meters: [Q1, FT]}", "unknown-meter", "under meters:"),
        ("{sigma: 1 % of reading, meters: [Q1, Q1]}", "meter-twice", "remove one"),
        ("{sigma: 1 % of reading, meters: [Q1]}", "too-short", "at least 2"),
        ("{sigma: 1 % of reading, meters: Q1}", "wrong-type", "a list"),
        ("{sigma: 1 % of reading}", "missing-key", "add meters:"),
        ("{meters: [Q1, Q2]}", "sigma-missing", "1 % of reading"),
        ("{sigma: 1 %, meters: [Q1, Q2]}", "percent-of-what", "1 % of reading"),
        ("{sigma: 1 kg/h, meters: [Q1, Q2]}", "sigma-unit", "density"),
        ("{sigma: {Q1: 1 L/min}, meters: [Q1, Q2]}", "sigma-missing", "add Q2:"),
        ("{sigma: {Q1: 1 L/min, Q2: 1 %}, meters: [Q1, Q2]}", "percent-of-what", "1 % of reading"),
        ("{sigma: {Q1: 1 L/min, Q3: 1 L/min, Q2: 1 L/min}, meters: [Q1, Q2]}", "unknown-meter", "none of its meters"),
        ("{sgima: 1 % of reading, meters: [Q1, Q2]}", "unknown-key", "did you mean 'sigma'?"),
        ("3", "wrong-type", "key: value"),
        (
            "{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q2]]}",
            "correlation-unreadable",
            "[FT-1, FT-2, 0.9]",
        ),
        ("{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q3, 0.5]]}", "unknown-meter", "Q"),
        (
            "{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q2, 1]]}",
            "correlation-range",
            "leave correlations out",
        ),
        (
            "{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q2, high]]}",
            "correlation-range",
            "between -1 and 1",
        ),
        (
            "{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q2, .5], [Q2, Q1, .4]]}",
            "correlation-twice",
            "once",
        ),
        ("{sigma: 1 % of reading, meters: [Q1, Q2], correlations: [[Q1, Q1, .5]]}", "correlation-twice", "once"),
    ],
)
def test_each_mistake_has_its_place_and_cure(refuse, block, code, cure):
    messages = refuse(METERS + f"  cal: {block}\n")
    wanted = [m for m in messages if m.endswith(f"[{code}]")]
    assert wanted, messages
    assert wanted[0].startswith("case.yaml:12:")
    assert "'cal'" in wanted[0]
    assert cure in wanted[0]


def test_one_wrong_text_is_told_once(refuse):
    assert len(refuse(METERS + "  cal: {sigma: 1 %, meters: [Q1, Q2, Q3]}\n")) == 1


def test_correlations_that_cannot_hold_together_are_named(refuse):
    pairs = "[[Q1, Q2, 0.9], [Q2, Q3, 0.9], [Q1, Q3, -0.9]]"
    (message,) = refuse(METERS + f"  cal: {{sigma: 1 % of reading, meters: [Q1, Q2, Q3], correlations: {pairs}}}\n")
    assert message.startswith(
        "case.yaml:12:68: shared error 'cal': Q1 with Q2 = 0.9, Q1 with Q3 = -0.9, Q2 with Q3 = 0.9"
    )
    assert "cannot all hold" in message
    assert message.endswith("[correlation-clash]")


def test_a_meter_with_a_problem_of_its_own_is_not_called_unknown(refuse):
    text = METERS.replace("sigma: 1 L/min}", "sigma: 1 %}", 1) + "  cal: {sigma: 1 % of reading, meters: [Q1, Q2]}\n"
    (message,) = refuse(text)
    assert message.startswith("case.yaml:8:")


TAGS = ("a", "b", "c", "d", "e")
PAIRS = st.dictionaries(
    st.sampled_from([(x, y) for i, x in enumerate(TAGS) for y in TAGS[i + 1 :]]), st.floats(-0.99, 0.99), max_size=10
)


@given(PAIRS)
def test_the_named_meters_clash_and_none_is_to_spare(pairs):
    def smallest(tags):
        matrix = np.eye(len(tags))
        for i, x in enumerate(tags):
            for j, y in enumerate(tags):
                if i != j:
                    matrix[i, j] = pairs.get((x, y), pairs.get((y, x), 0.0))
        return np.linalg.eigvalsh(matrix)[0] if tags else 1.0

    clash = clashing_meters(TAGS, pairs)
    # Right at the edge either answer is right.
    if clash:
        assert smallest(clash) <= 1e-9
        assert all(smallest(tuple(t for t in clash if t != out)) > -1e-9 for out in clash)
    else:
        assert smallest(TAGS) > 0
