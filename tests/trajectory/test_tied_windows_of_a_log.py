"""Windows of a log tied by inventories: a counter on the feed, levels in percent, means. The tank train is invented."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.errors import InputError
from reconcile.readings.levels import LevelTable, inventory
from reconcile.readings.steady import mean_sigma

CASE = """\
reconcile: 1
title: Two buffer tanks in series, from their log (invented)
domains:
  fluid: {unit: kg/h}
nodes:
  tank_1: {stores: true}
  tank_2: {stores: true}
streams:
  feed: outside -> tank_1
  mid: tank_1 -> tank_2
  out: tank_2 -> outside
meters:
  F1: {reads: feed.flow, unit: kg/h, sigma: 1 kg/h, reading: {counter: {pulse: 0.5 kg}}}
  F2: {reads: mid.flow, unit: kg/h, sigma: 0.8 kg/h, reading: {noise: 3 kg/h}}
  F3: {reads: out.flow, unit: kg/h, sigma: 1 kg/h}
  L1: {reads: tank_1.inventory, unit: kg, sigma: 0.4 kg, reading: {level: {unit: "%", holds: 2.5 kg, each_reading: 0.2 %}}}
  L2:
    reads: tank_2.inventory
    unit: kg
    sigma: 0.5 kg
    reading: {level: {unit: "%", table: [[0, 0], [50, 90], [100, 200]], content_unit: kg, each_reading: 0.1 %}}
windows: {length: 30 min}
trajectory:
  inventories: {tank_1: kg, tank_2: kg}
  read_at: start
