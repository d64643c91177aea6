"""A bench splitter with one balance and three meters (invented figures).

Expected values: weighted least squares of one condition, worked by hand (Kuehn & Davidson 1961, closed form for one
balance): adjustment_i = -sigma_i^2 a_i r / V with r = 1.60 and V = 1.0^2 + 0.5^2 + 0.6^2 = 1.61.
"""

from __future__ import annotations

import numpy as np
import pytest

import reconcile

CASE = """
reconcile: 1
title: Bench splitter (invented)
domains:
  fluid: {unit: UNIT}
streams:
  feed: outside -> splitter
  light: splitter -> outside
  heavy: splitter -> outside
meters:
  feed:  {reads: feed.flow,  unit: UNIT, sigma: 1.0 kg/h}
  light: {reads: light.flow, unit: UNIT, sigma: 0.5 kg/h}
  heavy: {reads: heavy.flow, unit: UNIT, sigma: 0.6 kg/h}
figures:
  split: light.flow / feed.flow
"""
READ = {"feed": 101.3, "light": 40.8, "heavy": 58.9}


@pytest.fixture
def result(write_case):
    return reconcile.load_case(write_case(CASE.replace("UNIT", "kg/h"))).run(READ)


def test_raw_closure_and_test_of_all_readings(result):
    s = result.snapshot(0)
    balance = s.balances[0]
    assert balance.before == pytest.approx(1.60, abs=1e-12)
    assert balance.spread == pytest.approx(np.sqrt(1.61), rel=1e-12)
    assert balance.ratio == pytest.approx(1.261, abs=5e-4)
    assert s.test.objective == pytest.approx(1.6**2 / 1.61, rel=1e-12)
    assert s.test.checks == 1
    assert s.test.limit == pytest.approx(3.841, abs=5e-4)
    assert s.test.p == pytest.approx(0.207, abs=5e-4)
    assert "agree within their sigmas" in result.summary()


def test_adjusted_values_and_their_sigmas(result):
    assert result.adjusted[0] == pytest.approx([100.3062, 41.0484, 59.2578], abs=5e-5)
    assert result.sigmas[0] == pytest.approx([0.6155, 0.4595, 0.5287], abs=5e-5)
    moved = [r.in_sigmas for r in result.snapshot(0).readings]
    assert moved == pytest.approx([-0.99, 0.50, 0.60], abs=5e-3)
    assert abs(result.snapshot(0).balances[0].after) <= 1e-9 * 101.3


def test_one_balance_names_no_reading(result, write_case):
    lines = result.snapshot(0).readings
    assert [abs(r.z) for r in lines] == pytest.approx([1.261] * 3, abs=5e-4)
    wrong = reconcile.load_case(write_case(CASE.replace("UNIT", "kg/h"))).run({**READ, "feed": 110.0})
    text = wrong.summary()
    assert "do not agree" in text
    assert "Cannot tell" in text
    assert "Most likely" not in text
    assert {r.word for r in wrong.snapshot(0).readings} == {"tied"}


def test_the_covariance_has_to_travel(result):
    covariance = result.covariance()
    assert covariance[0, 1] == pytest.approx(0.1553, abs=5e-5)
    split = result.figure_values()[0]
    assert (split.value, split.sigma) == pytest.approx((0.4092, 0.0038), abs=5e-5)
    assert (split.raw, split.raw_sigma) == pytest.approx((0.4028, 0.0063), abs=5e-5)
    assert split.diagonal_sigma == pytest.approx(0.0052, abs=5e-5)
    assert sum(split.shares.values()) == pytest.approx(1.0)


def test_another_unit_changes_nothing(result, write_case):
    text = CASE.replace("UNIT", "g/min")
    other = reconcile.load_case(write_case(text)).run({k: v * 1000 / 60 for k, v in READ.items()})
    assert other.objective[0] == pytest.approx(result.objective[0], rel=1e-9)
    z = [r.z for r in other.snapshot(0).readings]
    assert z == pytest.approx([r.z for r in result.snapshot(0).readings], rel=1e-9)
    assert other.figure_values()[0].value == pytest.approx(result.figure_values()[0].value, rel=1e-9)


@pytest.mark.parametrize("bad", ["", "0 kg/h", "-1 kg/h", "1 %"])
def test_sigma_that_is_no_sigma_is_refused_at_its_place(write_case, bad):
    text = CASE.replace("UNIT", "kg/h").replace("sigma: 1.0 kg/h", f"sigma: {bad}")
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(write_case(text))
    message = str(caught.value)
    assert "case.yaml:11" in message
    assert "feed" in message
