"""A day of the invented membrane skid as a corrected data set that a model reads: statuses, covariance, provenance.

Expected numbers were worked out independently by hand from the window means (see the case's README).
"""

from __future__ import annotations

import hashlib
import json
import shutil

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.corrected import load_corrected
from reconcile.export import write

TAGS = list("FRDPTB")
NAMES = {"F": "feed.flow", "R": "recycle.flow", "D": "discharge.flow", "P": "permeate.flow", "T": "retentate.flow",
         "B": "bleed.flow"}  # fmt: skip


@pytest.fixture
def folder(datasets, tmp_path):
    shutil.copytree(datasets / "membrane_log", tmp_path / "skid")
    return tmp_path / "skid"


@pytest.fixture
def result(folder):
    return reconcile.load_case(folder).run(suspects="exclude")


@pytest.fixture
def back(result, tmp_path):
    write(result, tmp_path / "out")
    return load_corrected(tmp_path / "out")


def of_window(back, number):
    rows = back.readings[back.readings["snapshot"] == str(number)]
    return rows.set_index("meter")


def test_every_window_and_quantity_has_a_status(back):
    assert len(back.adjusted) == 8
    assert list(back.adjusted.columns[1:]) == [NAMES[t] for t in TAGS]
    assert len(back.readings) == 48
    assert back.readings["status"].notna().all()
    for number in (1, 2, 3, 4):
        assert set(of_window(back, number)["status"]) == {"measured-corrected"}
    assert of_window(back, 5)["status"].to_dict() == dict.fromkeys(TAGS, "measured-corrected") | {"P": "calculated"}
    assert of_window(back, 8)["status"].to_dict() == dict.fromkeys(TAGS, "measured-corrected") | {"R": "calculated"}
    assert set(of_window(back, 6)["status"]) == {"no-balance"}
    assert set(of_window(back, 7)["status"]) == {"no-balance"}
    # No number stands where there is no balance, and no number is missing elsewhere.
    empty = back.readings["corrected"].isna()
    assert (empty == (back.readings["status"] == "no-balance")).all()


def test_the_reasons_of_what_was_left_out(result, back):
    off, moving = of_window(back, 6), of_window(back, 7)
    assert off["reason"].str.startswith("off: the plant is off").all()
    assert off["raw"].to_dict() == pytest.approx(
        dict(zip(TAGS, [0.4, 0.1, -0.2, 0.0, 0.1, 0.0], strict=True)), abs=1e-9
    )
    assert moving["reason"].str.startswith("not steady: F rises 2.4 kg/h per hour (p < 0.001)").all()
    zero = next(z for z in result.prepared.zero_checks if z.tag == "F")
    assert zero.mean == pytest.approx(0.4)
    entry = back.log[(back.log["rule"] == "zero-check") & (back.log["meter"] == "F")].iloc[0]
    assert (entry["snapshot"], entry["amount"]) == ("6", pytest.approx(0.4))
    text = " ".join(result.summary().split())
    assert "8 snapshots: 5 agree, 1 does not agree, 2 left out (1 off, 1 not steady)." in text


def test_a_missing_reading_is_calculated(result, back):
    assert (result.objective[4], result.checks[4]) == (pytest.approx(0.66, abs=5e-3), 2)
    p = of_window(back, 5).loc["P"]
    assert (p["corrected"], p["sigma_after"]) == pytest.approx((40.13, 0.53), abs=5e-3)
    assert p["reason"] == "0 of 8 readings are good"
    assert np.isnan(p["raw"])


def test_recovery_of_the_last_window_needs_the_covariance(result, back):
    value, sigma = back.propagate("permeate.flow / feed.flow", 7)
    assert (value, sigma) == pytest.approx((0.7976, 0.0036), abs=5e-5)
    x, cov = back.adjusted.iloc[7], back.covariance(7)
    slopes = np.array([1 / x["feed.flow"], -x["permeate.flow"] / x["feed.flow"] ** 2])
    names = ["permeate.flow", "feed.flow"]
    assert np.sqrt(slopes @ cov.loc[names, names].to_numpy() @ slopes) == pytest.approx(0.0036, abs=5e-5)
    diagonal = np.sqrt((slopes**2) @ np.diag(cov.loc[names, names]))
    assert diagonal == pytest.approx(0.0083, abs=5e-5)
    figure = result.figure_values(7)[0]
    assert (figure.raw, figure.raw_sigma) == pytest.approx((0.7913, 0.0112), abs=5e-5)


def test_balances_hold_when_read_back(back):
    x = back.adjusted.set_index("snapshot").astype(float)
    x = x[x["feed.flow"].notna()]
    assert len(x) == 6
    for closure in (
        x["feed.flow"] + x["recycle.flow"] - x["discharge.flow"],
        x["discharge.flow"] - x["permeate.flow"] - x["retentate.flow"],
        x["retentate.flow"] - x["recycle.flow"] - x["bleed.flow"],
    ):
        assert np.abs(closure).max() <= 1e-9 * x["discharge.flow"].max()


