"""From a table of readings to a skeleton that is a case as soon as its streams are drawn."""

from __future__ import annotations

import os
import sqlite3

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import reconcile
from reconcile.cli import main
from reconcile.errors import InputError
from reconcile.start import start_case

HEADER = (
    "Time;Feed FT-101;Out FT-102;PT_5;Level LT-3;Totaliser FQ-7;Temp TI-9;Ca;Remark\n;kg/h;t/h;bar;%;m3;degC;g/L;\n"
)


def log(rows=40):
    rng = np.random.default_rng(4)
    lines = []
    for i in range(rows):
        cells = [
            100 + rng.normal() * 0.5,
            0.1 + rng.normal() * 0.001,
            1.2,
            45 + 0.1 * rng.normal(),
            1000 + 10.5 * i,
            20,
            0.3,
        ]
        stamp = f"2024-05-01 {i // 4:02d}:{15 * (i % 4):02d}"
        lines.append(";".join([stamp, *(f"{c:.4f}".replace(".", ",") for c in cells), ""]))
    return HEADER + "\n".join(lines) + "\n"


@pytest.fixture
def table(tmp_path):
    path = tmp_path / "log.csv"
    path.write_text(log(), encoding="utf-8")
    return path


def test_columns_are_told_by_unit_value_and_header(table):
    kinds = {c.name: (c.kind, c.unit) for c in start_case(table).columns}
    assert kinds == {
        "Feed FT-101": ("flow", "kg/h"),
        "Out FT-102": ("flow", "t/h"),
        "PT_5": ("pressure", "bar"),
        "Level LT-3": ("level", "%"),
        "Totaliser FQ-7": ("counter", "m3"),
        "Temp TI-9": ("temperature", "degC"),
        "Ca": ("concentration", "g/L"),
    }


def test_the_sigma_guess_follows_the_scatter_and_is_marked(table, tmp_path):
    feed = start_case(table).columns[0]
    size = float(feed.sigma.removeprefix("default(").split()[0])
    # 39 differences of neighbours of scatter 0.5: the median estimator is good to about 20 % (one sigma about 0.1).
    assert 0.25 < size < 0.85
    out = tmp_path / "case.yaml"
    start_case(table, out)
    out.write_text(out.read_text("utf-8").replace("FILL_IN -> FILL_IN", "outside -> tank"), "utf-8")
    notices = reconcile.load_case(out).parts.notices
    assert any(n.code == "guessed-sigma" and "Feed FT-101" in n.message for n in notices)


def test_a_drift_does_not_count_as_scatter(tmp_path):
    rng = np.random.default_rng(9)
    path = tmp_path / "drift.csv"
    values = np.linspace(50, 90, 200) + rng.normal(size=200) * 0.5
    path.write_text("FT-1 (kg/h)\n" + "\n".join(f"{v:.3f}" for v in values), encoding="utf-8")
    size = float(start_case(path).columns[0].sigma.removeprefix("default(").split()[0])
    assert 0.4 < size < 0.6


def test_the_skeleton_passes_check_once_its_streams_are_drawn(table, tmp_path):
    out = tmp_path / "case.yaml"
    made = start_case(table, out)
    lines = out.read_text("utf-8").split("\n")
    assert [lines[i - 1].split(":")[0].strip() for i in made.to_fill] == ["feed_ft_101", "out_ft_102"]
    refused = CliRunner().invoke(main, ["check", str(out)])
    assert refused.exit_code == 2
    told = refused.output.strip().split("\n")
    assert len(told) == 2
    for line, number in zip(told, made.to_fill, strict=True):
        assert f"case.yaml:{number}:" in line
        assert "is still to be drawn; write from -> to" in line
    text = out.read_text("utf-8").replace("feed_ft_101: FILL_IN -> FILL_IN", "feed_ft_101: outside -> tank")
    out.write_text(text.replace("FILL_IN -> FILL_IN", "tank -> outside"), "utf-8")
    done = CliRunner().invoke(main, ["check", str(out)])
    assert done.exit_code == 0, done.output
    assert "Feed FT-101" in done.output
    assert reconcile.load_case(out).run().size == 40


