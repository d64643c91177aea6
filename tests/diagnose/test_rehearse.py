"""Rehearsals: figures of the skid by simulation, intervals, and repeatability."""

import numpy as np
import pytest
from diagnose_networks import LOOP, SKID
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import binomtest, chi2, ncx2

from reconcile.diagnose.refusal import Refusal
from reconcile.diagnose.rehearse import rehearse, wilson


@given(trials=st.integers(1, 3000), share=st.floats(0, 1), confidence=st.sampled_from([0.9, 0.95, 0.99]))
def test_interval_against_scipy(trials, share, confidence):
    count = round(share * trials)
    got = wilson(count, trials, confidence)
    theirs = binomtest(count, trials).proportion_ci(confidence, method="wilson")
    assert (got.low, got.high) == pytest.approx((theirs.low, theirs.high), abs=1e-9)
    assert got.low <= got.value <= got.high


def test_no_trials_give_no_share():
    assert np.isnan(wilson(0, 0).value)


def test_a_bias_in_the_recycle_of_the_skid():
    # measured with an independent program, 2000 draws: 4.8 % false alarms, 98.0 % noticed, 96.4 % named first
    got = rehearse(SKID.biases, [{1: 9.0}], trials=2000, rng=20240611)
    assert 0.04 <= got.false_alarm.value <= 0.06
    assert got.noticed[0].value >= 0.96
    assert got.named[0].value >= 0.94


def test_a_bias_that_is_noticed_but_often_blamed_on_others():
    # P +3 in the skid: noticed in 98 %, named right in about 60 %
    got = rehearse(SKID.biases, [{3: 3.0}], trials=20000, rng=1)
    f = SKID.biases[:, 3] * 3.0
    power = ncx2.sf(chi2.isf(0.05, 3), 3, f @ f)
    assert got.noticed[0].value == pytest.approx(power, abs=4 * np.sqrt(power * (1 - power) / 20000))
    assert power == pytest.approx(0.98, abs=0.01)
    assert got.named[0].value == pytest.approx(0.60, abs=0.05)
    blamed = got.confusion[0]
    assert set(np.argsort(-blamed)[:3]) == {0, 3, 5}  # F, P and B look nearly alike


def test_false_alarms_have_the_level_of_the_test():
    got = rehearse(SKID.biases, [], trials=40000, rng=7)
    assert got.false_alarm.value == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / 40000))
    assert got.confusion.shape == (1, 7)
    assert got.confusion.sum() == 40000


def test_a_tie_is_right_as_a_class_only():
    got = rehearse(LOOP.biases, [{0: 3.0}, {1: 3.0}], trials=500, rng=2, scale=1 / LOOP.sigma)
    assert got.named[1].value == 0  # R is never the first of its class
    assert got.in_class[1].value > 0.9
    assert got.in_class[0].count == pytest.approx(got.named[0].count)


def test_rows_of_the_confusion_table_add_up():
    got = rehearse(SKID.biases, [{0: 2.0}, {1: 5.0, 3: -2.0}], trials=300, rng=3)
    assert got.confusion.sum(axis=1).tolist() == [300, 300, 300]
    alarms = [r.count for r in got.noticed]
    assert (got.confusion[:2, :6].sum(axis=1)).tolist() == alarms
    assert [r.trials for r in got.named_when_noticed] == alarms


def test_the_same_seed_gives_the_same_counts():
    one = rehearse(SKID.biases, [{1: 6.0}], trials=200, rng=5)
    two = rehearse(SKID.biases, [{1: 6.0}], trials=200, rng=np.random.default_rng(5))
    assert np.array_equal(one.confusion, two.confusion)


def test_another_namer():
    got = rehearse(SKID.biases, [{1: 9.0}], trials=100, rng=5, namer=lambda p: np.full(len(p), -1))
    assert got.named[0].count == 0
    assert got.confusion[0].tolist() == [0] * 6 + [100]


@pytest.mark.parametrize(
    ("call", "code"),
    [
        (lambda: rehearse(np.zeros((0, 2)), [], trials=5, rng=0), "no-check"),
        (lambda: rehearse(np.zeros((2, 2)), [], trials=5, rng=0), "nothing-checked"),
        (lambda: rehearse(SKID.biases, [{9: 1.0}], trials=5, rng=0), "unknown-candidate"),
        (lambda: rehearse(SKID.biases, [], trials=0, rng=0), "no-trials"),
        (lambda: wilson(3, 2), "count-out-of-range"),
    ],
)
def test_rehearsals_that_mean_nothing(call, code):
    with pytest.raises(Refusal) as caught:
        call()
    assert caught.value.code == code