def test_where_each_row_comes_from(result, back, folder):
    row = of_window(back, 8).loc["R"]
    assert (row["start"], row["end"]) == ("2025-03-12 15:20:00", "2025-03-12 16:30:00")
    assert (row["raw"], row["sigma_before"]) == (pytest.approx(158.6), 1.5)
    assert (row["corrected"], row["sigma_after"]) == pytest.approx((150.96, 1.27), abs=5e-3)
    assert row["reason"].startswith("excluded R")
    assert row["domains"] == f"fluid {result.provenance['domains']['fluid']}"
    assert row["case"] == hashlib.sha256((folder / "case.yaml").read_bytes()).hexdigest()[:16]
    assert (
        back.summary["provenance"]["readings_sha256"] == hashlib.sha256((folder / "log.csv").read_bytes()).hexdigest()
    )


def test_two_runs_give_the_same_bytes(folder, tmp_path):
    for name in ("one", "two"):
        write(reconcile.load_case(folder).run(suspects="exclude"), tmp_path / name)
    first = {p.name: p.read_bytes() for p in sorted((tmp_path / "one").iterdir())}
    assert first == {p.name: p.read_bytes() for p in sorted((tmp_path / "two").iterdir())}
    assert {"readings.csv", "log.csv", "intervals.csv"} <= set(first)


def test_one_digit_changes_the_hash_and_only_the_affected_rows(folder, back, tmp_path):
    log = folder / "log.csv"
    lines = log.read_text().splitlines()
    assert lines[9].startswith("2025-03-12 07:20")
    cells = lines[9].split(",")
    cells[1] = f"{float(cells[1]) + 0.1:g}"
    lines[9] = ",".join(cells)
    log.write_text("\n".join(lines) + "\n")
    write(reconcile.load_case(folder).run(suspects="exclude"), tmp_path / "changed")
    new = load_corrected(tmp_path / "changed")
    hashes = [json.dumps(d.summary["provenance"]["readings_sha256"]) for d in (back, new)]
    assert hashes[0] != hashes[1]
    changed = [i for i in range(48) if not back.readings.iloc[i].equals(new.readings.iloc[i])]
    assert {back.readings.iloc[i]["snapshot"] for i in changed} == {"2"}
    assert len(changed) == 6
    assert set(back.readings["input"]) - set(new.readings["input"]) == set(of_window(back, 2)["input"])


def dead_time_log(path):
    """Feed composition 10 -> 14 g/L in minutes 100 to 120; the outlet shows it 8 minutes later."""
    rng = np.random.default_rng(20250313)
    minutes = np.arange(0, 241)
    feed = np.interp(minutes, [100, 120], [10.0, 14.0])
    outlet = np.interp(minutes - 8, [100, 120], [10.0, 14.0])
    noise = rng.normal(size=(2, minutes.size)) * 0.02
    table = pd.DataFrame(
        {
            "time": pd.Timestamp("2025-03-12 06:00") + pd.to_timedelta(minutes, unit="min"),
            "A-in": (feed + noise[0]).round(3),
            "A-out": (outlet + noise[1]).round(3),
        }
    )
    table.to_csv(path / "log.csv", index=False)
    return table


def test_a_dead_time_is_found_and_taken_back(tmp_path):
    raw = dead_time_log(tmp_path)
    (tmp_path / "case.yaml").write_text(
        "reconcile: 1\n"
        "domains: {fluid: {unit: g/L}}\n"
        "streams: {inlet: outside -> pipe, outlet: pipe -> outside}\n"
        "meters:\n"
        "  A-in:  {reads: inlet.flow,  unit: g/L, sigma: 0.05 g/L}\n"
        "  A-out:\n"
        "    {reads: outlet.flow, unit: g/L, sigma: 0.05 g/L, reading: {find_lag: {between: 0 to 20 min, behind: A-in}}}\n"
        "windows: {length: 20 min, steady: both, steady_level: 0.005}\n"
        "readings: log.csv\n"
    )
    result = reconcile.load_case(tmp_path).run()
    entry = next(e for e in result.prepared.log if e.rule == "lag-found")
    assert (entry.meter, entry.unit) == ("A-out", "min")
    assert entry.amount == pytest.approx(8.0, abs=1.0)
    ramp = slice(100, 120)
    gap = (raw["A-in"] - raw["A-out"])[ramp].mean()
    assert gap == pytest.approx(1.26, abs=0.05)
    values = result.prepared.table.values
    assert abs(values[5, 0] - values[5, 1]) <= 0.02
    codes = {result.prepared.table.label(i)[11:16]: left.code for i, left in result.prepared.left_out.items()}
    assert {k: codes.get(k) for k in ("07:40", "08:00")} == {"07:40": "not steady", "08:00": "not steady"}
    assert set(codes.values()) <= {"not steady", "short"}
    assert "07:20" not in codes
    assert "08:20" not in codes


def test_the_tables_validate_with_the_standards_own_validator(datasets, tmp_path):
    frictionless = pytest.importorskip("frictionless")
    for name in ("membrane_log", "batch_tank", "flotation_test"):
        write(reconcile.load_case(datasets / name).run(), tmp_path / name)
        report = frictionless.Package(str(tmp_path / name / "datapackage.json")).validate()
        assert report.valid, report.flatten(["type", "message"])
        paths = {r.path for r in frictionless.Package(str(tmp_path / name / "datapackage.json")).resources}
        assert {"readings.csv", "log.csv", "intervals.csv"} <= paths
