"""A batch tank charged from a counter that rolls over and one that is set to zero: an invented log.

Every expected number was worked out by hand beside this file: sums of the increments that the log shows, the mean of
two neighbours on each side of the restart, and the root sum of squares of the stated uncertainties.
"""

from __future__ import annotations

import shutil

import numpy as np
import pytest

import reconcile
from reconcile.campaign.variants import what_ifs
from reconcile.corrected import load_corrected
from reconcile.export import write


@pytest.fixture
def tank(datasets, tmp_path):
    shutil.copytree(datasets / "batch_tank", tmp_path / "tank")
    return tmp_path / "tank"


@pytest.fixture
def result(tank):
    return reconcile.load_case(tank).run()


def test_counters_become_what_passed(result):
    assert result.size == 1
    readings = dict(zip(result.tags, result.readings[0], strict=True))
    assert readings == pytest.approx({"feed_total": 134.0, "out_total": 121.2, "level": 12.4}, abs=1e-9)
    rollovers = [e for e in result.prepared.log if e.rule == "counter-rollover"]
    assert [(e.meter, e.row, e.amount) for e in rollovers] == [("feed_total", 5, 22.0)]


def test_the_restart_is_estimated_and_marked(result):
    step = next(e for e in result.prepared.log if e.rule == "counter-restart")
    assert (step.meter, step.before, step.after, step.unit) == ("out_total", 452.5, 3.9, "kg")
    assert step.amount == pytest.approx(20.2, abs=1e-9)
    assert step.sigma == pytest.approx(0.5, abs=0.05)
    assert step.otherwise == pytest.approx(3.9)
    assert "at least 3.9 passed" in step.words
    text = result.summary()
    assert "ESTIMATED, NOT READ" in text
    line = next(line for line in text.splitlines() if line.split()[:1] == ["out_total"])
    assert line.split()[-1] == "estimated"
    assert "-347.6" not in text
    assert -347.6 not in result.readings


def test_the_balance_agrees(result):
    line = result.snapshot(0).balances[0]
    assert line.before == pytest.approx(0.4, abs=1e-9)
    assert line.spread == pytest.approx(1.58, abs=0.01)
    assert result.objective[0] == pytest.approx(0.064, abs=0.001)
    assert result.words == ("agrees",)


def test_the_rejected_readings_of_the_log_are_shown(result):
    found = {w.alternative.rule: w for w in what_ifs(result)}
    restart = found["counter-restart"]
    assert restart.alternative.value == pytest.approx(104.9)
    assert (restart.closure, restart.ratio) == pytest.approx((16.7, 11.1), abs=0.05)
    assert "out_total, 452.5 -> 3.9: counted as 3.9 kg instead of 20.2: closure +16.7 kg" in " ".join(
        result.summary().split()
    )
    still = found["inventory"]
    assert still.closure == pytest.approx(12.8)
    assert "the tank holds rose by 12.4" in still.alternative.words


def test_a_fall_without_a_rule_is_refused_with_the_choices(tank):
    case = tank / "case.yaml"
    case.write_text(case.read_text().replace("counter: {rolls_over_at: 100000}", "counter: {}"))
    with pytest.raises(reconcile.InputError) as caught:
        reconcile.load_case(tank).run()
    text = str(caught.value)
    assert "log.csv:6 row 5" in text
    assert "feed_total row 5: 99979 -> 1: rollover, restart at zero, or bad reading? Nothing assumed" in text
    assert "rolls_over_at: 100000 (rollover), or starts_again: true, or mark the reading as bad" in text


def test_the_corrected_set_says_what_is_estimated(result, tmp_path):
    write(result, tmp_path / "out")
    back = load_corrected(tmp_path / "out")
    status = dict(zip(back.readings["meter"], back.readings["status"], strict=True))
    assert status == {
        "feed_total": "measured-corrected",
        "out_total": "estimated-corrected",
        "level": "measured-corrected",
    }
    assert set(back.log["rule"]) == {"counter-rollover", "counter-restart"}
    row = back.adjusted.iloc[0]
    closure = row["feed.flow"] - row["outlet.flow"] - row["tank.accumulation"]
    assert abs(closure) <= 1e-9 * row["feed.flow"]


def test_rates_from_counters_when_the_meters_are_rates(tank):
    """The same hour as rates: what passed in one hour, in kg/h, gives the same numbers."""
    case = tank / "case.yaml"
    text = case.read_text().replace("unit: kg}", "unit: kg/h}").replace("unit: kg\n", "unit: kg/h\n")
    for value in ("0.67", "0.6", "1.2"):
        text = text.replace(f"sigma: {value} kg", f"sigma: {value} kg/h")
    text = text.replace("rolls_over_at: 100000", "rolls_over_at: 100000, pulse: 1 kg")
    text = text.replace("starts_again: true", "starts_again: true, pulse: 1 kg")
    case.write_text(text)
    result = reconcile.load_case(tank).run()
    np.testing.assert_allclose(result.readings, [[134.0, 121.2, 12.4]], rtol=0, atol=1e-9)
    assert next(e for e in result.prepared.log if e.rule == "counter-restart").unit == "kg"


def test_a_counter_without_windows_or_with_a_rate_unit_alone_is_refused(tank):
    case = tank / "case.yaml"
    text = case.read_text()
    case.write_text(text.replace("windows: {whole: true, scatter: included}\n", ""))
    with pytest.raises(reconcile.InputError, match=r"add windows:, e\.g\. windows: \{whole: true\}"):
        reconcile.load_case(tank)
    case.write_text(text.replace("unit: kg\n    sigma: 0.67 kg", "unit: kg/h\n    sigma: 0.67 kg/h"))
    with pytest.raises(reconcile.InputError, match="pulse of the counter of 'feed_total' is missing"):
        reconcile.load_case(tank)
