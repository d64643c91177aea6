"""Where a stamp stands in its interval: asked for where it decides, told where it is assumed. All logs are invented."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.batch import Unsuited, run_streamed

CASE = """\
reconcile: 1
domains: {fluid: {unit: kg/h}}
nodes: {tank: {stores: true}}
streams: {feed: outside -> tank, out: tank -> outside}
meters:
  F: {reads: feed.flow, unit: kg/h, sigma: 0.5 kg/h, reading: {noise: 0.1 kg/h}}
  O: {reads: out.flow, unit: kg/h, sigma: 0.5 kg/h, reading: {counter: {pulse: 1 kg}}}
  L: {reads: tank.accumulation, unit: kg/h, sigma: 0.5 kg/h, reading: {level: {unit: "%%", holds: 2 kg}}}
windows: {length: 1 h, steady: none}
readings: {file: "%s"%s}
"""


def case_of(folder, file="log.csv", more=""):
    (folder / "case.yaml").write_text(CASE % (file, more))
    return reconcile.load_case(folder)


def rows(start, count, minutes, *, ends):
    """Means of a ramp over intervals of some minutes, and a counter and a level as they stand at each stamp."""
    begin = pd.date_range(start, periods=count, freq=f"{minutes}min")
    hours = (begin - pd.Timestamp("2025-05-12 00:00")).total_seconds().to_numpy() / 3600
    step = minutes / 60
    at = hours + (step if ends else 0.0)
    # Feed 10 t, outflow 4 t (kg/h, t in hours): contents 3 t^2.
    frame = pd.DataFrame({"F": 10 * (hours + step / 2), "O": 2 * at**2, "L": 3 * at**2 / 2})
    frame.index = begin + pd.Timedelta(minutes=minutes if ends else 0)
    return frame.rename_axis("time")


def codes(result):
    return [n.code for n in result.notices]


def test_means_move_and_counters_and_levels_stay_where_they_were_read(tmp_path):
    rows("2025-05-12 06:00", 16, 15, ends=True).to_csv(tmp_path / "log.csv")
    result = case_of(tmp_path, more=", interval: end").run()
    # Nothing was read at 06:00, so what passed in the first hour is not known; every other hour closes to rounding.
    # What stood there at 10:00 closes the last hour, and is too short for a window of its own.
    assert result.labels == tuple(f"2025-05-12 {h:02d}:00:00" for h in (6, 7, 8, 9, 10))
    assert list(result.prepared.left_out) == [4]
    hours = np.array([6, 7, 8, 9]) + 0.5
    np.testing.assert_allclose(result.readings[:4, 0], 10 * hours, rtol=1e-12)
    np.testing.assert_allclose(result.readings[1:4, 1], 4 * hours[1:], rtol=1e-12)
    np.testing.assert_allclose(result.readings[1:4, 2], 6 * hours[1:], rtol=1e-12)
    assert np.isnan(result.readings[0, 1:]).all()
    assert result.objective[1:4] == pytest.approx(0.0, abs=1e-16)
    told = next(n.message for n in result.notices if n.code == "stamps-moved")
    assert "ends of intervals of 15 min: moved to their starts; O, L shows what is at the stamp, and stays" in told


def test_a_wrong_convention_would_have_shown(tmp_path):
    rows("2025-05-12 06:00", 16, 15, ends=True).to_csv(tmp_path / "log.csv")
    result = case_of(tmp_path, more=", interval: start").run()
    assert result.readings[1, 0] == pytest.approx(10 * 7.25)
    assert result.readings[1, 1] == pytest.approx(4 * 7.5)


def test_what_stamps_are_taken_for_is_told_where_a_row_is_much_of_a_window(tmp_path):
    rows("2025-05-12 06:00", 17, 15, ends=False).to_csv(tmp_path / "log.csv")
    result = case_of(tmp_path).run()
    told = [n.message for n in result.notices if n.code == "stamps-taken-as-starts"]
    assert len(told) == 1
    assert "a window of 60 min holds 4 rows" in told[0]
    assert "write interval: end under readings:" in told[0]
    assert "stamps-taken-as-starts" not in codes(case_of(tmp_path, more=", interval: start").run())
    rows("2025-05-12 06:00", 241, 1, ends=False).to_csv(tmp_path / "log.csv")
    assert "stamps-taken-as-starts" not in codes(case_of(tmp_path).run())


def two_files(folder):
    (folder / "logs").mkdir()
    rows("2025-05-12 06:00", 60, 2, ends=True).to_csv(folder / "logs" / "a_fine.csv")
    rows("2025-05-12 08:00", 8, 15, ends=True).to_csv(folder / "logs" / "b_coarse.csv")


def test_files_of_different_steps_are_asked_for_their_convention(tmp_path):
    two_files(tmp_path)
    with pytest.raises(reconcile.InputError) as caught:
        case_of(tmp_path, "logs/*.csv").run()
    (problem,) = caught.value.problems
    assert problem.code == "interval-unknown"
    assert problem.where.file.endswith("b_coarse.csv")
    assert "a row every 15 min here, every 2 min in" in problem.message
    assert "start or at the end of their interval?" in problem.message
    assert "interval: end}" in problem.hint


def test_each_file_is_moved_by_its_own_step(tmp_path):
    two_files(tmp_path)
    result = case_of(tmp_path, "logs/*.csv", ", interval: end").run()
    hours = np.array([6, 7, 8, 9]) + 0.5
    np.testing.assert_allclose(result.readings[:4, 0], 10 * hours, rtol=1e-12)
    np.testing.assert_allclose(result.readings[1:4, 1], 4 * hours[1:], rtol=1e-12)
    assert "ends of intervals of 2 or 15 min" in next(n.message for n in result.notices if n.code == "stamps-moved")


def test_rows_that_are_snapshots_themselves_are_not_asked(tmp_path):
    two_files(tmp_path)
    text = CASE.replace(", reading: {counter: {pulse: 1 kg}}", "").replace("windows: {length: 1 h, steady: none}\n", "")
    text = text.replace(', reading: {level: {unit: "%%", holds: 2 kg}}', "")
    (tmp_path / "case.yaml").write_text(text % ("logs/*.csv", ""))
    assert reconcile.load_case(tmp_path).run().size == 68


def test_a_log_whose_stamps_move_is_not_worked_in_pieces(tmp_path):
    two_files(tmp_path)
    text = CASE.replace(", reading: {counter: {pulse: 1 kg}}", "").replace("windows: {length: 1 h, steady: none}\n", "")
    text = text.replace(', reading: {level: {unit: "%%", holds: 2 kg}}', "")
    (tmp_path / "case.yaml").write_text(text % ("logs/a_fine.csv", ", interval: end"))
    case = reconcile.load_case(tmp_path)
    assert case.run().labels[0] == "2025-05-12 06:00:00"
    with pytest.raises(Unsuited, match="moved to the starts"):
        run_streamed(case, None, tmp_path / "out", least=0)


def test_a_counter_has_no_middle_of_an_interval(tmp_path):
    rows("2025-05-12 06:00", 16, 15, ends=True).to_csv(tmp_path / "log.csv")
    with pytest.raises(reconcile.InputError, match=r"O, L shows what is at the stamp itself") as caught:
        case_of(tmp_path, more=", interval: centre").run()
    assert caught.value.problems[0].code == "interval-of-instants"
    assert caught.value.problems[0].where.file.endswith("log.csv")


LAB = """\
reconcile: 1
domains: {fluid: {unit: kg/h}}
streams: {feed: outside -> pan, brine: pan -> outside}
meters:
  F: {reads: feed.flow, unit: kg/h, sigma: 1 kg/h}
  B: {reads: brine.flow, unit: kg/h, sigma: 1 kg/h, reading: {sample: true}}
