"""The corrected data set in open formats, read by other people's programs."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import reconcile
from reconcile.cli import main
from reconcile.corrected import load_corrected
from reconcile.export import write

frictionless = pytest.importorskip(
    "frictionless", reason="the validator of the table-package standard is not installed"
)


TANK = """\
reconcile: 1
title: A buffer tank (invented)
domains: {fluid: {unit: kg/h}}
nodes: {tank: {stores: true}}
streams: {feed: outside -> tank, drain: tank -> outside}
meters:
  F1: {reads: feed.flow, unit: kg/h, sigma: 1 kg/h}
  F2: {reads: drain.flow, unit: kg/h, sigma: 1 kg/h}
  L: {reads: tank.inventory, unit: kg, sigma: 0.2 kg}
figures: {residence: tank.inventory / feed.flow}
trajectory: {inventories: {tank: kg}, read_at: start, step: 15 min}
readings: log.csv
"""


@pytest.fixture
def result(datasets):
    case = reconcile.load_case(datasets / "membrane_skid")
    rng = np.random.default_rng(11)
    values = np.array([50.0, 150, 200, 40, 160, 10]) + rng.normal(size=(5, 6)) * [0.5, 1.5, 2, 0.4, 1.6, 0.2]
    values[2, 3] = np.nan
    values[4, 1] += 12.0
    return case.run(pd.DataFrame(values, columns=list("FRDPTB")))


def faults_of(folder):
    report = frictionless.Package(str(folder / "datapackage.json")).validate()
    return report.flatten(["title", "rowNumber", "fieldNumber", "message"])


def test_the_package_validates_with_the_standards_own_validator(result, tmp_path):
    write(result, tmp_path)
    assert faults_of(tmp_path) == []
    package = json.loads((tmp_path / "datapackage.json").read_text("utf-8"))
    assert len(package["resources"]) == 9


def test_the_validator_notices_a_changed_cell(result, tmp_path):
    # Otherwise the test above could not fail.
    write(result, tmp_path)
    path = tmp_path / "adjusted.csv"
    path.write_text(path.read_text("utf-8").replace("\n1,", "\n1,x", 1), "utf-8")
    assert faults_of(tmp_path)


@pytest.mark.parametrize("name", ["membrane_skid", "chemostat", "flotation", "heat_recovery"])
def test_every_kind_of_case_validates(datasets, tmp_path, name):
    done = CliRunner().invoke(main, ["run", str(datasets / name), "--out", str(tmp_path / "out")])
    assert done.exit_code == 0, done.output
    assert faults_of(tmp_path / "out") == []


def test_the_workbook_holds_every_table_and_is_the_same_twice(result, tmp_path):
    for name in ("one", "two"):
        write(result, tmp_path / name, formats=("csv", "xlsx"))
    assert (tmp_path / "one" / "corrected.xlsx").read_bytes() == (tmp_path / "two" / "corrected.xlsx").read_bytes()
    sheets = pd.read_excel(tmp_path / "one" / "corrected.xlsx", sheet_name=None, engine="calamine")
    assert list(sheets) == ["adjusted", "sigmas", "variables", "evidence", "suspects", "balances", "figures"]
    np.testing.assert_allclose(sheets["adjusted"][list(result.variables)].to_numpy(), result.adjusted, rtol=1e-15)
    assert faults_of(tmp_path / "one") == []


def test_a_sequence_of_windows_is_written_and_read_back(tmp_path):
    case_file = tmp_path / "case.yaml"
    case_file.write_text(TANK, "utf-8")
    rng = np.random.default_rng(6)
    held = 40 + np.cumsum(np.full(12, 0.5))
    frame = pd.DataFrame(
        {"F1": 10 + rng.normal(size=12), "F2": 8 + rng.normal(size=12), "L": held + 0.2 * rng.normal(size=12)}
    )
    frame.to_csv(tmp_path / "log.csv", index=False)
    done = CliRunner().invoke(main, ["run", str(case_file), "--out", str(tmp_path / "out"), "--xlsx"])
    assert done.exit_code == 0, done.output
    assert "12 windows, 36 readings, 11 checks" in done.output
    assert faults_of(tmp_path / "out") == []
    found = reconcile.load_case(case_file).run_trajectory()
    back = load_corrected(tmp_path / "out")
    assert np.array_equal(back.adjusted[list(found.variables)].to_numpy(), found.adjusted, equal_nan=True)
    np.testing.assert_allclose(back.covariance(5).to_numpy(), found.covariance(5), rtol=1e-12)
    value, sigma = back.propagate("tank.inventory / feed.flow", 5)
    figure = back.figures.iloc[5]
    assert (value, sigma) == pytest.approx((figure["value"], figure["sigma"]), rel=1e-9)
    again = CliRunner().invoke(main, ["run", str(case_file), "--out", str(tmp_path / "again"), "--xlsx"])
    assert again.exit_code == 0
    for path in (tmp_path / "out").iterdir():
        assert path.read_bytes() == (tmp_path / "again" / path.name).read_bytes(), path.name


def test_a_text_that_looks_like_a_formula_stays_a_text(tmp_path):
    from reconcile.export_workbook import write_workbook

    write_workbook({"t": pd.DataFrame({"=1+1": ["=2+2", "https://example.org"]})}, tmp_path / "t.xlsx")
    back = pd.read_excel(tmp_path / "t.xlsx", engine="calamine")
    assert list(back.columns) == ["=1+1"]
    assert back["=1+1"].tolist() == ["=2+2", "https://example.org"]


def test_parquet_holds_the_same_numbers(result, tmp_path):
    pytest.importorskip("pyarrow")
    write(result, tmp_path, formats=("csv", "parquet"))
    frame = pd.read_parquet(tmp_path / "adjusted.parquet")
    assert np.array_equal(frame[list(result.variables)].to_numpy(), result.adjusted, equal_nan=True)


def test_the_sigma_of_a_ratio_comes_from_the_full_covariance(datasets, tmp_path):
    # Recycle meter left out of the membrane skid: expected values from an independent full solution.
    case = reconcile.load_case(datasets / "membrane_skid")
    reading = dict(zip("FRDPTB", [50.3, np.nan, 201.2, 39.8, 161.0, 10.1], strict=True))
    result = case.run(reading)
    write(result, tmp_path)
    value, sigma = load_corrected(tmp_path).propagate("permeate.flow / feed.flow")
    assert (value, sigma) == pytest.approx((0.7976, 0.0036), abs=5e-5)
    p, f = result.variables.index("permeate.flow"), result.variables.index("feed.flow")
    s = result.sigmas[0] / result.adjusted[0]
    assert value * np.hypot(s[p], s[f]) == pytest.approx(0.0083, abs=5e-5)
