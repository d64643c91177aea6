"""What a meter reads: sums of variables."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.case.quantities import Refusal
from reconcile.case.reads import names_in, read_reads


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("supply.flow", {"supply.flow": 1.0}),
        ("a.flow + b.flow", {"a.flow": 1.0, "b.flow": 1.0}),
        ("a.flow - 0.5 * b.flow", {"a.flow": 1.0, "b.flow": -0.5}),
        ("-a.flow", {"a.flow": -1.0}),
        ("a.flow * 2 / 4", {"a.flow": 0.5}),
        ("1e-3*a.flow", {"a.flow": 0.001}),
        ("a-1.flow - b-2.flow", {"a-1.flow": 1.0, "b-2.flow": -1.0}),
        ("2nd.flow", {"2nd.flow": 1.0}),
        ("10.flow", {"10.flow": 1.0}),
        ("feed.SO4-2 + `feed.Na+`", {"feed.SO4-2": 1.0, "feed.Na+": 1.0}),
        ("a.flow + a.flow", {"a.flow": 2.0}),
        ("a.mole.fraction", {"a.mole.fraction": 1.0}),
        ("Zulauf_Süd.flow", {"Zulauf_Süd.flow": 1.0}),
    ],
)
def test_sums_are_read(text, expected):
    assert dict(read_reads(text, "meter 'M'")) == expected


@pytest.mark.parametrize(
    ("text", "code", "says"),
    [
        ("", "reads-missing", "supply.flow"),
        ("supply", "reads-no-quantity", "supply.flow"),
        ("a.flow * b.flow", "reads-not-a-sum", "figures:"),
        ("a.flow / b.flow", "reads-not-a-sum", "figures:"),
        ("2 / a.flow", "reads-not-a-sum", "a sum"),
        ("a.flow b.flow", "reads-unreadable", "a + or - is missing before 'b.flow'"),
        ("a.flow +", "reads-unreadable", "ends too early"),
        ("a.flow + + b.flow", "reads-unreadable", "unexpected '+'"),
        ("0.5", "reads-unreadable", "number without a variable"),
        ("a.flow / 0", "reads-unreadable", "divides by zero"),
        ("a.flow - a.flow", "reads-nothing", "cancels"),
        ("0 * a.flow", "reads-nothing", "cancels"),
        ("a.flow + (b.flow)", "reads-unreadable", "unexpected '(' at position 10"),
        ("feed.Na& ", "reads-unreadable", "in backticks"),
    ],
)
def test_what_is_no_sum_is_refused_with_a_cure(text, code, says):
    with pytest.raises(Refusal) as caught:
        read_reads(text, "meter 'M'")
    assert caught.value.code == code
    assert says in f"{caught.value.message} {caught.value.hint}"


ITEMS = st.from_regex(r"[a-z_][a-z0-9_-]{0,6}", fullmatch=True)
TERMS = st.dictionaries(
    st.builds("{}.{}".format, ITEMS, st.sampled_from(["flow", "x.CO2"])),
    st.floats(-1e6, 1e6).filter(lambda c: c != 0),
    min_size=1,
    max_size=5,
)


@given(TERMS)
def test_a_written_sum_is_read_back(terms):
    text = " ".join(f"{'-' if c < 0 else '+'} {abs(c)!r} * {name}" for name, c in terms.items())
    assert dict(read_reads(text, "meter 'M'")) == terms


def test_names_in_a_formula():
    assert names_in("sqrt(a.flow) / (2.5 * `odd name.flow` - a.flow) + split") == ["a.flow", "odd name.flow"]
