"""A tail assay below its detection limit: an invented bench test; yields by the two-product formula, by hand."""

from __future__ import annotations

import shutil

import numpy as np
import pytest

import reconcile
from reconcile.campaign.variants import bound_checks, moves
from reconcile.corrected import load_corrected
from reconcile.export import write

FEED, CONCENTRATE = 0.80, 8.9


def by_hand(tail):
    share = (FEED - tail) / (CONCENTRATE - tail)
    return 100 * share, 100 * share * CONCENTRATE / FEED


@pytest.fixture
def result(datasets):
    return reconcile.load_case(datasets / "flotation_test").run()


def test_both_ends_of_the_interval_are_solved(result):
    found = {m.name: m for m in moves(result)}
    for name, place, printed in (("mass_yield", 0, (8.99, 8.47, 7.95)), ("copper_recovery", 1, (100.0, 94.3, 88.5))):
        m = found[name]
        assert (m.low, m.high) == (0.0, 0.10)
        got = (m.at_low, m.entered, m.at_high)
        assert got == pytest.approx([by_hand(t)[place] for t in (0.0, 0.05, 0.10)], rel=1e-9)
        assert got == pytest.approx(printed, abs=0.05)


def test_the_middle_with_a_rectangular_sigma_is_entered(result):
    cell = result.prepared.intervals[0]
    assert (cell.lower, cell.upper, cell.middle) == (0.0, 0.10, 0.05)
    line = result.snapshot(0).reading("tail_Cu")
    assert line.sigma_before == pytest.approx(0.10 / np.sqrt(12), rel=1e-12)
    assert result.readings[0, 2] == 0.05


def test_the_range_is_the_answer_and_not_full_recovery(result):
    text = result.summary()
    assert "OVER THE INTERVAL OF tail_Cu, 0 to 0.1 %" in text
    assert "The answer is the range" in " ".join(text.split())
    figures = {f.name: f for f in result.figure_values(0)}
    assert figures["copper_recovery"].value == pytest.approx(94.3, abs=0.05)
    # What is entered is as unsure as its interval: half of it in recovery is 5.7 %, and 5.7 / sqrt(3) = 3.3.
    assert figures["copper_recovery"].sigma == pytest.approx(3.3, abs=0.1)


def test_the_interval_reaches_the_corrected_set(result, tmp_path):
    write(result, tmp_path)
    back = load_corrected(tmp_path)
    row = back.readings.set_index("meter").loc["tail_Cu"]
    assert (row["lower"], row["upper"], row["raw"]) == (0.0, 0.1, 0.05)
    assert row["status"] == "interval-unchecked"
    assert "between 0 and 0.1; entered as 0.05" in row["reason"]
    ends = back.intervals.set_index("item").loc["copper_recovery"]
    assert (ends["at_lower"], ends["at_upper"]) == pytest.approx((100.0, 88.5), abs=0.05)
    assert back.log["rule"].tolist() == ["interval-entered"]


def test_the_case_may_leave_the_cell_out(datasets, tmp_path):
    shutil.copytree(datasets / "flotation_test", tmp_path / "test")
    case = tmp_path / "test" / "case.yaml"
    case.write_text(case.read_text().replace("0.01 % absolute}", "0.01 % absolute, reading: {censored: leave out}}"))
    result = reconcile.load_case(case).run()
    assert moves(result) == ()
    assert np.isnan(result.figure_values(0)[0].value)
    assert "left out, as the case says" in result.prepared.table.reason(0, 2)


def test_a_bound_without_another_end_is_no_reading_but_is_compared(datasets, tmp_path):
    """A steam meter at the end of its span: the balance gives 43 t/h, and the bound of 40 is respected."""
    (tmp_path / "case.yaml").write_text(
        "reconcile: 1\n"
        "domains: {fluid: {unit: t/h}}\n"
        "streams: {steam: outside -> header, a: header -> outside, b: header -> outside}\n"
        "meters:\n"
        "  FS: {reads: steam.flow, unit: t/h, sigma: 1 % of reading, span: 0 to 40 t/h}\n"
        "  FA: {reads: a.flow, unit: t/h, sigma: 0.3 t/h}\n"
        "  FB: {reads: b.flow, unit: t/h, sigma: 0.3 t/h}\n"
    )
    case = reconcile.load_case(tmp_path)
    result = case.run({"FS": [40.0, 40.0], "FA": [20.0, 15.0], "FB": [23.0, 15.0]})
    assert np.isnan(result.readings[:, 0]).all()
    respected, broken = bound_checks(result)
    assert (respected.side, respected.bound, respected.word) == ("at least", 40.0, "respects it")
    assert respected.value == pytest.approx(43.0)
    assert (broken.value, broken.word) == (pytest.approx(30.0), "contradicts it")
    text = " ".join(result.summary().split())
    assert "FS is at 100 % of its span (40) for 2 samples: the true value is at least this" in text
    assert "FS is at least 40 t/h; the balances give 43.00 ± 0.42: respects it." in text
