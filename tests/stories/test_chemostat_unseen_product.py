"""A chemostat that makes acetate which nobody measures (invented figures; truth 3.0 mmol/h), worked by hand beside it."""

import pytest
from chemostat_by_hand import CASE, TAGS, objective, one_fault

import reconcile

READ = dict(zip(TAGS, [10.05, 29.1, 29.6, 24.4], strict=True))


@pytest.fixture(scope="module")
def case(tmp_path_factory):
    path = tmp_path_factory.mktemp("chemostat") / "case.yaml"
    path.write_text(CASE, encoding="utf-8")
    return reconcile.load_case(path)


@pytest.fixture(scope="module")
def result(case):
    return case.run(READ)


@pytest.fixture(scope="module")
def words(result):
    return " ".join(result.summary().split())


def test_carbon_is_missing(result):
    s = result.snapshot(0)
    carbon = next(b for b in s.balances if b.name == "reactor carbon")
    assert carbon.outflow / carbon.inflow == pytest.approx(0.896, abs=5e-4)
    assert s.test.objective == pytest.approx(objective(READ), rel=1e-9)
    assert s.test.objective == pytest.approx(10.95, abs=5e-3)


@pytest.mark.parametrize(
    ("fault", "size", "sigma", "left"),
    [
        ("glucose", 1.00, 0.31, 0.32),
        ("acetate", 2.99, 0.92, 0.32),
        ("biomass", -5.74, 1.79, 0.63),
        ("ethanol", None, None, 4.56),
        ("CO2", None, None, 8.11),
    ],
)
def test_each_single_fault(result, fault, size, sigma, left):
    line = result.snapshot(0).fault(fault if fault in TAGS else f"reactor.hidden_{fault}")
    assert (line.size, line.sigma, line.left) == pytest.approx(one_fault(READ, fault), rel=1e-9)
    assert line.left == pytest.approx(left, abs=5e-3)
    if size is not None:
        assert (line.size, line.sigma) == pytest.approx((size, sigma), abs=5e-3)


def test_glucose_and_acetate_are_tied_because_both_have_four_electrons_per_carbon(result, words):
    s = result.snapshot(0)
    assert s.fault("glucose").left == pytest.approx(s.fault("reactor.hidden_acetate").left, abs=1e-9)
    best = s.accounts.standing[0]
    assert {a.faults[0].candidate.name for a in best.alternatives} == {"glucose", "reactor.hidden_acetate"}
    assert "glucose reads high by 1.00 mmol/h (± 0.31" in words
    assert "or 2.99 mmol/h of acetate (C2H4O2, 4 electrons per carbon like glucose) formed at reactor" in words
    assert "No reading here can tell these apart" in words


def test_the_words_name_the_test_to_do(words):
    assert "analyse what leaves reactor for acetate (HPLC, GC or an enzyme kit), and weigh the feed bottle" in words


def test_biomass_points_nearly_the_same_way_and_stays_listed(result, words):
    s = result.snapshot(0)
    standing = [a.faults[0].candidate.name for x in s.accounts.standing for a in x.alternatives if len(a.faults) == 1]
    assert "biomass" in standing
    assert "biomass reads low by 5.7 mmol/h" in words


def test_ethanol_and_the_analyser_are_rejected_aloud(words):
    rejected = words[words.index("Rejected:") : words.index("To separate:")]
    assert "ethanol alone leaves χ² 4.56, limit 3.84" in rejected
    assert "CO2" in rejected
    assert "χ² 8.11" in rejected


def test_a_product_cannot_be_formed_at_a_negative_rate(case):
    # More carbon out than in: glucose reads low, or acetate is "formed" at -3.2 mmol/h, with the same leftover.
    result = case.run({**READ, "glucose": 8.0})
    s = result.snapshot(0)
    assert s.test.objective > s.test.limit
    acetate = s.fault("reactor.hidden_acetate")
    assert acetate.size == pytest.approx(-3.16, abs=5e-3)
    assert acetate.left == pytest.approx(s.fault("glucose").left, abs=1e-9)
    offered = {f.candidate.name for a in s.accounts.ranked for e in a.alternatives for f in e.faults}
    assert "glucose" in offered
    assert not any("hidden" in name for name in offered)
    text = result.summary()
    assert "of acetate" not in text[text.index("EXPLANATIONS") :]


def test_a_product_that_is_analysed_settles_it(case, tmp_path):
    # The test that the words propose, done: acetate found at 3.0 mmol/h enters the balances, and all agree.
    text = (
        CASE.replace("ammonia: NH3,", "ammonia: NH3, acetate: C2H4O2,")
        .replace("hidden: {acetate: C2H4O2, ethanol: C2H6O}", "hidden: {ethanol: C2H6O}")
        .replace("species: [biomass, water]", "species: [biomass, water, acetate]")
        .replace("figures:", "  acetate: {reads: harvest.acetate, unit: mmol/h, sigma: 0.1 mmol/h}\nfigures:")
    )
    path = tmp_path / "case.yaml"
    path.write_text(text, encoding="utf-8")
    s = reconcile.load_case(path).run({**READ, "acetate": 3.0}).snapshot(0)
    assert s.test.checks == 2
    assert s.test.objective < s.test.limit
    without = case.run({**READ, "glucose": 9.05}).snapshot(0)  # the tied explanation, done instead
    assert without.test.objective < without.test.limit
