"""What the terminal says of a log: before the run, and of many windows without drowning the reader."""

from __future__ import annotations

import numpy as np
import pandas as pd
from click.testing import CliRunner

import reconcile
from reconcile.cli import main
from reconcile.report.campaign import grouped_notices

CASE = """\
reconcile: 1
title: Pump loop (invented)
domains: {fluid: {unit: kg/h}}
streams: {in: outside -> pump, out: pump -> outside}
meters:
  A: {reads: in.flow,  unit: kg/h, sigma: 0.5 kg/h}
  B: {reads: out.flow, unit: kg/h, sigma: 0.5 kg/h}
windows: {length: 10 min, steady: none, runs_when: 'A > 2 kg/h'}
readings: log.csv
"""


def write_log(folder, hours=20):
    rng = np.random.default_rng(51)
    n = hours * 60
    log = pd.DataFrame(
        {"A": 30 + rng.normal(size=n), "B": 30 + rng.normal(size=n)},
        index=pd.date_range("2025-02-03", periods=n, freq="1min", name="time"),
    )
    for hour in range(0, hours, 2):
        log.iloc[hour * 60 : hour * 60 + 10] = [0.3, -0.1]
    log.round(3).to_csv(folder / "log.csv")
    (folder / "case.yaml").write_text(CASE)


def test_check_shows_what_becomes_of_the_log(tmp_path):
    write_log(tmp_path)
    found = CliRunner().invoke(main, ["check", str(tmp_path)])
    assert found.exit_code == 0, found.output
    assert "windows: 120, from 2025-02-03 00:00:00 to 2025-02-03 19:50:00; left out: 10 off" in found.output
    assert "first window used, 2025-02-03 00:10:00: A = " in found.output


def test_many_windows_are_told_in_few_lines(tmp_path):
    write_log(tmp_path)
    result = reconcile.load_case(tmp_path).run()
    assert len(result.prepared.left_out) == 10
    text = result.summary()
    assert "10 left out (10 off)" in " ".join(text.split())
    assert text.count("[window-off]") == 4
    assert "and 7 more [window-off]" in text
    assert len(text.splitlines()) < 120


def test_notices_of_other_kinds_are_not_crowded_out():
    notices = [reconcile.Notice("a", f"message {i}") for i in range(5)] + [reconcile.Notice("b", "once")]
    assert grouped_notices(tuple(notices)) == [
        "message 0 [a]", "message 1 [a]", "message 2 [a]", "once [b]", "and 2 more [a]"
    ]  # fmt: skip


def test_a_window_left_out_on_its_own(tmp_path):
    write_log(tmp_path, hours=1)
    result = reconcile.load_case(tmp_path).run()
    from reconcile.report.text import render

    text = render(result, snapshot=0)
    assert (
        "Left out: off: the plant is off; readings used for a zero check only (A shows 0.3, B shows -0.1)"
        in " ".join(text.split())
    )


def test_a_bad_log_ends_with_its_message_and_nothing_written(tmp_path):
    write_log(tmp_path, hours=1)
    lines = (tmp_path / "log.csv").read_text().replace("30.", "1.", 0).splitlines()
    (tmp_path / "log.csv").write_text("\n".join(lines[:11]) + "\n")
    found = CliRunner().invoke(main, ["run", str(tmp_path), "--out", str(tmp_path / "out")])
    assert found.exit_code == 2
    assert "no window left: 1 off; loosen one of: runs_when [no-window-left]" in found.output
    assert not (tmp_path / "out").exists()
