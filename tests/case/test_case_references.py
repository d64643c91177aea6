"""Names and units of variables, once the domains have declared them."""

import pytest

from reconcile.case import check_references
from reconcile.errors import Problems

VARIABLES = {
    "supply.flow": "L/min",
    "return.flow": "L/min",
    "supply.temperature": "degC",
    "feed.Na+": "meq/L",
    "a-b.flow": "L/min",
}


@pytest.fixture
def check(read):
    def _check(text, variables=VARIABLES):
        problems = Problems("case.yaml")
        check_references(read(text), variables, problems)
        return [str(p) for p in problems.found]

    return _check


GOOD = """\
meters:
  FT-1: {reads: supply.flow + 0.5 * return.flow, unit: m3/h, sigma: 1 % of reading}
  AT-1: {reads: '`feed.Na+`', unit: eq/m3, sigma: 1 % of reading}
  TT-1: {reads: supply.temperature, unit: K, sigma: 0.1 K}
known: {'`feed.Na+`': 3 meq/L}
bounds: {supply.flow: 0 to 1 m3/h}
design: {supply.temperature: 20 degC}
figures: {ratio: '2.5 * supply.flow / return.flow - `feed.Na+` + other'}
"""


def test_a_case_that_fits_has_no_problems(check):
    assert check(GOOD) == []


@pytest.mark.parametrize(
    ("old", "new", "place", "says", "cure"),
    [
        (
            "supply.flow +",
            "suply.flow +",
            "8:17",
            "meter 'FT-1': there is no variable 'suply.flow'",
            "did you mean 'supply.flow'?",
        ),
        ("supply.flow +", "supply.flwo +", "8:17", "'supply.flwo'", "did you mean 'supply.flow'?"),
        ("supply.flow +", "supply.pressure +", "8:17", "'supply.pressure'", "supply has: flow, temperature"),
        ("supply.flow +", "zzz.qqq +", "8:17", "'zzz.qqq'", "there are 5 variables, such as supply.flow"),
        ("supply.flow + 0.5 * ", "supply.flow-", "8:17", "'supply.flow-return.flow'", "a minus needs a space"),
        (
            "unit: m3/h",
            "unit: kg/h",
            "8:56",
            "kg/h (mass per time), but supply.flow is in L/min (volume per time)",
            "density",
        ),
        ("unit: m3/h", "unit: l/m", "8:56", "but supply.flow is in L/min", "did you mean l/min?"),
        ("unit: eq/m3", "unit: mmol/L", "9:37", "but feed.Na+ is in meq/L", "charge number"),
        ("`feed.Na+`': 3", "`feed.K+`': 3", "11:9", "known 'feed.K+'", "feed has: Na+"),
        ("3 meq/L", "3 kg", "11:", "is in kg (mass)", "measures the same as meq/L"),
        ("{supply.flow: 0 to 1 m3/h}", "{suply.flow: 0 to 1 m3/h}", "12:10", "bound of 'suply.flow'", "'supply.flow'"),
        ("0 to 1 m3/h", "0 to 1 t/h", "12:23", "bound of 'supply.flow' is in t/h", "density"),
        ("20 degC", "20 L", "13:", "design of 'supply.temperature' is in L (volume)", "measures the same as degC"),
        (
            "/ return.flow",
            "/ retrun.flow",
            "14:18",
            "figure 'ratio': there is no variable 'retrun.flow'",
            "'return.flow'",
        ),
    ],
)
def test_each_misfit_has_its_place_and_cure(check, old, new, place, says, cure):
    assert old in GOOD
    text = GOOD.replace(old, new, 1)
    found = check(text)
    assert found, text
    assert found[0].startswith(f"case.yaml:{place}")
    assert says in found[0]
    assert cure in found[0]


def test_a_domain_unit_that_cannot_be_read_is_told_once_where_the_user_wrote_it(read):
    problems = Problems("case.yaml")
    sigma = "unit: L/min, sigma: 1 % of reading"
    spec = read(f"meters:\n  FT-1: {{reads: supply.flow, {sigma}}}\n  FT-2: {{reads: return.flow, {sigma}}}\n")
    spec.domains["water"]["unit"] = "L/minn."
    check_references(spec, {"supply.flow": "L/minn.", "return.flow": "L/minn."}, problems)
    (message,) = [str(p) for p in problems.found]
    assert message.startswith("case.yaml:3:17: variable supply.flow: unit 'L/minn.' is not understood")
    assert "L/min" in message


def test_no_variables_at_all(check):
    (message,) = check("design: {a.flow: 1 L}\n", {})
    assert "declare no variables" in message


def test_a_misspelt_name_among_a_hundred_thousand(check):
    many = {f"s{i}.flow": "L/min" for i in range(100_000)}
    (message,) = check("design: {s5.flwo: 1 L/min}\n", many)
    assert "did you mean 's5.flow'?" in message
    (message,) = check("design: {x5.flow: 1 L/min}\n", many)
    assert "there are 100000 variables" in message
