"""Windows: values, sigmas, and the reason for each window that is left out. All data are made up."""

import numpy as np
import pandas as pd
import pytest

from reconcile.errors import InputError
from reconcile.readings import ReadingsTable, Status
from reconcile.readings.counters import CounterRule
from reconcile.readings.levels import LevelTable
from reconcile.readings.validity import SignalLimits, check_signals, run_mask
from reconcile.readings.windows import WindowRules, make_windows, sigma_of_mean


def table(columns, values, *, step="1min", units=None, extra=None, start="2025-05-01"):
    values = np.asarray(values, dtype=float)
    status = np.where(np.isfinite(values), Status.GOOD, Status.MISSING).astype(np.int8)
    time = None if step is None else pd.date_range(start, periods=len(values), freq=step)
    return ReadingsTable(tuple(columns), values, status, time=time, units=units or {}, extra=extra or {})


@pytest.fixture
def plant():
    """Nine windows of 20 minutes: 4 good, 1 with P missing, 1 off, 1 with a ramp in F, 2 good."""
    rng = np.random.default_rng(12)
    f = 50 + rng.normal(size=180) * 0.5
    p = 40 + rng.normal(size=180) * 0.4
    p[80:100] = np.nan
    f[100:120] = 0.4 + rng.normal(size=20) * 0.01
    p[100:120] = rng.normal(size=20) * 0.01
    f[120:140] += np.linspace(0, 10, 20)
    run = np.ones(180)
    run[100:120] = 0
    flags = np.array([str(int(r)) for r in run], dtype=object)
    return table(["F", "P"], np.column_stack([f, p]), units={"F": "kg/h"}, extra={"pump_run": flags})


def test_windows_and_their_reasons(plant):
    found = make_windows(plant, WindowRules(duration=1200), running=run_mask(plant, "pump_run"))
    assert len(found.table) == 9
    assert found.used.tolist() == [True] * 5 + [False, False] + [True] * 2
    np.testing.assert_allclose(found.table.values[0, 0], plant.values[:20, 0].mean(), rtol=1e-14)
    off, moving = found.left_out
    assert (off.window, off.code) == (5, "off")
    assert "readings used for a zero check only (F shows 0.4, P shows" in off.reason
    assert (moving.window, moving.code) == (6, "not steady")
    assert moving.reason.startswith("F rises 3")
    assert "kg/h per hour (p < 0.001); use inventory terms to keep it" in moving.reason
    assert found.table.status[4].tolist() == [Status.GOOD, Status.MISSING]
    assert found.table.reason(4, 1) == "0 of 20 readings are good"
    assert found.table.status[5].tolist() == [Status.OFF, Status.OFF]
    zero = found.zero_checks[0]
    assert (zero.window, zero.tag) == (5, "F")
    assert zero.mean == pytest.approx(0.4, abs=0.01)
    assert {n.code for n in found.table.notices} == {"window-off", "window-left-out"}
    assert len(found.kept()) == 7
    assert found.bounds[6].tolist() == [120, 140]
    assert found.table.label(6) == "2025-05-01 02:00:00"


def test_what_may_be_kept_and_what_is_required(plant):
    running = run_mask(plant, "pump_run")
    kept = make_windows(plant, WindowRules(duration=1200, keep_unsteady=True), running=running)
    assert kept.used[6]
    assert "window-not-steady" in {n.code for n in kept.table.notices}
    assert make_windows(plant, WindowRules(duration=1200, tolerance={"F": 20.0}), running=running).used[6]
    assert make_windows(plant, WindowRules(duration=1200, steady=["P"]), running=running).used[6]
    by_r = make_windows(plant, WindowRules(duration=1200, slope_level=None, r_level=0.01), running=running)
    assert "F is not steady (ratio of variances" in {x.window: x.reason for x in by_r.left_out}[6]
    required = make_windows(plant, WindowRules(duration=1200, required=["P"]), running=running)
    assert [x.code for x in required.left_out] == ["missing P", "off", "not steady"]


def test_no_window_left(plant):
    running = np.zeros(180, dtype=bool)
    running[120:140] = True
    with pytest.raises(InputError) as caught:
        make_windows(plant, WindowRules(duration=1200), running=running)
    assert caught.value.code == "no-window-left"
    assert "no window left: 8 off, 1 not steady; loosen one of: the run flag, slope_level" in str(caught.value)


def test_a_window_in_which_the_pump_is_switched_is_left_out(plant):
    running = run_mask(plant, "pump_run").copy()
    running[5] = False
    found = make_windows(plant, WindowRules(duration=1200), running=running)
    assert found.left_out[0].code == "switched"


