"""Counters and levels. The batch tank (feed 134, outlet 121.2, level +12.4) is an invented scenario, worked by hand."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import PchipInterpolator

from reconcile.errors import InputError, Location
from reconcile.readings.counters import CounterRule, counter_increments
from reconcile.readings.levels import LevelTable, inventory, inventory_change

FEED = np.array([99912, 99934, 99957, 99979, 1, 24, 46.0])
OUTLET = np.array([412.0, 432.3, 452.5, 3.9, 24.0, 44.2, 64.4])
SECONDS = 600.0 * np.arange(7)


def test_rollover():
    found = counter_increments(FEED, CounterRule(modulus=100_000, sigma=0.67 / np.sqrt(2)), tag="feed_total")
    np.testing.assert_array_equal(found.amounts, [22, 23, 22, 22, 23, 22])
    amount, sigma = found.total()
    assert amount == 134
    assert sigma == pytest.approx(0.67, abs=1e-12)
    (step,) = found.log
    assert (step.row, step.rule, step.amount, step.before, step.after) == (4, "rollover", 22, 99979, 1)
    assert "as a restart it would be at least 1" in step.alternative
    assert not found.estimated.any()


@pytest.mark.parametrize("seconds", [None, SECONDS])
def test_restart_is_estimated_and_marked(seconds):
    found = counter_increments(OUTLET, CounterRule(restart=True, sigma=0.3), seconds=seconds, tag="out_total")
    assert found.amounts[2] == pytest.approx(20.2, abs=1e-9)
    assert round(found.sigmas[2], 1) == 0.5
    assert found.estimated.tolist() == [False, False, True, False, False, False]
    amount, sigma = found.total()
    assert amount == pytest.approx(121.2, abs=1e-9)
    # Two unbroken runs of counts cost two readings each: 2 * 0.3 = 0.6; the estimate adds its own.
    assert sigma == pytest.approx(np.hypot(0.6, found.sigmas[2]), rel=1e-12)
    (step,) = found.log
    assert step.rule == "restart"
    assert "at least 3.9 passed" in step.alternative
    assert "20.200 +- 0.47 estimated from its neighbours" in str(found.notices[0])


def test_the_balance_of_the_tank():
    feed = counter_increments(FEED, CounterRule(modulus=100_000)).total()[0]
    outlet = counter_increments(OUTLET, CounterRule(restart=True)).total()[0]
    change, sigma = inventory_change(40.0, 43.1, LevelTable(per_level=4.0), sigma=0.3 / np.sqrt(2))
    assert change == pytest.approx(12.4)
    assert sigma == pytest.approx(1.2)
    assert feed - outlet - change == pytest.approx(0.4, abs=1e-9)


def test_a_fall_without_a_rule_is_refused():
    with pytest.raises(InputError) as caught:
        counter_increments(
            OUTLET, CounterRule(), tag="out_total", where=lambda row: Location("log.csv", row + 2, row=row)
        )
    text = str(caught.value)
    assert caught.value.code == "counter-falls"
    assert "out_total row 4: 452.5 -> 3.9: rollover, restart at zero, or bad reading? Nothing assumed" in text
    assert "declare modulus = 1000 (rollover), or restart = true, or mark the reading as bad" in text
    assert text.startswith("log.csv:5")


def test_a_rollover_that_cannot_be_is_not_assumed():
    with pytest.raises(InputError, match="a rollover at 100000 would mean 99551") as caught:
        counter_increments(OUTLET, CounterRule(modulus=100_000), tag="out_total")
    assert caught.value.code == "counter-falls"


def test_drop_and_recover():
    """A heat counter that reads zero once and comes back."""
    values = np.array([15507.9, 15508.0, 15508.1, 0.0, 15508.3, 15508.4])
    rule = CounterRule(max_rate=0.03)
    found = counter_increments(values, rule, seconds=10.0 * np.arange(6), tag="heat_kWh")
    assert found.total()[0] == pytest.approx(0.5, abs=1e-9)
    (step,) = found.log
    assert (step.row, step.rule) == (3, "drop-and-recover")
    assert "the step back, 15508.3 in 10 s, was not counted; at most 0.6 can have passed" in str(found.notices[0])
    # Without any rule, even this is not assumed.
    with pytest.raises(InputError, match="Nothing assumed"):
        counter_increments(values, CounterRule(), tag="heat_kWh")
    # A restart that is allowed must not count the way back up.
    assert counter_increments(values, CounterRule(restart=True)).total()[0] == pytest.approx(0.5, abs=1e-9)


def test_a_leap_up_that_comes_back():
    values = np.array([10.0, 11.0, 9000.0, 13.0, 14.0])
    found = counter_increments(values, CounterRule(max_rate=2.0), seconds=np.arange(5.0))
    assert found.total()[0] == pytest.approx(4.0)
    assert found.log[0].rule == "spike"


def test_a_step_that_is_too_fast_is_not_counted():
    values = np.array([10.0, 11.0, 12.0, 500.0, 501.0, 502.0])
    found = counter_increments(values, CounterRule(max_rate=0.3), seconds=10.0 * np.arange(6), tag="gas")
    assert found.amounts[2] == pytest.approx(1.0)
    assert found.estimated[2]
    assert "488 in 10 s, but max_rate allows 3" in str(found.notices[0])
    with pytest.raises(InputError) as caught:
        counter_increments(values, CounterRule(max_rate=0.3))
    assert caught.value.code == "max-rate-without-time"


def test_a_rate_is_no_counter():
    values = np.random.default_rng(3).normal(50, 2, 200)
    with pytest.raises(InputError) as caught:
        counter_increments(values, CounterRule(restart=True), tag="feed_total")
    assert caught.value.code == "counter-is-rate"
    assert "% of the time: this looks like a rate, not a counter" in str(caught.value)


def test_gaps_and_pulses():
    values = np.array([np.nan, 10.0, np.nan, 16.0, 18.0, np.nan])
    found = counter_increments(values, CounterRule(pulse=0.5))
    np.testing.assert_array_equal(found.amounts, [np.nan, 0.0, 3.0, 1.0, np.nan])
    assert found.total(1, 4)[0] == 4.0
    assert [s.rule for s in found.log] == ["gap"]
    # One count, uniformly distributed: GUM F.2.2.1.
    assert CounterRule(pulse=0.5).reading_sigma == pytest.approx(0.5 / np.sqrt(12))


@given(
    st.lists(st.integers(0, 400), min_size=1, max_size=40),
    st.integers(0, 999),
)
def test_any_series_survives_rolling_over(steps, start):
    truth = start + np.concatenate([[0], np.cumsum(steps)])
    found = counter_increments((truth % 1000).astype(float), CounterRule(modulus=1000))
    np.testing.assert_array_equal(found.amounts, steps)


# ------------------------------------------------------------------ levels


def test_level_table_is_the_published_monotone_cubic():
    """Against scipy's PchipInterpolator, which documents the same source (Fritsch & Butland 1984)."""
    levels, contents = [0.0, 5, 20, 60, 90, 100], [0.0, 3, 30, 150, 400, 420]
    x = np.linspace(0, 100, 201)
    reference = PchipInterpolator(levels, contents)
    content, sigma = inventory(x, LevelTable(levels=levels, contents=contents), sigma=0.1)
    np.testing.assert_allclose(content, reference(x), rtol=0, atol=1e-10)
    np.testing.assert_allclose(sigma, 0.1 * np.abs(reference(x, 1)), rtol=0, atol=1e-10)


