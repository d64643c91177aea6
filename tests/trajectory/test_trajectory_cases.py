"""Sequences as a user meets them: mistakes told at their place, faults named, what cannot be known left open."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from tank_trains import TAGS, tank_train

import reconcile
from reconcile.errors import InputError

REFUSALS = {
    "no rate": ((("  tank_2: {stores: true}\n", ""),), "no-rate", "write nodes: {tank_2: {stores: true}}"),
    "unit": ((("tank_2: kg}", "tank_2: L}"),), "unit-mismatch", "inventory 'tank_2' is in L (volume), but tank_2.accumulation is in kg/h"),
    "no unit": ((("tank_2: kg}", "tank_2: }"),), "unit-missing", "inventory 'tank_2' has no unit"),
    "read at": ((("read_at: start", "read_at: middle"),), None, "start"),
    "step": ((("step: 15 min", "step: 15 kg"),), "step-unreadable", "write e.g. step: 10 min, or step: from stamps"),
    "step of nothing": ((("step: 15 min", "step: 0 min"),), "step-not-positive", "write e.g. step: 10 min"),
    "unknown meter": ((("step: 15 min", "step: 15 min\n  constant_errors: {F9: 1 kg/h}"),), "unknown-meter", "there is no meter 'F9'"),
    "percent of what": ((("step: 15 min", "step: 15 min\n  constant_errors: {F1: 1 %}"),), "percent-of-what", "of reading or of span?"),
    "not known": ((("step: 15 min", "step: 15 min\n  varying: [feed.flow]"),), "unknown-known", "is no prior knowledge of this case"),
    "unknown key": ((("step: 15 min", "steps: 15 min"),), "unknown-key", "did you mean 'step'?"),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSALS)
def test_mistakes_of_the_block_are_told_at_their_place(train, name):
    changes, code, words = REFUSALS[name]
    with pytest.raises(InputError) as caught:
        reconcile.load_case(train(*changes))
    found = [p for p in caught.value.problems if (code is None or p.code == code) and words in str(p)]
    assert found, str(caught.value)
    assert found[0].where.line is not None
    assert "Traceback" not in str(caught.value)


def frame_of(windows, seed, minutes=15):
    _, y = tank_train(windows, seed)
    frame = pd.DataFrame(y, columns=TAGS)
    frame.insert(0, "time", pd.date_range("2025-01-01", periods=windows, freq=f"{minutes}min"))
    return frame


def save(frame, tmp_path):
    path = tmp_path / "log.csv"
    frame.to_csv(path, index=False)
    return path


def test_a_step_that_the_stamps_contradict_is_refused(train, tmp_path):
    case = reconcile.load_case(train())
    assert case.run_trajectory(save(frame_of(8, 1), tmp_path)).size == 8
    with pytest.raises(InputError, match="the case says windows of 900 s, but 1800 s pass from row 3 to row 4"):
        case.run_trajectory(save(frame_of(8, 1).drop(index=3), tmp_path))


def test_lengths_from_stamps_equal_a_stated_step_and_follow_a_gap(train, tmp_path):
    by_step = reconcile.load_case(train()).run_trajectory(save(frame_of(12, 2), tmp_path))
    case = reconcile.load_case(train(("step: 15 min", "step: from stamps")))
    by_stamp = case.run_trajectory(save(frame_of(12, 2), tmp_path))
    assert np.array_equal(by_step.adjusted, by_stamp.adjusted)
    assert set(by_step.outer) == {"tank_1.inventory", "tank_2.inventory"}
    # The length of the last window is not in the stamps, so what lies behind it is not known.
    assert by_stamp.outer == {}
    gap = case.run_trajectory(save(frame_of(12, 2).drop(index=[5]), tmp_path))
    assert gap.lengths.max() == 1800
    assert any(n.code == "windows-of-different-length" for n in gap.notices)


def test_without_stamps_and_step_nothing_is_guessed(train):
    case = reconcile.load_case(train(("step: 15 min", "step: from stamps")))
    with pytest.raises(InputError, match="no time column, and the trajectory states no step"):
        case.run_trajectory(frame_of(5, 1)[TAGS])


def test_an_inventory_that_nothing_reads_is_known_by_its_changes_only(train):
    case = reconcile.load_case(train(("  L2: {reads: tank_2.inventory, unit: kg, sigma: 1.2 kg}\n", "")))
    found = case.run_trajectory(frame_of(10, 3)[TAGS[:4]])
    level, sigma = found.inventory("tank_2")
    assert np.isnan(level).all()
    assert np.isnan(sigma).all()
    assert np.isfinite(found.inventory("tank_1")[0]).all()
    # Nothing checks the outflow, and a meter that is not checked has no test value.
    assert np.isnan(found.z[:, TAGS.index("F3")]).all()
    assert "Not checked by anything in any window: F3" in found.summary()


def test_one_reading_of_an_inventory_settles_all_of_them(train):
    frame = frame_of(10, 3)[TAGS]
    frame.loc[[i for i in range(10) if i != 4], "L2"] = np.nan
    found = reconcile.load_case(train()).run_trajectory(frame)
    level, sigma = found.inventory("tank_2")
    assert np.isfinite(level).all()
    assert sigma.argmin() == 4
    assert level[4] == pytest.approx(frame.loc[4, "L2"], rel=1e-12)


@pytest.mark.parametrize("window", [0, 7, 19])
def test_a_single_wrong_level_is_named_with_its_window(train, window):
    frame = frame_of(20, 4)[TAGS]
    frame.loc[window, "L1"] += 9.0
    found = reconcile.load_case(train()).run_trajectory(frame)
    best = found.accounts.standing[0].alternatives[0].faults
    assert [f.candidate.name for f in best] == [f"L1 at window {window + 1}"]
    assert best[0].size == pytest.approx(9.0, abs=3 * best[0].sigma)
    assert f"L1 reads high by {best[0].size:.1f} kg at window {window + 1} alone" in found.summary()


def test_a_lasting_bias_is_sized_and_a_loss_has_its_side(train):
    truth, y = tank_train(40, 6)
    case = reconcile.load_case(train())
    biased = y.copy()
    biased[:, 1] += 4.0
    found = case.run_trajectory(pd.DataFrame(biased, columns=TAGS))
    best = found.accounts.standing[0].alternatives[0].faults[0]
    assert best.candidate.name == "F2"
    assert best.size == pytest.approx(4.0, abs=3 * best.sigma)
    # 5 kg/h are lost from the first tank: its level falls, and all flows read what flows.
    lost = y.copy()
    lost[:, 3] -= 0.25 * 5.0 * np.arange(40)
    leak = case.run_trajectory(pd.DataFrame(lost, columns=TAGS))
    sizes = {
        f.candidate.name: f.size
        for a in leak.accounts.standing
        for s in a.alternatives
        for f in s.faults
        if len(s.faults) == 1
    }
    assert sizes["tank_1.leak"] == pytest.approx(5.0, abs=1.2)
    assert truth.shape == y.shape


def test_a_bias_of_a_level_all_along_cannot_be_seen(train):
    _, y = tank_train(20, 5)
    case = reconcile.load_case(train())
    plain = case.run_trajectory(pd.DataFrame(y, columns=TAGS))
    y[:, 3] += 30.0
    moved = case.run_trajectory(pd.DataFrame(y, columns=TAGS))
    assert moved.objective == pytest.approx(plain.objective, rel=1e-9)
    j = [c.name for c in plain.candidates].index("L1")
    assert not np.any(plain.solution.signatures[:, j])


def test_a_constant_error_does_not_average_out(train):
    frame = frame_of(400, 7)[TAGS]
    free = reconcile.load_case(train()).run_trajectory(frame)
    held = reconcile.load_case(train(more="  constant_errors: {L1: 2 kg}\n")).run_trajectory(frame)
    assert free.inventory("tank_1")[1][200] < 0.7
    assert held.inventory("tank_1")[1][200] > 2.0
    assert held.checks == free.checks


def test_false_alarms_are_as_rare_as_stated(train):
    case = reconcile.load_case(train())
    alarms = 0
    for seed in range(300):
        found = case.run_trajectory(pd.DataFrame(tank_train(6, 1000 + seed)[1], columns=TAGS))
        alarms += found.test.status == "disagrees"
    # 5 % of 300; the central 99.9 % of the binomial lies between 4 and 29.
    assert 4 <= alarms <= 29
