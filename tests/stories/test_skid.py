"""A membrane skid with recycle (invented figures): one bad meter, then two.

Expected values were computed independently (full KKT solve and exhaustive leave-one-out and leave-two-out fits).
"""

from __future__ import annotations

import numpy as np
import pytest

import reconcile

TAGS = ["F", "R", "D", "P", "T", "B"]
ONE = dict(zip(TAGS, [50.3, 158.6, 201.2, 39.8, 161.0, 10.1], strict=True))
TWO = {**ONE, "P": 37.4}


@pytest.fixture
def case(datasets):
    return reconcile.load_case(datasets / "membrane_skid")


def test_the_balances_and_the_whole_set(case):
    s = case.run(ONE).snapshot(0)
    by_node = {b.node: b for b in s.balances}
    assert [by_node[n].before for n in ("tee", "module", "splitter")] == pytest.approx([7.7, 0.4, -7.7], abs=1e-9)
    assert [by_node[n].ratio for n in ("tee", "module", "splitter")] == pytest.approx([3.02, 0.15, -3.50], abs=5e-3)
    assert s.test.objective == pytest.approx(15.50, abs=5e-3)
    assert s.test.checks == 3
    assert s.test.limit == pytest.approx(7.81, abs=5e-3)
    assert s.test.p == pytest.approx(0.0014, abs=5e-5)
    assert s.test.status == "disagrees"


def test_the_recycle_meter_is_named_and_the_next_one_rejected(case):
    result = case.run(ONE)
    s = result.snapshot(0)
    recycle = s.fault("R")
    assert recycle.z == pytest.approx(3.89, abs=5e-3)
    assert (recycle.size, recycle.sigma) == pytest.approx((7.64, 1.96), abs=5e-3)
    assert recycle.left == pytest.approx(0.37, abs=5e-3)
    assert s.meter_tests.worst == TAGS.index("R")
    following = s.fault("T")
    assert following.z == pytest.approx(-2.52, abs=5e-3)
    assert following.left == pytest.approx(9.15, abs=5e-3)
    assert s.fault("D").left == pytest.approx(12.70, abs=5e-3)
    assert s.fault("F").left == pytest.approx(14.73, abs=5e-3)
    singles = [a for a in s.accounts.ranked if a.count == 1]
    assert [a.alternatives[0].faults[0].candidate.name for a in singles if a.survives] == ["R"]
    assert s.reading("R").word == "suspect"


def test_the_words_name_it_and_no_loss_explains_it(case):
    text = case.run(ONE).summary()
    assert "do not agree" in text
    assert "R reads high by 7.6 kg/h" in text
    assert "T alone leaves χ² 9.15, limit 5.99" in text
    s = case.run(ONE).snapshot(0)
    losses = [f.left for f in s.faults if f.candidate.kind == "leak"]
    assert min(losses) == pytest.approx(14.73, abs=5e-3)


def test_leaving_out_one_at_a_time(case):
    left = []
    for tag in TAGS:
        what_if = case.run(ONE, exclude={tag: "what if"})
        assert what_if.checks[0] == 2
        left.append(what_if.objective[0])
    assert left == pytest.approx([14.73, 0.37, 12.70, 15.35, 9.15, 15.32], abs=5e-3)
    without = case.run(ONE, exclude={"R": "what if"}).snapshot(0)
    line = without.variable("recycle.flow")
    assert line.klass == "calculated"
    assert (line.adjusted, line.sigma) == pytest.approx((150.96, 1.27), abs=5e-3)
    assert without.reading("R").word == "left out"


def test_keeping_the_bad_meter_smears_its_error(case):
    kept, without = case.run(ONE), case.run(ONE, exclude={"R": "what if"})
    moved = dict(zip(kept.variables, kept.adjusted[0] - without.adjusted[0], strict=True))
    assert moved["discharge.flow"] == pytest.approx(3.1, abs=0.05)
    assert moved["retentate.flow"] == pytest.approx(3.1, abs=0.05)


