"""The command on a long log: when it goes in pieces, what it says, and what it says when it cannot."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from skid_logs import SKID, skid_log

import reconcile.batch.stream
from reconcile.adjust.batch import BLOCK
from reconcile.cli import main
from reconcile.corrected import load_corrected


@pytest.fixture
def run(tmp_path):
    def invoke(rows, *more, text=SKID, **options):
        (tmp_path / "case.yaml").write_text(text.replace("LEVEL", "1.0e-6"), "utf-8")
        skid_log(rows, **options).to_csv(tmp_path / "log.csv", index=False)
        line = [
            "run",
            str(tmp_path / "case.yaml"),
            "--readings",
            str(tmp_path / "log.csv"),
            "--out",
            str(tmp_path / "out"),
        ]
        return CliRunner().invoke(main, [*line, *more]), tmp_path / "out"

    return invoke


def test_a_short_log_is_not_cut_up(run):
    done, out = run(20)
    assert done.exit_code == 0, done.output
    assert not (out / "flagged.csv").exists()


def test_long_enough_a_log_is_cut_up_without_being_asked(run, monkeypatch):
    monkeypatch.setattr(reconcile.batch, "STREAM_FROM", 3000)
    done, out = run(3000, drift=20.0)
    assert done.exit_code == 0, done.output
    assert "3000 snapshots" in done.stdout
    assert "LARGEST TEST VALUE" in done.stdout
    assert (out / "flagged.csv").exists()


def test_strict_tells_by_the_exit_code_and_json_by_numbers(run):
    done, out = run(BLOCK + 20, "--chunk", "100", "--strict", "--json", drift=20.0)
    assert done.exit_code == 1
    summary = json.loads(done.stdout)
    assert summary == json.loads((out / "summary.json").read_text("utf-8"))
    assert summary["campaign"]["flagged"][0]["meter"] == "R"
    assert summary["campaign"]["suspicious"] > 300
    assert summary["campaign"]["explained"] <= 200
    codes = [n["code"] for n in summary["notices"]]
    assert "explained-in-part" in codes
    assert "history" not in summary
    assert "tables-in-part" in codes


def test_every_row_of_the_summary_table_can_be_counted_again(run):
    _, out = run(3 * BLOCK, "--chunk", "1", drift=20.0)
    found = load_corrected(out)
    flagged = pd.read_csv(out / "flagged.csv")
    beyond = found.evidence["objective"] > found.evidence["limit"]
    assert flagged["snapshots"].sum() == beyond.sum() == found.summary["campaign"]["suspicious"]
    labels = found.evidence["snapshot"][beyond]
    assert flagged["first"].min() == labels.iloc[0]
    assert flagged["last"].max() == labels.iloc[-1]
    drifter = flagged.iloc[0]
    where = np.flatnonzero(found.evidence["snapshot"].isin([drifter["run_first"], drifter["run_last"]]))
    assert where[1] - where[0] + 1 == drifter["longest_run"]
    assert beyond[where[0] : where[1] + 1].all()
    words = found.evidence["word"].value_counts().to_dict()
    assert words == found.summary["campaign"]["words"]
    explained = found.evidence[found.evidence["explanation"] != ""]
    assert len(explained) == found.summary["campaign"]["explained"]
    assert set(explained["explanation"]) & {"R"}


def test_a_case_with_windows_goes_through_memory_and_says_so(run):
    done, out = run(200, "--chunk", "50", text=SKID + "windows: {length: 20 min}\n")
    assert "Not worked through in pieces" in done.stderr
    assert "windows" in done.stderr
    assert not (out / ".parts").exists()


def test_what_does_not_go_with_pieces_is_said(tmp_path):
    (tmp_path / "case.yaml").write_text(SKID.replace("LEVEL", "1.0e-6"), "utf-8")
    skid_log(20).to_csv(tmp_path / "log.csv", index=False)
    line = ["run", str(tmp_path / "case.yaml"), "--readings", str(tmp_path / "log.csv"), "--chunk", "10"]
    done = CliRunner().invoke(main, line)
    assert done.exit_code == 0
    assert "--chunk and --restart need --out" in done.stderr


def test_where_the_log_stood_still_is_told(tmp_path):
    frame = skid_log(BLOCK + 500)
    stamps = pd.to_datetime(frame["time"])
    stamps[300:] += pd.Timedelta(hours=5)
    stamps[BLOCK:] += pd.Timedelta(hours=2)  # just where the next part begins
    frame["time"] = stamps.dt.strftime("%Y-%m-%d %H:%M:%S")
    frame.to_csv(tmp_path / "log.csv", index=False)
    (tmp_path / "case.yaml").write_text(SKID.replace("LEVEL", "1.0e-6"), "utf-8")
    line = ["run", str(tmp_path / "case.yaml"), "--readings", str(tmp_path / "log.csv"), "--out", str(tmp_path / "out")]
    done = CliRunner().invoke(main, [*line, "--chunk", "1", "--json"])
    notice = next(n["message"] for n in json.loads(done.stdout)["notices"] if n["code"] == "log-stood-still")
    assert "2 times" in notice
    assert f"18060 s after {frame['time'][299]}" in notice
    assert f"7260 s after {frame['time'][BLOCK - 1]}" in notice
