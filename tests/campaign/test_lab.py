"""Laboratory samples beside a plant's log: by their sample times, and in windows. An invented evaporator."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.campaign.tables import cell_table
from reconcile.campaign.variants import moves
from reconcile.readings import Status

CASE = """\
reconcile: 1
domains:
  mixture: {unit: kg/h, components: {salt: "%%"}}
streams: {feed: outside -> pan, brine: pan -> outside, vapour: pan -> outside}
meters:
  FF: {reads: feed.flow,  unit: kg/h, sigma: 1 kg/h}
  FB: {reads: brine.flow, unit: kg/h, sigma: 0.5 kg/h}
  AF: {reads: feed.salt,  unit: "%%", sigma: 0.05 %% absolute, reading: {sample: true}}
  AB: {reads: brine.salt, unit: "%%", sigma: 0.2 %% absolute, reading: {sample: true, column: brine salt}}
known:
  vapour.salt: {value: 0 %%, sigma: 0.001 %% absolute}
lab: %s
readings: log.csv
%s"""


@pytest.fixture
def folder(tmp_path):
    rng = np.random.default_rng(41)
    time = pd.date_range("2025-06-02 06:00", periods=481, freq="1min")
    log = pd.DataFrame(
        {"FF": 100 + rng.normal(size=481) * 0.5, "FB": 40 + rng.normal(size=481) * 0.2}, index=time
    ).round(2)
    log.iloc[258:278, 0] += np.linspace(0, 20, 20)
    log.iloc[278:, 0] += 20
    log.rename_axis("time").to_csv(tmp_path / "log.csv")
    (tmp_path / "lab.csv").write_text(
        "time,AF,brine salt\n2025-06-02 08:00,4.02,10.1\n2025-06-02 10:30,3.98,9.9\n2025-06-02 13:00,4.01,<13\n"
    )
    return tmp_path


def case_of(folder, lab="lab.csv", more=""):
    (folder / "case.yaml").write_text(CASE % (lab, more))
    return reconcile.load_case(folder)


def by_cell(result):
    cells = cell_table(result)
    return cells[cells["meter"] != ""].set_index(["snapshot", "meter"]).sort_index()


def test_a_row_a_sample_with_the_mean_of_the_plant_before_it(folder):
    result = case_of(folder).run()
    log = pd.read_csv(folder / "log.csv", index_col=0, parse_dates=True)
    assert result.size == 3
    assert result.tags == ("FF", "FB", "AF", "AB")
    mean = log.loc["2025-06-02 07:50":"2025-06-02 08:00"].mean()
    np.testing.assert_allclose(result.readings[0], [*mean, 4.02, 10.1], rtol=1e-12)
    wide = case_of(folder, "{file: lab.csv, before: 30 min, after: 0 min}").run()
    mean = log.loc["2025-06-02 07:30":"2025-06-02 08:00"].mean()
    np.testing.assert_allclose(wide.readings[0, :2], mean, rtol=1e-12)


def test_a_sample_in_a_ramp_is_told(folder):
    result = case_of(folder).run()
    words = [n.message for n in result.notices if n.code == "sample-in-ramp"]
    assert len(words) == 1
    assert words[0].startswith("sample 2025-06-02 10:30:00 falls in a ramp: FF changes by ")


def test_a_censored_sample_keeps_its_interval(folder):
    result = case_of(folder).run()
    cell = result.prepared.intervals[0]
    assert (cell.snapshot, cell.tag, cell.lower, cell.upper, cell.status) == (2, "AB", 0.0, 13.0, Status.CENSORED_LOW)
    ends = {m.name: m for m in moves(result, 2)}["brine.salt"]
    assert ends.at_low < ends.entered < ends.at_high
    cells = by_cell(result)
    row = cells.loc[("2025-06-02 13:00:00", "AB")]
    assert (row["lower"], row["upper"], row["status"]) == (0.0, 13.0, "interval-corrected")


def test_samples_in_windows(folder):
    result = case_of(folder, more="windows: {length: 4 h, steady: none}\n").run()
    assert result.labels == ("2025-06-02 06:00:00", "2025-06-02 08:00:00", "2025-06-02 12:00:00")
    assert np.isnan(result.readings[0, 2:]).all()
    assert result.readings[1, 2:] == pytest.approx([(4.02 + 3.98) / 2, (10.1 + 9.9) / 2])
    assert result.readings[2, 2:] == pytest.approx([4.01, 6.5])
    assert [(c.snapshot, c.tag) for c in result.prepared.intervals] == [(2, "AB")]
    cells = by_cell(result)
    assert cells.loc[("2025-06-02 06:00:00", "AF")]["reason"] == "no sample was drawn in the window"


def test_mistakes_of_the_laboratorys_file(folder):
    (folder / "lab.csv").write_text("time,AF,brine salt\n2025-06-09 08:00,4.02,10.1\n")
    with pytest.raises(reconcile.InputError, match=r"sample 2025-06-09 08:00:00 is outside the record of .*log.csv"):
        case_of(folder).run()
    (folder / "lab.csv").write_text("time,AF,brine slat\n2025-06-02 08:00,4.02,10.1\n")
    with pytest.raises(reconcile.InputError, match="brine s"):
        case_of(folder).run()
    (folder / "lab.csv").write_text("time,AF,brine salt\n2025-06-02T08:00+02:00,4.02,10.1\n")
    with pytest.raises(reconcile.InputError, match="zone"):
        case_of(folder).run()
    (folder / "lab.csv").write_text("AF,brine salt\n4.02,10.1\n")
    with pytest.raises(reconcile.InputError, match="has no stamps to join on"):
        case_of(folder).run()
    with pytest.raises(
        reconcile.InputError, match=r"case\.yaml:12.*unknown key 'befor' in lab; did you mean 'before'\?"
    ):
        case_of(folder, "{file: lab.csv, befor: 3 min}")


def test_values_in_the_log_need_no_file(folder):
    """Readings that hold all columns already are taken as they are."""
    result = case_of(folder).run({"FF": 100.0, "FB": 40.0, "AF": 4.0, "AB": 10.0})
    assert result.size == 1
    assert result.words == ("agrees",)