def test_nothing_is_overwritten(table, tmp_path):
    out = tmp_path / "case.yaml"
    out.write_text("mine", "utf-8")
    with pytest.raises(InputError, match="is there already, and is not overwritten") as caught:
        start_case(table, out)
    assert caught.value.problems[0].code == "file-exists"
    assert out.read_text("utf-8") == "mine"


def test_a_folder_that_cannot_be_written_is_told(table, tmp_path):
    with pytest.raises(InputError, match="nothing was written"):
        start_case(table, tmp_path / "no" / "such" / "case.yaml")


def test_the_command_echoes_what_it_understood(table, tmp_path):
    done = CliRunner().invoke(main, ["start", str(table)])
    assert done.exit_code == 0, done.output
    assert "decimal mark ','" in done.output
    assert "2 lines are left to fill in" in done.output
    assert (tmp_path / "case.yaml").is_file()
    assert not [f for f in os.listdir(tmp_path) if f.startswith(".")]


def test_without_units_every_place_for_one_is_marked(tmp_path):
    path = tmp_path / "bare.csv"
    path.write_text("FT-1,FT-2\n" + "\n".join(f"{i % 3 + 10.5},{i % 2 + 9.25}" for i in range(12)), encoding="utf-8")
    out = tmp_path / "case.yaml"
    made = start_case(path, out)
    with pytest.raises(InputError) as caught:
        reconcile.load_case(out)
    assert [p.where.line for p in caught.value.problems] == list(made.to_fill)
    assert {p.code for p in caught.value.problems} == {"to-fill-in"}
    text = out.read_text("utf-8").replace("FILL_IN -> FILL_IN", "outside -> tank").replace("FILL_IN}", "kg/h}")
    out.write_text(text.replace("FILL_IN,", "kg/h,"), "utf-8")
    assert CliRunner().invoke(main, ["check", str(out)]).exit_code == 0


ODD = ["a: b", "#5", "x,y", "yes", "2 % {flow}", "Durchfluß", "'q'", 'say "go"', "- dash", "1e5"]


def test_odd_headers_survive_as_tags(tmp_path):
    rng = np.random.default_rng(0)
    path = tmp_path / "odd.xlsx"
    frame = pd.DataFrame(rng.normal(50, 1, (8, len(ODD))).round(2), columns=ODD)
    units = pd.DataFrame([["kg/h"] * len(ODD)], columns=ODD)
    pd.concat([units, frame]).to_excel(path, index=False, engine="xlsxwriter")
    out = tmp_path / "case.yaml"
    made = start_case(path, out)
    assert [c.name for c in made.columns] == ODD
    out.write_text(out.read_text("utf-8").replace("FILL_IN -> FILL_IN", "outside -> tank"), "utf-8")
    case = reconcile.load_case(out)
    assert list(case.tags) == ODD
    assert len(case.read()) == 8


@pytest.mark.parametrize("kind", ["parquet", "xlsx", "sqlite"])
def test_every_kind_of_source_starts_a_case(tmp_path, kind):
    rng = np.random.default_rng(1)
    frame = pd.DataFrame(rng.normal(50, 1, (12, 2)).round(2), columns=["FT-1 (kg/h)", "FT-2 (kg/h)"])
    frame.insert(0, "time", pd.date_range("2025-01-01", periods=12, freq="10min"))
    path, options = tmp_path / f"log.{kind}", {}
    if kind == "parquet":
        frame.to_parquet(path)
    elif kind == "xlsx":
        frame.to_excel(path, index=False, engine="xlsxwriter")
    else:
        options = {"query": "log"}
        with sqlite3.connect(path) as db:
            frame.astype({"time": str}).to_sql("log", db, index=False)
        db.close()
    out = tmp_path / "case.yaml"
    made = start_case(path, out, **options)
    assert [(c.kind, c.unit) for c in made.columns] == [("flow", "kg/h")] * 2
    out.write_text(out.read_text("utf-8").replace("FILL_IN -> FILL_IN", "outside -> tank"), "utf-8")
    assert CliRunner().invoke(main, ["check", str(out)]).exit_code == 0