def test_two_bad_meters_are_not_found_one_after_the_other(case):
    s = case.run(TWO).snapshot(0)
    assert s.test.objective == pytest.approx(31.56, abs=5e-3)
    # The largest test value belongs to a healthy meter; granting it alone is not enough.
    assert s.meter_tests.worst == TAGS.index("F")
    assert s.fault("F").z == pytest.approx(4.36, abs=5e-3)
    assert s.fault("F").left == pytest.approx(12.52, abs=5e-3)
    names = _pairs_of_meters(s)
    assert names[frozenset("RP")] == pytest.approx(0.00, abs=5e-3)
    for pair in ("FR", "FB", "RB"):
        assert names[frozenset(pair)] == pytest.approx(1.17, abs=5e-3)
    assert names[frozenset("FT")] == pytest.approx(3.72, abs=5e-3)
    text = case.run(TWO).summary()
    assert "At least 2 faults" in text
    first = s.accounts.standing[0]
    assert any({f.candidate.name for f in a.faults} == {"R", "P"} for a in first.alternatives)
    sizes = {f.candidate.name: f.size for a in first.alternatives for f in a.faults}
    assert (sizes["R"], sizes["P"]) == pytest.approx((7.7, -2.8), abs=0.05)


def _pairs_of_meters(s):
    found = {}
    for a in s.accounts.ranked:
        for alternative in a.alternatives:
            names = frozenset(f.candidate.name for f in alternative.faults)
            if len(names) == 2 and names <= set(TAGS):
                found[names] = a.left
    return found


def test_pairs_that_cannot_be_split_are_listed_once(case):
    s = case.run(TWO).snapshot(0)
    together = [
        {frozenset(f.candidate.name for f in alt.faults) for alt in a.alternatives}
        for a in s.accounts.ranked
        if a.count == 2 and abs(a.left - 1.17) < 5e-3
    ]
    assert len(together) == 1
    assert {frozenset("FR"), frozenset("FB"), frozenset("RB")} <= together[0]


def test_as_many_faults_as_checks_is_refused(case):
    result = case.run(TWO, max_faults=3)
    with pytest.raises(reconcile.InputError, match="3 faults asked, 3 checks: every set would fit"):
        result.snapshot(0)


def test_share_checked_and_smallest_bias_before_the_experiment(case):
    found = case.coverage
    share = [found.line(t).share for t in TAGS]
    assert share == pytest.approx([0.564, 0.584, 0.755, 0.367, 0.634, 0.096], abs=5e-4)
    smallest = [found.line(t).smallest for t in TAGS]
    assert smallest == pytest.approx([2.16, 6.36, 7.46, 2.14, 6.51, 2.09], abs=5e-3)
    after = [found.line(t).sigma_after for t in TAGS]
    assert after == pytest.approx([0.330, 0.967, 0.989, 0.318, 0.967, 0.190], abs=5e-4)
    of_value = [100 * found.line(t).smallest / found.line(t).value for t in TAGS]
    assert of_value == pytest.approx([4.3, 4.2, 3.7, 5.4, 4.1, 20.9], abs=0.05)
    pairs = {(n.first, n.second): n.correlation for n in found.near}
    assert pairs[("F", "P")] == pytest.approx(-0.96, abs=5e-3)
    assert pairs[("P", "B")] == pytest.approx(0.95, abs=5e-3)
    assert pairs[("F", "B")] == pytest.approx(-0.94, abs=5e-3)


def test_a_missing_reading_is_calculated_from_the_others(case):
    values = {**dict(zip(TAGS, [50.2, 149.1, 200.9, np.nan, 160.8, 10.1], strict=True))}
    result = case.run(values)
    assert result.objective[0] == pytest.approx(0.66, abs=5e-3)
    assert result.checks[0] == 2
    line = result.snapshot(0).variable("permeate.flow")
    assert (line.adjusted, line.sigma) == pytest.approx((40.13, 0.53), abs=5e-3)
    assert result.snapshot(0).reading("P").klass == "calculated"


def test_recovery_needs_the_covariance(case):
    figure = case.run(ONE, exclude={"R": "what if"}).figure_values()[0]
    assert (figure.value, figure.sigma) == pytest.approx((0.7976, 0.0036), abs=5e-5)
    assert figure.diagonal_sigma == pytest.approx(0.0083, abs=5e-5)
    assert (figure.raw, figure.raw_sigma) == pytest.approx((0.7913, 0.0112), abs=5e-5)