"""
TAGS = ["F1", "F2", "F3", "L1", "L2"]
PER_WINDOW = 30


def content_2(level):
    """Contents of the second tank, a table of two pieces: the monotone cubic has chords 1.8 and 2.2 kg/%."""
    return inventory(level, LevelTable(levels=[0, 50, 100], contents=[0.0, 90.0, 200.0]), 0.1)


def level_2(content):
    grid = np.linspace(0, 100, 20001)
    return np.interp(content, content_2(grid)[0], grid)


def log_of(windows, seed, noise=1.0):
    """A row a minute, the closing one included, and the true contents at the start of every window."""
    rng = np.random.default_rng(seed)
    rows = windows * PER_WINDOW + 1
    t = np.arange(rows) / 60.0
    flow = np.column_stack([100 + 10 * np.sin(t / 3), 96 + 6 * np.cos(t / 4), np.full(rows, 97.0)])
    passed = np.vstack([np.zeros(3), np.cumsum(flow[:-1], axis=0)]) / 60.0
    held = np.array([120.0, 80.0]) + passed[:, :2] - passed[:, 1:]
    frame = pd.DataFrame(
        {
            "time": pd.date_range("2025-03-01 06:00", periods=rows, freq="1min"),
            "F1": np.floor(passed[:, 0] / 0.5) + 40000,
            "F2": flow[:, 1] + noise * rng.normal(size=rows) * 3,
            "F3": flow[:, 2] + noise * rng.normal(size=rows) * 2,
            "L1": held[:, 0] / 2.5 + noise * rng.normal(size=rows) * 0.2,
            "L2": level_2(held[:, 1]) + noise * rng.normal(size=rows) * 0.1,
        }
    )
    return frame, flow, held


def by_hand(frame, windows):
    """Readings and sigmas of every window, worked out from the rows."""
    y, sigma = np.full((windows + 1, 5), np.nan), np.full((windows + 1, 5), np.nan)
    for w in range(windows + 1):
        a, b = w * PER_WINDOW, (w + 1) * PER_WINDOW
        if w < windows:
            y[w, 0] = (frame["F1"][b] - frame["F1"][a]) * 0.5 / 0.5
            # One count over sqrt(12) at each end, per half an hour.
            sigma[w, 0] = np.hypot(1.0, np.sqrt(2.0) * 0.5 / np.sqrt(12.0) / 0.5)
            y[w, 1], y[w, 2] = frame["F2"][a:b].mean(), frame["F3"][a:b].mean()
            sigma[w, 1] = np.hypot(0.8, 3.0 / np.sqrt(mean_sigma(frame["F2"][a:b].to_numpy())[2]))
            sigma[w, 2] = np.hypot(1.0, mean_sigma(frame["F3"][a:b].to_numpy())[1])
        y[w, 3], sigma[w, 3] = 2.5 * frame["L1"][a], np.hypot(0.4, 2.5 * 0.2)
        content, spread = content_2([frame["L2"][a]])
        y[w, 4], sigma[w, 4] = content[0], np.hypot(0.5, spread[0])
    return y, sigma


def least_squares(y, sigma, hours, at_end=False):
    """Dense weighted least squares over all flows and the first (or outer) contents."""
    size = len(y)
    rows, right = [], []
    for w in range(size):
        for j in range(5):
            if not np.isfinite(y[w, j]):
                continue
            row = np.zeros(3 * size + 2)
            if j < 3:
                row[3 * w + j] = 1.0
            else:
                k = j - 3
                row[3 * size + k] = 1.0
                for v in range(w + 1 if at_end else w):
                    row[3 * v + k], row[3 * v + k + 1] = hours[v], -hours[v]
            rows.append(row / sigma[w, j])
            right.append(y[w, j] / sigma[w, j])
    a, b = np.array(rows), np.array(right)
    x, _, rank, _ = np.linalg.lstsq(a, b, rcond=None)
    return x, float(((a @ x - b) ** 2).sum()), len(b) - rank, np.linalg.pinv(a.T @ a)


@pytest.fixture
def case(write_case):
    def make(*changes):
        text = CASE
        for old, new in changes:
            assert old in text
            text = text.replace(old, new)
        return reconcile.load_case(write_case(text))

    return make


def save(frame, tmp_path):
    path = tmp_path / "log.csv"
    frame.to_csv(path, index=False)
    return path


def test_a_log_gives_what_its_windows_give_by_hand(case, tmp_path):
    frame, flow, held = log_of(16, 11)
    found = case().run_trajectory(save(frame, tmp_path))
    y, sigma = by_hand(frame, 16)
    # The closing row is a window of its own: too short for flows, and its level closes the last window.
    assert found.size == 17
    np.testing.assert_allclose(found.readings, y, rtol=1e-9)
    np.testing.assert_allclose(found.lengths[:16], 1800.0)
    given = np.isfinite(y)
    used = found.solution.sigma[:, found.model.meters]
    np.testing.assert_allclose(used[given], sigma[given], rtol=1e-9)
    x, objective, checks, cover = least_squares(y, sigma, np.full(17, 0.5))
    assert found.checks == checks == 32
    assert found.objective == pytest.approx(objective, rel=1e-8)
    names = [found.variables.index(f"{s}.flow") for s in ("feed", "mid", "out")]
    np.testing.assert_allclose(found.adjusted[:16, names], x[: 3 * 16].reshape(16, 3), rtol=1e-8)
    spread = np.sqrt(np.diag(cover))
    np.testing.assert_allclose(found.sigmas[:16, names], spread[: 3 * 16].reshape(16, 3), rtol=1e-7)
    np.testing.assert_allclose(found.inventory("tank_1")[0][0], x[-2], rtol=1e-9)
    np.testing.assert_allclose(found.inventory("tank_2")[1][0], spread[-1], rtol=1e-7)
    # The truth lies within three and a half sigmas of every adjusted mean flow and content.
    truth = flow[:-1].reshape(16, PER_WINDOW, 3).mean(axis=1)
    assert np.abs((found.adjusted[:16, names] - truth) / found.sigmas[:16, names]).max() < 3.5
    for k, tank in enumerate(("tank_1", "tank_2")):
        value, sure = found.inventory(tank)
        assert np.abs((value - held[::PER_WINDOW, k]) / sure).max() < 3.5


def test_without_noise_a_log_gives_the_truth(case, tmp_path):
    frame, flow, held = log_of(8, 1, noise=0.0)
    frame["F1"] = 40000 + np.append(0.0, np.cumsum(flow[:-1, 0])) / 60.0 / 0.5
    found = case().run_trajectory(save(frame, tmp_path))
    assert found.objective < 1e-6
    np.testing.assert_allclose(found.inventory("tank_1")[0], held[::PER_WINDOW, 0], rtol=1e-6)
    np.testing.assert_allclose(found.inventory("tank_2")[0], held[::PER_WINDOW, 1], rtol=1e-5)


def test_contents_read_at_the_end_come_from_the_row_behind_a_window(case, tmp_path):
    frame, _, held = log_of(6, 2)
    found = case(("read_at: start", "read_at: end")).run_trajectory(save(frame, tmp_path))
    assert found.size == 6
    np.testing.assert_allclose(found.readings[:, 3], 2.5 * frame["L1"][PER_WINDOW::PER_WINDOW], rtol=1e-12)
    assert [n.code for n in found.notices].count("first-level-not-used") == 1
    value, sure = found.outer["tank_1.inventory"]
    assert abs(value - held[0, 0]) < 4 * sure
    y, sigma = by_hand(frame, 6)
    y = np.column_stack([y[:-1, :3], y[1:, 3:]])
    sigma = np.column_stack([sigma[:-1, :3], sigma[1:, 3:]])
    x, objective, checks, _ = least_squares(y, sigma, np.full(6, 0.5), at_end=True)
    assert (found.checks, found.objective) == (checks, pytest.approx(objective, rel=1e-8))
    assert value == pytest.approx(x[-2], rel=1e-9)


def test_missing_rows_become_a_window_of_unknown_flows(case, tmp_path):
    frame, _, held = log_of(10, 3)
    # From 08:00 to 08:59 nothing was written: two windows of the clock, and the counter counts over them.
    gone = frame.drop(index=range(120, 180)).reset_index(drop=True)
    found = case().run_trajectory(save(gone, tmp_path))
    assert found.labels[4] == "after 2025-03-01 07:30:00"
    assert found.lengths[:7].tolist() == [1800.0, 1800.0, 1800.0, 1800.0, 3600.0, 1800.0, 1800.0]
    assert np.isnan(found.readings[4]).all()
    assert np.isnan(found.readings[3, 0])
    assert found.statuses[3, "F1"] == "it counts over the missing rows behind the window as well"
    assert np.isfinite(found.readings[3, 1:]).all()
    assert [n.code for n in found.notices].count("gap-between-windows") == 1
    starts = [0, 30, 60, 90, 120, *range(180, 301, 30)]
    # The feed of the window before was counted over them, so what the first tank held when they began is not known.
    for k, (tank, unknown) in enumerate((("tank_1", [4]), ("tank_2", []))):
        value, sure = found.inventory(tank)
        assert np.flatnonzero(np.isnan(value)).tolist() == unknown
        assert np.nanmax(np.abs((value - held[starts, k]) / sure)) < 3.5
    assert found.word == "agrees"


def test_contents_at_the_end_of_missing_rows_are_of_the_gap(case, tmp_path):
    frame, _, held = log_of(10, 3)
    gone = frame.drop(index=range(120, 180)).reset_index(drop=True)
    found = case(("read_at: start", "read_at: end")).run_trajectory(save(gone, tmp_path))
    assert np.isnan(found.readings[3, 3:]).all()
    np.testing.assert_allclose(found.readings[4, 3], 2.5 * frame["L1"][180])
    value, sure = found.inventory("tank_1")
    assert np.flatnonzero(np.isnan(value)).tolist() == [3]
    assert np.nanmax(np.abs((value - held[[30, 60, 90, 120, 180, *range(210, 301, 30)], 0]) / sure)) < 3.5


def test_a_window_that_is_off_keeps_its_level(case, tmp_path):
    frame, _, _ = log_of(6, 5)
    frame["run"] = 1
    frame.loc[60:89, "run"] = 0
    found = case(("length: 30 min", "length: 30 min, runs_when: run")).run_trajectory(save(frame, tmp_path))
    assert np.isnan(found.readings[2, :3]).all()
    assert np.isfinite(found.readings[2, 3:]).all()
    assert "the plant is off" in found.statuses[2, "F2"]


def test_windows_that_move_are_kept(case, tmp_path):
    frame, _, _ = log_of(6, 6)
    frame["F2"] += np.linspace(0, 40, len(frame))
    found = case().run_trajectory(save(frame, tmp_path))
    assert np.isfinite(found.readings[:6]).all()
    assert found.word == "does not agree"


def test_a_coarse_counter_is_told(case, tmp_path):
    frame, _, _ = log_of(6, 7)
    told = case(("pulse: 0.5 kg", "pulse: 0.5 kg, each_reading: 2 kg")).run_trajectory(save(frame, tmp_path))
    assert [n.code for n in told.notices].count("counter-borders") == 1
    fine = case().run_trajectory(save(frame, tmp_path))
    assert "counter-borders" not in [n.code for n in fine.notices]


def test_a_step_that_the_windows_contradict_is_refused(case, tmp_path):
    path = save(log_of(6, 8)[0], tmp_path)
    found = case(("read_at: start", "read_at: start\n  step: 30 min")).run_trajectory(path)
    assert found.outer == {}
    with pytest.raises(
        InputError, match=r"windows of 900 s, but window 2025-03-01 06:00:00 lasts 1800 s; 6 such windows"
    ):
        case(("read_at: start", "read_at: start\n  step: 15 min")).run_trajectory(path)


def test_windows_that_overlap_are_refused(case, tmp_path):
    spans = "at: [{start: 2025-03-01 06:00, end: 2025-03-01 07:00}, {start: 2025-03-01 06:30, end: 2025-03-01 07:30}]"
    with pytest.raises(InputError, match=r"begins before window .* has ended"):
        case(("length: 30 min", spans)).run_trajectory(save(log_of(6, 8)[0], tmp_path))


REFUSALS = {
    "change of a level": (
        (("reads: tank_1.inventory, unit: kg, sigma: 0.4 kg", "reads: tank_1.accumulation, unit: kg/h, sigma: 0.4 kg/h"),),
        "level-of-a-rate", "write reads: tank_1.inventory, with unit and sigma in kg",
    ),
    "counter of an inventory": (
        (('level: {unit: "%", holds: 2.5 kg, each_reading: 0.2 %}', "counter: {pulse: 1 kg}"),),
        "inventory-counter", "a counter is of a whole window",
    ),
    "an inventory beside others": (
        (("L1: {reads: tank_1.inventory,", "L1: {reads: tank_1.inventory + tank_1.accumulation,"),
         (', reading: {level: {unit: "%", holds: 2.5 kg, each_reading: 0.2 %}}', "")),
        "instant-and-mean", "read the inventory alone",
    ),
    "line-ups": (
        (("windows: {length: 30 min}", "windows: {length: 30 min}\nline_ups: {stop: {closed: [out], when: F3 < 1 kg/h}}"),),
        "line-up-tied", "one network throughout",
    ),
    "noise of a level": (
        (("each_reading: 0.2 %}", "each_reading: 0.2 %}, noise: 0.1 %"),), "not-for-levels", "write each_reading",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSALS)
def test_what_a_log_cannot_mean_is_refused_at_its_place(case, name):
    changes, code, words = REFUSALS[name]
    with pytest.raises(InputError) as caught:
        case(*changes)
    hits = [p for p in caught.value.problems if p.code == code]
    assert hits, str(caught.value)
    assert words in str(hits[0])
    assert hits[0].where.line is not None


def test_false_alarms_of_a_log_are_as_rare_as_stated(case):
    tied, rng, alarms = case(("pulse: 0.5 kg", "pulse: 0.001 kg")), np.random.default_rng(77), 0
    for seed in range(200):
        frame, flow, _ = log_of(6, 5000 + seed)
        # What the sigma of a meter stands for is one error for each window; for a level, one more for each reading.
        drift = np.append(np.repeat(rng.normal(size=(6, 3)), PER_WINDOW, axis=0), np.zeros((1, 3)), axis=0)
        frame["F1"] = np.append(0.0, np.cumsum(flow[:-1, 0] + drift[:-1, 0])) / 60.0 / 0.001
        frame["F2"] += 0.8 * drift[:, 1]
        frame["F3"] += drift[:, 2]
        frame["L1"] += 0.4 / 2.5 * rng.normal(size=len(frame))
        frame["L2"] += 0.5 / 1.9 * rng.normal(size=len(frame))
        alarms += tied.run_trajectory(frame.set_index("time")).test.status == "disagrees"
    # 5 % of 200; the central 99.9 % of the binomial lies between 2 and 21.
    assert 2 <= alarms <= 21
