"""Streams that are closed in some snapshots: separate networks in one result. Invented branches of a cooling loop."""

from __future__ import annotations

import numpy as np
import pytest

import reconcile
from reconcile.campaign.line_ups import zero_of_closed
from reconcile.campaign.tables import cell_table

CASE = """\
reconcile: 1
domains: {fluid: {unit: L/min}}
streams:
  supply: outside -> header
  a: header -> outside
  b: header -> outside
meters:
  FS: {reads: supply.flow, unit: L/min, sigma: 0.3 L/min}
  FA: {reads: a.flow, unit: L/min, sigma: 0.2 L/min}
  FB: {reads: b.flow, unit: L/min, sigma: 0.2 L/min}
figures: {share: a.flow / supply.flow}
"""
BY_COLUMN = CASE + "line_ups:\n  b shut: {closed: [b], when: 'valve = shut'}\n"
READINGS = {
    "FS": [30.2, 20.3, 30.0],
    "FA": [20.1, 20.0, 19.9],
    "FB": [10.0, 0.7, 10.0],
    "valve": ["open", "shut", "open"],
}


def case_of(folder, text):
    (folder / "case.yaml").write_text(text)
    return reconcile.load_case(folder)


def test_a_closed_stream_is_zero_and_its_meter_tells_of_its_zero(tmp_path):
    result = case_of(tmp_path, BY_COLUMN).run(READINGS)
    b = result.variables.index("b.flow")
    assert result.adjusted[1, b] == 0.0
    assert result.sigmas[1, b] == 0.0
    assert result.checks.tolist() == [1, 1, 1]
    # FS against FA alone, by hand: (20.3 - 20.0)^2 / (0.3^2 + 0.2^2)
    assert result.objective[1] == pytest.approx(0.09 / 0.13)
    assert result.classes(1)[b] == "known"
    assert result.classes(0)[b] == "checked"
    zero = zero_of_closed(result)
    assert [(z.window, z.tag, z.mean) for z in zero] == [(1, "FB", 0.7)]
    text = " ".join(result.summary().split())
    assert "line-up 'b shut' holds in 1 of 3 snapshots: b closed" in text
    assert "ZERO CHECKS" in text


def test_the_same_as_a_case_without_the_stream(tmp_path):
    shut = case_of(tmp_path, BY_COLUMN).run(READINGS)
    alone = CASE.replace("  b: header -> outside\n", "").replace(
        "  FB: {reads: b.flow, unit: L/min, sigma: 0.2 L/min}\n", ""
    )
    other = case_of(tmp_path, alone).run({"FS": 20.3, "FA": 20.0})
    for name in ("supply.flow", "a.flow"):
        i, j = shut.variables.index(name), other.variables.index(name)
        assert shut.adjusted[1, i] == pytest.approx(other.adjusted[0, j], rel=1e-13)
        assert shut.sigmas[1, i] == pytest.approx(other.sigmas[0, j], rel=1e-12)
    assert shut.figure_values(1)[0].sigma == pytest.approx(other.figure_values(0)[0].sigma, rel=1e-12)


def test_cells_say_which_line_up_held(tmp_path):
    cells = cell_table(case_of(tmp_path, BY_COLUMN).run(READINGS))
    row = cells[(cells["snapshot"] == "2") & (cells["meter"] == "FB")].iloc[0]
    assert (row["status"], row["raw"], row["corrected"], row["line_up"]) == ("calculated", 0.7, 0.0, "b shut")
    assert row["reason"] == "b closed: it tells of its zero only"
    assert set(cells[cells["snapshot"] == "1"]["line_up"]) == {""}


def test_line_ups_by_the_names_of_windows(tmp_path):
    text = CASE + "line_ups:\n  b shut: {closed: [b], windows: [2]}\n"
    result = case_of(tmp_path, text).run({k: v for k, v in READINGS.items() if k != "valve"})
    assert result.prepared.closed == {1: ("b",)}
    wrong = CASE + "line_ups:\n  b shut: {closed: [b], windows: [7]}\n"
    with pytest.raises(reconcile.InputError, match="names window '7', which there is not"):
        case_of(tmp_path, wrong).run({k: v for k, v in READINGS.items() if k != "valve"})


def test_a_line_up_that_changes_within_a_window_leaves_it_out(tmp_path):
    log = {k: np.repeat(v, 4).tolist() for k, v in READINGS.items()}
    log["valve"][5] = "open"
    text = BY_COLUMN + "windows: {rows: 4, steady: none}\n"
    result = case_of(tmp_path, text).run(log)
    assert {i: left.code for i, left in result.prepared.left_out.items()} == {1: "line-up changed"}


@pytest.mark.parametrize(
    ("block", "told"),
    [
        ("{closed: [bb], windows: [1]}", "line-up 'x' closes 'bb', which is no stream; did you mean 'b'?"),
        ("{closed: [b]}", "line-up 'x' has neither when nor windows"),
        ("{closed: [b], when: 'valve = shut', windows: [1]}", "line-up 'x' has both when and windows"),
        ("{closd: [b], windows: [1]}", "unknown key 'closd' in line-up 'x'; did you mean 'closed'?"),
        ("{closed: [b], when: 'a < b < c'}", "when of line-up 'x' 'a < b < c' is not understood"),
    ],
)
def test_mistakes_are_told_where_they_stand(tmp_path, block, told):
    with pytest.raises(reconcile.InputError) as caught:
        case_of(tmp_path, CASE + f"line_ups:\n  x: {block}\n")
    assert told in str(caught.value)
    assert "case.yaml:13" in str(caught.value)
