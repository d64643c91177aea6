"""A campaign of a million rows on a plant of 28 meters (invented): what is found, how much memory, how fast.

Run with ``pytest -m benchmark -s tests/benchmarks/test_long_campaign.py``. Speed is printed as a ratio, never asserted.
"""

from __future__ import annotations

import json
import os
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from peak import peak_of

pytestmark = pytest.mark.benchmark

NODES = 11
STREAMS = [
    ("outside", "n0"), ("n0", "n1"), ("n1", "n2"), ("n2", "n3"), ("n3", "n4"), ("n4", "n5"), ("n5", "n6"), ("n6", "n7"),
    ("n7", "n8"), ("n8", "n9"), ("n9", "n10"), ("n10", "outside"), ("n3", "n0"), ("n6", "n2"), ("n9", "n5"), ("n10", "n7"),
    ("n1", "n4"), ("n2", "n6"), ("n4", "n8"), ("n5", "n9"), ("outside", "n3"), ("n8", "outside"), ("n7", "n10"),
    ("n0", "n5"), ("outside", "n6"), ("n4", "outside"), ("n1", "n7"), ("n2", "n9"),
]  # fmt: skip
DRIFTER = "M09"
CHUNK_ROWS = 100_000


def case_text():
    lines = ["reconcile: 1", "title: Plant of eleven nodes (invented)", "domains:", "  fluid: {unit: t/h}", "streams:"]
    lines += [f"  s{i}: {a} -> {b}" for i, (a, b) in enumerate(STREAMS)]
    lines += ["meters:"]
    lines += [f"  M{i:02d}: {{reads: s{i}.flow, unit: t/h, sigma: {sigma_of(i)} t/h}}" for i in range(len(STREAMS))]
    return "\n".join([*lines, "settings: {level: 0.001, max_faults: 1}"]) + "\n"


def sigma_of(i):
    return round(0.4 + 0.1 * (i % 7), 2)


def true_flows():
    """Flows that close the balances, all well above zero."""
    a = np.zeros((NODES, len(STREAMS)))
    for j, (u, v) in enumerate(STREAMS):
        if u != "outside":
            a[int(u[1:]), j] -= 1.0
        if v != "outside":
            a[int(v[1:]), j] += 1.0
    x = 40.0 + 10.0 * np.sin(np.arange(len(STREAMS)))
    for _ in range(200):
        x = np.maximum(x - np.linalg.pinv(a) @ (a @ x), 5.0)
    assert np.abs(a @ x).max() < 1e-9
    return x


def write_log(path, rows, seed=20260101):
    """Minutes of a steady plant: 5 % of the cells missing, one meter drifting, the log standing still twice."""
    rng = np.random.default_rng(seed)
    flows, sigma = true_flows(), np.array([sigma_of(i) for i in range(len(STREAMS))])
    restarts = [int(0.3 * rows), int(0.7 * rows)]
    tags = [f"M{i:02d}" for i in range(len(STREAMS))]
    for start in range(0, rows, CHUNK_ROWS):
        count = min(CHUNK_ROWS, rows - start)
        row = np.arange(start, start + count)
        y = flows * (1.0 + 0.1 * np.sin(row / 5000.0))[:, None] + sigma * rng.normal(size=(count, len(STREAMS)))
        y[:, 9] += np.clip((row / rows - 0.8) / 0.2, 0.0, 1.0) * 12.0
        y[rng.random(y.shape) < 0.05] = np.nan
        minutes = row + 360 * (row >= restarts[0]) + 1500 * (row >= restarts[1])
        frame = pd.DataFrame(y.round(3), columns=tags)
        frame.insert(
            0, "time", (pd.Timestamp("2024-01-01") + pd.to_timedelta(minutes, unit="min")).strftime("%Y-%m-%d %H:%M:%S")
        )
        frame.to_csv(path, index=False, mode="w" if start == 0 else "a", header=start == 0)
    return restarts


def run_command(folder, out, jobs):
    """Wall time and peak memory (MiB) of the whole command, and its summary."""
    begun = time.perf_counter()
    memory = peak_of(
        "run", str(folder / "case.yaml"), "--readings", str(folder / "log.csv"), "--out", str(out), "--jobs", str(jobs)
    )
    spent = time.perf_counter() - begun
    return spent, memory // 2**20, json.loads((out / "summary.json").read_text("utf-8"))


def pandas_alone(source, out):
    """What pandas needs just to read the log, and to write a table of its size for each of two results."""
    begun = time.perf_counter()
    frame = pd.read_csv(source)
    read = time.perf_counter()
    frame.to_csv(out, index=False)
    wrote = time.perf_counter()
    return read - begun, wrote - read


def check_found(summary, rows, restarts):
    assert summary["campaign"]["snapshots"] == rows
    flagged = summary["campaign"]["flagged"]
    assert flagged[0]["meter"] == DRIFTER
    assert flagged[0]["largest_z"] > 5
    # The drift ends at twelve times the step of the other meters' sigmas; the last rows name it without a break.
    assert flagged[0]["longest_run"] > 20 * max(f["longest_run"] for f in flagged[1:])
    still = next(n["message"] for n in summary["notices"] if n["code"] == "log-stood-still")
    assert "went on 2 times" in still
    for row, minutes in zip(restarts, (361, 1501), strict=True):
        before = pd.Timestamp("2024-01-01") + pd.Timedelta(minutes=row - 1 + (360 if row == restarts[1] else 0))
        assert f"{60 * minutes} s after {before}" in still
    missing = sum(sum(v.values()) for v in summary["campaign"]["cells_without_a_number"].values())
    cells = 28 * rows
    assert abs(missing - 0.05 * cells) < 5 * np.sqrt(cells * 0.05 * 0.95)


@pytest.mark.parametrize("rows", [1_000_000])
def test_a_million_rows(tmp_path, rows):
    (tmp_path / "case.yaml").write_text(case_text(), "utf-8")
    restarts = write_log(tmp_path / "log.csv", rows)
    read, wrote = pandas_alone(tmp_path / "log.csv", tmp_path / "copy.csv")
    (tmp_path / "copy.csv").unlink()
    lines = []
    for jobs in (1, 2):
        out = tmp_path / f"out{jobs}"
        spent, memory, summary = run_command(tmp_path, out, jobs)
        check_found(summary, rows, restarts)
        assert memory < 2048
        lines.append(
            f"{jobs} job{'s' * (jobs > 1)}: {rows / spent:,.0f} rows/s, {spent / (read + wrote):.2f} of reading and writing "
            f"the table once by pandas, {spent / (read + 2 * wrote):.2f} of reading it and writing two, peak {memory} MiB"
        )
    same = [
        p.name for p in (tmp_path / "out1").iterdir() if p.read_bytes() != (tmp_path / "out2" / p.name).read_bytes()
    ]
    assert not same
    print("\n" + "\n".join(lines))  # noqa: T201 - the ratio is what this is for


def test_ten_million_rows_in_bounded_memory(tmp_path):
    """Needs 12 GB of disk and half an hour."""
    if os.environ.get("RECONCILE_TEN_MILLION") != "1":
        pytest.skip("set RECONCILE_TEN_MILLION=1")
    (tmp_path / "case.yaml").write_text(case_text(), "utf-8")
    rows = 10_000_000
    restarts = write_log(tmp_path / "log.csv", rows)
    spent, memory, summary = run_command(tmp_path, Path(tmp_path / "out"), 2)
    check_found(summary, rows, restarts)
    assert memory < 2048
    print(f"\n10,000,000 rows: {rows / spent:,.0f} rows/s, peak {memory} MiB")  # noqa: T201