lab: %s
readings: log.csv
%s"""


def lab_of(folder, lab, stamps, more="windows: {length: 2 h, steady: none}\n"):
    time = pd.date_range("2025-06-02 06:00", periods=481, freq="1min")
    flow = 100 + np.random.default_rng(3).normal(size=481)
    pd.DataFrame({"F": flow}, index=time).rename_axis("time").to_csv(folder / "log.csv")
    (folder / "lab.csv").write_text("time,B\n" + "".join(f"{s},{100 + i}\n" for i, s in enumerate(stamps)))
    (folder / "case.yaml").write_text(LAB % (lab, more))
    return reconcile.load_case(folder)


BORDERS = [f"2025-06-02 {h:02d}:00" for h in (8, 10, 12, 14)]


def test_samples_on_the_borders_of_windows_are_asked_for_their_time(tmp_path):
    with pytest.raises(reconcile.InputError) as caught:
        lab_of(tmp_path, "lab.csv", BORDERS).run()
    (problem,) = caught.value.problems
    assert problem.code == "interval-unknown"
    assert problem.where.file.endswith("lab.csv")
    assert "all 4 samples stand on borders of windows, the first 2025-06-02 08:00:00" in problem.message
    assert "lab: {file: lab.csv, interval: end}" in problem.hint


@pytest.mark.parametrize(
    ("interval", "expected"),
    [("end", [100, 101, 102, 103]), ("start", [np.nan, 100, 101, 102]), ("centre", [np.nan, 100, 101, 102])],
)
def test_samples_go_to_the_window_they_were_collected_in(tmp_path, interval, expected):
    result = lab_of(tmp_path, f"{{file: lab.csv, interval: {interval}}}", BORDERS).run()
    np.testing.assert_allclose(result.readings[:4, 1], expected)


def test_regular_samples_elsewhere_are_told_to_be_of_their_stamp(tmp_path):
    stamps = [f"2025-06-02 {h:02d}:30" for h in (7, 9, 11, 13)]
    result = lab_of(tmp_path, "lab.csv", stamps).run()
    np.testing.assert_allclose(result.readings[:4, 1], [100, 101, 102, 103])
    told = [n.message for n in result.notices if n.code == "samples-at-stamps"]
    assert told[0].startswith("samples come every 120 min; each is taken as drawn at its stamp")
    declared = lab_of(tmp_path, "{file: lab.csv, interval: centre}", stamps).run()
    assert "samples-at-stamps" not in codes(declared)


def test_an_interval_of_samples_without_windows_is_refused_at_its_place(tmp_path):
    with pytest.raises(reconcile.InputError, match=r"case\.yaml:7.*write before: and after: instead"):
        lab_of(tmp_path, "{file: lab.csv, interval: end}", BORDERS, more="")