def test_the_tank_with_counters_and_level():
    """Feed 134, outlet 121.2, inventory +12.4: an invented batch tank, worked by hand."""
    feed = [99912, 99934, 99957, 99979, 1, 24, 46]
    outlet = [412.0, 432.3, 452.5, 3.9, 24.0, 44.2, 64.4]
    level = np.linspace(40.0, 43.1, 7)
    readings = table(["feed_total", "out_total", "level"], np.column_stack([feed, outlet, level]), step="10min")
    rules = WindowRules(
        count=7,
        counters={
            "feed_total": CounterRule(modulus=100_000, sigma=0.67 / np.sqrt(2)),
            "out_total": CounterRule(restart=True, sigma=0.3),
        },
        levels={"level": LevelTable(per_level=4.0)},
        level_sigma={"level": 0.3 / np.sqrt(2)},
    )
    found = make_windows(readings, rules)
    np.testing.assert_allclose(found.table.values, [[134, 121.2, 12.4]], rtol=0, atol=1e-9)
    assert found.table.status.tolist() == [[Status.GOOD, Status.ESTIMATED, Status.GOOD]]
    assert found.sigma[0, 0] == pytest.approx(0.67)
    assert found.sigma[0, 2] == pytest.approx(1.2)
    assert "estimated from its neighbours" in found.table.reason(0, 1)
    assert {n.code for n in found.table.notices} == {"counter-rollover", "counter-restart"}
    hourly = make_windows(readings, WindowRules(count=7, counters=rules.counters, levels=rules.levels, per=3600))
    np.testing.assert_allclose(hourly.table.values, [[134, 121.2, 12.4]], rtol=0, atol=1e-9)


def test_counter_windows_add_up_to_the_whole():
    total = np.cumsum(np.random.default_rng(13).uniform(0, 3, 61))
    readings = table(["gas"], total[:, None])
    found = make_windows(readings, WindowRules(duration=600, counters={"gas": CounterRule()}))
    assert found.table.values[found.used, 0].sum() == pytest.approx(total[-1] - total[0], rel=1e-12)
    assert found.left_out[-1].code == "short"


def test_sigma_of_the_mean_has_two_parts():
    """Only the part that is independent from reading to reading averages out: sqrt(0.8^2/16 + 0.3^2)."""
    assert sigma_of_mean(0.8, 0.3, 16) == pytest.approx(np.hypot(0.2, 0.3))
    assert sigma_of_mean(0.8, 0.3, 1e12) == pytest.approx(0.3, rel=1e-6)
    rng = np.random.default_rng(14)
    found = make_windows(table(["F"], rng.normal(50, 2, (400, 1))), WindowRules(count=100, slope_level=None))
    assert found.effective.max() <= 100
    np.testing.assert_allclose(found.sigma[:, 0], 2 / np.sqrt(found.effective[:, 0]), rtol=0.35)


def test_clipped_and_censored_readings_make_a_bound_and_not_a_mean():
    rng = np.random.default_rng(15)
    steam = np.minimum(rng.normal(98, 2, 40), 100.0)
    readings = table(["steam_flow"], steam[:, None])
    checked = check_signals(readings, {"steam_flow": SignalLimits(span=(0, 100))})
    found = make_windows(checked, WindowRules(count=40))
    assert found.table.status[0, 0] == Status.SATURATED
    assert np.isnan(found.table.values[0, 0])
    assert found.table.lower[0, 0] == pytest.approx(steam.mean())
    assert found.table.upper[0, 0] == np.inf
    assert "only bounds" in found.table.reason(0, 0)


def test_windows_by_a_column_and_by_count(plant):
    runs = np.array(["a"] * 60 + ["b"] * 20 + ["a"] * 100, dtype=object)
    by_column = table(["F"], plant.values[:, :1], extra={"campaign": runs}, step=None)
    found = make_windows(by_column, WindowRules(column="campaign", slope_level=None))
    assert found.table.labels == ["a", "b", "a"]
    assert found.bounds.tolist() == [[0, 60], [60, 80], [80, 180]]
    assert len(make_windows(plant, WindowRules(count=50, slope_level=None)).table) == 4


def test_windows_start_at_round_times():
    readings = table(["F"], np.random.default_rng(16).normal(50, 1, (100, 1)), start="2025-05-01 10:07")
    found = make_windows(readings, WindowRules(duration=900))
    assert found.bounds[1, 0] == 8
    assert str(readings.time[8]) == "2025-05-01 10:15:00"


def test_window_shorter_than_the_hold_up(plant):
    rules = WindowRules(duration=600, hold_up=2700)
    found = make_windows(plant, rules, running=run_mask(plant, "pump_run"))
    (notice,) = [n for n in found.table.notices if n.code == "window-shorter-than-hold-up"]
    assert "windows last 10 min, the hold-up is 45 min: residuals will show accumulation" in notice.message