def test_straight_table_is_a_straight_line():
    content, sigma = inventory([10.0, np.nan, 35.0], LevelTable(levels=[0, 50, 100], contents=[0, 200, 400]), 0.5)
    np.testing.assert_allclose(content, [40, np.nan, 140], atol=1e-12)
    np.testing.assert_allclose(sigma, [2, np.nan, 2], atol=1e-12)


def test_scale_error_acts_on_the_change_only():
    table = LevelTable(per_level=4.0)
    assert inventory_change(50.0, 50.0, table, 0.0, 0.02) == (0.0, 0.0)
    assert inventory_change(50.0, 60.0, table, 0.0, 0.02)[1] == pytest.approx(0.8)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ({}, "needs either a content per unit of level or a table"),
        ({"per_level": 1.0, "levels": [0, 1], "contents": [0, 1]}, "needs either"),
        ({"per_level": -1.0}, "give a positive number"),
        ({"levels": [0, 1, 2], "contents": [0, 1]}, "3 levels and 2 contents"),
        ({"levels": [0, 2, 1], "contents": [0, 1, 2]}, "2 is followed by 1 (row 3)"),
        ({"levels": [0, 1, 2], "contents": [0, 5, 5]}, "the contents of the table do not rise"),
    ],
)
def test_wrong_tables(arguments, words):
    with pytest.raises(InputError) as caught:
        LevelTable(**arguments)
    assert words in str(caught.value)


def test_nothing_is_extrapolated():
    with pytest.raises(InputError, match="level 101 \\(row 2\\) is outside the table, 0 to 100; 2 such rows in all"):
        inventory([50, 101, -1], LevelTable(levels=[0, 100], contents=[0, 400]))
