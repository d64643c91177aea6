"""What a log gets wrong, told once and in the words of the case. All logs are made up with fixed seeds."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import reconcile

STREAMS = """\
reconcile: 1
domains: {fluid: {unit: kg/h}}
streams: {feed: outside -> mixer, wash: outside -> mixer, out: mixer -> outside}
"""
METERS = """\
meters:
  F: {reads: feed.flow, unit: kg/h, sigma: 0.5 kg/h%s}
  W: {reads: wash.flow, unit: kg/h, sigma: 0.2 kg/h%s}
  O: {reads: out.flow, unit: kg/h, sigma: 0.6 kg/h%s}
"""


def case_of(folder, more="", f="", w="", o=""):
    blocks = [f", {b}" if b else "" for b in (f, w, o)]
    (folder / "case.yaml").write_text(STREAMS + METERS % tuple(blocks) + more)
    return reconcile.load_case(folder)


def log_of(rows=120, seed=7):
    rng = np.random.default_rng(seed)
    f, w = 50 + 0.5 * rng.normal(size=rows), 10 + 0.2 * rng.normal(size=rows)
    o = 60 + 0.6 * rng.normal(size=rows)
    index = pd.date_range("2025-05-12 06:00", periods=rows, freq="1min")
    return pd.DataFrame({"F": f, "W": w, "O": o}, index=index)


def codes(result):
    return {n.code for n in result.notices}


def told(result, code):
    return next(n.message for n in result.notices if n.code == code)


def test_an_impossible_step_of_a_counter_is_not_counted(tmp_path):
    """A heat counter that drops and comes back 10 s later: 15508 kWh in 10 s cannot be."""
    text = STREAMS.replace("kg/h", "kWh") + METERS.replace("kg/h", "kWh") % (
        ", reading: {counter: {largest_rate: 108 kW}}", ", reading: {counter: {}}", ", reading: {counter: {}}"
    )  # fmt: skip
    (tmp_path / "case.yaml").write_text(text + "windows: {whole: true, scatter: included}\n")
    index = pd.date_range("2025-05-12", periods=6, freq="10s")
    log = pd.DataFrame(
        {
            "F": [15500.0, 15500.3, 0.0, 15508.0 - 7.4, 15500.9, 15501.2],
            "W": np.arange(6) * 0.1,
            "O": np.arange(6) * 0.34,
        },
        index=index,
    )
    result = reconcile.load_case(tmp_path).run(log)
    assert result.readings[0, 0] == pytest.approx(1.2)
    step = next(e for e in result.prepared.log if e.rule == "counter-drop-and-recover")
    assert "was not counted; at most 0.6 can have passed" in step.words


def test_a_rate_that_is_declared_as_a_counter(tmp_path):
    case = case_of(tmp_path, "windows: {whole: true}\n", f="reading: {counter: {pulse: 1 kg}}")
    with pytest.raises(reconcile.InputError, match=r"F decreases .* of the time: this looks like a rate"):
        case.run(log_of())


def test_the_best_dead_time_at_the_end_of_its_range(tmp_path):
    log = log_of()
    log["F"] += np.interp(np.arange(120), [40, 60], [0, 8])
    log["O"] += np.interp(np.arange(120) - 30, [40, 60], [0, 8])
    case = case_of(tmp_path, o="reading: {find_lag: {between: 0 to 20 min, behind: F}}")
    result = case.run(log)
    assert "the largest allowed; widen the range or give it" in told(result, "lag-at-end")
    assert "O lags 20 min behind F" in told(result, "lag-found")
    wide = case_of(tmp_path, o="reading: {find_lag: {between: 10 to 45 min, behind: F}}").run(log)
    entry = next(e for e in wide.prepared.log if e.rule == "lag-found")
    assert entry.amount == pytest.approx(30, abs=3)
    assert "lag-at-end" not in codes(wide)


def test_a_given_lag_is_taken_back(tmp_path):
    log = log_of()
    result = case_of(tmp_path, o="reading: {lag: 5 min}").run(log)
    np.testing.assert_array_equal(result.readings[:115, 2], log["O"].to_numpy()[5:])
    assert "the record ends before the dead time is over" in result.statuses[119, "O"]


def test_a_window_shorter_than_the_hold_up(tmp_path):
    result = case_of(tmp_path, "windows: {length: 10 min, hold_up: 45 min}\n").run(log_of())
    assert told(result, "window-shorter-than-hold-up") == (
        "windows last 10 min, the hold-up is 45 min: residuals will show accumulation; add the level or lengthen the window"
    )


def test_an_unsteady_window_and_one_that_is_kept(tmp_path):
    log = log_of()
    log.iloc[40:60, 0] += np.linspace(0, 8, 20)
    result = case_of(tmp_path, "windows: {length: 20 min}\n").run(log)
    left = result.prepared.left_out[2]
    assert left.code == "not steady"
    assert left.reason.startswith("F rises 2")
    assert "kg/h per hour (p < 0.001); use inventory terms to keep it" in left.reason
    assert np.isnan(result.adjusted[2]).all()
    kept = case_of(tmp_path, "windows: {length: 20 min, keep_unsteady: true}\n").run(log)
    assert not kept.prepared.left_out
    assert "window-not-steady" in codes(kept)
    assert "no level is read: what is stored meanwhile shows as a closure" in told(kept, "no-inventory-read")
    tolerant = case_of(tmp_path, "windows: {length: 20 min}\n", f="reading: {steady_within: 20 kg/h}").run(log)
    assert not tolerant.prepared.left_out


def test_the_condition_is_in_the_unit_of_its_meter(tmp_path):
    log = log_of()
    log.iloc[40:60] = [[0.4, 0.0, 0.1]] * 20
    result = case_of(tmp_path, "windows: {length: 20 min, runs_when: 'F > 0.02 t/h'}\n").run(log)
    assert {i: left.code for i, left in result.prepared.left_out.items()} == {2: "off"}
    assert {(z.tag, round(z.mean, 9)) for z in result.prepared.zero_checks} == {("F", 0.4), ("W", 0.0), ("O", 0.1)}


def test_what_single_readings_cannot_be(tmp_path):
    log = log_of()
    log.iloc[30, 0], log.iloc[35, 0] = -400.0, 58.0
    log.iloc[60:100, 1] = 10.2
    case = case_of(
        tmp_path,
        "windows: {length: 20 min}\n",
        f="reading: {limits: {possible: -1 to 80 kg/h, spike: 5 kg/h}}",
        w="reading: {limits: {flat_for: 10}}",
        o="reading: {limits: {change_per_minute: 20 kg/h, gap: 5 min}}",
    )
    result = case.run(log)
    assert "F: 1 readings below -1" in told(result, "gross-range")
    assert "F: 1 spikes of more than 5" in told(result, "spike")
    flat = told(result, "flat-line")
    assert "W repeats 10.2 for 40 samples while" in flat
    assert "frozen or last good value; status 'flat'" in flat
    assert result.prepared.table.reason(3, 1) == "0 of 20 readings are good"
    assert np.isnan(result.readings[3:5, 1]).all()
    rules = {e.rule for e in result.prepared.log}
    assert rules >= {"gross-range", "spike", "flat-line"}


def test_a_reading_at_the_end_of_the_span_is_a_bound(tmp_path):
    log = log_of()
    log["O"] = np.minimum(log["O"], 60.0)
    result = case_of(tmp_path, "windows: {whole: true}\n", o="span: 0 to 60 kg/h").run(log)
    assert "the true value is at least this; treated as a lower bound, not as a reading" in told(result, "saturated")
    assert np.isnan(result.readings[0, 2])
    clear = case_of(
        tmp_path, "windows: {whole: true}\n", o="span: 0 to 60 kg/h, reading: {limits: {saturates: false}}"
    ).run(log)
    assert np.isfinite(clear.readings[0, 2])


def test_a_calculated_reading_is_no_check(tmp_path):
    log = log_of(30).round(1)
    log["O"] = (log["F"] + log["W"]).round(1)
    result = case_of(tmp_path).run(log)
    words = told(result, "reading-calculated")
    assert "O equals F + W to the last digit in 30 of 30 rows: looks calculated in the spreadsheet" in words
    assert "not used; write calculated: false under reading: of O if an instrument reads it" in words
    assert result.checks.tolist() == [0] * 30
    assert result.classes(0)[result.variables.index("out.flow")] == "calculated"
    stated = case_of(tmp_path, o="reading: {calculated: true}").run(log)
    assert stated.checks.tolist() == [0] * 30
    assert "declared as calculated" in told(stated, "reading-calculated")


def test_too_good_to_be_true(tmp_path):
    log = log_of(30).round(1)
    log["O"] = (log["F"] + log["W"]).round(1)
    result = case_of(tmp_path, o="reading: {calculated: false}").run(log)
    assert result.checks.tolist() == [1] * 30
    assert "reading-calculated" not in codes(result)
    assert "readings agree better than their sigmas allow" in told(result, "agrees-too-well")
    assert "agrees-too-well" not in codes(case_of(tmp_path).run(log_of(30)))


def test_a_calibration_within_the_record(tmp_path):
    result = case_of(tmp_path, "windows: {length: 20 min}\n", f="calibrated: ['2025-05-12T07:00']").run(log_of())
    assert told(result, "recalibrated") == (
        "F was recalibrated 2025-05-12 07:00: windows before and after are not one series for an audit of sigmas"
    )
    assert result.prepared.segments["F"].tolist() == [0, 0, 0, 1, 1, 1]


def test_no_window_left(tmp_path):
    log = log_of(60)
    log.iloc[:20] = [[0.4, 0.0, 0.1]] * 20
    log.iloc[20:40, 0] += np.linspace(0, 8, 20)
    log.iloc[40:, 1] = np.nan
    case = case_of(tmp_path, "windows: {length: 20 min, runs_when: 'F > 2 kg/h', required: [W]}\n")
    with pytest.raises(reconcile.InputError) as caught:
        case.run(log)
    text = str(caught.value)
    assert "no window left: 1 off, 1 not steady, 1 missing W" in text
    assert "loosen one of: runs_when, steady, steady_within or keep_unsteady, required or least_coverage" in text


def test_windows_by_their_times_and_by_a_column(tmp_path):
    at = "windows:\n  at:\n    - {name: morning, start: 2025-05-12 06:20, end: 2025-05-12 06:40}\n"
    at += "    - {start: '2025-05-12 07:00', end: '2025-05-12 07:30'}\n"
    log = log_of()
    result = case_of(tmp_path, at).run(log)
    assert result.labels == ("morning", "2025-05-12 07:00")
    np.testing.assert_allclose(result.readings[0], log.iloc[20:40].mean(), rtol=1e-12)
    assert result.prepared.spans[1] == ("2025-05-12 07:00:00", "2025-05-12 07:30:00")
    empty = at.replace("2025-05-12 07:00", "2025-05-13 07:00").replace("2025-05-12 07:30", "2025-05-13 07:30")
    with pytest.raises(reconcile.InputError, match="holds no row; the record runs 2025-05-12 06:00:00"):
        case_of(tmp_path, empty).run(log)
    log["batch"] = np.repeat(["a", "b"], 60)
    by = case_of(tmp_path, "windows: {by: batch}\n").run(log)
    assert by.labels == ("a", "b")
    with pytest.raises(reconcile.InputError, match="there is no column 'batch' to cut by"):
        case_of(tmp_path, "windows: {by: batch}\n").run(log_of())


def test_stamps_at_the_end_of_their_interval_are_moved_to_its_start(tmp_path):
    log = log_of(8)
    log.index = pd.date_range("2025-05-12 06:15", periods=8, freq="15min")
    log.rename_axis("time").to_csv(tmp_path / "log.csv")
    text = "windows: {length: 1 h, steady: none}\nreadings: {file: log.csv, interval: %s}\n"
    ends = case_of(tmp_path, text % "end").run()
    assert ends.labels == ("2025-05-12 06:00:00", "2025-05-12 07:00:00")
    np.testing.assert_allclose(ends.readings[0], log.iloc[:4].mean(), rtol=1e-12)
    assert "stamps are the ends of intervals of 15 min: moved to their starts" in told(ends, "stamps-moved")
    starts = case_of(tmp_path, text % "start").run()
    np.testing.assert_allclose(starts.readings[0], log.iloc[:3].mean(), rtol=1e-12)
    assert "stamps-moved" not in codes(starts)