def test_recalibration_parts_the_series(plant):
    rules = WindowRules(duration=1200, calibrations={"F": ["2025-05-01 01:00"]})
    found = make_windows(plant, rules, running=run_mask(plant, "pump_run"))
    assert found.segments["F"].tolist() == [0, 0, 0, 1, 1, 1, 1, 1, 1]
    (notice,) = [n for n in found.table.notices if n.code == "recalibrated"]
    assert "F was recalibrated 2025-05-01 01:00: windows before and after are not one series" in notice.message


@pytest.mark.parametrize(
    ("rules", "code", "words"),
    [
        ({}, "window-rule", "none given; give exactly one"),
        ({"duration": 60, "count": 5}, "window-rule", "duration and count given"),
        ({"duration": -1}, "window-rule", "longer than nothing"),
        ({"column": "batch"}, "column-missing", "list it under keep"),
        ({"count": 5, "required": ["FF"]}, "tag-unknown", "did you mean 'F'?"),
    ],
)
def test_rules_that_do_not_fit(plant, rules, code, words):
    with pytest.raises(InputError) as caught:
        make_windows(plant, WindowRules(**rules))
    assert caught.value.code == code
    assert words in str(caught.value)


def test_durations_need_stamps():
    readings = table(["F"], np.ones((10, 1)), step=None)
    with pytest.raises(InputError, match="need stamps"):
        make_windows(readings, WindowRules(duration=60))


# ------------------------------------------------------------------ single signals


def test_each_test_of_a_signal():
    x = np.array([50, 51, 49, 500, 50, 52, 70, 51, 50, 49, 50.5, 50.5, 50.5, 50.5, 51.0, -3])
    other = np.linspace(100, 101.5, 16)
    readings = table(["D", "T"], np.column_stack([x, other]))
    rule = SignalLimits(low=0, high=200, spike=15, flat_count=4)
    found = check_signals(readings, {"D": rule})
    bad, flat = (
        np.flatnonzero(found.status[:, 0] == Status.BAD_SOURCE),
        np.flatnonzero(found.status[:, 0] == Status.FLAT),
    )
    assert bad.tolist() == [3, 6, 15]
    assert flat.tolist() == [10, 11, 12, 13]
    assert found.reason(3, 0) == "gross range: above 200"
    assert found.reason(6, 0) == "spike: more than 15 from its neighbours"
    assert np.isnan(found.values[bad, 0]).all()
    words = {n.code: n.message for n in found.notices}
    assert (
        words["flat-line"]
        == "D repeats 50.5 for 4 samples while T varies by 0.3 %: frozen or last good value; status 'flat'"
    )
    assert set(words) == {"gross-range", "spike", "flat-line"}
    np.testing.assert_array_equal(found.status[:, 1], Status.GOOD)


def test_saturation_is_a_bound():
    x = np.array([80.0, 100, 100, 100, 90, 4])
    found = check_signals(table(["steam_flow"], x[:, None]), {"steam_flow": SignalLimits(span=(4, 100))})
    assert np.flatnonzero(found.status[:, 0] == Status.SATURATED).tolist() == [1, 2, 3, 5]
    assert (found.lower[1, 0], found.upper[1, 0]) == (100, np.inf)
    assert (found.lower[5, 0], found.upper[5, 0]) == (-np.inf, 4)
    assert "steam_flow is at 100 % of its span (100) for 3 samples: the true value is at least this" in str(
        found.notices[0]
    )


def test_rate_of_change_does_not_blame_the_way_back():
    x = np.array([50.0, 51, 90, 91, 52, 51])
    found = check_signals(table(["F"], x[:, None]), {"F": SignalLimits(max_rate=0.1)})
    assert np.flatnonzero(found.status[:, 0] == Status.BAD_SOURCE).tolist() == [2, 3]


def test_gaps_are_told():
    x = np.ones(30)
    x[10:20] = np.nan
    found = check_signals(table(["F"], x[:, None]), {"F": SignalLimits(max_gap=120)})
    (notice,) = found.notices
    assert notice.message == "F: 1 gaps longer than 120 s; the longest is 660 s"


def test_limits_that_do_not_fit():
    readings = table(["F"], np.ones((5, 1)), step=None)
    with pytest.raises(InputError, match="did you mean 'F'"):
        check_signals(readings, {"f": SignalLimits(low=0)})
    with pytest.raises(InputError, match="rows have no time"):
        check_signals(readings, {"F": SignalLimits(max_rate=1)})


def test_run_flags(plant):
    assert run_mask(plant, "F", on_above=5.0).sum() == 160
    assert run_mask(plant, "pump_run").sum() == 160
    with pytest.raises(InputError, match="did you mean 'pump_run'"):
        run_mask(plant, "pump_ran")
    odd = table(["F"], np.ones((2, 1)), extra={"run": np.array(["on", "maybe"], dtype=object)})
    with pytest.raises(InputError, match="'maybe' is neither on nor off"):
        run_mask(odd, "run")
