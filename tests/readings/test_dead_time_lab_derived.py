"""Dead time, laboratory samples, and columns that are no readings. All data are made up, with fixed seeds."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.errors import InputError
from reconcile.readings import ReadingsTable, Status
from reconcile.readings.dead_time import estimate_dead_time, shift_times
from reconcile.readings.derived import find_derived, mark_derived
from reconcile.readings.lab import join_lab


def table(columns, values, *, step="1min", start="2025-05-01", zone=None, source="log.csv"):
    values = np.asarray(values, dtype=float)
    status = np.where(np.isfinite(values), Status.GOOD, Status.MISSING).astype(np.int8)
    time = None if step is None else pd.date_range(start, periods=len(values), freq=step, tz=zone)
    return ReadingsTable(tuple(columns), values, status, time=time, sources=(source,))


MINUTES = np.arange(180.0)
RAMP = np.interp(MINUTES, [100, 120], [10.0, 14.0])
LATE = np.interp(MINUTES - 8, [100, 120], [10.0, 14.0])


def test_dead_time_of_a_ramp():
    """A ramp of 10 to 14 g/l in minutes 100 to 120; the outlet follows 8 minutes later."""
    rng = np.random.default_rng(17)
    x, y = RAMP + rng.normal(0, 0.02, 180), LATE + rng.normal(0, 0.02, 180)
    found = estimate_dead_time(x, y, 20, names=("feed", "outlet"), unit="min")
    assert found.lag == pytest.approx(8, abs=1)
    assert found.low <= 8 <= found.high
    assert found.notices == ()
    assert found.gain == pytest.approx(1.0, abs=0.02)
    # Raw gap in minutes 100 to 120: 26.4/21 = 1.257 g/l, worked by hand; after alignment only noise is left.
    assert np.mean(RAMP[100:121] - LATE[100:121]) == pytest.approx(1.26, abs=0.005)
    shifted = shift_times(table(["x", "y"], np.column_stack([x, y])), {"y": 480.0})
    assert abs(np.mean(shifted.values[100:121, 0] - shifted.values[100:121, 1])) < 0.02


@given(st.integers(0, 12), st.floats(0.2, 5.0), st.floats(-10.0, 10.0))
def test_any_lag_is_found(lag, gain, offset):
    x = np.cumsum(np.random.default_rng(18).normal(size=150))
    y = offset + gain * x[np.maximum(np.arange(150) - lag, 0)]
    found = estimate_dead_time(x, y, 15)
    assert found.lag == pytest.approx(lag, abs=0.3)
    assert found.gain == pytest.approx(gain, rel=1e-9)
    assert found.offset == pytest.approx(offset, abs=1e-6)


def test_the_interval_covers():
    """Of 200 records with 4 steps of lag, the 95 % interval holds the truth in at least 90 %."""
    rng = np.random.default_rng(19)
    hits = []
    for _ in range(200):
        x = np.convolve(rng.normal(size=320), np.ones(20) / 20, "valid")
        y = np.roll(x, 4) + rng.normal(0, 0.15, x.size)
        found = estimate_dead_time(x[20:], y[20:], 15)
        hits.append(found.low <= 4 <= found.high)
    assert np.mean(hits) >= 0.90


def test_lag_at_the_end_of_the_range():
    found = estimate_dead_time(RAMP, LATE, 5, names=("feed", "outlet"), unit="min")
    (notice,) = found.notices
    assert notice.code == "lag-at-end"
    assert "best dead time of outlet behind feed is 5 min, the largest allowed; widen the range" in notice.message


def test_dead_time_cannot_be_had():
    with pytest.raises(InputError, match="feed does not move"):
        estimate_dead_time(np.ones(100), RAMP[:100], 10, names=("feed", "outlet"))
    with pytest.raises(InputError, match="too few"):
        estimate_dead_time(RAMP[:15], LATE[:15], 10)


def test_shifting():
    readings = table(["A", "B"], np.column_stack([np.arange(6.0), 10 * np.arange(6.0)]))
    exact = shift_times(readings, {"B": 120})
    np.testing.assert_array_equal(exact.values[:, 1], [20, 30, 40, 50, np.nan, np.nan])
    np.testing.assert_array_equal(exact.values[:, 0], readings.values[:, 0])
    assert exact.status[4, 1] == Status.MISSING
    assert exact.reason(4, 1) == "the record ends before the dead time is over"
    between = shift_times(readings, {"B": 90})
    np.testing.assert_allclose(between.values[:, 1], [15, 25, 35, 45, np.nan, np.nan])
    back = shift_times(readings, {"B": -60})
    np.testing.assert_array_equal(back.values[:, 1], [np.nan, 0, 10, 20, 30, 40])
    with pytest.raises(InputError, match="did you mean 'B'"):
        shift_times(readings, {"b": 60})
    with pytest.raises(InputError, match="need stamps"):
        shift_times(table(["A"], np.ones((3, 1)), step=None), {"A": 60})


# ------------------------------------------------------------------ laboratory


def test_lab_samples_get_the_mean_of_the_plant():
    plant = table(["F", "c_in"], np.column_stack([np.arange(180.0), RAMP]))
    lab = table(["Cu"], [[0.5], [0.6]], step="110min", start="2025-05-01 00:30", source="lab.csv")
    joined = join_lab(plant, lab, before=600, watch=["c_in"])
    assert joined.columns == ("F", "c_in", "Cu")
    assert joined.values[0].tolist() == [25.0, 10.0, 0.5]
    later = join_lab(plant, lab, before=600, delays={"F": 300}, watch=["c_in"])
    assert later.values[0, 0] == 30.0
    assert len(joined) == 2


def test_a_sample_in_a_ramp_is_told():
    rng = np.random.default_rng(20)
    plant = table(["c_in"], (RAMP + rng.normal(0, 0.01, 180))[:, None])
    lab = table(["Cu"], [[0.5]], start="2025-05-01 01:55", source="lab.csv")
    (notice,) = join_lab(plant, lab).notices
    assert notice.code == "sample-in-ramp"
    # In the ten minutes before, 11.0 to 13.0 g/l about a mean of 12.0: 2/12.
    assert "falls in a ramp: c_in changes by 17 % in its time" in notice.message
    assert join_lab(plant, lab, change=0.5).notices == ()


def test_lab_and_plant_that_do_not_fit():
    plant = table(["F"], np.ones((60, 1)))
    with pytest.raises(InputError, match=r"log\.csv has stamps without a zone, lab\.csv has \+02:00"):
        join_lab(plant, table(["Cu"], [[1.0]], zone="Etc/GMT-2", source="lab.csv"))
    with pytest.raises(InputError, match=r"'F' is in log\.csv and in lab\.csv"):
        join_lab(plant, table(["F"], [[1.0]], source="lab.csv"))
    with pytest.raises(InputError, match=r"is outside the record of log\.csv"):
        join_lab(plant, table(["Cu"], [[1.0]], start="2025-06-01", source="lab.csv"))
    with pytest.raises(InputError, match="no stamps to join on"):
        join_lab(plant, table(["Cu"], [[1.0]], step=None, source="lab.csv"))


def test_limits_of_the_lab_stay_limits():
    plant = table(["F"], np.ones((60, 1)))
    lab = ReadingsTable(
        ("Cu",),
        np.array([[np.nan]]),
        np.array([[Status.CENSORED_LOW]]),
        time=pd.DatetimeIndex(["2025-05-01 00:30"]),
        lower=np.array([[0.0]]),
        upper=np.array([[0.1]]),
        reasons={(0, 0): "below the limit 0.1"},
    )
    joined = join_lab(plant, lab)
    assert (joined.lower[0, 1], joined.upper[0, 1]) == (0.0, 0.1)
    assert joined.reason(0, 1) == "below the limit 0.1"
    assert joined.status[0].tolist() == [Status.GOOD, Status.CENSORED_LOW]


# ------------------------------------------------------------------ calculated columns


@pytest.fixture
def survey():
    rng = np.random.default_rng(21)
    s, c, f = rng.normal(49, 0.5, 30).round(2), rng.normal(9.8, 0.2, 30).round(2), rng.normal(20, 0.2, 30).round(2)
    return {"S": s, "C": c, "F": f}


def found_in(columns):
    return find_derived(table(list(columns), np.column_stack(list(columns.values())), step=None))


def test_a_difference_is_found(survey):
    survey["L"] = (survey["S"] - survey["C"]).round(2)
    (found,) = found_in(survey)
    assert (found.tag, found.formula, found.kind, found.rows) == ("L", "S - C", "sum", 30)
    assert (
        "L equals S - C to the last digit in 30 of 30 rows: looks calculated in the spreadsheet" in found.notice.message
    )
    marked = mark_derived(table(list(survey), np.column_stack(list(survey.values())), step=None), [found])
    assert not marked.usable[:, 3].any()
    assert marked.usable[:, :3].all()
    assert marked.reason(0, 3) == "calculated as S - C"


@pytest.mark.parametrize(
    ("formula", "kind", "text"),
    [
        (lambda d: d["S"], "copy", "S"),
        (lambda d: (d["S"] + d["C"] - d["F"]).round(2), "sum", "S + C - F"),
        (lambda d: (d["C"] / d["S"]).round(4), "ratio", "C / S"),
        (lambda d: (100 * d["C"] / d["S"]).round(2), "ratio", "100 * C / S"),
        (lambda d: (d["C"] * d["S"]).round(1), "product", "S * C"),
        (lambda d: (d["S"] * 3.6).round(2), "factor", "3.6 * S"),
    ],
)
def test_kinds_of_calculation(survey, formula, kind, text):
    survey["X"] = formula(survey)
    (found,) = found_in(survey)
    assert (found.tag, found.kind, found.formula) == ("X", kind, text)


def test_measured_columns_are_left_alone(survey):
    """A meter that agrees with the difference of two others to 0.05 is a meter."""
    rng = np.random.default_rng(22)
    survey["L"] = (survey["S"] - survey["C"] + rng.normal(0, 0.05, 30)).round(2)
    assert found_in(survey) == ()
    survey["L"] = (survey["S"] - survey["C"]).round(2)
    survey["L"][7] += 0.02
    assert found_in(survey) == ()


def test_too_few_rows_prove_nothing(survey):
    survey["L"] = (survey["S"] - survey["C"]).round(2)
    assert found_in({k: v[:7] for k, v in survey.items()}) == ()
